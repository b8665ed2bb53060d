"""`drivers/WIRE.md` says what the code does: its examples, codes, refusals and arm key are regenerated and compared."""

import re
import zlib
from pathlib import Path

import msgpack
import numpy as np
import pytest

from drivers.template import arm_key
from rtctl import blocks
from rtctl.blocks import MAX_MESSAGE_BYTES, STATE, TORQUE
from rtctl.kernels.layout import OK, new_block
from rtctl.wire.codec import decode_state, decode_torque, encode_state, encode_torque
from rtctl.wire.refusals import REFUSALS
from tests.messages import STATE_COUNTERS, TORQUE_COUNTERS, bytes_in, state_items, torque_items

TEXT = (Path(__file__).resolve().parents[2] / "drivers" / "WIRE.md").read_text(encoding="utf-8")

STATE_NAMES = ("version", "kind", *STATE_COUNTERS, "q", "qd", "tau", "extras")
TORQUE_NAMES = ("version", "kind", *TORQUE_COUNTERS, "tau")


def example_state():
    """The two-joint state of the text; invented values."""
    state = new_block(STATE)
    for name, value in {
        "arm_key": 12040475670550,
        "session": 4503599627370496,
        "sequence": 70000,
        "sample_ns": 81234567890123,
        "holder": 1234567890123456,
        "grant": 3,
        "received_session": 1234567890123456,
        "received_sequence": 66001,
        "applied_session": 1234567890123456,
        "applied_sequence": 66000,
        "status": 41,
        "n": 2,
        "tau_count": 2,
    }.items():
        state[name] = value
    state["q"][:2], state["qd"][:2], state["tau_meas"][:2] = (0.5, -1.25), (0.1, 0.0), (9.80665, -2.0)
    return state


def example_torque():
    """The two-joint torque of the text, which answers the state above; invented values."""
    torque = new_block(TORQUE)
    for name, value in {
        "arm_key": 12040475670550,
        "session": 1234567890123456,
        "sequence": 66003,
        "driver_session": 4503599627370496,
        "state_sequence": 70000,
        "grant": 3,
        "request": 1,
        "valid_for_ns": 10000000,
        "n": 2,
    }.items():
        torque[name] = value
    torque["tau"][:2] = (9.75, -2.5)
    return torque


def listing(names, items, header):
    """One line per element: bytes, name, value; the header first and the CRC last."""
    lines = [f"{header.hex()}  array of {len(items) + 1}"]
    body = header
    for name, item in zip(names, items, strict=True):
        element = msgpack.packb(item)
        body += element
        if isinstance(item, list):
            lines.append(f"{element[:1].hex()}  {name}, array of {len(item)}")
            lines.extend(f"  {msgpack.packb(value).hex()}  {value!r}" for value in item)
        else:
            lines.append(f"{element.hex()}  {name} {item}")
    crc = zlib.crc32(body)
    lines.append(f"{msgpack.packb(crc).hex()}  crc 0x{crc:08x}")
    return "\n".join(lines), body + msgpack.packb(crc)


EXAMPLES = {
    "state": (listing(STATE_NAMES, state_items(example_state()), b"\xdc\x00\x12"), encode_state, decode_state, example_state()),
    "torque": (listing(TORQUE_NAMES, torque_items(example_torque()), b"\x9c"), encode_torque, decode_torque, example_torque()),
}


@pytest.mark.parametrize("kind", ["state", "torque"])
def test_the_example_of_the_text_is_what_the_codec_writes(kind):
    """The listing in the text, its bytes joined, is the encoded example, and decoding it gives the example back."""
    (text, message), encode, decode, block = EXAMPLES[kind]
    assert f"```text\n{text}\n```" in TEXT, text
    joined = "".join(line.split("  ")[0 if line[0] != " " else 1] for line in text.splitlines())
    buffer = np.zeros(MAX_MESSAGE_BYTES, np.uint8)
    assert buffer[: encode(block, buffer)].tobytes() == message == bytes.fromhex(joined)
    back = new_block(STATE if kind == "state" else TORQUE)
    assert decode(bytes_in(message), len(message), back) == OK
    block["version"] = 1
    assert back.tobytes() == block.tobytes()


def _rows(heading):
    """Rows of the first table below a heading, as lists of cells."""
    section = TEXT.split(f"## {heading}\n")[1].split("\n## ")[0]
    table = re.search(r"(?:^\|.*\n)+", section, re.M)[0].splitlines()
    return [[cell.strip() for cell in line.strip("|").split("|")] for line in table[2:]]


@pytest.mark.parametrize(
    ("heading", "names"), [("State: driver to controller", STATE_NAMES), ("Torque: controller to driver", TORQUE_NAMES)]
)
def test_the_field_tables_name_every_element_in_order(heading, names):
    """The tables list all elements in the order of the message, the CRC last."""
    rows = _rows(heading)
    assert [int(row[0]) for row in rows] == list(range(len(names) + 1))
    assert [row[1].replace(" ", "_") for row in rows] == [*names, "crc"]


def test_the_codes_of_the_text_are_the_codes_of_the_blocks():
    """Requests, status bits, version and kinds are the numbers the program uses."""
    for name in ("ENABLED", "BRAKE", "FAULT", "STOP_CHAIN_CLOSED", "GRAVITY_ADDED", "SIMULATED"):
        assert re.search(rf"^\| {getattr(blocks, 'STATUS_' + name)} \| {name.lower().replace('_', ' ')} \|", TEXT, re.M), name
    for name in ("ASK", "DRIVE", "RELEASE"):
        assert re.search(rf"^\| {getattr(blocks, 'REQUEST_' + name)} \| `{name.lower()}` \|", TEXT, re.M), name
    assert (blocks.WIRE_VERSION, blocks.KIND_STATE, blocks.KIND_TORQUE) == (1, 1, 2)
    assert "version of this text: 1" in TEXT


def test_the_text_lists_every_refusal():
    """A driver author can look up each refusal the controller reports."""
    for refusal in REFUSALS:
        assert f"| {refusal.name} | {refusal.sentence} |" in TEXT, refusal.name


def test_the_arm_key_of_the_text_is_the_one_computed():
    """The worked example of the arm key holds, and its lines give the key in the message examples."""
    key = arm_key("two-joint example", (("shoulder", "rad"), ("slide", "m")))
    assert key == int(example_state()["arm_key"])
    assert f"`two-joint example`, `shoulder rad`, `slide m` give {key}." in TEXT
