"""The compiled writer of the ring."""

from pathlib import Path

import numpy as np

from rtctl.blocks import COLUMNS, ROW
from rtctl.kernels.layout import OK, new_block
from rtctl.record.append import ring_append
from rtctl.record.ring import Ring
from rtctl.record.rows import compact_shape
from tests.synthetic_record import TERMS, InventedArm


def test_an_appended_row_comes_out_bit_for_bit(tmp_path: Path) -> None:
    """What a reader gets is what the cycle wrote, in every column, NaN payloads included."""
    ring = Ring.create(tmp_path / "ring", InventedArm(n=3), TERMS, 8)  # type: ignore[arg-type]  # stands in for an arm
    row = np.random.default_rng(5).integers(0, 256, ROW.itemsize, np.uint8).view(ROW)[0]
    assert ring_append(ring.block, row) == OK
    rows, lost = ring.read_new(0)
    assert lost == 0
    assert len(rows) == 1
    for column in COLUMNS:
        used = tuple(slice(size) for size in compact_shape(column, 3, len(TERMS["pd"])))
        assert rows[0][column.name].tobytes() == np.ascontiguousarray(np.asarray(row[column.name])[used]).tobytes(), column.name


def test_appending_compiles_once_and_leaves_the_row_alone(tmp_path: Path) -> None:
    """One compiled variant serves every ring, and the row is only read."""
    for n in (1, 7):
        ring = Ring.create(tmp_path / f"ring{n}", InventedArm(n=n), TERMS, 4)  # type: ignore[arg-type]
        row = new_block(ROW)
        row["q"] = 1.5
        before = row.tobytes()
        for _ in range(9):
            ring_append(ring.block, row)
        assert row.tobytes() == before
        assert ring.row_count == 9
    assert len(getattr(ring_append, "signatures", [0])) == 1
