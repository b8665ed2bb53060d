"""The record file: its objects and their seals, against the msgpack specification and SHA-256 as published."""

import hashlib
import io

import pytest

from rtctl.record.file import CLOSE, NO_SEAL, RECORD_NAME, RECORD_VERSION, Damage, pack_object, pieces, seal
from tests.sources import source


def small_file() -> tuple[bytes, list[int]]:
    """A record of a header, three blocks and a close, and where each object ends."""
    data, mark, ends = b"", NO_SEAL, []
    objects = [
        (RECORD_NAME, RECORD_VERSION, b"\x80"),
        (0, 2, b"0123456789abcdef"),
        (2, 1, b"01234567"),
        (9, 1, b"89abcdef"),
        (CLOSE, 4, b"\x80"),
    ]
    for first, second, content in objects:
        packed, mark = pack_object(mark, first, second, content)
        data += packed
        ends.append(len(data))
    return data, ends


@source("msgpack-spec", "fixarray 0x94, positive fixint, bin 8 0xc4, negative fixint 0xff")
@source("fips180-4", "SHA-256, as in the standard library's hashlib")
def test_a_block_is_laid_out_as_documented() -> None:
    """A block by hand from the specification: array of four, first row, row count, rows, seal."""
    before = bytes(range(32))
    expected_seal = hashlib.sha256(before + b"\x05\x01" + b"abcdefgh").digest()
    packed, mark = pack_object(before, 5, 1, b"abcdefgh")
    assert mark == expected_seal
    assert packed == b"\x94\x05\x01\xc4\x08abcdefgh\xc4\x20" + expected_seal
    assert pack_object(before, CLOSE, 1, b"")[0][:4] == b"\x94\xff\x01\xc4"


def test_pieces_come_back_in_order() -> None:
    """Reading gives the objects and where they end."""
    data, ends = small_file()
    found = list(pieces(io.BytesIO(data)))
    assert [piece.first for piece in found] == [RECORD_NAME, 0, 2, 9, CLOSE]
    assert [piece.end for piece in found] == ends


def test_every_cut_is_read_to_its_last_whole_object() -> None:
    """At every offset: the objects before the cut, and a note of the rest unless the cut is between two objects."""
    data, ends = small_file()
    for cut in range(len(data)):
        found, note = read_all(data[:cut])
        whole = sum(end <= cut for end in ends)
        assert len(found) == whole
        place = "the header" if whole == 0 else f"block {whole - 1}"
        rest = cut - ([0, *ends][whole])
        assert note == (f"ends inside {place}: {rest} bytes follow the last whole block" if rest else "")


def test_every_flipped_bit_is_noticed() -> None:
    """Every single bit of the file: no object at or after the changed one is given out."""
    data, ends = small_file()
    for bit in range(8 * len(data)):
        changed = bytearray(data)
        changed[bit // 8] ^= 1 << bit % 8
        found, note = read_all(bytes(changed))
        assert note
        assert len(found) <= sum(end <= bit // 8 for end in ends)


def read_all(data: bytes) -> tuple[list[object], str]:
    """What can be read, and what is said about the rest."""
    found: list[object] = []
    try:
        for piece in pieces(io.BytesIO(data)):
            found.append(piece.first)
    except Damage as damage:
        return found, str(damage)
    return found, ""


def test_bytes_after_the_close_are_noticed() -> None:
    """Nothing may be added to an ended record."""
    data, _ = small_file()
    found, note = read_all(data + b"\x00")
    assert (len(found), note) == (5, "1 bytes follow the close mark: the file was changed")


def test_blocks_cannot_be_swapped_or_dropped() -> None:
    """The seals chain: a block that is whole by itself does not fit in another place."""
    data, ends = small_file()
    head, one, two, rest = data[: ends[0]], data[ends[0] : ends[1]], data[ends[1] : ends[2]], data[ends[2] :]
    text = "block 0 does not match its SHA-256: the file was changed there"
    assert read_all(head + two + one + rest) == ([RECORD_NAME], text)
    assert read_all(head + two + rest) == ([RECORD_NAME], text)


@pytest.mark.parametrize("junk", [b"\xdd\xff\xff\xff\xff", b"\xdf\xff\xff\xff\xff", b"\xc1", b"hello"])
def test_junk_is_no_record_and_asks_for_no_memory(junk: bytes) -> None:
    """Lengths out of all proportion are refused before anything of that size is made."""
    assert read_all(junk + bytes(10)) == ([], "not a record, or its header was changed")


def test_a_length_beyond_the_file_is_a_cut_header() -> None:
    """Bytes that claim 4 GB of content are no record either, and only what is there is read."""
    assert read_all(b"\xc6\xff\xff\xff\xff" + bytes(10)) == ([], "ends inside the header: 15 bytes follow the last whole block")


def test_the_seal_covers_all_three_elements() -> None:
    """Another first row, count, content or history gives another seal."""
    marks = [seal(NO_SEAL, 1, 2, b"x"), seal(NO_SEAL, 2, 2, b"x"), seal(NO_SEAL, 1, 1, b"x"), seal(NO_SEAL, 1, 2, b"y")]
    marks.append(seal(marks[0], 1, 2, b"x"))
    assert len(set(marks)) == len(marks)
