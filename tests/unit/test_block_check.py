"""Tables checked against a model: every problem at once, in our own sentences."""

from typing import Annotated, Any, Literal

import pytest
from annotated_types import Ge, Gt, Le
from pydantic import Field, ValidationError

from rtctl.config.block_check import Block, Text, Vector3, likely_cause, read_block, unknown_key, value_text
from rtctl.config.toml_file import Document
from rtctl.errors import Finding


class Keys(Block):
    """One key of every kind."""

    name: Text
    kind: Literal["this", "that"]
    mass_kg: Annotated[float, Gt(0.0)]
    share_ratio: Annotated[float, Ge(0.0), Le(1.0)] | None = None
    part_count: Annotated[int, Ge(1)] = 1
    flag: bool = False
    origin_m: Vector3 = [0.0, 0.0, 0.0]
    times_s: list[float] = []
    inner: Any = Field(default=None, description="a table [inner]")


GOOD = {"name": "x", "kind": "this", "mass_kg": 2}


def texts(raw: object) -> list[str]:
    findings: list[Finding] = []
    keys = read_block(Keys, Document("f", {"table": raw}), ("table",), raw, findings)
    assert (keys is None) == bool(findings)
    return [str(finding) for finding in findings]


def test_a_correct_table_is_frozen() -> None:
    """A correct table becomes an object that cannot change; whole numbers count as numbers."""
    keys = read_block(Keys, Document("f", {}), (), GOOD, [])
    assert keys is not None and keys.mass_kg == 2.0 and keys.share_ratio is None
    with pytest.raises(ValidationError):
        keys.name = "y"


def test_everything_wrong_at_once() -> None:
    """One pass finds every wrong, missing and unknown key, each with kind, bound and unit of what was expected."""
    raw = {
        "kind": "other",
        "mass_kg": 0,
        "share_ratio": 1.5,
        "part_count": 2.0,
        "flag": "yes",
        "origin_m": [1.0, "2", float("nan")],
        "times_s": 3,
        "mass_g": 1,
    }
    assert texts(raw) == [
        "f: table.name: must be given, text, got nothing.",
        'f: table.kind: must be one of this, that, got "other".',
        "f: table.mass_kg: must be a finite number > 0 kg, got 0.",
        "f: table.share_ratio: must be a finite number >= 0 and <= 1, got 1.5.",
        "f: table.part_count: must be a whole number >= 1, got 2.0.",
        'f: table.flag: must be true or false, got "yes".',
        'f: table.origin_m[1]: must be a finite number in m, got "2". The number is written as text; take the quotes away.',
        "f: table.origin_m[2]: must be a finite number in m, got nan.",
        "f: table.times_s: must be a list of finite numbers in s, got 3. It looks like milliseconds; 3 ms are 0.003 s.",
        "f: table.mass_g: must be a known key, got an unknown one. The nearest is mass_kg.",
    ]


@pytest.mark.parametrize(
    ("change", "text"),
    [
        ({"name": ""}, 'f: table.name: must be text, got "".'),
        ({"name": 3}, "f: table.name: must be text, got 3."),
        ({"mass_kg": True}, "f: table.mass_kg: must be a finite number > 0 kg, got true."),
        ({"mass_kg": float("inf")}, "f: table.mass_kg: must be a finite number > 0 kg, got inf."),
        ({"part_count": True}, "f: table.part_count: must be a whole number >= 1, got true."),
        ({"origin_m": [0.0, 0.0]}, "f: table.origin_m: must be a list of 3 finite numbers in m, got [0.0, 0.0]."),
        (
            {"mass_kg": "2 kg"},
            'f: table.mass_kg: must be a finite number > 0 kg, got "2 kg". '
            "A unit is written beside the number; write the number in kg alone.",
        ),
        ({"colour": 1}, "f: table.colour: must be one of the keys name, kind, mass_kg, share_ratio, part_count, flag, origin_m, "
         "times_s, inner, got an unknown one."),
    ],
)  # fmt: skip
def test_single_mistakes(change: dict[str, Any], text: str) -> None:
    """Nothing is converted: text is no number, true is no number, a number is no text."""
    assert texts(GOOD | change) == [text]


def test_no_table() -> None:
    """A value in the place of a table is told which keys belong there."""
    assert texts(3) == ["f: table: must be a table (keys: name, kind, mass_kg), got 3."]


def test_nearest_key() -> None:
    """A key with another unit is nearer than one that only looks alike; with nothing near, all keys are named."""
    known = ["torque_max_nm", "torque_rate_nm_s"]
    assert str(unknown_key("f", "torque_max_n", known)) == (
        "f: must be a known key, got an unknown one. The nearest is torque_max_nm."
    )
    assert str(unknown_key("f", "xyz", known)) == (
        "f: must be one of the keys torque_max_nm, torque_rate_nm_s, got an unknown one."
    )
    assert str(unknown_key("f", "xyz", [])) == "f: must be absent, got an unknown one."


def test_likely_causes() -> None:
    """Degrees, milliseconds and periods given for rates are recognised by their size; an ordinary value is not suspected."""
    assert likely_cause("goal_rad", 90.0) == "It looks like degrees; 90 degrees are 1.571 rad."
    assert likely_cause("goal_rad", -3.0) == ""
    assert likely_cause("rate_hz", 0.001) == "It looks like a period; one of 0.001 s is a rate of 1000 Hz."
    assert likely_cause("speed_rad_s", 90.0) == ""
    assert likely_cause("moving_s", True) == ""
    assert likely_cause("gravity_m_s2", -9.81) == ("It is a vector in base coordinates: [0.0, 0.0, -9.80665] when z points up.")


def test_long_values_are_cut() -> None:
    """A message shows short values whole and long ones as what they are."""
    assert value_text(list(range(100))) == "a list of 100"
    assert value_text("x" * 100) == '"' + "x" * 56 + "..."
    assert value_text({"a": 1, "b": 2}) == "a table of 2 keys"
