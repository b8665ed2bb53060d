"""Waiting for the driver: a bounded time, and an error that says what was seen instead."""

import threading
from collections.abc import Iterator

import pytest
import zmq

from rtctl.errors import SetupError, WireError
from rtctl.loop.handshake import wait_for_driver
from tests.loop_stand import Table, plan_of
from tests.stand import ARM_KEY


@pytest.fixture
def table() -> Iterator[Table]:
    table = Table()
    yield table
    table.close()


def waiting(table: Table, *messages: bytes | list[bytes]) -> object:
    """What the wait comes to when these messages are there."""
    for message in messages:
        table.states.send_multipart([message] if isinstance(message, bytes) else message)
    return wait_for_driver(table._ends[0], plan_of("ipc:///tmp/states", "ipc:///tmp/torques", table.stand))


def test_the_first_state_of_the_right_arm_is_returned(table: Table) -> None:
    """Garbage before it does no harm."""
    state = waiting(table, b"\xc1", [b"two", b"parts"], table.state())
    assert int(state["arm_key"]) == ARM_KEY  # type: ignore[index]


def test_silence_is_a_bounded_wait_with_the_next_step(table: Table) -> None:
    """No message: the endpoint, the time, and how to start the simulated arm."""
    with pytest.raises(SetupError) as caught:
        waiting(table)
    assert str(caught.value) == (
        'ipc:///tmp/states: must be a driver that sends states of arm "stand" within 0.3 s, got no message. '
        "The driver is not running, or it publishes on another endpoint. Start the driver, or the simulated arm with: rtctl sim RUN"
    )


def test_another_arm_is_named_by_its_key_and_joints(table: Table) -> None:
    """Both keys stand in the message: the arm file and the driver differ."""
    table.stand.driver.arm_key = 5
    with pytest.raises(WireError) as caught:
        waiting(table, table.state(), table.state())
    assert str(caught.value) == (
        f'ipc:///tmp/states: must be a driver that sends states of arm "stand" within 0.3 s (key {ARM_KEY}, 2 joints), '
        "got states of another arm: key 5 with 2 joints (2 messages). The arm file and the driver differ in arm name, joint order "
        "or units. Use the arm file of the arm that is connected."
    )


def test_another_version_of_the_messages_is_named(table: Table) -> None:
    """The version that came and the one that is spoken."""
    import zlib

    import msgpack

    content = msgpack.unpackb(table.state())
    content[0] = 9
    body = msgpack.packb(content[:-1])
    body = bytes([0x90 | len(content)]) + body[1:] if len(content) < 16 else body[:1] + len(content).to_bytes(2, "big") + body[3:]
    message = body + msgpack.packb(zlib.crc32(body))
    with pytest.raises(WireError) as caught:
        waiting(table, message)
    assert str(caught.value) == (
        "ipc:///tmp/states: must be a driver that speaks version 1 of the messages, got version 9. "
        "Install the same version on both sides."
    )


def test_refused_messages_are_counted_by_reason(table: Table) -> None:
    """What a driver author needs first: how many of which fault."""
    with pytest.raises(WireError, match=r"messages that were refused: 2 x .*; 1 x parts"):
        waiting(table, b"\xc1", b"\xc1", [b"two", b"parts"])


def test_the_wait_can_be_given_up(table: Table) -> None:
    """A stop asked meanwhile ends it."""
    stopped = threading.Event()
    stopped.set()
    with pytest.raises(SetupError):
        wait_for_driver(table._ends[0], plan_of("ipc:///a", "ipc:///b", table.stand), stop=stopped.is_set)
    assert zmq.zmq_version_info() >= (4, 3, 5)
