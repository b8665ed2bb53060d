"""What the checkout holds, what its files may say, and that commands written down in two places stay equal."""

import re
import subprocess
import sys
from pathlib import Path

import pytest

from tests.structure.sources_of import TOP, python_files

TOP_LEVEL = {"README.md", "DEVELOPERS.md", "pyproject.toml", "rtctl", "drivers", "tests", "configs"}
GENERATED = {"build", "dist", "reports", "records"}  # in .gitignore
TEXT_SUFFIXES = {".py", ".md", ".toml", ".c", ".h", ".csv", ".js", ".css", ".html", ".txt", ""}
# The patterns are put together from halves so that this file does not match itself.
FORBIDDEN = {
    "a path of one machine": r"(^|[^.\w])/(home|root|wo" + r"rk|farm)/[a-z.]",
    "a note for later": r"\b(TO" + r"DO|FIX" + r"ME|XX" + r"X)\b",
    "an unfinished place": r"NotImplemented" + r"Error",
    "a test that does not run": r"mark\.(sk" + r"ip|xf" + r"ail)|pytest\.sk" + r"ip\(",
    "where the project comes from": r"\b(lec" + r"ture|course" + r"work|tran" + r"script)",
    "a number of a work item": r"\bissue" + r" #?\d",
}


def text_files() -> list[Path]:
    """Every text file of the checkout that would be committed."""
    files = []
    for path in sorted(TOP.rglob("*")):
        parts = path.relative_to(TOP).parts
        hidden = any(part.startswith(".") and part not in (".ci", ".gitignore") for part in parts)
        generated = parts[0] in GENERATED or "__pycache__" in parts or any(part.endswith(".egg-info") for part in parts)
        if path.is_file() and not hidden and not generated and path.suffix in TEXT_SUFFIXES:
            files.append(path)
    return files


def test_top_level_holds_the_agreed_names_only() -> None:
    """A stranger sees the same seven names always; everything else is a dot-file."""
    names = {path.name for path in TOP.iterdir() if not path.name.startswith(".") and not path.name.endswith(".egg-info")}
    assert names - GENERATED == TOP_LEVEL


@pytest.mark.parametrize("what", FORBIDDEN)
def test_no_file_says(what: str) -> None:
    """No file holds machine paths, notes for later, unfinished places, tests that do not run."""
    pattern = re.compile(FORBIDDEN[what], re.IGNORECASE if what == "where the project comes from" else 0)
    found = [
        f"{path.relative_to(TOP)}:{number}: {line.strip()[:100]}"
        for path in text_files()
        for number, line in enumerate(path.read_text(errors="replace").splitlines(), start=1)
        if pattern.search(line)
    ]
    assert found == []


def test_every_module_has_a_test_file_and_every_test_file_a_module() -> None:
    """tests/unit/test_<module>.py for each module, by its file name; modules tested elsewhere are listed with the place."""
    elsewhere = {
        "layout": "tests/unit/test_arm.py and every kernel test: constants and record types only",
        "blocks": "tests/unit/test_cycle.py and tests/structure: constants and record types only",
        "__init__": "packages hold names only",
        "__main__": "tests/process: started as a process",
    }
    files = python_files("rtctl", "drivers")
    modules = {path.stem for path in files} - set(elsewhere)
    packages = {path.parent.name for path in files if path.name == "__init__.py"}
    tested = {path.stem.removeprefix("test_") for path in python_files("tests/unit") if path.stem.startswith("test_")}
    assert sorted(modules - tested) == []
    assert sorted(tested - modules - packages - set(elsewhere)) == []


def readme_command(label: str) -> str:
    """The one line of the README's code block under the comment `<!-- label -->`."""
    match = re.search(rf"<!-- {label} -->\n```sh\n(.+)\n```", (TOP / "README.md").read_text())
    assert match, f"README.md holds no block under <!-- {label} -->"
    return match.group(1)


def test_ci_runs_the_test_command_of_the_readme() -> None:
    """.ci/run finds exactly the README's line, with the same sed script that it runs."""
    script = (TOP / ".ci/run").read_text()
    extract = re.search(r"command=\$\((.*)\)\n", script)
    assert extract
    shown = subprocess.run(["bash", "-c", f'top="{TOP}"; {extract.group(1)}'], capture_output=True, text=True, check=True)
    assert shown.stdout.strip() == readme_command("test command")
    assert "-m tests" in readme_command("test command")


def test_readme_commands_are_one_line_each() -> None:
    """The main job and the tests are one pasted line each, from a clone to the result."""
    for label, ending in (("main command", "rtctl demo"), ("test command", "-m tests")):
        command = readme_command(label)
        assert command.startswith("python3 -m venv .venv && ")
        assert command.endswith(ending)


def test_readme_starts_with_the_job() -> None:
    """The first paragraph says what the program does, before any heading but the title, badge or table."""
    title, paragraph, *_ = (TOP / "README.md").read_text().split("\n\n")
    assert title == "# rtctl"
    assert re.fullmatch(r"`rtctl` runs .*\.", paragraph, re.DOTALL)


@pytest.mark.slow
def test_help_of_the_test_command_is_there() -> None:
    """`python -m tests --help` explains its options."""
    done = subprocess.run([sys.executable, "-m", "tests", "--help"], cwd=TOP, capture_output=True, text=True, check=True)
    assert "--all" in done.stdout and "--json" in done.stdout
