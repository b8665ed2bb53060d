"""Reads records, also cut and damaged ones: everything up to the last whole block, and a sentence about the rest."""

from dataclasses import dataclass
from pathlib import Path
from typing import Any, BinaryIO

import msgpack
import numpy as np

from rtctl.errors import ConfigError, Finding
from rtctl.record.file import CLOSE, RECORD_NAME, RECORD_VERSION, Damage, Piece, pieces


@dataclass(frozen=True)
class Record:
    """What was recorded. Columns are full precision, one row per cycle."""

    path: str
    header: dict[str, Any]  # see rtctl.record.header
    columns: dict[str, np.ndarray]  # (rows,) per cycle, (rows, n) per joint, (rows, terms, n), (rows, watches)
    row_numbers: np.ndarray  # number of each row in the run: a jump is a gap of lost rows
    complete: bool  # ended by the recorder and undamaged
    lost_rows: int  # overwritten in the ring before they could be recorded
    damage: str | None  # why the file could not be read to its end
    seal: str  # SHA-256 of the last whole object, hex: stands for everything before it
    reason: str | None  # why the recording ended, None when it was not ended

    @property
    def row_count(self) -> int:
        """Rows that could be read."""
        return len(self.row_numbers)

    @property
    def joint_names(self) -> list[str]:
        """Names of the joints, in the order of the columns."""
        return list(self.header["joint_names"])

    @property
    def law_names(self) -> list[str]:
        """Laws that were in force in this record, in the order of their first use."""
        used = self.columns["law_index"]
        _, first = np.unique(used, return_index=True)
        return [self.header["laws"][int(used[k])][0] for k in sorted(first)]


def read_record(path: Path | str) -> Record:
    """Read a record to its last whole block. Raises ConfigError when there is no header to go by."""
    place = Path(path)
    try:
        with place.open("rb") as file:
            return _read(place, file)
    except OSError as error:
        raise _refusal(place, "a record that can be read", str(error.strerror), "Check the path.") from None


def _read(place: Path, file: BinaryIO) -> Record:
    stream = pieces(file)
    try:
        head = next(stream, None)
    except Damage as damage:
        raise _refusal(place, "a record with a whole header", str(damage), "Nothing in it can be read without.") from None
    if head is None:
        raise _refusal(place, "a record", "an empty file")
    if head.first != RECORD_NAME:
        raise _refusal(place, "a record", "another kind of file")
    if head.second > RECORD_VERSION:
        raise _refusal(
            place, f"a record of version {RECORD_VERSION} or older", f"version {head.second}", "Read it with a newer rtctl."
        )
    header = msgpack.unpackb(head.content)
    layout = np.dtype([(column["name"], "<" + column["type"], tuple(column["shape"])) for column in header["columns"]])
    last_seal = head.seal
    blocks: list[Piece] = []
    end: Piece | None = None
    damage_text: str | None = None
    try:
        for piece in stream:
            last_seal = piece.seal
            if piece.first == CLOSE:
                end = piece
            else:
                blocks.append(piece)
    except Damage as damage:
        damage_text = str(damage)
    counts = np.array([piece.second for piece in blocks], np.int64)
    firsts = np.array([piece.first for piece in blocks], np.int64)
    rows = np.frombuffer(b"".join(piece.content for piece in blocks), layout)
    blocks.clear()
    assert len(rows) == counts.sum()  # a block whose bytes disagree with its count was sealed that way by a wrong writer
    row_numbers = np.repeat(firsts - np.cumsum(counts) + counts, counts) + np.arange(len(rows))
    note = msgpack.unpackb(end.content) if end else {}
    last = int(row_numbers[-1]) + 1 if len(rows) else 0
    return Record(
        path=str(place),
        header=header,
        columns={name: np.ascontiguousarray(rows[name]) for name in layout.names or ()},
        row_numbers=row_numbers,
        complete=end is not None and damage_text is None,
        lost_rows=max(last - len(rows), int(note.get("lost_rows", 0))),
        damage=damage_text,
        seal=last_seal.hex(),
        reason=note.get("reason"),
    )


def _refusal(path: Path, expected: str, got: str, next_step: str = "") -> ConfigError:
    return ConfigError.from_findings([Finding(str(path), expected, got, next=next_step)])
