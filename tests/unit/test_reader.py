"""Reading records: whole, cut, changed, with gaps, and what is no record at all."""

from pathlib import Path

import numpy as np
import pytest

from rtctl.errors import ConfigError
from rtctl.record.file import NO_SEAL, RECORD_NAME, RECORD_VERSION, pack_object
from rtctl.record.reader import Record, read_record
from tests.synthetic_record import InventedArm, make_record, plain_row

TRIALS = 400
ROWS = 60


@pytest.fixture(scope="module")
def whole(tmp_path_factory: pytest.TempPathFactory) -> tuple[bytes, Record]:
    """A record of three blocks, as bytes and as read."""
    path = make_record(tmp_path_factory.mktemp("whole") / "whole.record", plain_row, ROWS, arm=InventedArm(n=1))
    return path.read_bytes(), read_record(path)


def same_rows(record: Record, other: Record) -> bool:
    """Is `record` bit for bit the beginning of `other`?"""
    return all(
        record.columns[name].tobytes() == other.columns[name][: record.row_count].tobytes() for name in other.columns
    ) and np.array_equal(record.row_numbers, other.row_numbers[: record.row_count])


def test_a_whole_record_is_complete(whole: tuple[bytes, Record]) -> None:
    """All rows, their numbers, no damage, and why it ended."""
    _, record = whole
    assert (record.row_count, record.complete, record.lost_rows, record.damage) == (ROWS, True, 0, None)
    assert record.reason == "the controller closed the run"
    assert list(record.row_numbers) == list(record.columns["cycle"]) == list(range(ROWS))
    assert record.columns["terms"].shape == (ROWS, 3, 1)
    assert record.columns["q"].flags.c_contiguous
    assert record.law_names == ["pd"]
    assert record.joint_names == ["joint_1"]


def test_no_cut_is_silently_wrong(whole: tuple[bytes, Record], tmp_path: Path) -> None:
    """Several hundred cuts: rows up to the last whole block, never called complete; a cut header is refused."""
    data, record = whole
    path = tmp_path / "cut.record"
    read_counts = set()
    for cut in np.random.default_rng(11).integers(0, len(data), TRIALS):
        path.write_bytes(data[:cut])
        try:
            part = read_record(path)
        except ConfigError as error:
            assert str(error).startswith(f"{path}: must be a record")
            continue
        assert not part.complete
        assert same_rows(part, record)
        read_counts.add(part.row_count)
    assert read_counts == {0, 20, 40, 60}


def test_no_flipped_bit_is_silently_wrong(whole: tuple[bytes, Record], tmp_path: Path) -> None:
    """Several hundred single changed bits: each is noticed, and what is given out is unchanged."""
    data, record = whole
    path = tmp_path / "flipped.record"
    for bit in np.random.default_rng(12).integers(0, 8 * len(data), TRIALS):
        changed = bytearray(data)
        changed[bit // 8] ^= 1 << int(bit % 8)
        path.write_bytes(changed)
        try:
            part = read_record(path)
        except ConfigError:
            continue
        assert part.damage
        assert not part.complete
        assert same_rows(part, record)


def test_damage_names_the_block(whole: tuple[bytes, Record], tmp_path: Path) -> None:
    """A changed bit in the rows of the second block is told apart from a cut, with its place."""
    data, _ = whole
    path = tmp_path / "changed.record"
    changed = bytearray(data)
    changed[len(data) * 2 // 3] ^= 1
    path.write_bytes(changed)
    record = read_record(path)
    assert record.damage == "block 1 does not match its SHA-256: the file was changed there"
    assert record.row_count == 20
    path.write_bytes(data[: len(data) * 2 // 3])
    assert str(read_record(path).damage).startswith("ends inside block 1: ")


def test_a_record_without_an_end_is_not_complete(tmp_path: Path) -> None:
    """Cut exactly between two blocks there is no damage to see, but no close mark either."""
    record = read_record(make_record(tmp_path / "open.record", plain_row, 40, reason=None))
    assert (record.row_count, record.complete, record.damage, record.reason) == (40, False, None, None)


def test_gaps_are_counted_as_lost(tmp_path: Path) -> None:
    """Rows that were overwritten before the recorder came leave a gap in the numbers and a count."""
    record = read_record(make_record(tmp_path / "gap.record", plain_row, 100, rows_per_block=50, capacity=16))
    assert record.lost_rows == 2 * (50 - 16)
    assert list(record.row_numbers) == [*range(34, 50), *range(84, 100)]
    assert np.array_equal(record.row_numbers, record.columns["cycle"])
    assert record.complete


@pytest.mark.parametrize(
    ("content", "text"),
    [
        (b"", "must be a record, got an empty file."),
        (b"not a record", "must be a record with a whole header, got not a record, or its header was changed. {}"),
        (pack_object(NO_SEAL, "other", 1, b"\x80")[0], "must be a record, got another kind of file."),
        (
            pack_object(NO_SEAL, RECORD_NAME, RECORD_VERSION + 1, b"\x80")[0],
            f"must be a record of version {RECORD_VERSION} or older, got version {RECORD_VERSION + 1}. Read it with a newer rtctl.",
        ),
    ],
)
def test_what_is_no_record_is_refused(tmp_path: Path, content: bytes, text: str) -> None:
    """One sentence says what the file is instead."""
    path = tmp_path / "x.record"
    path.write_bytes(content)
    with pytest.raises(ConfigError) as caught:
        read_record(path)
    assert str(caught.value) == f"{path}: " + text.format("Nothing in it can be read without.")


def test_a_missing_file_is_refused(tmp_path: Path) -> None:
    """A wrong path is one sentence, a folder too."""
    with pytest.raises(ConfigError) as caught:
        read_record(tmp_path / "none")
    expected = "must be a record that can be read"
    assert str(caught.value) == f"{tmp_path / 'none'}: {expected}, got No such file or directory. Check the path."
    with pytest.raises(ConfigError) as caught:
        read_record(tmp_path)
    assert str(caught.value) == f"{tmp_path}: {expected}, got Is a directory. Check the path."
