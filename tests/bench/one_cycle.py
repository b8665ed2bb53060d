"""One full cycle without waiting and without sockets: decode, reference, law, supervisor, encode, record row; and each part alone.

A stretch of a real run in lock-step is recorded as messages and played back again and again from the same memory, so that every
cycle is a moving, commanded one. The torques must come out as they did in the run, to the last bit.
"""

import tempfile
from collections.abc import Callable
from dataclasses import dataclass
from pathlib import Path
from typing import Any

import numpy as np

from rtctl.blocks import (
    INPUT,
    MAX_MESSAGE_BYTES,
    MEMORY,
    MODE_LIVE,
    ROW,
    STATE,
    TORQUE,
)
from rtctl.cycle import cycle
from rtctl.kernels.compile import hot
from rtctl.kernels.layout import OK, new_block
from rtctl.kernels.memory import address_of, array_at, block_at, call_address
from rtctl.record.append import ring_append
from rtctl.record.ring import RING, Ring
from rtctl.supervisor.fold import fold
from rtctl.supervisor.gate import pass_gate
from rtctl.supervisor.holding import holding_fits, holding_torque
from rtctl.supervisor.observe import observe
from rtctl.supervisor.watches import update_checks, update_still, watch
from rtctl.wire.codec import decode_state, encode_torque
from tests.bench.ratios import Side, Times, interleave
from tests.bench.table import Finding, cost, time_text
from tests.lockstep_runs import Rehearsal, demo

CYCLES = 256
MOVING_S = 0.5  # into the motion
GOAL_NS = 10_000.0
_MEMORY_WORDS = MEMORY.itemsize // 8
_STATE_WORDS = STATE.itemsize // 8
RING_ROWS = 8192


@hot
def copy_words(source, target, count):  # type: ignore[no-untyped-def]
    """Copy 64-bit words from address to address."""
    words_in = array_at(source, count, np.int64)
    words_out = array_at(target, count, np.int64)
    for k in range(count):
        words_out[k] = words_in[k]


@hot
def _begin_cycle(inp, now_ns, fresh):  # type: ignore[no-untyped-def]
    """What the loop tells a cycle: the time, and the state that has just been decoded."""
    inp["now_ns"] = now_ns
    inp["deadline_ns"] = now_ns
    inp["state_arrival_ns"] = now_ns
    inp["state_new"] = 1
    copy_words(address_of(fresh), address_of(inp["state"]), _STATE_WORDS)


@hot
def play_whole(repeats, setup, pointers, start, memory, inp, torque, row, fresh, ring, messages, lengths, times, outbox):  # type: ignore[no-untyped-def]
    """All cycles of the stretch, `repeats` times. Returns how many did all they should."""
    good = 0
    for _ in range(repeats):
        copy_words(address_of(start), address_of(memory), _MEMORY_WORDS)
        for k in range(times.size):
            decoded = decode_state(messages[k], lengths[k], fresh)
            _begin_cycle(inp, times[k], fresh)
            status = cycle(setup, pointers, memory, inp, torque, row)
            length = encode_torque(torque, outbox)
            kept = ring_append(block_at(ring, RING), row)
            if decoded == OK and status == OK and length > 0 and kept == OK:
                good += 1
    return good


@hot
def play_decode(repeats, setup, pointers, start, memory, inp, torque, row, fresh, ring, messages, lengths, times, outbox):  # type: ignore[no-untyped-def]
    """Only decode each message, check sum included."""
    good = 0
    for _ in range(repeats):
        for k in range(times.size):
            good += decode_state(messages[k], lengths[k], fresh)
    return good


@hot
def play_observe(repeats, setup, pointers, start, memory, inp, torque, row, fresh, ring, messages, lengths, times, outbox):  # type: ignore[no-untyped-def]
    """Only take over each state: identity, order, age, delay by echo."""
    good = 0
    for _ in range(repeats):
        copy_words(address_of(start), address_of(memory), _MEMORY_WORDS)
        for k in range(times.size):
            inp["state"]["sequence"] = memory["link"]["last_sequence"] + 1
            inp["state"]["sample_ns"] = times[k]
            inp["now_ns"] = times[k]
            inp["state_arrival_ns"] = times[k]
            good += observe(setup, memory, inp)
    return good


@hot
def play_reference(repeats, setup, pointers, start, memory, inp, torque, row, fresh, ring, messages, lengths, times, outbox):  # type: ignore[no-untyped-def]
    """Only sample the reference, through its address."""
    good = 0
    sample = memory["sample"]
    for _ in range(repeats):
        for k in range(times.size):
            sample["t_s"] = float(times[k] - times[0]) * 1e-9
            good += call_address(
                pointers["reference_sample"],
                (address_of(setup["reference"]), address_of(memory["reference"]), address_of(sample)),
            )
    return good


@hot
def play_law(repeats, setup, pointers, start, memory, inp, torque, row, fresh, ring, messages, lengths, times, outbox):  # type: ignore[no-untyped-def]
    """Only the law, through its address, at poses that differ a little."""
    good = 0
    x = memory["law_input"]
    for _ in range(repeats):
        for k in range(times.size):
            x["q"][0] = x["q_ref"][0] + 1e-6 * k
            good += call_address(
                pointers["law"],
                (
                    address_of(setup["model"]),
                    address_of(x),
                    address_of(pointers["law_parameters"]),
                    address_of(memory["law"]),
                    address_of(memory["scratch"]),
                    row["terms"][:].ctypes.data,
                ),
            )
    return good


@hot
def play_holding(repeats, setup, pointers, start, memory, inp, torque, row, fresh, ring, messages, lengths, times, outbox):  # type: ignore[no-untyped-def]
    """Only the holding torque and whether it fits."""
    good = 0
    gravity = memory["scratch"]["x0"][:]
    for _ in range(repeats):
        for k in range(times.size):
            memory["link"]["q"][0] = memory["sample"]["q_ref"][0] + 1e-6 * k
            holding_torque(setup, memory, gravity)
            if holding_fits(setup, gravity):
                good += 1
    return good


@hot
def play_watches(repeats, setup, pointers, start, memory, inp, torque, row, fresh, ring, messages, lengths, times, outbox):  # type: ignore[no-untyped-def]
    """Only all watches, standstill and checks, and the fold of what they found."""
    good = 0
    for _ in range(repeats):
        copy_words(address_of(start), address_of(memory), _MEMORY_WORDS)
        for _ in range(times.size):
            conditions = watch(setup, memory, inp, row)
            fold(conditions, MODE_LIVE, inp["requests"], setup["limits"]["estop_stop"])
            still = update_still(setup, memory, 1)
            update_checks(setup, memory, conditions, True, still)
            if conditions == 0:
                good += 1
    return good


@hot
def play_gate(repeats, setup, pointers, start, memory, inp, torque, row, fresh, ring, messages, lengths, times, outbox):  # type: ignore[no-untyped-def]
    """Only the gate."""
    good = 0
    supervisor = memory["supervisor"]
    for _ in range(repeats):
        for _ in range(times.size):
            good += pass_gate(
                setup, MODE_LIVE, supervisor["tau_law"][:], memory["scratch"]["x0"][:], supervisor["tau_out"][:], row
            )
    return good


@hot
def play_encode(repeats, setup, pointers, start, memory, inp, torque, row, fresh, ring, messages, lengths, times, outbox):  # type: ignore[no-untyped-def]
    """Only encode the torque message, check sum included."""
    good = 0
    for _ in range(repeats):
        for k in range(times.size):
            torque["sequence"] = 1_000_000 + k
            if encode_torque(torque, outbox) > 0:
                good += 1
    return good


@hot
def play_record(repeats, setup, pointers, start, memory, inp, torque, row, fresh, ring, messages, lengths, times, outbox):  # type: ignore[no-untyped-def]
    """Only put the row into the ring."""
    good = 0
    for _ in range(repeats):
        for _ in range(times.size):
            good += ring_append(block_at(ring, RING), row)
    return good


PARTS: dict[str, tuple[Any, str]] = {
    "decode": (play_decode, "decode the state message, check sum included"),
    "observe": (play_observe, "take over the state: identity, order, age, delay by echo"),
    "reference": (play_reference, "sample the reference"),
    "law": (play_law, "computed torque"),
    "holding": (play_holding, "holding torque and whether it fits"),
    "watches": (play_watches, "all watches, standstill, checks, fold"),
    "gate": (play_gate, "gate"),
    "encode": (play_encode, "encode the torque message, check sum included"),
    "record": (play_record, "put the row into the ring"),
}


@dataclass
class Stretch:
    """A stretch of a run and the blocks to play it back with."""

    rehearsal: Rehearsal
    messages: np.ndarray
    lengths: np.ndarray
    times: np.ndarray
    start: np.void
    tau_out: np.ndarray
    ring: Ring

    def __post_init__(self) -> None:
        self.memory, self.row = new_block(MEMORY), new_block(ROW)
        self.inp, self.torque, self.fresh = new_block(INPUT), new_block(TORQUE), new_block(STATE)
        self.outbox = np.zeros(MAX_MESSAGE_BYTES, np.uint8)

    def player(self, function: Any) -> Callable[[int], int]:
        """A function that plays the stretch `repeats` times."""
        assembly = self.rehearsal.assembly
        blocks = (assembly.setup, assembly.pointers[assembly.law], self.start, self.memory, self.inp, self.torque, self.row)
        ring = int(self.ring.block.__array_interface__["data"][0])
        rest = (self.fresh, ring, self.messages, self.lengths, self.times, self.outbox)
        return lambda repeats: int(function(repeats, *blocks, *rest))


def record_stretch(name: str, folder: Path) -> Stretch:
    """Messages and times of CYCLES cycles in the middle of a motion of a shipped run."""
    rehearsal = Rehearsal(demo(name)).start()
    rate_hz = rehearsal.run.rate_hz
    lockstep = rehearsal.lockstep
    lockstep.advance(round(MOVING_S * rate_hz))
    start = np.array([lockstep.memory])
    messages, lengths, times = (
        np.zeros((CYCLES, MAX_MESSAGE_BYTES), np.uint8),
        np.zeros(CYCLES, np.int64),
        np.zeros(CYCLES, np.int64),
    )
    for k in range(CYCLES):
        place = int(lockstep.link["k"]) % len(lockstep.link["state_length"])
        row = lockstep.advance(1)[0]
        assert int(row["mode"]) == MODE_LIVE and int(row["state_new"]) == 1
        messages[k], lengths[k] = lockstep.link["state_bytes"][place], lockstep.link["state_length"][place]
        times[k] = row["now_ns"]
    ring = Ring.create(folder / "ring", rehearsal.run.arm, rehearsal.assembly.term_names, RING_ROWS)
    return Stretch(rehearsal, messages, lengths, times, start[0], row["tau_out"].copy(), ring)


def measure(quick: bool) -> list[tuple[str, list[Finding]]]:
    """The whole and its parts, seven joints."""
    with tempfile.TemporaryDirectory(prefix="rtctl-bench-") as folder:
        stretch = record_stretch("seven_joint", Path(folder))
        whole = stretch.player(play_whole)
        assert whole(1) == CYCLES
        assert np.array_equal(stretch.row["tau_out"], stretch.tau_out), "the stretch plays back other torques"
        sides = {"whole": Side(whole, CYCLES)}
        for name, (function, _) in PARTS.items():
            player = stretch.player(function)
            assert player(1) == CYCLES, name
            sides[name] = Side(player, CYCLES)
        times = interleave(sides, 21 if quick else 101)
        return [("one full cycle without waiting, seven joints, computed torque; ratio = part / whole", findings_of(times))]


def findings_of(times: dict[str, Times]) -> list[Finding]:
    """The table of where the time goes."""
    found = [cost(f"cycle_{name}_ratio", what, times[name], times["whole"]) for name, (_, what) in PARTS.items()]
    rest = float(np.median(times["whole"])) - sum(float(np.median(times[name])) for name in PARTS)
    found.append(Finding("", "everything else: decision, sum of terms, torque block, 300 words of row", time_text(rest)))
    goal = np.full(len(times["whole"]), GOAL_NS)
    found.append(cost("cycle_goal_ratio", "whole cycle, against the goal of 10 us", times["whole"], goal, "< 1"))
    return found
