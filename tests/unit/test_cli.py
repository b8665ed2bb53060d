"""The frame of the command line: exit codes, one JSON object, no traceback for a mistake, nothing heavy imported."""

import json
import subprocess
import sys

import click
import pytest

from rtctl import cli
from rtctl.cli.result import NEGATIVE, Result, json_option
from rtctl.errors import ConfigError, Finding, SetupError
from tests.structure.sources_of import TOP

FINDING = Finding("arm.toml: mass_kg", "> 0 kg", "-1.0", next="Use the data sheet.")


@click.command()
@click.argument("what")
@json_option
def probe(what: str) -> Result:
    """A verb for these tests."""
    if what == "config":
        raise ConfigError.from_findings([FINDING])
    if what == "setup":
        raise SetupError("no driver")
    if what == "interrupt":
        raise KeyboardInterrupt
    return Result({"verdict": what}, f"verdict: {what}", 0 if what == "pass" else NEGATIVE)


@pytest.fixture(autouse=True)
def _with_probe(monkeypatch: pytest.MonkeyPatch) -> None:
    monkeypatch.setattr(cli.Verbs, "get_command", lambda self, context, name: probe if name == "probe" else None)


@pytest.mark.parametrize(("what", "code"), [("pass", 0), ("warn", 1), ("config", 2), ("setup", 3), ("interrupt", 1)])
def test_exit_codes(what: str, code: int, capsys: pytest.CaptureFixture[str]) -> None:
    """0 pass, 1 negative verdict, 2 bad input, 3 the environment does not allow it."""
    assert cli.run_command(["probe", what]) == code


@pytest.mark.parametrize("what", ["pass", "warn", "config", "setup", "interrupt"])
def test_json_is_one_object_whatever_happens(what: str, capsys: pytest.CaptureFixture[str]) -> None:
    """Standard output holds exactly one JSON object with a verdict, in failure too."""
    cli.run_command(["probe", what, "--json"])
    out = capsys.readouterr().out
    assert "verdict" in json.loads(out)
    assert out.count("\n") == 1


def test_findings_reach_the_json(capsys: pytest.CaptureFixture[str]) -> None:
    """A refused file lists its findings with the agreed keys."""
    cli.run_command(["probe", "config", "--json"])
    (finding,) = json.loads(capsys.readouterr().out)["findings"]
    assert {"where", "expected", "got", "likely", "next"} <= set(finding)


def test_user_mistakes_are_one_message(capsys: pytest.CaptureFixture[str]) -> None:
    """A refused file is its sentence on standard error, nothing on standard output, no traceback."""
    cli.run_command(["probe", "config"])
    captured = capsys.readouterr()
    assert captured.err == "arm.toml: mass_kg: must be > 0 kg, got -1.0. Use the data sheet.\n"
    assert captured.out == ""


def test_wrong_options_name_the_help(capsys: pytest.CaptureFixture[str]) -> None:
    """A mistyped option or verb ends with exit code 2 and the command that helps."""
    assert cli.run_command(["probe", "pass", "--jsonn"]) == 2
    assert "Try: rtctl probe --help" in capsys.readouterr().err
    assert cli.run_command(["prob"]) == 2
    assert capsys.readouterr().err == "rtctl: No such command 'prob'. Try: rtctl --help\n"


@pytest.mark.slow
def test_help_imports_nothing_heavy() -> None:
    """`rtctl --help` loads no array, compiler, socket or table library."""
    script = (
        "import sys; from rtctl.cli import run_command; run_command(['--help']); "
        "print(*[m for m in ('numpy', 'numba', 'zmq', 'pydantic', 'rich', 'msgpack') if m in sys.modules])"
    )
    done = subprocess.run([sys.executable, "-c", script], cwd=TOP, capture_output=True, text=True, check=True)
    assert done.stdout.splitlines()[-1] == ""
