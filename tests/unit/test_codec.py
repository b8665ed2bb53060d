"""The compiled codec against the msgpack package, published vectors and every legal form; fuzzing is in tests/faults."""

import math
import struct

import msgpack
import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from numba.core.runtime import _nrt_python, rtsys

from rtctl.blocks import MAX_MESSAGE_BYTES, STATE, TORQUE
from rtctl.kernels.compile import hot
from rtctl.kernels.layout import MAX_JOINTS, OK, new_block
from rtctl.wire import refusals
from rtctl.wire.codec import decode_state, decode_torque, encode_state, encode_torque
from tests.messages import (
    COUNTER_END,
    STATE_COUNTERS,
    TORQUE_COUNTERS,
    array_header,
    bytes_in,
    example_state,
    example_torque,
    integer_forms,
    joined,
    number_forms,
    packed,
    sealed,
    state_items,
    torque_items,
)
from tests.sources import source

PROPERTIES = settings(deadline=None, derandomize=True, max_examples=200)

EDGES = sorted({edge + step for width in (7, 8, 15, 16, 31, 32, 53) for edge in (2**width,) for step in (-1, 0, 1)} | {0, 1})
COUNTER = st.one_of(st.sampled_from([edge for edge in EDGES if edge < COUNTER_END]), st.integers(0, COUNTER_END - 1))
NUMBER = st.one_of(
    st.floats(allow_nan=True, allow_infinity=True),
    st.floats(width=32),
    st.integers(-(2**63), 2**63 - 1).map(float),
    st.integers(-40, 300).map(float),
)
NOT_A_NUMBER = [b"\xc0", b"\xc1", b"\xc2", b"\xc3", b"\xa11", b"\x91\x01", b"\x81\xa1a\x01", b"\xc4\x01\x01", b"\xd4\x01\x01"]


@st.composite
def state_blocks(draw):
    """STATE blocks over the whole range of every field."""
    state = new_block(STATE)
    state["version"] = 1
    for name in STATE_COUNTERS:
        state[name] = draw(COUNTER)
    n = draw(st.integers(1, MAX_JOINTS))
    state["n"], state["tau_count"] = n, draw(st.sampled_from([0, n]))
    for name, count in (("q", n), ("qd", n), ("tau_meas", int(state["tau_count"]))):
        state[name][:count] = draw(st.lists(NUMBER, min_size=count, max_size=count))
    return state


@st.composite
def torque_blocks(draw):
    """TORQUE blocks over the whole range of every field."""
    torque = new_block(TORQUE)
    torque["version"] = 1
    for name in TORQUE_COUNTERS:
        torque[name] = draw(COUNTER)
    torque["request"] = draw(st.integers(0, 2))
    n = draw(st.integers(1, MAX_JOINTS))
    torque["n"] = n
    torque["tau"][:n] = draw(st.lists(NUMBER, min_size=n, max_size=n))
    return torque


def encoded(block):
    """The block as message bytes; a refusal code if it cannot be encoded."""
    buffer = np.zeros(MAX_MESSAGE_BYTES, np.uint8)
    length = (encode_state if block.dtype == STATE else encode_torque)(block, buffer)
    return buffer[:length].tobytes() if length > 0 else length


def decoded(data, layout):
    """(status, block) of a message held in an array of exactly its length."""
    block = new_block(layout)
    status = (decode_state if layout == STATE else decode_torque)(bytes_in(data), len(data), block)
    return status, block


def status_of(data, layout):
    """Only the status of `decoded`."""
    return decoded(data, layout)[0]


def elements_of(block):
    """The block's elements before the CRC, each encoded by the msgpack package."""
    items = state_items(block) if block.dtype == STATE else torque_items(block)
    return [msgpack.packb(item) for item in items]


def with_element(block, index, element):
    """The block's message with one encoded element exchanged and the right CRC."""
    elements = elements_of(block)
    elements[index] = element
    return joined(elements)


# ---- agreement with the msgpack package ----------------------------------------------------------------------------------------


@source("msgpack-python", "packb")
@PROPERTIES
@given(state_blocks())
def test_encode_state_equals_the_msgpack_package(state):
    """A state is encoded byte for byte as the msgpack package does, not-a-number and infinities included."""
    assert encoded(state) == packed(state_items(state))


@source("msgpack-python", "packb")
@PROPERTIES
@given(torque_blocks())
def test_encode_torque_equals_the_msgpack_package(torque):
    """A torque is encoded byte for byte as the msgpack package does."""
    assert encoded(torque) == packed(torque_items(torque))


@PROPERTIES
@given(st.one_of(state_blocks(), torque_blocks()))
def test_decode_is_the_inverse_of_encode(block):
    """Encoding and decoding give back every byte of the block."""
    status, back = decoded(encoded(block), block.dtype)
    assert status == OK
    assert back.tobytes() == block.tobytes()


@source("msgpack-spec", "formats of integers, floats and arrays")
@PROPERTIES
@given(st.one_of(state_blocks(), torque_blocks()), st.data())
def test_decode_accepts_every_legal_form(block, data):
    """Whatever width, sign form and header a driver's library chooses, the decoded block is the same."""

    def form(forms):
        return forms[data.draw(st.integers(0, len(forms) - 1))]

    items = state_items(block) if block.dtype == STATE else torque_items(block)
    elements = []
    for item in items:
        if isinstance(item, list):
            numbers = b"".join(form(number_forms(number)) for number in item)
            elements.append(array_header(len(item), data.draw(st.booleans())) + numbers)
        elif isinstance(item, dict):
            elements.append(form([b"\x80", b"\xde\x00\x00"]))
        else:
            elements.append(form(integer_forms(item)))
    message = joined(elements, crc_form=data.draw(st.integers(0, 3)), wide=data.draw(st.booleans()))
    status, back = decoded(message, block.dtype)
    assert status == OK
    for name in block.dtype.names:  # values, because the sign and payload of a not-a-number may change from float32 to float64
        np.testing.assert_array_equal(back[name], block[name], err_msg=name)


# ---- published vectors ---------------------------------------------------------------------------------------------------------


@source("msgpack-vectors", "number groups: positive, negative and float values, all published forms that a float field may take")
@pytest.mark.parametrize(
    ("value", "hexes"),
    [
        (0, "00 cc00 cd0000 ce00000000 cf0000000000000000 d000 d10000 d200000000 d30000000000000000 ca00000000"),
        (
            1,
            "01 cc01 cd0001 ce00000001 cf0000000000000001 d001 d10001 d200000001 d30000000000000001 ca3f800000 "
            "cb3ff0000000000000",
        ),
        (127, "7f cc7f cd007f ce0000007f cf000000000000007f d07f d1007f d20000007f d3000000000000007f"),
        (128, "cc80 cd0080 ce00000080 cf0000000000000080 d10080 d200000080 d30000000000000080"),
        (255, "ccff cd00ff ce000000ff cf00000000000000ff d100ff d2000000ff d300000000000000ff"),
        (256, "cd0100 ce00000100 cf0000000000000100 d10100 d200000100 d30000000000000100"),
        (65535, "cdffff ce0000ffff cf000000000000ffff d20000ffff d3000000000000ffff"),
        (65536, "ce00010000 cf0000000000010000 d200010000 d30000000000010000"),
        (2147483647, "ce7fffffff cf000000007fffffff d27fffffff d3000000007fffffff"),
        (4294967295, "ceffffffff cf00000000ffffffff d300000000ffffffff cb41efffffffe00000"),
        (-1, "ff d0ff d1ffff d2ffffffff d3ffffffffffffffff cabf800000 cbbff0000000000000"),
        (-32, "e0 d0e0 d1ffe0 d2ffffffe0 d3ffffffffffffffe0 cac2000000 cbc040000000000000"),
        (-33, "d0df d1ffdf d2ffffffdf d3ffffffffffffffdf"),
        (-128, "d080 d1ff80 d2ffffff80 d3ffffffffffffff80"),
        (-32768, "d18000 d2ffff8000 d3ffffffffffff8000"),
        (-2147483648, "d280000000 d3ffffffff80000000"),
        (-(2.0**63), "d38000000000000000"),
        (2.0**64, "cfffffffffffffffff"),  # 2^64 - 1, rounded to the nearest float64
        (0.5, "ca3f000000 cb3fe0000000000000"),
        (-0.5, "cabf000000 cbbfe0000000000000"),
    ],
)
def test_published_vectors_are_read(value, hexes):
    """Every published form of a number is read as its value in q of a state and in tau of a torque."""
    for text in hexes.split():
        element = b"\x91" + bytes.fromhex(text)
        status, state = decoded(
            joined([*elements_of(example_state(1, with_tau=False))[:13], element, b"\x91\x00", b"\x90", b"\x80"]), STATE
        )
        assert (status, state["q"][0]) == (OK, value), text
        status, torque = decoded(with_element(example_torque(1), 10, element), TORQUE)
        assert (status, torque["tau"][0]) == (OK, value), text


@source(
    "msgpack-spec", "float64: 0xcb and eight bytes of IEEE 754 binary64, big-endian; bytes of the values by hand from binary64"
)
@pytest.mark.parametrize(
    ("value", "text"),
    [
        (0.1, "cb3fb999999999999a"),
        (9.80665, "cb40239d013a92a305"),
        (float("inf"), "cb7ff0000000000000"),
        (float("-inf"), "cbfff0000000000000"),
        (float("nan"), "cb7ff8000000000000"),
        (-0.0, "cb8000000000000000"),
        (math.pi, "cb400921fb54442d18"),
        (2.0, "cb4000000000000000"),
    ],
)
def test_floats_are_written_as_float64(value, text):
    """Each value, whole or not finite, leaves as 0xcb and its IEEE 754 bytes, and comes back unchanged."""
    torque = example_torque(1)
    torque["tau"][0] = value
    message = encoded(torque)
    assert bytes.fromhex("91" + text) in message
    assert decoded(message, TORQUE)[1]["tau"].tobytes() == torque["tau"].tobytes()


@source("msgpack-vectors", "string, array and map groups: published bytes of what may stand in the extras")
@pytest.mark.parametrize(
    "text",
    [
        "80",  # {}
        "81a16101",  # {"a": 1}
        "81a001",  # {"": 1}
        "81a16190",  # {"a": []}
        "81a1619101",  # {"a": [1]}
        "81a161dc0010" + "".join(f"{k:02x}" for k in range(1, 17)),  # {"a": [1, 2, ..., 16]}
        "81d920" + b"12345678901234567890123456789012".hex() + "01",  # a name of 32 bytes
        "81a161ca3f000000",  # {"a": 0.5}
    ],
)
def test_published_strings_arrays_and_maps_are_read(text):
    """Published bytes of names, flat arrays and maps pass as extras, and the state before them is unchanged."""
    status, state = decoded(with_element(example_state(), 16, bytes.fromhex(text)), STATE)
    assert status == OK
    assert state.tobytes() == decoded(packed(state_items(example_state())), STATE)[1].tobytes()


@source("msgpack-vectors", "nil, bool, binary, string, map and timestamp groups: published bytes that are not numbers")
@pytest.mark.parametrize(
    "text",
    ["c0", "c2", "c3", "c400", "c40200ff", "a0", "a161", "90", "9101", "80", "81a16101", "d7ffa1dcd7c85a4af6a5"],
)
def test_published_values_that_are_no_numbers_are_refused(text):
    """Nil, truth values, bytes, text, arrays, maps and the time stamp of 2018-01-02 are no joint value, counter or extra."""
    element = bytes.fromhex(text)
    assert status_of(with_element(example_torque(1), 10, b"\x91" + element), TORQUE) == refusals.NUMBER_FORM
    assert status_of(with_element(example_torque(1), 2, element), TORQUE) == refusals.COUNTER_FORM
    if text not in ("90", "9101"):
        assert status_of(with_element(example_state(), 16, b"\x81\xa1a" + element), STATE) == refusals.EXTRAS


@source("msgpack-spec", "the smallest form SHOULD be used: fixarray up to 15 elements, array16 (dc) above; floats take 9 bytes")
def test_joint_arrays_are_written_in_the_smallest_form():
    """15 joints begin with 9f, 16 with dc0010; seven float64 take one byte and 63."""
    for n, header in ((7, "97"), (15, "9f"), (16, "dc0010")):
        torque = example_torque(n)
        assert bytes.fromhex(header) + struct.pack(">Bd", 0xCB, torque["tau"][0]) in encoded(torque)
    assert len(encoded(example_torque(7))) - len(encoded(example_torque(6))) == 9


def test_unsigned_values_beyond_int64_are_rounded_to_even():
    """2^63 + 1025 lies just above half of two floats 2048 apart, so it rounds up; rounding twice would round down."""
    status, torque = decoded(with_element(example_torque(1), 10, b"\x91" + struct.pack(">BQ", 0xCF, 2**63 + 1025)), TORQUE)
    assert status == OK
    assert torque["tau"][0] == float(2**63 + 1025) == 2.0**63 + 2048.0


# ---- what is refused -----------------------------------------------------------------------------------------------------------

STATE_MESSAGE = packed(state_items(example_state()))
TORQUE_MESSAGE = packed(torque_items(example_torque()))
BOTH = [(STATE, STATE_MESSAGE), (TORQUE, TORQUE_MESSAGE)]
COUNTERS = [(STATE, 2 + i, name) for i, name in enumerate(STATE_COUNTERS)] + [
    (TORQUE, 2 + i, name) for i, name in enumerate(TORQUE_COUNTERS) if name != "request"
]


def example(layout):
    """An example block of a layout."""
    return example_state() if layout == STATE else example_torque()


@pytest.mark.parametrize(("layout", "index", "name"), COUNTERS)
def test_counter_fields_keep_their_range_and_form(layout, index, name):
    """Every counter field takes each form of 0 to 2^53 - 1 and refuses negative, larger and non-integer values."""
    block = example(layout)
    for value in (edge for edge in EDGES if edge < COUNTER_END):
        for form in integer_forms(value):
            status, back = decoded(with_element(block, index, form), layout)
            assert (status, back[name]) == (OK, value), form.hex()
    for value in (-1, -32, -33, -128, -(2**15), -(2**31), -(2**63), 2**53, 2**63 - 1, 2**63, 2**64 - 1):
        for form in integer_forms(value):
            assert status_of(with_element(block, index, form), layout) == refusals.COUNTER_RANGE, form.hex()
    for form in [*NOT_A_NUMBER, struct.pack(">Bd", 0xCB, 1.0), struct.pack(">Bf", 0xCA, 1.0)]:
        assert status_of(with_element(block, index, form), layout) == refusals.COUNTER_FORM, form.hex()


@pytest.mark.parametrize("request_code", [3, 128, 2**53 - 1])
def test_an_unknown_request_is_refused(request_code):
    """A torque asks, drives or releases; nothing else."""
    assert status_of(with_element(example_torque(), 8, msgpack.packb(request_code)), TORQUE) == refusals.REQUEST


@pytest.mark.parametrize(("layout", "index"), [(STATE, 13), (STATE, 14), (STATE, 15), (TORQUE, 10)])
def test_joint_arrays_keep_their_form(layout, index):
    """Joint arrays hold numbers only, have an array header, and all of them are equally long."""
    block = example(layout)
    good = elements_of(block)[index]
    for form in NOT_A_NUMBER:
        assert status_of(with_element(block, index, b"\x97" + form + good[10:]), layout) == refusals.NUMBER_FORM, form.hex()
    for form in (b"\xc0", b"\x07", b"\xdd\x00\x00\x00\x07" + good[1:], b"\xc4\x38" + bytes(56), b"\x80"):
        assert status_of(with_element(block, index, form), layout) == refusals.VECTOR_FORM, form.hex()
    assert status_of(with_element(block, index, array_header(17, True) + bytes(17)), layout) == refusals.JOINTS
    if layout == STATE:
        assert status_of(with_element(block, index, b"\x96" + good[10:]), layout) == refusals.VECTOR_LENGTHS


def test_no_joints_are_refused():
    """A message of an arm without joints is refused."""
    empty = [*elements_of(example_state())[:13], b"\x90", b"\x90", b"\x90", b"\x80"]
    assert status_of(joined(empty), STATE) == refusals.JOINTS
    assert status_of(with_element(example_torque(), 10, b"\x90"), TORQUE) == refusals.JOINTS


def test_empty_measured_torque_is_accepted():
    """A driver that measures no torque sends an empty array, and nothing of an earlier message stays in the block."""
    block = example_state()
    message = packed(state_items(example_state(with_tau=False)))
    assert decode_state(bytes_in(message), len(message), block) == OK
    assert block["tau_count"] == 0
    assert not block["tau_meas"].any()


def test_extras_are_skipped():
    """Named extras in every legal form do not change what is decoded; their text is not looked at."""
    plain = decoded(STATE_MESSAGE, STATE)[1]
    many = {f"joint {i} temperature_degc": 20.0 + i for i in range(20)}
    for extras in (
        msgpack.packb({"temperature_degc": [20.5, 21, 22.25], "bus_v": 48, "current_a": []}),
        msgpack.packb(many),
        msgpack.packb({"x" * 200: [1.5] * 16, "y" * 31: 1.0, "": 0}),
        b"\xde\x00\x01\xda\x00\x01\xff\xdc\x00\x02\xd3\xff\xff\xff\xff\xff\xff\xff\xff\xca\x7f\xc0\x00\x00",
    ):
        status, state = decoded(with_element(example_state(), 16, extras), STATE)
        assert status == OK, extras.hex()
        assert state.tobytes() == plain.tobytes()


@pytest.mark.parametrize(
    "text",
    [
        "c0",
        "90",
        "00",
        "8101",
        "810101",
        "81a161c0",
        "81a1619190",
        "81a16181a16101",
        "81a161a162",
        "81c4016101",
        "81a161c3",
        "df00000000",
    ],
)
def test_malformed_extras_are_refused(text):
    """Anything but a map from strings to numbers or flat arrays of numbers is refused, nested arrays and maps included."""
    status = status_of(with_element(example_state(), 16, bytes.fromhex(text)), STATE)
    assert status in (refusals.EXTRAS, refusals.TRUNCATED)
    if text not in ("8101", "810101"):
        assert status == refusals.EXTRAS


@pytest.mark.parametrize(("layout", "message"), BOTH)
def test_frame_of_the_message(layout, message):
    """Header, version, kind, element count, length and trailing bytes each have their own refusal."""
    start = 3 if layout == STATE else 1
    body = message[: -len(msgpack.packb(msgpack.unpackb(message)[-1]))]
    kind = message[start + 1]
    header = message[:start]
    cases = [
        (b"", refusals.LENGTH),
        (message + bytes(1025 - len(message)), refusals.LENGTH),
        (message + bytes(1024 - len(message)), refusals.TRAILING),
        (message + b"\x00", refusals.TRAILING),
        (b"\xdd\x00\x00\x00" + bytes([18 if layout == STATE else 12]) + message[start:], refusals.HEADER),
        (b"\x81" + message[1:], refusals.HEADER),
        (sealed(header + b"\x02" + body[start + 1 :]), refusals.VERSION),
        (b"\x91\x02", refusals.VERSION),
        (sealed(header + b"\x01" + bytes([3 - kind]) + body[start + 2 :]), refusals.KIND),
        (sealed(array_header(17 if layout == STATE else 11, False) + body[start:]), refusals.COUNT),
        (sealed(array_header(19 if layout == STATE else 13, False) + body[start:] + b"\x00"), refusals.COUNT),
        (sealed(body)[:-1] + bytes([message[-1] ^ 1]), refusals.CRC),
        (body + struct.pack(">BQ", 0xCF, 2**32 + 5), refusals.CRC),
        (body + b"\xc0", refusals.COUNTER_FORM),
        (body + b"\xff", refusals.COUNTER_RANGE),
    ]
    for data, expected in cases:
        assert status_of(data, layout) == expected, (data.hex(), expected)


@pytest.mark.parametrize(("layout", "message"), BOTH)
def test_every_cut_is_refused_as_truncated(layout, message):
    """No prefix of a message is accepted, whatever bytes lie behind its end."""
    decode = decode_state if layout == STATE else decode_torque
    for length in range(1, len(message)):
        for data in (message[:length], message, message[:length] + b"\xff" * 40):
            assert decode(bytes_in(data), length, new_block(layout)) == refusals.TRUNCATED


@pytest.mark.parametrize(("layout", "message"), BOTH)
def test_a_length_beyond_the_buffer_is_refused(layout, message):
    """A receive call that reports more bytes than fit never leads to a read beyond the buffer."""
    decode = decode_state if layout == STATE else decode_torque
    assert decode(bytes_in(message), len(message) + 1, new_block(layout)) == refusals.LENGTH
    assert decode(bytes_in(message), -1, new_block(layout)) == refusals.LENGTH


def test_a_block_that_breaks_the_contract_is_not_encoded():
    """Wrong joint counts, counters out of range, unknown requests and a small buffer give a refusal instead of a message."""
    for layout, field, value, expected in (
        (STATE, "n", 0, refusals.JOINTS),
        (STATE, "n", 17, refusals.JOINTS),
        (STATE, "n", -1, refusals.JOINTS),
        (STATE, "tau_count", 3, refusals.VECTOR_LENGTHS),
        *((STATE, name, value, refusals.COUNTER_RANGE) for name in STATE_COUNTERS for value in (-1, 2**53)),
        (TORQUE, "n", 0, refusals.JOINTS),
        (TORQUE, "n", 17, refusals.JOINTS),
        (TORQUE, "request", 3, refusals.REQUEST),
        (TORQUE, "request", -1, refusals.REQUEST),
        *(
            (TORQUE, name, value, refusals.COUNTER_RANGE)
            for name in TORQUE_COUNTERS
            if name != "request"
            for value in (-1, 2**53)
        ),
    ):
        block = example(layout)
        block[field] = value
        assert encoded(block) == expected, (field, value)
    assert encode_state(example_state(), np.zeros(1023, np.uint8)) == refusals.LENGTH
    assert encode_torque(example_torque(), np.zeros(1023, np.uint8)) == refusals.LENGTH


# ---- size, memory, compiled variants -------------------------------------------------------------------------------------------


def test_the_largest_message_fits():
    """A 16-joint state with every number in its largest form is 571 bytes, so 453 bytes stay for extras.

    By hand: header 3, 13 counters of 9, three arrays of 3 + 16 x 9, an empty map 1, the CRC 9: 3 + 117 + 441 + 1 + 9 = 571.
    """
    state = example_state(16)
    items = state_items(state)
    elements = [struct.pack(">BQ", 0xCF, item) for item in items[:13]]
    elements += [array_header(16, True) + b"".join(struct.pack(">Bd", 0xCB, x) for x in vector) for vector in items[13:16]]
    body = array_header(18, True) + b"".join(elements) + b"\x80"
    crc = msgpack.unpackb(sealed(body))[-1]
    message = body + struct.pack(">BQ", 0xCF, crc)
    assert len(message) == 571 <= MAX_MESSAGE_BYTES
    status, back = decoded(message, STATE)
    assert status == OK
    assert back.tobytes() == state.tobytes()


TRUNCATED = refusals.TRUNCATED


@hot
def _many(state, torque, buffer, count):
    """Encode and decode both messages `count` times; the number of failures."""
    failures = 0
    for _ in range(count):
        failures += decode_state(buffer, encode_state(state, buffer), state) != OK
        length = encode_torque(torque, buffer)
        failures += decode_torque(buffer, length, torque) != OK
        failures += decode_torque(buffer, length - 1, torque) != TRUNCATED
    return failures


def test_nothing_is_allocated():
    """A thousand messages allocate as much as one: nothing."""
    _nrt_python.memsys_enable_stats()
    state, torque, buffer = example_state(), example_torque(), np.zeros(MAX_MESSAGE_BYTES, np.uint8)
    assert _many(state, torque, buffer, 1) == 0
    counts = []
    for count in (1, 1001):
        before = rtsys.get_allocation_stats().alloc
        assert _many(state, torque, buffer, count) == 0
        counts.append(rtsys.get_allocation_stats().alloc - before)
    assert counts[0] == counts[1]


def test_one_compiled_variant_is_enough():
    """Every test of this file used the same compiled code: no argument kind compiles another variant."""
    encoded(example_state()), encoded(example_torque()), status_of(STATE_MESSAGE, STATE), status_of(TORQUE_MESSAGE, TORQUE)
    for function in (encode_state, decode_state, encode_torque, decode_torque):
        assert len(function.signatures) == 1
