"""The live loop on a table: the stand's arm and driver, sockets inside this process, a counted number of cycles."""

import threading
from pathlib import Path
from typing import Any

import msgpack
import numpy as np
import zmq

from rtctl.blocks import INPUT, MAX_MESSAGE_BYTES, MEMORY, ROW, STATE, TORQUE
from rtctl.cycle import begin_memory
from rtctl.kernels.external import ZMQ_FD, load_libraries, socket_option, zmq_socket_address
from rtctl.kernels.layout import new_block
from rtctl.loop.blocks import CONTROL, LOOP, PACING_NAMES
from rtctl.loop.live import run_loop
from rtctl.loop.plan import LoopPlan
from rtctl.wire.codec import encode_state
from tests.stand import Stand


def plan_of(state: str, torque: str, stand: Stand | None = None, folder: Path | None = None) -> LoopPlan:
    """A plan for the stand's arm and law."""
    stand = stand or Stand()
    return LoopPlan(
        name="stand",
        setup=stand.setup,
        laws={"stand": stand.pointers},
        law="stand",
        state_endpoint=state,
        torque_endpoint=torque,
        arm_name="stand",
        folder=folder,
        driver_wait_s=0.3,
        keep_alive=(stand,),
    )


class Table:
    """The loop's blocks around a stand, with both ends of its sockets in hand."""

    def __init__(self, pacing: str = "timer", period_ns: int = 1_000_000) -> None:
        load_libraries()
        self.stand = Stand()
        self.stand.setup["period_ns"] = period_ns
        self.context = zmq.Context()
        self.states, state_end = self._pair("states")
        self.torques, torque_end = self._pair("torques")
        self._ends = (state_end, torque_end)
        self.loop, self.memory = new_block(LOOP), new_block(MEMORY)
        self.inp, self.torque, self.row = new_block(INPUT), new_block(TORQUE), new_block(ROW)
        self.pointers, self.rows = np.zeros(2, self.stand.pointers.dtype), np.zeros(2, ROW)
        self.pointers[0] = self.stand.pointers
        self.control, self.flags = np.zeros(1, CONTROL), np.zeros(512, np.int64)
        loop = self.loop
        loop["state_socket"], loop["torque_socket"] = zmq_socket_address(state_end), zmq_socket_address(torque_end)
        loop["state_fd"] = socket_option(loop["state_socket"], ZMQ_FD, loop["scratch"])
        loop["pacing"] = PACING_NAMES.index(pacing)
        loop["pointers"], loop["rows"] = self.pointers.ctypes.data, self.rows.ctypes.data
        loop["control"], loop["flags"] = self.control.ctypes.data, self.flags.ctypes.data
        begin_memory(self.memory)

    def _pair(self, name: str) -> tuple[Any, Any]:
        here, there = self.context.socket(zmq.PAIR), self.context.socket(zmq.PAIR)
        for socket in (here, there):
            socket.setsockopt(zmq.LINGER, 0)
        here.bind(f"inproc://{name}")
        there.connect(f"inproc://{name}")
        return here, there

    def state(self) -> bytes:
        """The next state of the stand's driver, as bytes."""
        block, buffer = new_block(STATE), np.zeros(MAX_MESSAGE_BYTES, np.uint8)
        self.stand.now_ns += 1_000_000
        self.stand.driver.say(block, self.stand.now_ns)
        return buffer[: int(encode_state(block, buffer))].tobytes()

    def run(self, cycles: int) -> int:
        """Run so many cycles more; returns what the loop returned."""
        self.loop["cycle_limit"] = self.loop["cycles"] + cycles
        return int(run_loop(self.loop, self.stand.setup, self.memory, self.inp, self.torque, self.row))

    def in_thread(self) -> threading.Thread:
        """Run without a limit in a thread of its own."""
        self.loop["cycle_limit"] = 0
        thread = threading.Thread(
            target=run_loop, args=(self.loop, self.stand.setup, self.memory, self.inp, self.torque, self.row)
        )
        thread.start()
        return thread

    def sent(self) -> list[list[Any]]:
        """Torque messages that left, decoded by the msgpack package."""
        found = []
        while self.torques.poll(0):
            found.append(msgpack.unpackb(self.torques.recv()))
        return found

    def close(self) -> None:
        self.context.destroy(linger=0)
