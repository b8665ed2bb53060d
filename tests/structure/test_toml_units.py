"""Every number in a shipped file has its unit in its key's name, and every shipped file loads."""

import tomllib
from collections.abc import Iterator
from pathlib import Path
from typing import Any

import pytest

from rtctl.arm import load_arm
from rtctl.config.run_file import load_run
from rtctl.config.units import suffix_of
from rtctl.laws import load_law
from rtctl.references import check_reference, prepare_reference
from tests.structure.sources_of import TOP

CONFIGS = TOP / "configs"
FILES = sorted(CONFIGS.rglob("*.toml"))
LABELS = {"seed"}  # numbers that are no quantity


def numeric_keys(value: Any, key: str = "") -> Iterator[str]:
    """Keys whose values are numbers or lists of numbers, at any depth."""
    if isinstance(value, dict):
        for name, entry in value.items():
            yield from numeric_keys(entry, name)
    elif isinstance(value, list):
        for entry in value:
            yield from numeric_keys(entry, key)
    elif isinstance(value, int | float) and not isinstance(value, bool):
        yield key


def test_numbers_are_found_at_any_depth() -> None:
    """The search itself sees numbers in tables, lists of tables and lists of lists, and no text or truth values."""
    data = {"a_s": 1, "b": {"c": [[1.0]]}, "d": [{"e": 2}], "f": "1", "g": True}
    assert list(numeric_keys(data)) == ["a_s", "c", "e"]


@pytest.mark.parametrize("path", FILES, ids=lambda path: str(path.relative_to(CONFIGS)))
def test_numbers_carry_their_unit(path: Path) -> None:
    """Every numeric key ends in a unit, _count, _ratio or _factor."""
    keys = set(numeric_keys(tomllib.loads(path.read_text())))
    assert keys
    assert sorted(key for key in keys if suffix_of(key) is None and key not in LABELS) == []


@pytest.mark.parametrize("path", sorted((CONFIGS / "arms").glob("*.toml")), ids=lambda path: path.stem)
def test_arms_load(path: Path) -> None:
    """Every shipped arm loads without a warning, and says that its data is invented."""
    arm = load_arm(path)
    assert arm.n >= 1 and arm.warnings == ()
    assert "invented" in tomllib.loads(path.read_text())["source"]


@pytest.mark.parametrize("path", sorted((CONFIGS / "runs").glob("*.toml")), ids=lambda path: path.stem)
def test_runs_load(path: Path) -> None:
    """Every shipped run loads, its law and all gains are known, and its motion stays within its limits from its start pose."""
    run = load_run(path)
    for law in {run.law, *run.gains}:
        load_law(law).prepare(run.arm, run.gains.get(law, {}))
    assert run.sim is not None
    reference = prepare_reference(run.arm, run.reference, run.folder)
    assert check_reference(reference, run.arm, run.limits, run.sim.q_start) == []


def test_every_limits_file_is_used() -> None:
    """Each limits file is loaded by some run."""
    used = {load_run(path).limits_path.resolve() for path in (CONFIGS / "runs").glob("*.toml")}
    assert used == {path.resolve() for path in (CONFIGS / "limits").glob("*.toml")}


def test_runs_have_sockets_of_their_own() -> None:
    """Two runs may go on at a time: names and sockets are used once."""
    runs = [load_run(path) for path in sorted((CONFIGS / "runs").glob("*.toml"))]
    for values in ([run.name for run in runs], [e for run in runs for e in (run.link.state, run.link.torque)]):
        assert len(set(values)) == len(values)
