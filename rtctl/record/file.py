"""The record file, byte for byte. The one place that knows its layout.

A record is a stream of msgpack objects, only ever appended to. Every object is an array of four:

    header   ["rtctl record", version, H, seal]        H: msgpack map with everything needed to read the rows, see `header.py`
    block    [first row, row count, rows, seal]        rows: the rows' bytes, little-endian, packed, columns in the header's order
    close    [-1, row count, C, seal]                  row count: rows in the record; C: msgpack map {lost_rows, reason, closed_utc}

first row counts from 0 over the run; a gap between blocks is a number of lost rows. A seal is the SHA-256 of the seal before it
(32 zero bytes for the header), the first two elements packed as msgpack, and the third element's bytes. So each object is bound
to everything before it: a cut loses at most the object it goes through, and a changed bit breaks the chain where it happened.

Nothing may follow a close. A record without one is whole up to its last block but was not ended properly.
"""

import hashlib
import io
from collections.abc import Iterator
from dataclasses import dataclass
from typing import Any, BinaryIO

import msgpack

RECORD_NAME = "rtctl record"
RECORD_VERSION = 1
CLOSE = -1  # in place of the first row
NO_SEAL = bytes(32)
MAX_OBJECT_BYTES = 1 << 26  # a damaged length must not make the reader ask for memory without bound


def seal(before: bytes, first: object, second: object, content: bytes) -> bytes:
    """Seal of an object: 32 bytes."""
    return hashlib.sha256(before + msgpack.packb(first) + msgpack.packb(second) + content).digest()


def pack_object(before: bytes, first: object, second: object, content: bytes) -> tuple[bytes, bytes]:
    """Bytes of one object of the file, and its seal."""
    mark = seal(before, first, second, content)
    return bytes(msgpack.packb([first, second, content, mark])), mark


@dataclass(frozen=True)
class Piece:
    """One whole object of a record, its seal checked."""

    first: Any  # RECORD_NAME, a row number or CLOSE
    second: int
    content: bytes
    seal: bytes
    end: int  # bytes of the file up to and with this object


class Damage(Exception):
    """Why the file cannot be read further. `cut` tells a file that merely ends early from one that was changed."""

    def __init__(self, text: str, cut: bool) -> None:
        super().__init__(text)
        self.cut = cut


def pieces(file: BinaryIO) -> Iterator[Piece]:
    """The whole objects of a record from its start. Raises `Damage` at the first one that is cut or changed."""
    size = file.seek(0, io.SEEK_END)
    file.seek(0)
    unpacker = msgpack.Unpacker(
        file,
        max_buffer_size=2 * MAX_OBJECT_BYTES,
        max_bin_len=MAX_OBJECT_BYTES,
        max_str_len=64,
        max_array_len=4,
        max_map_len=0,
        max_ext_len=0,
    )
    before, end, number = NO_SEAL, 0, 0
    while end < size:
        place = "the header" if number == 0 else f"block {number - 1}"
        try:
            found = unpacker.unpack()
        except msgpack.OutOfData:
            raise Damage(f"ends inside {place}: {size - end} bytes follow the last whole block", cut=True) from None
        # what a damaged byte can make of a stream: a wrong length, a wrong type, text that is none, nesting without end
        except (ValueError, TypeError, OverflowError, RecursionError, msgpack.UnpackException):
            raise Damage(_unreadable(number, end), cut=False) from None
        if not (isinstance(found, list) and len(found) == 4):
            raise Damage(_unreadable(number, end), cut=False)
        _check(found, number, before, place)
        first, second, content, before = found
        end = unpacker.tell()
        number += 1
        yield Piece(first, second, content, before, end)
        if first == CLOSE and end < size:
            raise Damage(f"{size - end} bytes follow the close mark: the file was changed", cut=False)


def _unreadable(number: int, at: int) -> str:
    if number == 0:
        return "not a record, or its header was changed"
    return f"block {number - 1} (at byte {at}) is not readable: the file was changed there"


def _check(found: list[Any], number: int, before: bytes, place: str) -> None:
    first, second, content, mark = found
    kinds_hold = type(first) is (str if number == 0 else int) and type(second) is int and type(content) is type(mark) is bytes
    if not kinds_hold or seal(before, first, second, content) != mark:
        raise Damage(f"{place} does not match its SHA-256: the file was changed there", cut=False)
