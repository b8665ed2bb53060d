"""Compact rows: what of a full-width `ROW` block is kept for an arm with n joints, and where it goes.

A full-width row has room for 16 joints, 8 terms and 24 watches; a compact row has what the arm and the laws of the run use.
Every column is made of 8-byte words, so both layouts are rows of words and one list of word ranges maps one to the other.
"""

import hashlib
from dataclasses import dataclass

import numpy as np

from rtctl.blocks import COLUMNS, ROW, WATCH_COUNT, Column

WORD_BYTES = 8


def compact_shape(column: Column, n: int, term_count: int) -> tuple[int, ...]:
    """Shape of a column in a compact row: () per cycle, (n,) per joint, (terms, n) per term, (watches,) per watch."""
    return {"cycle": (), "joint": (n,), "term": (term_count, n), "watch": (WATCH_COUNT,)}[column.per]


def compact_layout(n: int, term_count: int) -> np.dtype:
    """Layout of a compact row, little-endian and without padding: the bytes of one row in ring and record."""
    return np.dtype([(column.name, "<" + column.kind, compact_shape(column, n, term_count)) for column in COLUMNS])


def layout_key(n: int, term_count: int) -> int:
    """Number below 2^48 that two programs share only if they mean the same compact row: names, order, types, shapes and units."""
    text = repr([(column.name, column.kind, compact_shape(column, n, term_count), column.unit) for column in COLUMNS])
    return int.from_bytes(hashlib.sha256(text.encode()).digest()[:6], "big")


@dataclass(frozen=True)
class Segment:
    """A run of words that is copied as one piece."""

    source: int  # word in the full-width row
    target: int  # word in the compact row
    words: int


def _offset(layout: np.dtype, name: str) -> int:
    assert layout.fields is not None
    return int(layout.fields[name][1]) // WORD_BYTES


def segments(n: int, term_count: int) -> list[Segment]:
    """The word ranges that make a compact row from a full-width one, neighbours joined."""
    compact = compact_layout(n, term_count)
    found: list[Segment] = []
    for column in COLUMNS:
        shape = compact_shape(column, n, term_count)
        if 0 in shape:
            continue
        source, target = _offset(ROW, column.name), _offset(compact, column.name)
        rows, words = (shape[0], shape[1]) if len(shape) == 2 else (1, shape[0] if shape else 1)
        stride = column.shape[-1] if column.shape else 1
        for row in range(rows):
            piece = Segment(source + row * stride, target + row * words, words)
            last = found[-1] if found else None
            if last and last.source + last.words == piece.source and last.target + last.words == piece.target:
                found[-1] = Segment(last.source, last.target, last.words + piece.words)
            else:
                found.append(piece)
    return found
