"""Compiled encoder and decoder of the two messages: STATE and TORQUE blocks to single-part msgpack arrays and back.

The text of the contract is `drivers/WIRE.md`. Encoding agrees byte for byte with the `msgpack` package; decoding accepts every
number form a driver in another language may choose. Form and range of integers are judged here, meaning is not: identity, order,
age, limits and finiteness (a NaN passes through) belong to the supervisor and to the driver.

Readers share one pattern: they take a position and return the next one; a negative position is a refusal code and passes through
every later reader unchanged, so that a run of fields needs one check at its end.
Source: MessagePack specification (msgpack.org), type formats; all multi-byte values are big-endian.
"""

import numpy as np

from rtctl.blocks import KIND_STATE, KIND_TORQUE, MAX_MESSAGE_BYTES, REQUEST_RELEASE, WIRE_VERSION
from rtctl.kernels.compile import hot
from rtctl.kernels.layout import MAX_JOINTS, OK
from rtctl.wire import refusals
from rtctl.wire.crc import crc32

STATE_ELEMENTS = 18
TORQUE_ELEMENTS = 12
COUNTER_END = 2**53  # counters stay below, so that every language can hold them in a float64

# Plain integers: compiled code takes globals of this module as constants.
LENGTH = refusals.LENGTH
TRUNCATED = refusals.TRUNCATED
HEADER = refusals.HEADER
VERSION = refusals.VERSION
KIND = refusals.KIND
COUNT = refusals.COUNT
COUNTER_FORM = refusals.COUNTER_FORM
COUNTER_RANGE = refusals.COUNTER_RANGE
NUMBER_FORM = refusals.NUMBER_FORM
VECTOR_FORM = refusals.VECTOR_FORM
JOINTS = refusals.JOINTS
VECTOR_LENGTHS = refusals.VECTOR_LENGTHS
REQUEST = refusals.REQUEST
EXTRAS = refusals.EXTRAS
TRAILING = refusals.TRAILING
CRC = refusals.CRC

# First bytes of the MessagePack forms used here
FIXMAP, FIXARRAY, FIXSTR = 0x80, 0x90, 0xA0
FLOAT32, FLOAT64 = 0xCA, 0xCB
UINT8, UINT16, UINT32, UINT64 = 0xCC, 0xCD, 0xCE, 0xCF
INT8, INT16, INT32, INT64 = 0xD0, 0xD1, 0xD2, 0xD3
STR8, STR16 = 0xD9, 0xDA
ARRAY16, MAP16 = 0xDC, 0xDE
NEGATIVE_FIXINT = 0xE0


# ---- reading -------------------------------------------------------------------------------------------------------------------


@hot
def _big_endian(buffer, pos, width):
    """The unsigned integer in `width` (1, 2, 4 or 8) bytes at `pos`; 8 bytes wrap into int64."""
    if width == 8:
        return (
            (np.int64(buffer[pos]) << 56)
            | (np.int64(buffer[pos + 1]) << 48)
            | (np.int64(buffer[pos + 2]) << 40)
            | (np.int64(buffer[pos + 3]) << 32)
            | (np.int64(buffer[pos + 4]) << 24)
            | (np.int64(buffer[pos + 5]) << 16)
            | (np.int64(buffer[pos + 6]) << 8)
            | np.int64(buffer[pos + 7])
        )
    value = np.int64(0)
    for i in range(width):
        value = (value << 8) | np.int64(buffer[pos + i])
    return value


@hot
def _integer(buffer, pos, length):
    """The integer at `pos`: (value wrapped into int64, 1 if it is an unsigned 64-bit value of 2^63 or more, next position).

    COUNTER_FORM if the element is not an integer, TRUNCATED if it does not end before `length`.
    """
    if pos < 0:
        return np.int64(0), 0, pos
    if pos >= length:
        return np.int64(0), 0, TRUNCATED
    first = np.int64(buffer[pos])
    if first < FIXMAP:
        return first, 0, pos + 1
    if first >= NEGATIVE_FIXINT:
        return first - 256, 0, pos + 1
    if UINT8 <= first <= UINT64:
        width = 1 << (first - UINT8)
    elif INT8 <= first <= INT64:
        width = 1 << (first - INT8)
    else:
        return np.int64(0), 0, COUNTER_FORM
    if pos + 1 + width > length:
        return np.int64(0), 0, TRUNCATED
    value = _big_endian(buffer, pos + 1, width)
    huge = 0
    if first >= INT8:
        if width < 8 and value >= (1 << (8 * width - 1)):
            value -= 1 << (8 * width)
    elif value < 0:
        huge = 1
    return value, huge, pos + 1 + width


@hot
def _counter(buffer, pos, length):
    """The counter at `pos`: (value, next position). Any integer form; COUNTER_RANGE unless 0 <= value < 2^53."""
    value, huge, pos = _integer(buffer, pos, length)
    if pos < 0:
        return np.int64(0), pos
    if huge != 0 or not (0 <= value < COUNTER_END):
        return np.int64(0), COUNTER_RANGE
    return value, pos


@hot
def _number(buffer, pos, length):
    """The physical value at `pos`: (float64, next position). Both float forms and every integer form, rounded to even."""
    if pos < 0:
        return 0.0, pos
    if pos >= length:
        return 0.0, TRUNCATED
    first = np.int64(buffer[pos])
    if first == FLOAT64:
        if pos + 9 > length:
            return 0.0, TRUNCATED
        return np.int64(_big_endian(buffer, pos + 1, 8)).view(np.float64), pos + 9
    if first == FLOAT32:
        if pos + 5 > length:
            return 0.0, TRUNCATED
        return np.float64(np.uint32(_big_endian(buffer, pos + 1, 4)).view(np.float32)), pos + 5
    value, huge, pos = _integer(buffer, pos, length)
    if pos == COUNTER_FORM:
        pos = NUMBER_FORM
    if huge != 0:
        return np.float64(np.int64(value).view(np.uint64)), pos  # 2^63 and more
    return np.float64(value), pos


@hot
def _array_header(buffer, pos, length, refusal):
    """The element count of the array at `pos`: (count, next position); `refusal` if its header is not fixarray or array16."""
    if pos < 0:
        return np.int64(0), pos
    if pos >= length:
        return np.int64(0), TRUNCATED
    first = np.int64(buffer[pos])
    if FIXARRAY <= first < FIXSTR:
        return first - FIXARRAY, pos + 1
    if first != ARRAY16:
        return np.int64(0), refusal
    if pos + 3 > length:
        return np.int64(0), TRUNCATED
    return _big_endian(buffer, pos + 1, 2), pos + 3


@hot
def _vector(buffer, pos, length, out):
    """The joint array at `pos` into `out`, zeros behind it: (count, next position). JOINTS if longer than `out`."""
    count, pos = _array_header(buffer, pos, length, VECTOR_FORM)
    if pos < 0:
        return np.int64(0), pos
    if count > MAX_JOINTS:
        return np.int64(0), JOINTS
    for i in range(count):
        out[i], pos = _number(buffer, pos, length)
    for i in range(count, MAX_JOINTS):
        out[i] = 0.0
    return count, pos


@hot
def _skip_numbers(buffer, pos, length, count):
    """Position after `count` numbers; EXTRAS if one is something else."""
    for _ in range(count):
        _, pos = _number(buffer, pos, length)
        if pos < 0:
            return EXTRAS if pos == NUMBER_FORM else pos
    return pos


@hot
def _skip_string(buffer, pos, length):
    """Position after the string at `pos`; EXTRAS if it is not a string. Its text is not looked at."""
    if pos >= length:
        return TRUNCATED
    first = np.int64(buffer[pos])
    if FIXSTR <= first < 0xC0:
        after = pos + 1 + (first - FIXSTR)
    elif first == STR8 or first == STR16:
        width = 1 << (first - STR8)
        if pos + 1 + width > length:
            return TRUNCATED
        after = pos + 1 + width + _big_endian(buffer, pos + 1, width)
    else:
        return EXTRAS
    if after > length:
        return TRUNCATED
    return after


@hot
def _skip_extras(buffer, pos, length):
    """Position after the map of extras at `pos`; EXTRAS unless it maps strings to numbers or flat arrays of numbers."""
    if pos < 0:
        return pos
    if pos >= length:
        return TRUNCATED
    first = np.int64(buffer[pos])
    if FIXMAP <= first < FIXARRAY:
        count = first - FIXMAP
        pos += 1
    elif first == MAP16:
        if pos + 3 > length:
            return TRUNCATED
        count = _big_endian(buffer, pos + 1, 2)
        pos += 3
    else:
        return EXTRAS
    for _ in range(count):
        pos = _skip_string(buffer, pos, length)
        if pos < 0:
            return pos
        if pos >= length:
            return TRUNCATED
        values = np.int64(1)
        first = np.int64(buffer[pos])
        if FIXARRAY <= first < FIXSTR or first == ARRAY16:
            values, pos = _array_header(buffer, pos, length, EXTRAS)
            if pos < 0:
                return pos
        pos = _skip_numbers(buffer, pos, length, values)
        if pos < 0:
            return pos
    return pos


@hot
def _open(buffer, length, kind, elements):
    """Position after version and kind, or why this cannot be a message of this `kind` with so many `elements`.

    The version is judged before the element count, so that a newer peer is told apart from a broken one.
    """
    if not (1 <= length <= MAX_MESSAGE_BYTES) or length > buffer.shape[0]:
        return LENGTH
    count, pos = _array_header(buffer, np.int64(0), length, HEADER)
    version, pos = _counter(buffer, pos, length)
    if pos < 0:
        return pos
    if version != WIRE_VERSION:
        return VERSION
    found, pos = _counter(buffer, pos, length)
    if pos < 0:
        return pos
    if found != kind:
        return KIND
    if count != elements:
        return COUNT
    return pos


@hot
def _close(buffer, pos, length):
    """OK if the CRC at `pos` ends the message and belongs to all bytes before it."""
    crc, after = _counter(buffer, pos, length)
    if after < 0:
        return after
    if after != length:
        return TRAILING
    if crc != crc32(buffer, pos):
        return CRC
    return OK


@hot
def decode_state(buffer, length, state):
    """A state message into `state`; OK, or a refusal code (below 0, see `rtctl.wire.refusals`).

    buffer  (>= length,)  uint8    the message; nothing at or beyond `length` is read
    length                integer  its size as received; above 1024 is refused unread
    state                 STATE    result. On refusal it may be half-written: decode into a spare block and take it over on OK.

    Non-finite values pass through. Extras are checked for form and skipped. Behind n, vectors are filled with zeros.
    Identity: decode_state after encode_state gives the same block.
    """
    pos = _open(buffer, length, KIND_STATE, STATE_ELEMENTS)
    if pos < 0:
        return pos
    state["version"] = WIRE_VERSION
    state["arm_key"], pos = _counter(buffer, pos, length)
    state["session"], pos = _counter(buffer, pos, length)
    state["sequence"], pos = _counter(buffer, pos, length)
    state["sample_ns"], pos = _counter(buffer, pos, length)
    state["holder"], pos = _counter(buffer, pos, length)
    state["grant"], pos = _counter(buffer, pos, length)
    state["received_session"], pos = _counter(buffer, pos, length)
    state["received_sequence"], pos = _counter(buffer, pos, length)
    state["applied_session"], pos = _counter(buffer, pos, length)
    state["applied_sequence"], pos = _counter(buffer, pos, length)
    state["status"], pos = _counter(buffer, pos, length)
    n, pos = _vector(buffer, pos, length, state["q"][:])
    n_qd, pos = _vector(buffer, pos, length, state["qd"][:])
    n_tau, pos = _vector(buffer, pos, length, state["tau_meas"][:])
    if pos < 0:
        return pos
    if n == 0:
        return JOINTS
    if n_qd != n or (n_tau != n and n_tau != 0):
        return VECTOR_LENGTHS
    state["n"] = n
    state["tau_count"] = n_tau
    pos = _skip_extras(buffer, pos, length)
    if pos < 0:
        return pos
    return _close(buffer, pos, length)


@hot
def decode_torque(buffer, length, torque):
    """A torque message into `torque`; OK, or a refusal code (below 0, see `rtctl.wire.refusals`).

    buffer  (>= length,)  uint8    the message; nothing at or beyond `length` is read
    length                integer  its size as received; above 1024 is refused unread
    torque                TORQUE   result. On refusal it may be half-written: decode into a spare block and take it over on OK.

    Non-finite values pass through: the receiver must check them. Behind n, tau is filled with zeros.
    Identity: decode_torque after encode_torque gives the same block.
    """
    pos = _open(buffer, length, KIND_TORQUE, TORQUE_ELEMENTS)
    if pos < 0:
        return pos
    torque["version"] = WIRE_VERSION
    torque["arm_key"], pos = _counter(buffer, pos, length)
    torque["session"], pos = _counter(buffer, pos, length)
    torque["sequence"], pos = _counter(buffer, pos, length)
    torque["driver_session"], pos = _counter(buffer, pos, length)
    torque["state_sequence"], pos = _counter(buffer, pos, length)
    torque["grant"], pos = _counter(buffer, pos, length)
    request, pos = _counter(buffer, pos, length)
    torque["valid_for_ns"], pos = _counter(buffer, pos, length)
    n, pos = _vector(buffer, pos, length, torque["tau"][:])
    if pos < 0:
        return pos
    if n == 0:
        return JOINTS
    if request > REQUEST_RELEASE:
        return REQUEST
    torque["request"] = request
    torque["n"] = n
    return _close(buffer, pos, length)


# ---- writing -------------------------------------------------------------------------------------------------------------------


@hot
def _put_counter(buffer, pos, value):
    """Write a counter in its smallest form; position after it, COUNTER_RANGE unless 0 <= value < 2^53."""
    if pos < 0:
        return pos
    if not (0 <= value < COUNTER_END):
        return COUNTER_RANGE
    if value < FIXMAP:
        buffer[pos] = value
        return pos + 1
    if value < 1 << 8:
        first, width = UINT8, 1
    elif value < 1 << 16:
        first, width = UINT16, 2
    elif value < 1 << 32:
        first, width = UINT32, 4
    else:
        first, width = UINT64, 8
    buffer[pos] = first
    for i in range(width):
        buffer[pos + 1 + i] = (value >> (8 * (width - 1 - i))) & 0xFF
    return pos + 1 + width


@hot
def _put_vector(buffer, pos, values, count):
    """Write `count` values as float64; position after them. Room is guaranteed by the callers' checks of `count`."""
    if pos < 0:
        return pos
    if count < 16:
        buffer[pos] = FIXARRAY + count
        pos += 1
    else:
        buffer[pos] = ARRAY16
        buffer[pos + 1] = 0
        buffer[pos + 2] = count
        pos += 3
    for i in range(count):
        bits = np.float64(values[i]).view(np.int64)
        buffer[pos] = FLOAT64
        buffer[pos + 1] = (bits >> 56) & 0xFF
        buffer[pos + 2] = (bits >> 48) & 0xFF
        buffer[pos + 3] = (bits >> 40) & 0xFF
        buffer[pos + 4] = (bits >> 32) & 0xFF
        buffer[pos + 5] = (bits >> 24) & 0xFF
        buffer[pos + 6] = (bits >> 16) & 0xFF
        buffer[pos + 7] = (bits >> 8) & 0xFF
        buffer[pos + 8] = bits & 0xFF
        pos += 9
    return pos


@hot
def encode_state(state, buffer):
    """`state` as a message into `buffer`; its length in bytes, or a refusal code (below 0) and no message.

    state                STATE  `version` is not read: this codec writes its own
    buffer  (>= 1024,)   uint8  result

    LENGTH if the buffer is too small, JOINTS unless 1 <= n <= 16, VECTOR_LENGTHS unless tau_count is 0 or n, COUNTER_RANGE
    if an integer is negative or 2^53 and more. Extras are written as an empty map. Non-finite values are written as they are.
    Identity: equal to msgpack.packb of the same list, then of its CRC.
    """
    n, n_tau = state["n"], state["tau_count"]
    if buffer.shape[0] < MAX_MESSAGE_BYTES:
        return LENGTH
    if not (1 <= n <= MAX_JOINTS):
        return JOINTS
    if n_tau != 0 and n_tau != n:
        return VECTOR_LENGTHS
    buffer[0] = ARRAY16
    buffer[1] = 0
    buffer[2] = STATE_ELEMENTS
    pos = _put_counter(buffer, np.int64(3), WIRE_VERSION)
    pos = _put_counter(buffer, pos, KIND_STATE)
    pos = _put_counter(buffer, pos, state["arm_key"])
    pos = _put_counter(buffer, pos, state["session"])
    pos = _put_counter(buffer, pos, state["sequence"])
    pos = _put_counter(buffer, pos, state["sample_ns"])
    pos = _put_counter(buffer, pos, state["holder"])
    pos = _put_counter(buffer, pos, state["grant"])
    pos = _put_counter(buffer, pos, state["received_session"])
    pos = _put_counter(buffer, pos, state["received_sequence"])
    pos = _put_counter(buffer, pos, state["applied_session"])
    pos = _put_counter(buffer, pos, state["applied_sequence"])
    pos = _put_counter(buffer, pos, state["status"])
    pos = _put_vector(buffer, pos, state["q"][:], n)
    pos = _put_vector(buffer, pos, state["qd"][:], n)
    pos = _put_vector(buffer, pos, state["tau_meas"][:], n_tau)
    if pos < 0:
        return pos
    buffer[pos] = FIXMAP
    return _put_counter(buffer, pos + 1, crc32(buffer, pos + 1))


@hot
def encode_torque(torque, buffer):
    """`torque` as a message into `buffer`; its length in bytes, or a refusal code (below 0) and no message.

    torque               TORQUE  `version` is not read: this codec writes its own
    buffer  (>= 1024,)   uint8   result

    LENGTH if the buffer is too small, JOINTS unless 1 <= n <= 16, REQUEST if the request is unknown, COUNTER_RANGE if an
    integer is negative or 2^53 and more. Non-finite values are written as they are: the gate keeps them out.
    Identity: equal to msgpack.packb of the same list, then of its CRC.
    """
    n = torque["n"]
    if buffer.shape[0] < MAX_MESSAGE_BYTES:
        return LENGTH
    if not (1 <= n <= MAX_JOINTS):
        return JOINTS
    if not (0 <= torque["request"] <= REQUEST_RELEASE):
        return REQUEST
    buffer[0] = FIXARRAY + TORQUE_ELEMENTS
    pos = _put_counter(buffer, np.int64(1), WIRE_VERSION)
    pos = _put_counter(buffer, pos, KIND_TORQUE)
    pos = _put_counter(buffer, pos, torque["arm_key"])
    pos = _put_counter(buffer, pos, torque["session"])
    pos = _put_counter(buffer, pos, torque["sequence"])
    pos = _put_counter(buffer, pos, torque["driver_session"])
    pos = _put_counter(buffer, pos, torque["state_sequence"])
    pos = _put_counter(buffer, pos, torque["grant"])
    pos = _put_counter(buffer, pos, torque["request"])
    pos = _put_counter(buffer, pos, torque["valid_for_ns"])
    pos = _put_vector(buffer, pos, torque["tau"][:], n)
    if pos < 0:
        return pos
    return _put_counter(buffer, pos, crc32(buffer, pos))
