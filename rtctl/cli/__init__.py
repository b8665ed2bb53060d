"""The command line: one verb per file, thin. What a verb needs is imported when it runs, so that `ask stop` waits for nothing.

Exit codes: 0 pass, 1 the verdict is negative, 2 bad input, 3 the environment does not allow it.
With `--json` a verb prints exactly one object on standard output, also when it fails; progress and warnings go to standard error.
"""

import importlib
import os
import sys
from collections.abc import Sequence

import click

from rtctl.cli.result import Result, json_text
from rtctl.errors import RtctlError

VERBS = ("demo", "vet", "run", "sim", "ask", "compare", "report")
BAD_INPUT = 2
INTERRUPTED = 1


class Verbs(click.Group):
    """A group whose verbs are imported when they are used."""

    def list_commands(self, context: click.Context) -> list[str]:
        """The verbs in the order of the work, not of the alphabet."""
        return list(VERBS)

    def get_command(self, context: click.Context, name: str) -> click.Command | None:
        """The command of a verb, imported now; None when there is no such verb."""
        if name not in VERBS:
            return None
        command = getattr(importlib.import_module(f"rtctl.cli.{name}"), name)
        assert isinstance(command, click.Command)
        return command


@click.group(cls=Verbs, no_args_is_help=True, context_settings={"help_option_names": ["-h", "--help"], "max_content_width": 80})
@click.version_option(package_name="rtctl", message="%(package)s %(version)s")
def verbs() -> None:
    """Model-based torque control of robot arms, supervised and recorded.

    \b
    Not a safety-rated control: keep a hardware emergency stop within
    reach whenever a real arm is powered.

    \b
    Exit codes: 0 pass, 1 verdict negative, 2 bad input,
    3 the environment does not allow it.
    """


def run_command(arguments: Sequence[str]) -> int:
    """Run one command line; returns the exit code. Mistakes of the user become one message, never a traceback."""
    as_json = "--json" in arguments
    try:
        result = verbs.main(args=list(arguments), prog_name="rtctl", standalone_mode=False)
    except click.ClickException as error:
        context = getattr(error, "ctx", None)
        command = context.command_path if context else "rtctl"
        return _fail(f"{command}: {error.format_message()} Try: {command} --help", as_json, BAD_INPUT)
    except RtctlError as error:
        findings = [vars(finding) for finding in error.findings]
        return _fail(str(error), as_json, error.exit_code, findings)
    except (click.Abort, KeyboardInterrupt):
        return _fail("rtctl: stopped by the user.", as_json, INTERRUPTED)
    if isinstance(result, Result):
        print(json_text(result.data) if as_json else result.text, flush=True)
        return result.exit_code
    return result if isinstance(result, int) else 0


def _fail(text: str, as_json: bool, code: int, findings: list[dict[str, str]] | None = None) -> int:
    print(text, file=sys.stderr, flush=True)
    if as_json:
        print(json_text({"verdict": "refuse", "error": text, "findings": findings or []}), flush=True)
    return code


def main() -> None:
    """Entry of the console script."""
    try:
        code = run_command(sys.argv[1:])
        sys.stdout.flush()
    except BrokenPipeError:
        # The reader of a pipe went away; keep Python from complaining about it once more at exit.
        os.dup2(os.open(os.devnull, os.O_WRONLY), sys.stdout.fileno())
        code = 0
    sys.exit(code)
