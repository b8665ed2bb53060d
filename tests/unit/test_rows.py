"""Compact rows: the layout and the word ranges that lead to it."""

import numpy as np
import pytest

from rtctl.blocks import COLUMNS, ROW
from rtctl.record.rows import compact_layout, compact_shape, layout_key, segments

SIZES = [(1, 1), (2, 3), (7, 7), (16, 8), (3, 0)]


@pytest.mark.parametrize(("n", "term_count"), SIZES)
def test_segments_carry_every_used_word_of_every_column(n: int, term_count: int) -> None:
    """Copying the word ranges gives the same values as copying column by column."""
    words = np.arange(ROW.itemsize // 8)
    full = words.view(ROW)[0]
    layout = compact_layout(n, term_count)
    copied = np.zeros(layout.itemsize // 8, "i8")
    for piece in segments(n, term_count):
        copied[piece.target : piece.target + piece.words] = words[piece.source : piece.source + piece.words]
    row = copied.view(layout)[0]
    for column in COLUMNS:
        used = tuple(slice(size) for size in compact_shape(column, n, term_count))
        assert np.array_equal(np.asarray(row[column.name]).view("i8"), np.asarray(full[column.name])[used].view("i8")), (
            column.name
        )


@pytest.mark.parametrize(("n", "term_count"), SIZES)
def test_segments_fill_a_compact_row_without_overlap(n: int, term_count: int) -> None:
    """Every word of a compact row is written exactly once."""
    written = np.zeros(compact_layout(n, term_count).itemsize // 8, int)
    for piece in segments(n, term_count):
        written[piece.target : piece.target + piece.words] += 1
    assert (written == 1).all()


def test_layout_key_tells_layouts_apart() -> None:
    """Rows of another number of joints or terms have another key."""
    assert len({layout_key(n, terms) for n, terms in SIZES}) == len(SIZES)
