"""Clock, sleep and sockets from compiled code, against Python's own."""

import time

import numpy as np
import pytest
import zmq

from rtctl.errors import SetupError
from rtctl.kernels import external
from rtctl.kernels.external import (
    CLOCK_BOOTTIME,
    CLOCK_MONOTONIC,
    EAGAIN,
    EXTERNAL_SCRATCH,
    ZMQ_FD,
    ZMQ_RCVMORE,
    load_libraries,
    now_ns,
    receive_bytes,
    send_bytes,
    sleep_until_ns,
    socket_option,
    wait_readable,
    zmq_socket_address,
)
from rtctl.kernels.layout import OK, new_block


@pytest.fixture(autouse=True)
def libraries() -> None:
    """Names must be known before anything is compiled."""
    load_libraries()


def test_clocks_are_those_of_the_standard_library() -> None:
    """Each reading lies between two of Python's; an unknown clock is -1."""
    scratch = new_block(EXTERNAL_SCRATCH)
    for clock, python in ((CLOCK_MONOTONIC, time.CLOCK_MONOTONIC), (CLOCK_BOOTTIME, time.CLOCK_BOOTTIME)):
        before = time.clock_gettime_ns(python)
        assert before <= now_ns(clock, scratch) <= time.clock_gettime_ns(python)
    assert now_ns(9999, scratch) == -1


def test_a_sleep_never_ends_before_its_deadline() -> None:
    """Nor does one whose deadline has passed wait at all (tolerance: a whole second, for a busy machine)."""
    scratch = new_block(EXTERNAL_SCRATCH)
    for ahead_ns in (3_000_000, -5_000_000):
        began = time.monotonic_ns()
        assert sleep_until_ns(began + ahead_ns, scratch) == OK
        slept = time.monotonic_ns() - began
        assert slept >= ahead_ns
        assert slept <= max(ahead_ns, 0) + 1_000_000_000


def test_messages_pass_between_compiled_code_and_pyzmq() -> None:
    """Both directions, byte for byte; nothing there is -EAGAIN; the length of a long message is its own, not the buffer's."""
    scratch, buffer = new_block(EXTERNAL_SCRATCH), np.zeros(16, np.uint8)
    with zmq.Context() as context, context.socket(zmq.PAIR) as here, context.socket(zmq.PAIR) as there:
        here.bind("inproc://external")
        there.connect("inproc://external")
        address = zmq_socket_address(there)
        assert receive_bytes(address, buffer) == -EAGAIN
        here.send(b"abc")
        here.send(b"x" * 40)
        here.send_multipart([b"1", b"2"])
        assert wait_readable(socket_option(address, ZMQ_FD, scratch), 1_000_000_000, scratch) >= 0
        assert receive_bytes(address, buffer) == 3
        assert buffer[:3].tobytes() == b"abc"
        assert receive_bytes(address, buffer) == 40
        assert socket_option(address, ZMQ_RCVMORE, scratch) == 0
        assert receive_bytes(address, buffer) == 1
        assert socket_option(address, ZMQ_RCVMORE, scratch) == 1
        buffer[:4] = np.frombuffer(b"back", np.uint8)
        assert send_bytes(address, buffer, 4) == OK
        assert here.recv() == b"back"


def test_a_name_that_is_missing_is_a_sentence_not_a_crash(monkeypatch: pytest.MonkeyPatch) -> None:
    """The check before any compile names what is missing and how to get it."""
    monkeypatch.setattr(external, "NAMES", (*external.NAMES, "no_such_function_of_libzmq"))
    with pytest.raises(SetupError, match="got no no_such_function_of_libzmq .*pip install --force-reinstall"):
        load_libraries.__wrapped__()
