"""Controller and simulated arm in lock-step on one core, and what remains when only a law and the arm's motion are computed."""

import tempfile
from collections.abc import Callable
from pathlib import Path

import numpy as np

from rtctl.blocks import LAW_INPUT, LAW_MEMORY, MAX_TERMS, MODE_LIVE
from rtctl.kernels.compile import hot
from rtctl.kernels.layout import MAX_JOINTS, OK, SCRATCH, new_block
from rtctl.kernels.memory import address_of, call_address
from rtctl.plant.blocks import BRAKE_OPEN
from rtctl.plant.physics import substep
from rtctl.record.header import make_header
from rtctl.record.recorder import Recorder
from rtctl.record.ring import Ring
from rtctl.run import drain
from tests.bench.ratios import Comparison, Side, Times, interleave
from tests.bench.table import Finding, cost, rate_text
from tests.lockstep_runs import Rehearsal, demo

CYCLES = 1000  # of one block
CHUNK = 20  # cycles between two looks, as `rtctl run --lockstep` has it
GOAL_LOCKSTEP = 50_000.0  # cycles per second
GOAL_LAW_PLANT = 250_000.0
SUBSTEPS = 4


class MovingRun:
    """A lock-step run of the seven-joint arm that can be put back to the same moment of its motion."""

    def __init__(self, folder: Path | None) -> None:
        """`folder`: of ring and record; None = no record."""
        self.rehearsal = Rehearsal(demo("seven_joint")).start()
        self.lockstep = self.rehearsal.lockstep
        assert int(self.rehearsal.plant_setup["substeps"]) == SUBSTEPS
        self.recorder: Recorder | None = None
        if folder is not None:
            run, assembly = self.rehearsal.run, self.rehearsal.assembly
            self.ring = Ring.create(folder / "ring", run.arm, assembly.term_names)
            header = make_header(
                run.arm,
                assembly.term_names,
                run_key=self.ring.run_key,
                period_ns=run.period_ns,
                config={},
                hashes={},
                simulated=True,
            )
            self.recorder = Recorder(self.ring, folder / "bench.rec", header)
            self.lockstep.link["ring"] = self.ring.block.__array_interface__["data"][0]
        self.blocks = (self.lockstep.link, self.lockstep.memory, self.lockstep.inp, self.rehearsal.plant_memory)
        self.saved = [np.array([block]) for block in self.blocks]

    def run(self, repeats: int) -> None:
        """CYCLES cycles from that moment on, `repeats` times; the record is written as they come."""
        for _ in range(repeats):
            for block, saved in zip(self.blocks, self.saved, strict=True):
                for name in block.dtype.names or ():
                    block[name] = saved[0][name]
            for _ in range(CYCLES // CHUNK):
                self.lockstep.advance(CHUNK, keep_rows=False)
                if self.recorder is not None:
                    drain(self.recorder)
            assert int(self.lockstep.memory["supervisor"]["mode"]) == MODE_LIVE


@hot
def loop_law_plant(repeats, model, x, pointers, memory, ws, terms, n_terms, plant_setup, plant_memory, q_start, dt_s):  # type: ignore[no-untyped-def]
    """CYCLES cycles of law and one substep of the motion, from the same pose, `repeats` times. Returns how many succeeded."""
    good = 0
    n = model["n"]
    for _ in range(repeats):
        for i in range(n):
            plant_memory["q"][i] = q_start[i]
            plant_memory["qd"][i] = 0.0
        for _ in range(CYCLES):
            for i in range(n):
                x["q"][i] = plant_memory["q"][i]
                x["qd"][i] = plant_memory["qd"][i]
            status = call_address(
                pointers["law"],
                (
                    address_of(model),
                    address_of(x),
                    address_of(pointers["law_parameters"]),
                    address_of(memory),
                    address_of(ws),
                    terms.ctypes.data,
                ),
            )
            for i in range(n):
                tau = 0.0
                for k in range(n_terms):
                    tau += terms[k, i]
                plant_memory["tau_ask"][i] = tau
            if substep(plant_setup, plant_memory, dt_s) == OK and status == OK:
                good += 1
    return good


def law_and_plant(rehearsal: Rehearsal) -> Callable[[int], int]:
    """Computed torque moves the true arm from its start to a pose nearby, one substep per cycle."""
    x, memory, ws = new_block(LAW_INPUT), new_block(LAW_MEMORY), new_block(SCRATCH)
    terms = np.zeros((MAX_TERMS, MAX_JOINTS))
    setup, assembly = rehearsal.setup, rehearsal.assembly
    n = int(setup["model"]["n"])
    plant_memory = rehearsal.plant_memory.copy()
    plant_memory["brake"] = BRAKE_OPEN
    q_start = np.array(rehearsal.plant_setup["q_start"])
    dt_s = float(setup["period_ns"]) * 1e-9
    x["n"], x["dt_s"] = n, dt_s
    x["q_ref"][:n] = q_start[:n] + 0.2
    pointers = assembly.pointers[assembly.law]
    count = int(pointers["law_term_count"])
    blocks = (setup["model"], x, pointers, memory, ws, terms, count, rehearsal.plant_setup, plant_memory, q_start, dt_s)
    return lambda repeats: int(loop_law_plant(repeats, *blocks))


def measure(quick: bool) -> list[tuple[str, list[Finding]]]:
    """Rates in simulated cycles per second of one core."""
    with tempfile.TemporaryDirectory(prefix="rtctl-bench-") as folder:
        recorded, bare = MovingRun(Path(folder)), MovingRun(None)
        player = law_and_plant(bare.rehearsal)
        assert player(1) == CYCLES
        sides = {
            "recorded": Side(recorded.run, CYCLES),
            "bare": Side(bare.run, CYCLES),
            "law_plant": Side(player, CYCLES),
        }
        times = interleave(sides, 11 if quick else 41, 0.02)
        found = [
            against_goal("lockstep_goal_ratio", "lock-step, 4 substeps, record written", times["recorded"], GOAL_LOCKSTEP),
            against_goal("law_plant_goal_ratio", "law and motion alone, 1 substep", times["law_plant"], GOAL_LAW_PLANT),
            cost("lockstep_record_ratio", "cycle with record, against without", times["recorded"], times["bare"]),
        ]
    return [("lock-step with the simulated seven-joint arm, one core; ratio = rate / goal", found)]


def against_goal(key: str, what: str, times: Times, goal_hz: float) -> Finding:
    """A rate as a multiple of the one wanted."""
    found = goal_comparison(times, goal_hz)
    return Finding(key, what, rate_text(1e9 / float(np.median(times))), rate_text(goal_hz), found, "> 1")


def goal_comparison(times: Times, goal_hz: float) -> Comparison:
    """Rate over goal; a number of this computer, unlike the other ratios."""
    from tests.bench.ratios import compare

    return compare(times, np.full(len(times), 1e9 / goal_hz))
