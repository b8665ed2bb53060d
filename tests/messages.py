"""Messages for tests: built with the msgpack package, in every legal form, and read by a plain reference reader.

The reference reader is written from the MessagePack specification and `drivers/WIRE.md` with struct and zlib; it shares no code
with the compiled codec.
"""

import struct
import zlib
from typing import Any

import msgpack
import numpy as np

from rtctl.blocks import STATE, TORQUE
from rtctl.kernels.layout import new_block

STATE_COUNTERS = (
    "arm_key",
    "session",
    "sequence",
    "sample_ns",
    "holder",
    "grant",
    "received_session",
    "received_sequence",
    "applied_session",
    "applied_sequence",
    "status",
)
TORQUE_COUNTERS = ("arm_key", "session", "sequence", "driver_session", "state_sequence", "grant", "request", "valid_for_ns")

COUNTER_END = 2**53
FLOAT32_MAX = 3.4028234663852886e38


# ---- building ------------------------------------------------------------------------------------------------------------------


def state_items(state: np.void) -> list[Any]:
    """The elements of a state message before its CRC."""
    n, n_tau = int(state["n"]), int(state["tau_count"])
    counters = [int(state[name]) for name in STATE_COUNTERS]
    return [1, 1, *counters, state["q"][:n].tolist(), state["qd"][:n].tolist(), state["tau_meas"][:n_tau].tolist(), {}]


def torque_items(torque: np.void) -> list[Any]:
    """The elements of a torque message before its CRC."""
    return [1, 2, *(int(torque[name]) for name in TORQUE_COUNTERS), torque["tau"][: int(torque["n"])].tolist()]


def packed(items: list[Any]) -> bytes:
    """A whole message with its CRC, by the msgpack package."""
    body = msgpack.packb([*items, 0])[:-1]
    return bytes(body + msgpack.packb(zlib.crc32(body)))


def joined(elements: list[bytes], crc_form: int = 0, wide: bool = False) -> bytes:
    """A whole message from encoded elements; `crc_form` picks the integer form of the CRC, `wide` an array16 header."""
    body = array_header(len(elements) + 1, wide) + b"".join(elements)
    forms = integer_forms(zlib.crc32(body))
    return body + forms[crc_form % len(forms)]


def sealed(body: bytes) -> bytes:
    """`body` with its right CRC behind it, whatever the body is."""
    return body + msgpack.packb(zlib.crc32(body))


def array_header(count: int, wide: bool) -> bytes:
    """Header of an array in its smallest form, or as array16."""
    return struct.pack(">BH", 0xDC, count) if wide or count > 15 else bytes([0x90 + count])


def integer_forms(value: int) -> list[bytes]:
    """Every legal MessagePack form of an integer, smallest unsigned ones first."""
    forms = [bytes([value])] if 0 <= value < 128 else []
    if -32 <= value < 0:
        forms.append(bytes([value + 256]))
    for first, code, low, high in (
        (0xCC, "B", 0, 2**8),
        (0xCD, "H", 0, 2**16),
        (0xCE, "I", 0, 2**32),
        (0xCF, "Q", 0, 2**64),
        (0xD0, "b", -(2**7), 2**7),
        (0xD1, "h", -(2**15), 2**15),
        (0xD2, "i", -(2**31), 2**31),
        (0xD3, "q", -(2**63), 2**63),
    ):
        if low <= value < high:
            forms.append(struct.pack(">B" + code, first, value))
    return forms


def number_forms(value: float) -> list[bytes]:
    """Every MessagePack form that holds a physical value exactly: float64, float32 and, for whole values, integers."""
    forms = [struct.pack(">Bd", 0xCB, value)]
    if value != value or abs(value) == float("inf") or (abs(value) <= FLOAT32_MAX and float(np.float32(value)) == value):
        forms.append(struct.pack(">Bf", 0xCA, value))
    if value == value and abs(value) < 2**63 and value == int(value) and str(value) != "-0.0":
        forms.extend(integer_forms(int(value)))
    return forms


def example_state(n: int = 7, seed: int = 1, with_tau: bool = True) -> np.void:
    """A STATE block with plausible invented values."""
    rng = np.random.default_rng(seed)
    state = new_block(STATE)
    state["version"] = 1
    for name in STATE_COUNTERS:
        state[name] = int(rng.integers(0, 2 ** int(rng.integers(1, 54))))
    state["n"], state["tau_count"] = n, n if with_tau else 0
    state["q"][:n], state["qd"][:n] = rng.normal(size=n), rng.normal(size=n)
    if with_tau:
        state["tau_meas"][:n] = 20.0 * rng.normal(size=n)
    return state


def example_torque(n: int = 7, seed: int = 1) -> np.void:
    """A TORQUE block with plausible invented values."""
    rng = np.random.default_rng(seed)
    torque = new_block(TORQUE)
    torque["version"] = 1
    for name in TORQUE_COUNTERS:
        torque[name] = int(rng.integers(0, 2 ** int(rng.integers(1, 54))))
    torque["request"] = int(rng.integers(0, 3))
    torque["n"] = n
    torque["tau"][:n] = 20.0 * rng.normal(size=n)
    return torque


def bytes_in(data: bytes) -> np.ndarray:
    """The bytes as a writable array of exactly their length: reading beyond the message is reading beyond the array."""
    return np.frombuffer(bytearray(data), np.uint8)


# ---- reference reader ----------------------------------------------------------------------------------------------------------


class Refused(Exception):
    """The reference reader does not accept the message."""


_INTEGERS = {0xCC: "B", 0xCD: "H", 0xCE: "I", 0xCF: "Q", 0xD0: "b", 0xD1: "h", 0xD2: "i", 0xD3: "q"}
_FLOATS = {0xCA: "f", 0xCB: "d"}


class _Reader:
    def __init__(self, data: bytes) -> None:
        self.data, self.at = data, 0

    def take(self, count: int) -> bytes:
        if self.at + count > len(self.data):
            raise Refused("truncated")
        self.at += count
        return self.data[self.at - count : self.at]

    def value(self) -> Any:
        """One element as int, float, str (as bytes), list or dict; only the forms the contract allows somewhere."""
        first = self.take(1)[0]
        if first < 0x80:
            return first
        if first >= 0xE0:
            return first - 256
        for table in (_INTEGERS, _FLOATS):
            if first in table:
                code = ">" + table[first]
                return struct.unpack(code, self.take(struct.calcsize(code)))[0]
        if 0xA0 <= first < 0xC0:
            return self.take(first - 0xA0)
        if first in (0xD9, 0xDA):
            return self.take(int.from_bytes(self.take(first - 0xD8), "big"))
        if 0x90 <= first < 0xA0 or first == 0xDC:
            count = first - 0x90 if first < 0xA0 else int.from_bytes(self.take(2), "big")
            return [self.value() for _ in range(count)]
        if 0x80 <= first < 0x90 or first == 0xDE:
            count = first - 0x80 if first < 0x90 else int.from_bytes(self.take(2), "big")
            return [(self.value(), self.value()) for _ in range(count)], "map"
        raise Refused("form")


def _numbers(value: Any) -> list[float]:
    if not isinstance(value, list) or not all(isinstance(number, (int, float)) for number in value):
        raise Refused("vector")
    return [float(number) for number in value]


def reference_read(data: bytes, kind: int) -> tuple[list[int], list[list[float]]]:
    """(counters, vectors) of a message; raises Refused for what the contract forbids."""
    if not 1 <= len(data) <= 1024:
        raise Refused("length")
    reader = _Reader(data)
    first = reader.take(1)[0]
    if not (0x90 <= first < 0xA0 or first == 0xDC):
        raise Refused("header")
    count = first - 0x90 if first < 0xA0 else int.from_bytes(reader.take(2), "big")
    if count != (18 if kind == 1 else 12):
        raise Refused("count")
    try:
        items = [reader.value() for _ in range(count - 1)]
    except RecursionError:
        raise Refused("nesting") from None
    body = data[: reader.at]
    crc = reader.value()
    if reader.at != len(data) or not isinstance(crc, int) or crc != zlib.crc32(body):
        raise Refused("end")
    counters = items[: 13 if kind == 1 else 10]
    if not all(isinstance(value, int) and 0 <= value < COUNTER_END for value in counters) or counters[:2] != [1, kind]:
        raise Refused("counters")
    vectors = [_numbers(value) for value in items[13:16]] if kind == 1 else [_numbers(items[10])]
    n = len(vectors[0])
    if not 1 <= n <= 16:
        raise Refused("joints")
    if kind == 1:
        if len(vectors[1]) != n or len(vectors[2]) not in (0, n):
            raise Refused("lengths")
        extras = items[16]
        if not (isinstance(extras, tuple) and all(isinstance(key, bytes) for key, _ in extras[0])):
            raise Refused("extras")
        for _, value in extras[0]:
            if not isinstance(value, (int, float)):
                _numbers(value)
    elif counters[8] > 2:
        raise Refused("request")
    return counters[2:], vectors


def block_values(block: np.void, kind: int) -> tuple[list[int], list[list[float]]]:
    """(counters, vectors) of a decoded block, in the order of `reference_read`."""
    if kind == 1:
        n = int(block["n"])
        vectors = [block["q"][:n].tolist(), block["qd"][:n].tolist(), block["tau_meas"][: int(block["tau_count"])].tolist()]
        return [int(block[name]) for name in STATE_COUNTERS], vectors
    return [int(block[name]) for name in TORQUE_COUNTERS], [block["tau"][: int(block["n"])].tolist()]
