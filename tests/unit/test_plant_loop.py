"""The simulated arm's real-time loop between real sockets: states on the grid, torques in, damaged messages out, end at rest."""

import threading
import time
from collections.abc import Iterator

import numpy as np
import pytest
import zmq

from rtctl.blocks import MAX_MESSAGE_BYTES, REQUEST_ASK, REQUEST_DRIVE, REQUEST_RELEASE, STATE
from rtctl.kernels.external import load_libraries, zmq_socket_address
from rtctl.kernels.layout import OK, new_block
from rtctl.loop.plant_loop import MAX_DRAIN, PLANT_LOOP, STOPPED, TIME_OVER, run_plant
from rtctl.plant import blocks
from rtctl.plant.truth import refusal_counts
from rtctl.wire.codec import decode_state, encode_torque
from tests.plants import MS, Controller, chain_model, true_arm

pytestmark = pytest.mark.slow
HOLD = (0.0, 0.0)
WAIT_S = 5.0  # for things that take some milliseconds on an idle machine


class Bench:
    """A two-joint arm behind PAIR sockets, its loop in a thread, and a controller's side in plain Python."""

    def __init__(self, **values: object) -> None:
        load_libraries()
        self.setup, self.memory = true_arm(chain_model(2), valid_for_max_ns=500 * MS, silent_max_ns=10**12, **values)
        self.loop, self.stop = new_block(PLANT_LOOP), np.zeros(1, np.int64)
        self.context: zmq.Context = zmq.Context()
        pairs = []
        for name in ("state", "torque"):
            here, there = self.context.socket(zmq.PAIR), self.context.socket(zmq.PAIR)
            for socket in (here, there):
                socket.setsockopt(zmq.LINGER, 0)
            here.bind(f"inproc://{name}-{id(self)}")
            there.connect(f"inproc://{name}-{id(self)}")
            pairs += [here, there]
        self._states, self.states, self._torques, self.torques = pairs
        self.loop["state_socket"] = zmq_socket_address(self._states)
        self.loop["torque_socket"] = zmq_socket_address(self._torques)
        self.loop["stop"] = self.stop.ctypes.data
        self.controller = Controller(self.setup, self.memory)
        self.result = 0
        # Compile before the clock counts, on an arm that is thrown away.
        spare = self.loop.copy()
        spare["duration_ns"] = 1
        run_plant(self.setup, new_block(blocks.PLANT_MEMORY), spare)
        self.states.recv()
        self._thread = threading.Thread(target=self._run)

    def _run(self) -> None:
        self.result = int(run_plant(self.setup, self.memory, self.loop))

    def start(self) -> None:
        self._thread.start()

    def end(self) -> int:
        """Set the stop word and wait; returns what the loop returned."""
        self.stop[0] = 1
        self._thread.join(WAIT_S)
        assert not self._thread.is_alive()
        return self.result

    def close(self) -> None:
        if self._thread.is_alive():
            self.end()
        self.context.destroy(linger=0)

    def receive(self) -> np.void:
        """The next state, in order."""
        assert self.states.poll(1000 * WAIT_S)
        data = self.states.recv()
        buffer = np.zeros(MAX_MESSAGE_BYTES, np.uint8)
        buffer[: len(data)] = np.frombuffer(data, np.uint8)
        state = new_block(STATE)
        assert decode_state(buffer, len(data), state) == OK
        self.controller.state = state
        return state

    def newest(self) -> np.void:
        """The newest state; waits for one."""
        state = self.receive()
        while self.states.poll(0):
            state = self.receive()
        return state

    def bytes_of(self, request: int = REQUEST_ASK, tau: tuple[float, ...] | None = None, **values: int) -> bytes:
        buffer = np.zeros(MAX_MESSAGE_BYTES, np.uint8)
        message = self.controller.message(request, tau, valid_for_ns=500 * MS, **values)
        return buffer[: int(encode_torque(message, buffer))].tobytes()

    def until(self, condition, request: int | None = None) -> np.void:
        """Read states, answering each with `request` if given, until `condition(state)` holds."""
        end_s = time.monotonic() + WAIT_S
        state = self.newest()
        while not condition(state):
            assert time.monotonic() < end_s, "waited too long"
            if request is not None:
                self.torques.send(self.bytes_of(request, HOLD))
            state = self.newest()
        return state


@pytest.fixture
def bench() -> Iterator[Bench]:
    made = Bench()
    yield made
    made.close()


def test_states_leave_once_per_period_on_the_grid_of_sample_times(bench):
    """Sequences count up by one per period, sample times lie on the grid of the first one, whatever the wake-ups did."""
    bench.start()
    states = [bench.receive() for _ in range(100)]
    first = states[0]
    for state in states:
        periods, rest = divmod(int(state["sample_ns"] - first["sample_ns"]), MS)
        assert rest == 0
        assert state["sequence"] - first["sequence"] == periods
    assert bench.end() == STOPPED


def test_a_controller_gets_the_grant_drives_and_releases(bench):
    """The whole conversation over sockets: ask, drive until the brake is open, release, brake closed again."""
    bench.start()
    bench.until(lambda state: state["holder"] == bench.controller.session, REQUEST_ASK)
    state = bench.until(lambda state: not state["status"] & 2, REQUEST_DRIVE)
    assert state["applied_session"] == bench.controller.session
    bench.torques.send(bench.bytes_of(REQUEST_RELEASE))
    bench.until(lambda state: state["holder"] == 0 and state["status"] & 2)
    assert bench.end() == STOPPED
    assert refusal_counts(bench.memory) == {}


def test_damaged_long_and_multipart_messages_are_refused_whole(bench):
    """Noise, a message of 3000 bytes, and all parts of a multipart message count as refused; the next good one counts."""
    bench.start()
    bench.newest()
    good = bench.bytes_of(REQUEST_ASK)
    bench.torques.send(b"noise")
    bench.torques.send(b"\x9c" * 3000)
    bench.torques.send_multipart([good, good, good])
    flipped = bytearray(good)
    flipped[10] ^= 1
    bench.torques.send(bytes(flipped))
    bench.torques.send(good)
    bench.until(lambda state: state["received_sequence"] > 0)
    bench.end()
    assert bench.loop["refused"] == 6
    assert bench.loop["received"] == 1


def test_after_a_flood_nothing_but_a_release_counts():
    """More waiting messages than the bound: torques among them are not used, a release is."""
    for request, accepted in ((REQUEST_DRIVE, 0), (REQUEST_RELEASE, 1)):
        bench = Bench()
        try:
            bench.controller.state["session"] = bench.setup["session"]
            for _ in range(MAX_DRAIN):
                bench.torques.send(bench.bytes_of(request, HOLD))
            bench.start()
            bench.until(lambda state: state["sequence"] > 5)
            bench.end()
            assert bench.loop["flooded"] == 1
            assert bench.loop["received"] == MAX_DRAIN
            assert (bench.memory["received_sequence"] > 0) == bool(accepted)
        finally:
            bench.close()


def test_a_stopped_loop_ends_the_grant_and_closes_the_brakes_first(bench):
    """Stopping while a controller drives: the states still show the lost grant, and the loop returns with the brakes closed."""
    bench.start()
    bench.until(lambda state: state["holder"] == bench.controller.session, REQUEST_ASK)
    bench.until(lambda state: not state["status"] & 2, REQUEST_DRIVE)
    bench.stop[0] = 1
    bench.until(lambda state: state["holder"] == 0)
    assert bench.end() == STOPPED
    assert bench.memory["brake"] == blocks.BRAKE_CLOSED
    assert bench.memory["phase"] == blocks.PHASE_STILL


def test_the_loop_ends_by_itself_after_its_time(bench):
    """A duration of 30 ms: about 30 states, then TIME_OVER."""
    bench.loop["duration_ns"] = 30 * MS
    bench.start()
    bench._thread.join(WAIT_S)
    assert bench.result == TIME_OVER
    assert bench.memory["sequence"] >= 30


def test_a_torque_acts_from_its_arrival_and_not_from_the_next_period():
    """With a period of 200 ms and steps of 1 ms, a torque sent after a state is applied long before the next state."""
    bench = Bench(period_ns=200 * MS, substeps=200, still_dwell_ns=0)
    try:
        bench.start()
        bench.until(lambda state: state["holder"] == bench.controller.session, REQUEST_ASK)
        state = bench.newest()
        bench.torques.send(bench.bytes_of(REQUEST_DRIVE, HOLD))
        end_s = time.monotonic() + 0.15
        while bench.memory["accepted"] == 0 and time.monotonic() < end_s:
            time.sleep(0.001)
        assert bench.memory["accepted"] == 1
        assert bench.memory["sequence"] == state["sequence"]
    finally:
        bench.close()
