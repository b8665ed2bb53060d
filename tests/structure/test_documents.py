"""What README.md and the help texts show is true: commands parse, Python runs, TOML loads."""

import re
import shlex
import shutil
import tomllib
from pathlib import Path

import click
import pytest

from rtctl.cli import VERBS, verbs
from tests.structure.sources_of import TOP


def blocks(language: str) -> list[str]:
    """Code blocks of the README in a language, without their fences."""
    return re.findall(rf"```{language}\n(.*?)```", (TOP / "README.md").read_text(), re.DOTALL)


def example_lines(command: click.Command) -> list[str]:
    """Lines of a help text that start with the program's name."""
    return [line.strip() for line in (command.help or "").splitlines() if line.strip().startswith("rtctl ")]


def parse(line: str) -> None:
    """Parse a command line as the program would, down to the last option, without running it. Raises click's errors."""
    words = shlex.split(line, comments=True)[1:]
    context = verbs.make_context("rtctl", words)
    name, command, rest = verbs.resolve_command(context, words)
    assert command is not None
    inner = command.make_context(name, list(rest), parent=context)
    if isinstance(command, click.Group):
        _, nested, rest = command.resolve_command(inner, list(rest))
        assert nested is not None
        nested.make_context(nested.name, list(rest), parent=inner)


def readme_commands() -> list[str]:
    """Every `rtctl ...` line in the README's shell blocks."""
    return [line for block in blocks("sh") for line in block.splitlines() if line.startswith("rtctl ")]


def test_readme_shows_commands() -> None:
    """There is something to check below."""
    assert len(readme_commands()) >= 5


def test_readme_commands_parse() -> None:
    """Every command in the README is accepted by the command line's own parser."""
    for line in readme_commands():
        parse(line)


@pytest.mark.parametrize("name", VERBS)
def test_every_verb_has_examples_that_parse(name: str) -> None:
    """Each verb's help starts with one sentence and shows at least two commands that its parser accepts."""
    command = verbs.get_command(click.Context(verbs), name)
    assert command is not None
    first = (command.help or "").strip().splitlines()[0]
    assert re.fullmatch(r"[A-Z][^\n]*\.", first), first
    examples = example_lines(command)
    assert len(examples) >= 2
    for line in examples:
        parse(line)


@pytest.mark.parametrize("name", VERBS)
def test_help_fits_eighty_columns(name: str) -> None:
    """Help is readable in a terminal of 80 columns."""
    command = verbs.get_command(click.Context(verbs), name)
    assert command is not None
    with click.Context(command, info_name=f"rtctl {name}", max_content_width=80, terminal_width=80) as context:
        assert max(len(line) for line in command.get_help(context).splitlines()) <= 80


def test_readme_toml_is_toml() -> None:
    """Every TOML block of the README is well-formed."""
    assert blocks("toml")
    for block in blocks("toml"):
        tomllib.loads(block)


@pytest.mark.slow
def test_readme_python_runs() -> None:
    """The library example runs as it stands, from the top of a checkout; its own asserts hold."""
    assert blocks("python")
    for block in blocks("python"):
        exec(compile(block, "README.md", "exec"), {"__name__": "readme"})


def test_readme_run_file_is_a_run_file(tmp_path: Path) -> None:
    """The run file shown in the README loads as it stands, beside the shipped arms and limits, and its laws take their gains."""
    from rtctl.config.run_file import load_run
    from rtctl.laws import load_law

    (tmp_path / "runs").mkdir()
    for folder in ("arms", "limits"):
        shutil.copytree(TOP / "configs" / folder, tmp_path / folder)
    (text,) = [block for block in blocks("toml") if "rate_hz" in block]
    place = tmp_path / "runs/shown.toml"
    place.write_text(text)
    run = load_run(place)
    for law, gains in run.gains.items():
        load_law(law).prepare(run.arm, gains)
