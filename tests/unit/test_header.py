"""The header of a record: names, units and meanings of everything, made of plain values."""

from pathlib import Path

import msgpack

from rtctl.blocks import COLUMNS
from rtctl.record.header import column_units
from rtctl.record.ring import Ring
from tests.synthetic_record import InventedArm, run_header

ARM = InventedArm(n=2, units=("rad", "m"), joint_names=("turn", "slide"))
LAWS = {"pd": ("p", "d"), "other": ("a", "b", "c")}


def header_of(folder: Path) -> dict[str, object]:
    """The header of an invented run of a turning and a sliding joint."""
    ring = Ring.create(folder / "ring", ARM, LAWS, 4)  # type: ignore[arg-type]  # stands in for an arm
    return run_header(ring, ARM, LAWS, hashes={"limits": "l", "reference": "r"})


def test_every_column_has_name_type_shape_unit_and_meaning(tmp_path: Path) -> None:
    """Nothing in a row needs this program to be understood."""
    columns = header_of(tmp_path)["columns"]
    assert isinstance(columns, list)
    assert [column["name"] for column in columns] == [column.name for column in COLUMNS]
    for column in columns:
        assert column["type"] in ("i8", "f8")
        assert all(column[key] for key in ("per", "units", "frame", "meaning")), column
    shapes = {column["name"]: column["shape"] for column in columns}
    assert (shapes["cycle"], shapes["q"], shapes["terms"]) == ([], [2], [3, 2])


def test_units_follow_the_kind_of_joint() -> None:
    """A turning joint has rad and N m where a sliding one has m and N."""
    assert column_units("rad/s|m/s", ARM.units) == ["rad/s", "m/s"]
    assert column_units("N m|N", ARM.units) == ["N m", "N"]
    assert column_units("bits", ARM.units) == ["bits", "bits"]


def test_the_header_is_plain_and_names_laws_terms_and_hashes(tmp_path: Path) -> None:
    """It survives msgpack unchanged, so nothing in it is an object of this program."""
    header = header_of(tmp_path)
    assert msgpack.unpackb(msgpack.packb(header)) == header
    assert header["laws"] == [["pd", ["p", "d"]], ["other", ["a", "b", "c"]]]
    assert header["hashes"] == {"arm": ARM.hash, "limits": "l", "reference": "r"}
    versions = header["versions"]
    assert isinstance(versions, dict)
    assert {"python", "rtctl", "numpy", "numba"} <= versions.keys()
