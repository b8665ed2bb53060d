"""One run: the controller of a run file against a driver, in real time or in lock-step, with a record of every cycle."""

import datetime
import hashlib
import subprocess
import time
from collections.abc import Callable, Mapping
from contextlib import ExitStack
from dataclasses import dataclass
from pathlib import Path
from typing import Any

import numpy as np

from rtctl.assembly import Assembly, assemble
from rtctl.blocks import BIT_START, BIT_STOP, MODE_HOLDING, MODE_LATCHED, MODE_LIVE, MODE_NAMES, MODE_READY
from rtctl.causes import cause
from rtctl.config.run_file import RunConfig
from rtctl.errors import ConfigError, Finding, SetupError
from rtctl.loop.controller import Controller
from rtctl.loop.lockstep import Lockstep
from rtctl.loop.plan import LoopPlan
from rtctl.loop.status import why_no_start
from rtctl.plant.build import build_plant
from rtctl.record.header import make_header
from rtctl.record.recorder import Recorder, check_record_folder, start_recorder
from rtctl.record.ring import Ring
from rtctl.record.rows import compact_layout
from rtctl.sim_process import SimulatedArm

READY_WAIT_S = 5.0  # from the first state to `ready`
STOP_WAIT_S = 5.0
RECORDER_WAIT_S = 15.0
CHUNK_CYCLES = 20  # of lock-step between two looks; the end of a motion is seen that late at most
RECORD_SUFFIX = ".rec"

Progress = Callable[[str], None]


def _quiet(text: str) -> None:
    """Say nothing."""


@dataclass(frozen=True)
class RunOutcome:
    """What a run came to."""

    record_path: Path
    law: str
    simulated: bool
    lockstep: bool
    started: bool  # a motion began
    mode: str  # at the end, before release
    cause: str  # first cause in force at the end
    ended: str  # why the run ended: "motion", "time", "stopped", "latched", "interrupted", "terminated" or "ended" (by itself)
    status: Mapping[str, Any]  # of the controller at the end; empty in lock-step
    permissions: tuple[Finding, ...]  # what the computer did not permit

    @property
    def verdict(self) -> str:
        """ "pass", or "refuse" when a fault stopped the arm."""
        return "pass" if self.cause == "none" and self.ended != "ended" else "refuse"

    def as_json(self) -> dict[str, Any]:
        """The run as plain values."""
        return {
            "verdict": self.verdict,
            "record_path": str(self.record_path),
            "law": self.law,
            "simulated": self.simulated,
            "lockstep": self.lockstep,
            "started": self.started,
            "mode": self.mode,
            "cause": self.cause,
            "ended": self.ended,
            "permissions": [vars(finding) for finding in self.permissions],
            "status": dict(self.status),
        }


def run_live(
    run: RunConfig,
    *,
    law: str | None = None,
    sim: bool = False,
    start: bool = False,
    seconds: float | None = None,
    record_folder: Path | None = None,
    progress: Progress = _quiet,
) -> RunOutcome:
    """Run in real time. Ends in `ready` unless `start`; then it ends with the motion.

    law             instead of the run file's
    sim             also start the simulated arm of the run file as a process
    start           begin the motion by itself; only with a driver that says it is simulated
    seconds         end after so long, whatever happens; None = until the motion ends (with `start`) or Ctrl-C
    record_folder   instead of the run file's

    Raises ConfigError, SetupError or WireError before anything moves.
    """
    with ExitStack() as stack:
        if sim:
            # It compiles beside this process.
            arm = SimulatedArm(run.path, ("--end-with-parent",))
            stack.callback(arm.close)
            arm.start()
        progress(f"preparing {law or run.law}")
        assembly = assemble(run, law, others=() if start else tuple(run.gains))
        record_path, ring = _prepare_record(assembly, record_folder, seconds)
        header = _header(assembly, ring, simulated=sim)
        controller = Controller(_plan(assembly, ring, record_path, header), progress)
        if sim:
            progress("starting the simulated arm")
            arm.wait_ready()
        try:
            with controller:
                for finding in controller.permissions:
                    progress(f"not permitted: {finding}")
                outcome = _conduct(controller, assembly, start, seconds, progress, record_path)
        finally:
            if controller.recorder is None:  # nobody else will take the ring away
                ring.remove()
            _await_recorder(controller.recorder, record_path, progress)
        return outcome


def _conduct(
    controller: Controller, assembly: Assembly, start: bool, seconds: float | None, progress: Progress, record_path: Path
) -> RunOutcome:
    """From `off` to the end, in the main thread."""
    end_s = None if seconds is None else time.monotonic() + seconds
    if start:
        if not controller.simulated:
            raise SetupError(
                "--start: must be used with a simulated arm, got a driver of a real one. "
                "Run without --start, look at the arm, then: rtctl ask start"
            )
        start = _start(controller, assembly, progress)
    else:
        progress('ready when all checks hold; motion needs, from another terminal: "rtctl ask start". Ctrl-C ends the run')
    ended = _wait_for_end(controller, end_s, start)
    if int(controller.row()["mode"]) == MODE_LIVE:
        controller.stop()
    controller.wait_at_rest(STOP_WAIT_S)
    row = controller.row()
    if ended == "stopped" and int(row["mode"]) == MODE_LATCHED:
        ended = "latched"
    return RunOutcome(
        record_path=record_path,
        law=assembly.law,
        simulated=controller.simulated,
        lockstep=False,
        started=start,
        mode=MODE_NAMES[int(row["mode"])],
        cause=cause(int(row["first_cause"])).name,
        ended=ended,
        status=controller.status(),
        permissions=tuple(controller.permissions),
    )


def _start(controller: Controller, assembly: Assembly, progress: Progress) -> bool:
    """Wait for `ready` and begin the motion. False when somebody ended the run first; raises SetupError when it cannot begin."""
    progress("waiting for ready")
    result = controller.wait(READY_WAIT_S, lambda row: int(row["mode"]) == MODE_READY)
    if result == "time":
        _refuse_rate(controller, assembly.run)
        raise SetupError(
            "start: must be possible, got a controller that is not ready. " + " ".join(why_no_start(controller.row()))
        )
    if result != "met":
        return False
    refusals = controller.start()
    if refusals:
        raise SetupError("start: must be possible, got a refusal. " + " ".join(refusals))
    progress(f"{assembly.law}: moving")
    return True


def _refuse_rate(controller: Controller, run: RunConfig) -> None:
    """Raise SetupError when late cycles are what keeps the controller from being ready."""
    if "late_cycles" not in controller.status()["conditions"]:
        return
    timing = controller.status()["timing"]
    late_us = int(run.limits["late_ns"]) / 1000.0
    cycles, skipped = timing["cycle_count"], timing["skipped_count"]
    raise SetupError(
        f"{run.path}: rate_hz must be a rate that this computer can hold, got {run.rate_hz:g} Hz: "
        f"of {cycles} cycles {skipped} were skipped, wake-ups were late by {timing['late_p50_us']:.0f} us (median) and "
        f"{timing['late_p99_us']:.0f} us (99 %), late counts from {late_us:.0f} us, "
        f"and a cycle costs {timing['cost_p99_us']:.0f} us (99 %). "
        "Lower rate_hz, end other programs, or permit what was said to be not permitted."
    )


def _wait_for_end(controller: Controller, end_s: float | None, start: bool) -> str:
    """Wait until the motion is over or stopped by a fault (with `start`), the time is over, or somebody ends the run."""
    left_s = None if end_s is None else max(0.0, end_s - time.monotonic())
    if not start:
        return controller.wait(left_s)
    result = controller.wait(left_s, lambda row: controller.motion_done or int(row["mode"]) != MODE_LIVE)
    if result != "met":
        return result
    return "motion" if controller.motion_done else "stopped"


def run_lockstep(
    run: RunConfig,
    *,
    law: str | None = None,
    seconds: float | None = None,
    record_folder: Path | None = None,
    progress: Progress = _quiet,
) -> RunOutcome:
    """Run against the simulated arm in lock-step: no sockets, no real time, the same rows bit for bit each time.

    seconds   of simulated time after the start; None = until the motion ends

    Raises ConfigError before anything runs; a hold needs `seconds`.
    """
    progress(f"preparing {law or run.law}")
    assembly = assemble(run, law, session=1)
    plant_setup, plant_memory = build_plant(run)
    faults = assembly.start_faults(np.asarray(run.sim.q_start if run.sim else ()))
    if faults:
        raise ConfigError.from_findings(faults)
    record_path, ring = _prepare_record(assembly, record_folder, seconds)
    recorder = Recorder(ring, record_path, _header(assembly, ring, simulated=True))
    lockstep = Lockstep(assembly.setup, assembly.pointers[assembly.law], plant_setup, plant_memory, ring=ring)
    rehearsal = _Rehearsal(lockstep, recorder, run)
    try:
        progress("running in lock-step")
        outcome = rehearsal.conduct(seconds)
    finally:
        drain(recorder)
        ring.close()
        recorder.finish("closed")
    return RunOutcome(
        record_path=record_path,
        law=assembly.law,
        simulated=True,
        lockstep=True,
        started=rehearsal.started,
        mode=MODE_NAMES[rehearsal.mode],
        cause=cause(rehearsal.cause).name,
        ended=outcome,
        status={},
        permissions=(),
    )


class _Rehearsal:
    """A lock-step run from `off` to `holding`, recorded as it goes."""

    def __init__(self, lockstep: Lockstep, recorder: Recorder, run: RunConfig) -> None:
        self.lockstep, self.recorder, self.rate_hz = lockstep, recorder, run.rate_hz
        self.endless = run.reference.kind == "hold"
        self.started = False

    @property
    def mode(self) -> int:
        return int(self.lockstep.memory["supervisor"]["mode"])

    @property
    def cause(self) -> int:
        return int(self.lockstep.memory["supervisor"]["first_cause"])

    def advance(self, cycles: int, requests: Mapping[int, int] | None = None) -> None:
        self.lockstep.advance(cycles, requests, keep_rows=False)
        drain(self.recorder)

    def until(self, mode: int, seconds: float) -> bool:
        for _ in range(round(seconds * self.rate_hz / 20) + 1):
            if self.mode == mode:
                return True
            self.advance(20)
        return False

    def conduct(self, seconds: float | None) -> str:
        """Run it; returns why it ended."""
        if seconds is None and self.endless:
            raise ConfigError("--seconds: must be given for a motion without an end, got nothing. Add e.g. --seconds 5.")
        if not self.until(MODE_READY, READY_WAIT_S):
            raise SetupError(
                "lock-step: must become ready, got a controller that is not. " + " ".join(why_no_start(self.lockstep.link["row"]))
            )
        self.advance(1, {0: BIT_START})
        self.started = self.mode == MODE_LIVE
        left = None if seconds is None else round(seconds * self.rate_hz)
        ended = "motion"
        while self.mode == MODE_LIVE and int(self.lockstep.memory["supervisor"]["reference_done"]) == 0:
            if left is not None and left <= 0:
                ended = "time"
                break
            cycles = CHUNK_CYCLES if left is None else min(CHUNK_CYCLES, left)
            self.advance(cycles)
            left = None if left is None else left - cycles
        if self.mode == MODE_LIVE:
            self.advance(1, {0: BIT_STOP})
            self.until(MODE_HOLDING, STOP_WAIT_S)
        return "latched" if self.mode == MODE_LATCHED else ended


def drain(recorder: Recorder) -> None:
    """Move all rows that wait in the ring into the record."""
    while recorder.step():
        pass


# ---- record --------------------------------------------------------------------------------------------------------------------


def _prepare_record(assembly: Assembly, folder: Path | None, seconds: float | None) -> tuple[Path, Ring]:
    """The path of the record and its ring; the folder is made and checked for room before anything starts."""
    run = assembly.run
    place = folder if folder is not None else run.record_folder
    try:
        place.mkdir(parents=True, exist_ok=True)
    except OSError as error:
        raise ConfigError(f"{place}: must be a folder for records, got {error.strerror}. Name another one.") from None
    term_count = max(len(names) for names in assembly.term_names.values())
    per_hour = compact_layout(run.arm.n, term_count).itemsize * run.rate_hz * 3600.0
    findings = check_record_folder(place, per_hour, seconds)
    if findings:
        raise ConfigError.from_findings(findings)
    stamp = datetime.datetime.now(datetime.UTC).strftime("%Y%m%d-%H%M%S")
    path = place / f"{run.name}-{assembly.law}-{stamp}{RECORD_SUFFIX}"
    k = 1
    while path.exists():
        k += 1
        path = place / f"{run.name}-{assembly.law}-{stamp}-{k}{RECORD_SUFFIX}"
    return path, Ring.create(None, run.arm, assembly.term_names)


def _header(assembly: Assembly, ring: Ring, simulated: bool) -> dict[str, Any]:
    run = assembly.run
    reference = hashlib.sha256(repr(run.reference).encode() + assembly.reference.data.tobytes()).hexdigest()
    return make_header(
        run.arm,
        assembly.term_names,
        run_key=ring.run_key,
        period_ns=run.period_ns,
        config={"run": run.text, "path": str(run.path), "files": dict(run.hashes), "law": assembly.law, "pacing": run.pacing},
        hashes={"limits": hashlib.sha256(run.limits.tobytes()).hexdigest(), "reference": reference, "run": run.hash},
        simulated=simulated,
    )


def _plan(assembly: Assembly, ring: Ring, record_path: Path, header: Mapping[str, Any]) -> LoopPlan:
    run = assembly.run
    return LoopPlan(
        name=run.name,
        setup=assembly.setup,
        laws=assembly.pointers,
        law=assembly.law,
        state_endpoint=run.link.state_endpoint,
        torque_endpoint=run.link.torque_endpoint,
        arm_name=run.arm.name,
        pacing=run.pacing,
        ring=ring,
        start_recorder=lambda: start_recorder(ring, record_path, header),
        check_start=assembly.start_faults,
        keep_alive=(assembly,),
    )


def _await_recorder(recorder: "subprocess.Popen[bytes] | None", record_path: Path, progress: Progress) -> None:
    """Wait until the record is closed; say where the rows are when it is not."""
    if recorder is None:
        return
    try:
        recorder.wait(RECORDER_WAIT_S)
    except subprocess.TimeoutExpired:
        progress(f"{record_path}: the recorder is still writing; the record is complete when it ends")
