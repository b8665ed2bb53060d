"""From a checked run file to the blocks of the cycle: the same for the live loop, for lock-step and for tests.

Compiles the law and the reference that the run needs; nothing here starts a process, opens a socket or moves anything.
"""

import secrets
from collections.abc import Sequence
from dataclasses import dataclass, replace

import numpy as np

from rtctl.blocks import POINTERS, SETUP
from rtctl.config.run_file import RunConfig
from rtctl.errors import ConfigError, Finding, RtctlError
from rtctl.kernels.layout import new_block
from rtctl.laws import Law, law_names, load_law
from rtctl.references import Reference, check_reference, prepare_reference

SESSION_END = 2**53  # session numbers stay below, so that every language can hold them in a float64


@dataclass(frozen=True, eq=False)
class Assembly:
    """All that a run's cycles need. Keep it alive as long as a loop uses its blocks: they hold addresses of its parts."""

    run: RunConfig
    setup: np.void  # SETUP
    laws: tuple[Law, ...]  # the first is in force at the start; the order is `law_index` in the record
    pointers: dict[str, np.void]  # law name to POINTERS
    reference: Reference

    @property
    def law(self) -> str:
        """Name of the law in force at the start."""
        return self.laws[0].name

    @property
    def term_names(self) -> dict[str, list[str]]:
        """Names of the torque terms of each law, in their order."""
        return {law.name: list(law.terms) for law in self.laws}

    def start_faults(self, q_start: np.ndarray) -> list[Finding]:
        """What is wrong with the motion from this pose: where it leaves the limits, or begins too far from the arm."""
        findings = check_reference(self.reference, self.run.arm, self.run.limits, q_start)
        return [replace(finding, where=f"{self.run.path}: {finding.where}") for finding in findings]


def assemble(run: RunConfig, law: str | None = None, others: Sequence[str] = (), session: int | None = None) -> Assembly:
    """Blocks of a run.

    law      instead of the run file's law
    others   laws that may be swapped in while running
    session  of this controller; None = a new random one

    Raises ConfigError with every problem of the law, its gains and the reference.
    """
    findings: list[Finding] = []
    laws: list[Law] = []
    pointers: dict[str, np.void] = {}
    reference: Reference | None = None
    for name in dict.fromkeys((law or run.law, *others)):
        if name not in law_names():
            findings += _placed(run, _unknown_law(name))
            continue
        entry = load_law(name)
        block = new_block(POINTERS)
        try:
            if name not in run.gains:
                raise _no_gains(name)
            block["law_parameters"] = entry.prepare(run.arm, run.gains[name])
        except RtctlError as error:
            findings += _placed(run, error)
        block["law_index"] = len(laws)
        block["law_term_count"] = len(entry.terms)
        laws.append(entry)
        pointers[name] = block
    try:
        reference = prepare_reference(run.arm, run.reference, run.folder)
    except RtctlError as error:
        findings += _placed(run, error)
    if findings or reference is None:
        raise ConfigError.from_findings(findings)

    for entry in laws:
        block = pointers[entry.name]
        block["law"] = entry.address
        block["reference_begin"] = reference.begin.address
        block["reference_sample"] = reference.sample.address
    setup = new_block(SETUP)
    for name in run.arm.model.dtype.names or ():
        setup["model"][name] = run.arm.model[name]
    setup["limits"] = run.limits
    setup["reference"] = reference.parameters
    setup["session"] = session if session is not None else 1 + secrets.randbelow(SESSION_END - 1)
    setup["period_ns"] = run.period_ns
    return Assembly(run, setup, tuple(laws), pointers, reference)


def _placed(run: RunConfig, error: RtctlError) -> list[Finding]:
    """Findings of a law or reference, with the run file they are about."""
    return [replace(finding, where=f"{run.path}: {finding.where}") for finding in error.findings]


def _unknown_law(name: str) -> RtctlError:
    try:
        load_law(name)
    except RtctlError as error:
        return error
    raise AssertionError(name)


def _no_gains(name: str) -> ConfigError:
    finding = Finding(f"gains.{name}", "a table with the gains of the law", "nothing", next=f"Add [gains.{name}].")
    return ConfigError.from_findings([finding])
