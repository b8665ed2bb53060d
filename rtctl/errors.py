"""Errors a user can cause, each with the sentence that says where, what was expected, what came, why it is likely and what to do.

Operating faults (a limit crossed, a state gone stale) are not exceptions but causes, see `rtctl.causes`.
"""

from dataclasses import dataclass
from typing import Self


@dataclass(frozen=True)
class Finding:
    """One thing that is wrong: the unit of every list of problems, and of `--json` output."""

    where: str  # file:line, key, joint or place
    expected: str  # with its unit
    got: str
    likely: str = ""  # the likely cause, empty when it is not known
    next: str = ""  # the next step
    severity: str = "refuse"  # "refuse" or "warn"

    def __str__(self) -> str:
        text = f"{self.where}: must be {self.expected}, got {self.got}."
        return " ".join(part for part in (text, self.likely, self.next) if part)


class RtctlError(Exception):
    """Base of every error of this package; `exit_code` is what the command line returns."""

    exit_code = 2

    def __init__(self, message: str, findings: tuple[Finding, ...] = ()) -> None:
        super().__init__(message)
        self.findings = findings

    @classmethod
    def from_findings(cls, findings: list[Finding]) -> Self:
        """One error that says all of them, one per line."""
        return cls("\n".join(str(finding) for finding in findings), tuple(findings))


class ConfigError(RtctlError):
    """A TOML or CSV file, or a command line option, says something that cannot be used."""


class ModelError(RtctlError):
    """The description of the arm is physically impossible or not usable for what was asked."""


class SetupError(RtctlError):
    """The environment does not allow it: no driver, endpoint in use, a rate this computer cannot hold, a missing permission."""

    exit_code = 3


class WireError(SetupError):
    """The peer does not speak the same messages or is another arm."""
