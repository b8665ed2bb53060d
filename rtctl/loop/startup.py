"""What must be done before the first cycle, and in which order. Nothing here runs in the cycle.

    1. compile, or take from the cache        `compile_loop`
    2. start the recorder                     (the caller's)
    3. contexts and sockets, first state      `HotLink`, `handshake.wait_for_driver`
    4. the hot thread alone: core, priority, signals    `machine.prepare_hot_thread`
    5. hold the latency file, lock memory     `machine.Machine`
    6. warm up, check the signatures          `warm_up`, `compiled_signatures`
    7. freeze the collector                   (`controller`)

Setting core or priority earlier would drag every later thread and process along. What the computer did not permit becomes a line in
a list of findings, with the command an administrator would use; the loop then runs without it and says so.
"""

import os
import sys
import time
from typing import Any

import numpy as np
import zmq

from rtctl.blocks import (
    INPUT,
    MAX_MESSAGE_BYTES,
    MEMORY,
    REQUEST_RELEASE,
    ROW,
    SETUP,
    STATE,
    STATUS_ENABLED,
    STATUS_SIMULATED,
    STATUS_STOP_CHAIN_CLOSED,
    TORQUE,
)
from rtctl.cycle import begin_memory
from rtctl.errors import SetupError
from rtctl.kernels.external import ZMQ_FD, load_libraries, socket_option, zmq_socket_address
from rtctl.kernels.layout import new_block
from rtctl.loop.blocks import CONTROL, LOOP, PACING_NAMES
from rtctl.loop.live import run_loop, warm_pointers
from rtctl.loop.plan import LoopPlan
from rtctl.wire.codec import encode_state, encode_torque

QUEUE_LIMIT = 4  # messages; 1 loses half of them even without a stall, more only stores old ones
WARM_CYCLES = 200
WARM_PERIOD_NS = 100_000

# ---- compile -------------------------------------------------------------------------------------------------------------------


def compile_loop() -> None:
    """Compile the loop for the kinds of arguments it has in a run, or take it from the cache."""
    from numba import typeof

    load_libraries()
    blocks = (LOOP, SETUP, MEMORY, INPUT, TORQUE, ROW)
    dispatcher: Any = run_loop  # typed as the function it compiles
    dispatcher.compile(tuple(typeof(new_block(block)) for block in blocks))


def compiled_signatures() -> dict[str, int]:
    """How many variants of every compiled function of this package exist: unchanged by a run, or something compiled in it."""
    found: dict[str, int] = {}
    for module in [name for name in sys.modules if name.split(".")[0] in ("rtctl", "rtctl_drivers")]:
        for name, value in list(vars(sys.modules[module]).items()):
            if hasattr(value, "nopython_signatures"):
                found[f"{value.py_func.__module__}.{name}"] = len(value.signatures)
    return found


# ---- sockets -------------------------------------------------------------------------------------------------------------------


class HotLink:
    """The hot sockets in a context of their own: SUB for states, PUSH for torques. While the loop runs only the loop uses them."""

    def __init__(self, plan: LoopPlan, io_core: int | None, io_priority: int | None) -> None:
        self.context = zmq.Context()
        # Options of the I/O thread must be set before the first socket; libzmq ends the process where they are not permitted.
        if io_priority is not None:
            self.context.set(zmq.THREAD_SCHED_POLICY, os.SCHED_FIFO)
            self.context.set(zmq.THREAD_PRIORITY, io_priority)
        if io_core is not None:
            self.context.set(zmq.THREAD_AFFINITY_CPU_ADD, io_core)
        try:
            self.state_socket = self._make(zmq.SUB, plan)
            self.state_socket.setsockopt(zmq.RCVHWM, QUEUE_LIMIT)
            self.state_socket.setsockopt(zmq.MAXMSGSIZE, MAX_MESSAGE_BYTES)
            self.state_socket.setsockopt(zmq.SUBSCRIBE, b"")
            self.torque_socket = self._make(zmq.PUSH, plan)
            self.torque_socket.setsockopt(zmq.SNDHWM, QUEUE_LIMIT)
            self.torque_socket.setsockopt(zmq.IMMEDIATE, 1)
            self.state_socket.connect(plan.state_endpoint)
            self.torque_socket.connect(plan.torque_endpoint)
        except zmq.ZMQError as error:
            self.context.destroy(linger=0)
            raise SetupError(
                f"{plan.state_endpoint}, {plan.torque_endpoint}: must be endpoints that can be connected to, got {error}. "
                "Check the endpoints in the run file."
            ) from None

    def _make(self, kind: int, plan: LoopPlan) -> "zmq.Socket[bytes]":
        socket = self.context.socket(kind)
        socket.setsockopt(zmq.LINGER, 0)
        if plan.curve is not None:
            socket.setsockopt_string(zmq.CURVE_PUBLICKEY, plan.curve.public)
            socket.setsockopt_string(zmq.CURVE_SECRETKEY, plan.curve.secret)
            socket.setsockopt_string(zmq.CURVE_SERVERKEY, plan.curve.driver_public)
        return socket

    def fill(self, loop: np.void) -> None:
        """Put the addresses into the LOOP block."""
        loop["state_socket"] = zmq_socket_address(self.state_socket)
        loop["torque_socket"] = zmq_socket_address(self.torque_socket)
        loop["state_fd"] = socket_option(loop["state_socket"], ZMQ_FD, loop["scratch"])
        assert loop["state_fd"] >= 0

    def send_release(self, torque: np.void, count: int = 3) -> None:
        """For the hot thread after its loop died: give the grant back. Never waits long."""
        buffer = np.zeros(MAX_MESSAGE_BYTES, np.uint8)
        torque["request"] = REQUEST_RELEASE
        torque["tau"] = 0.0
        for _ in range(count):
            torque["sequence"] += 1
            length = int(encode_torque(torque, buffer))
            if length > 0:
                try:
                    self.torque_socket.send(buffer[:length].tobytes(), zmq.DONTWAIT)
                except zmq.ZMQError:
                    pass  # nobody to tell: the driver's time-out is what remains
            time.sleep(0.001)

    def close(self) -> None:
        """Close both sockets. The loop must have ended; a moment is left for what was sent last."""
        time.sleep(0.02)
        self.context.destroy(linger=0)


# ---- warm-up -------------------------------------------------------------------------------------------------------------------


def warm_up(plan: LoopPlan, context: "zmq.Context[Any]") -> None:
    """Run the loop on throw-away blocks and sockets, in the hot thread and with the real kinds of arguments; nothing leaves.

    Raises SetupError when the loop did not run to its end or compiled something.
    """
    before = compiled_signatures()
    setup, loop, memory = new_block(SETUP), new_block(LOOP), new_block(MEMORY)
    for field in SETUP.names or ():
        setup[field] = plan.setup[field]
    setup["period_ns"] = WARM_PERIOD_NS
    inp, torque, row = new_block(INPUT), new_block(TORQUE), new_block(ROW)
    pointers, rows = np.zeros(2, plan.laws[plan.law].dtype), np.zeros(2, ROW)
    pointers[0] = plan.laws[plan.law]
    control, flags = np.zeros(1, CONTROL), np.zeros(512, np.int64)
    sockets = [context.socket(zmq.PAIR) for _ in range(4)]
    name = f"inproc://warm-{id(loop)}"
    for k in (0, 2):
        sockets[k].bind(f"{name}-{k}")
        sockets[k + 1].connect(f"{name}-{k}")
    for sequence in range(1, WARM_CYCLES):
        sockets[1].send(_warm_state(plan, sequence))
    loop["state_socket"], loop["torque_socket"] = zmq_socket_address(sockets[0]), zmq_socket_address(sockets[2])
    loop["state_fd"] = socket_option(loop["state_socket"], ZMQ_FD, loop["scratch"])
    loop["pacing"] = PACING_NAMES.index(plan.pacing)
    loop["pointers"], loop["rows"] = pointers.ctypes.data, rows.ctypes.data
    loop["control"], loop["flags"] = control.ctypes.data, flags.ctypes.data
    loop["cycle_limit"] = WARM_CYCLES
    begin_memory(memory)
    result = run_loop(loop, setup, memory, inp, torque, row)
    for law in plan.laws.values():
        for _ in range(20):
            warm_pointers(setup, law, memory, row)
    for socket in sockets:
        socket.close(linger=0)
    after = compiled_signatures()
    grown = sorted(name for name in before if after.get(name, 0) > before[name] > 0)
    if int(loop["cycles"]) != WARM_CYCLES or grown:
        raise SetupError(
            f"warm-up: must run {WARM_CYCLES} cycles without compiling, got {int(loop['cycles'])} cycles (result {result}) "
            f"and new variants of {', '.join(grown) or 'nothing'}. This is a defect of rtctl."
        )


def _warm_state(plan: LoopPlan, sequence: int) -> bytes:
    state, buffer = new_block(STATE), np.zeros(MAX_MESSAGE_BYTES, np.uint8)
    state["arm_key"], state["n"] = plan.setup["limits"]["arm_key"], plan.setup["limits"]["n"]
    state["session"], state["sequence"], state["sample_ns"] = 1, sequence, sequence * WARM_PERIOD_NS
    state["status"] = STATUS_ENABLED | STATUS_STOP_CHAIN_CLOSED | STATUS_SIMULATED
    return buffer[: int(encode_state(state, buffer))].tobytes()
