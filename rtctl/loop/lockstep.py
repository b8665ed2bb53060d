"""The lock-step link: controller and simulated arm in one compiled function, without sockets and without time.

The same bytes travel as on the real link: states and torques are encoded, delayed and decoded again. Time is counted, not read, so
that the same blocks give the same rows bit for bit, as fast as the processor allows.
"""

from collections.abc import Mapping
from dataclasses import dataclass

import numpy as np

from rtctl.blocks import INPUT, MAX_MESSAGE_BYTES, MEMORY, ROW, STATE, TORQUE
from rtctl.cycle import begin_memory, cycle
from rtctl.errors import SetupError
from rtctl.kernels.compile import hot
from rtctl.kernels.layout import OK, new_block
from rtctl.kernels.memory import address_of, array_at, block_at
from rtctl.plant.driver_duty import plant_advance, plant_receive, plant_state
from rtctl.record.append import ring_append
from rtctl.record.ring import RING, Ring
from rtctl.wire.codec import decode_state, decode_torque, encode_state, encode_torque

LINE = 64  # messages in flight at most: link delays are below this
START_NS = 1_000_000_000_000  # of the counted time: far from 0, as a real clock is
LOST_STATE = 1 << 32  # bits of the schedule beside the requests: the state, or the torque, of this cycle does not arrive
LOST_TORQUE = 1 << 33
REQUEST_MASK = LOST_STATE - 1

_ROW_BYTES = ROW.itemsize
_ROW_WORDS = _ROW_BYTES // 8

PLANT_FAILED = -1000  # added to what the plant returned
CODEC_FAILED = -2000
CYCLE_FAILED = -3000

LINK = np.dtype(
    [
        ("k", "i8"),  # cycles run so far
        ("now_ns", "i8"),
        ("state_delay", "i8"),  # of the link, in cycles
        ("torque_delay", "i8"),
        ("last_sequence", "i8"),  # of the newest state on its way
        ("last_session", "i8"),
        ("ring", "i8"),  # address of the RING block, 0 = no record
        ("rows", "i8"),  # address of the first ROW of this call, 0 = none
        ("state", STATE),  # work space of both ends
        ("torque", TORQUE),
        ("heard", TORQUE),
        ("row", ROW),
        ("state_bytes", "u1", (LINE, MAX_MESSAGE_BYTES)),
        ("torque_bytes", "u1", (LINE, MAX_MESSAGE_BYTES)),
        ("state_length", "i8", LINE),  # of the message of cycle k % LINE, 0 = none
        ("torque_length", "i8", LINE),
    ],
    align=True,
)


@hot
def run_cycles(link, setup, pointers, memory, inp, plant_setup, plant_memory, schedule):  # type: ignore[no-untyped-def]
    """One cycle per entry of `schedule`: the arm moves, its state travels, the cycle judges it, the torque travels back.

    link, setup, pointers, memory, inp      LINK, SETUP, POINTERS, MEMORY, INPUT
    plant_setup, plant_memory               of the simulated arm
    schedule    (k,)  int64                 request bits of each cycle, with LOST_ bits

    Returns OK, or PLANT_FAILED, CODEC_FAILED, CYCLE_FAILED plus what failed; link["k"] tells the cycle.
    """
    for k in range(schedule.size):
        link["now_ns"] += setup["period_ns"]
        status = _send_state(link, plant_setup, plant_memory)
        if status != OK:
            return status
        status = _receive_state(link, inp, schedule[k])
        if status != OK:
            return status
        inp["now_ns"] = link["now_ns"]
        inp["deadline_ns"] = link["now_ns"]
        inp["requests"] = schedule[k] & REQUEST_MASK
        if cycle(setup, pointers, memory, inp, link["torque"], link["row"]) != OK:
            return CYCLE_FAILED
        status = _send_torque(link, plant_setup, plant_memory, schedule[k])
        if status != OK:
            return status
        _keep_row(link, k)
        link["k"] += 1
    return OK


@hot
def _send_state(link, plant_setup, plant_memory):  # type: ignore[no-untyped-def]
    """Let the arm move up to now; its newest state goes onto the line unless it already did."""
    status = plant_advance(plant_setup, plant_memory, link["now_ns"])
    if status != OK:
        return PLANT_FAILED + status
    place = link["k"] % LINE
    link["state_length"][place] = 0
    state = link["state"]
    if plant_state(plant_setup, plant_memory, link["now_ns"], state) != OK:
        return OK
    if state["sequence"] == link["last_sequence"] and state["session"] == link["last_session"]:
        return OK
    link["last_sequence"] = state["sequence"]
    link["last_session"] = state["session"]
    length = encode_state(state, link["state_bytes"][place])
    if length <= 0:
        return CODEC_FAILED + length
    link["state_length"][place] = length
    return OK


@hot
def _receive_state(link, inp, bits):  # type: ignore[no-untyped-def]
    inp["state_new"] = 0
    sent = link["k"] - link["state_delay"]
    if sent < 0 or bits & LOST_STATE != 0:
        return OK
    length = link["state_length"][sent % LINE]
    if length == 0:
        return OK
    status = decode_state(link["state_bytes"][sent % LINE], length, inp["state"])
    if status != OK:
        return CODEC_FAILED + status
    inp["state_new"] = 1
    inp["state_arrival_ns"] = link["now_ns"]
    return OK


@hot
def _send_torque(link, plant_setup, plant_memory, bits):  # type: ignore[no-untyped-def]
    """The torque goes onto the line; the one that has travelled long enough reaches the arm."""
    place = link["k"] % LINE
    length = encode_torque(link["torque"], link["torque_bytes"][place])
    if length <= 0:
        return CODEC_FAILED + length
    link["torque_length"][place] = 0 if bits & LOST_TORQUE != 0 else length
    sent = link["k"] - link["torque_delay"]
    if sent < 0 or link["torque_length"][sent % LINE] == 0:
        return OK
    status = decode_torque(link["torque_bytes"][sent % LINE], link["torque_length"][sent % LINE], link["heard"])
    if status != OK:
        return CODEC_FAILED + status
    plant_receive(plant_setup, plant_memory, link["heard"], link["now_ns"])  # a refusal is the driver's right, and counted there
    return OK


@hot
def _keep_row(link, k):  # type: ignore[no-untyped-def]
    if link["ring"] != 0:
        ring_append(block_at(link["ring"], RING), link["row"])
    if link["rows"] != 0:
        source = array_at(address_of(link["row"]), _ROW_WORDS, np.int64)
        target = array_at(link["rows"] + k * _ROW_BYTES, _ROW_WORDS, np.int64)
        for i in range(source.size):
            target[i] = source[i]
    return OK


@dataclass
class Lockstep:
    """A controller and a simulated arm in lock-step. `advance` runs cycles; the blocks may be looked at in between.

    setup, pointers             SETUP, POINTERS of the controller
    plant_setup, plant_memory   of the simulated arm
    state_delay, torque_delay   of the link, in cycles, beside the arm's own transport delay
    ring                        None = rows are only returned
    """

    setup: np.void
    pointers: np.void
    plant_setup: np.void
    plant_memory: np.void
    state_delay: int = 0
    torque_delay: int = 0
    ring: Ring | None = None

    def __post_init__(self) -> None:
        assert 0 <= self.state_delay < LINE and 0 <= self.torque_delay < LINE
        self.memory, self.inp, self.link = new_block(MEMORY), new_block(INPUT), new_block(LINK)
        begin_memory(self.memory)
        # Counted time goes on where the arm's own time is, when it has already lived.
        self.link["now_ns"] = max(START_NS, int(self.plant_memory["time_ns"]))
        self.link["state_delay"], self.link["torque_delay"] = self.state_delay, self.torque_delay
        if self.ring is not None:
            self.link["ring"] = self.ring.block.__array_interface__["data"][0]

    def advance(self, cycles: int, requests: Mapping[int, int] | None = None, keep_rows: bool = True) -> np.ndarray:
        """Run cycles and return their rows.

        requests    cycle, counted from 0 at this call, to BIT_ and LOST_ bits
        keep_rows   False: an empty array is returned (the ring has them)

        Raises SetupError when plant, codec or cycle failed; none of them does in sound code.
        """
        schedule = np.zeros(cycles, np.int64)
        for k, bits in (requests or {}).items():
            schedule[k] = bits
        rows = np.zeros(cycles if keep_rows else 0, ROW)
        self.link["rows"] = rows.ctypes.data if keep_rows else 0
        status = run_cycles(
            self.link, self.setup, self.pointers, self.memory, self.inp, self.plant_setup, self.plant_memory, schedule
        )
        self.link["rows"] = 0
        if status != OK:
            raise SetupError(
                f"lock-step cycle {int(self.link['k'])}: must run, got status {status}. "
                "The simulated arm's motion is probably not finite; look at its masses, gains and limits."
            )
        return rows


def run_lockstep(
    setup: np.void,
    pointers: np.void,
    plant_setup: np.void,
    plant_memory: np.void,
    cycles: int,
    requests: Mapping[int, int] | None = None,
    *,
    state_delay: int = 0,
    torque_delay: int = 0,
    ring: Ring | None = None,
) -> np.ndarray:
    """Rows of a fresh controller with a simulated arm over `cycles` cycles, see `Lockstep`."""
    lockstep = Lockstep(setup, pointers, plant_setup, plant_memory, state_delay, torque_delay, ring)
    return lockstep.advance(cycles, requests)
