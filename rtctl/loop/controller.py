"""The running controller: a hot thread that only runs the compiled loop, a side thread for requests, and orderly ends.

The main thread never runs the loop. Every exit stops and joins the hot thread first, because it works in memory that Python owns.
Ctrl-C once ends the run with a commanded stop, twice is an e-stop; SIGTERM and SIGHUP end it too; so does an exception.
"""

import atexit
import gc
import signal
import threading
import time
from collections.abc import Callable
from types import FrameType
from typing import Any, Self

import numpy as np

from rtctl.blocks import INPUT, MEMORY, MODE_BRAKING, MODE_LIVE, MODE_NAMES, ROW, STATUS_SIMULATED, TORQUE
from rtctl.cycle import begin_memory
from rtctl.errors import ConfigError, Finding, RtctlError, SetupError
from rtctl.kernels.layout import new_block
from rtctl.loop.blocks import CONTROL, LEAVE_EXTRA_NS, LEFT, LOOP, PACING_NAMES
from rtctl.loop.control import ControlServer, Reply, control_path
from rtctl.loop.flags import Flags, flags_path
from rtctl.loop.handshake import wait_for_driver
from rtctl.loop.live import run_loop
from rtctl.loop.machine import Machine, choose_cores, fifo_permitted, prepare_hot_thread, priority_finding
from rtctl.loop.plan import LoopPlan, check_endpoints
from rtctl.loop.startup import HotLink, compile_loop, compiled_signatures, warm_up
from rtctl.loop.status import explain, status_of, why_no_start

SIDE_PERIOD_MS = 5  # heartbeat of the side thread
LOOK_S = 0.02  # between two looks of `wait`
IO_PRIORITY_BELOW = 10  # the hot I/O thread's priority stands below the loop's by this
WARM_UP_MAX_S = 60.0
JOIN_EXTRA_S = 2.0
STOP_WORDS = {2: "stop", 1: "stop_release"}  # stop category of IEC 60204-1 to the word of the flag file

_LOST: list[Any] = []  # memory of a hot thread that could not be joined: kept as long as the process lives


class Controller:
    """A controller for one plan. Use it as a context manager: entering starts it up to `off`, leaving stops and releases.

    driver          STATE block of the first state, set after entering
    permissions     findings: what the computer did not permit
    """

    def __init__(self, plan: LoopPlan, progress: Callable[[str], None] = lambda text: None) -> None:
        self.plan = plan
        self.permissions: list[Finding] = []
        self.interrupted = 0  # how often Ctrl-C was pressed
        self.terminated = False
        self.result = 0  # what the loop returned
        self.recorder: Any = None
        self._progress = progress
        self._machine = Machine()
        self._flags: Flags | None = None
        self._link: HotLink | None = None
        self._server: ControlServer | None = None
        self._hot: threading.Thread | None = None
        self._side: threading.Thread | None = None
        self._error: BaseException | None = None
        self._warm, self._go, self._side_end = threading.Event(), threading.Event(), threading.Event()
        self._old_handlers: dict[int, Any] = {}
        self._closed = False
        self._make_blocks()

    # ---- start and end ---------------------------------------------------------------------------------------------------------

    def _make_blocks(self) -> None:
        """All memory of the run, before anything starts."""
        self.loop, self.memory = new_block(LOOP), new_block(MEMORY)
        self._inp, self._torque, self._row = new_block(INPUT), new_block(TORQUE), new_block(ROW)
        first = self.plan.laws[self.plan.law]
        self._pointers, self._rows = np.zeros(2, first.dtype), np.zeros(2, ROW)
        self._pointers[0] = first
        self._control = np.zeros(1, CONTROL)
        self._law = self.plan.law

    def __enter__(self) -> Self:
        try:
            self._open()
        except BaseException:
            self.close()
            raise
        return self

    def __exit__(self, *_: object) -> None:
        self.close()

    def _open(self) -> None:
        """The start-up order of `startup`. Nothing moves: the loop begins in `off`."""
        plan = self.plan
        check_endpoints(plan)
        path = flags_path(plan.name, plan.folder)
        try:
            self._flags = Flags.create(path)
        except FileExistsError as error:
            raise SetupError(
                f'controller "{plan.name}": must run only once, got one that runs already ({error.strerror}). '
                "End it first, or give this run another name."
            ) from None
        self._progress("compiling the loop")
        compile_loop()
        if plan.start_recorder is not None:
            self._progress("starting the recorder")
            self.recorder = plan.start_recorder()
        core, io_core, priority = self._choose_machine()
        self._link = HotLink(plan, io_core, priority - IO_PRIORITY_BELOW if priority is not None else None)
        self._server = ControlServer(control_path(plan.name, plan.folder), self._handle)
        self._progress("waiting for the driver")
        self.driver = wait_for_driver(self._link.state_socket, plan)
        self._fill_loop()
        self._progress("warming up")
        if plan.check_start is not None:
            # What a start asks in the side thread must not compile there: the heartbeat would stop.
            plan.check_start(self.driver["q"][: int(plan.setup["model"]["n"])])
        self._hot = threading.Thread(target=self._hot_main, args=(core, priority), name="rtctl-hot", daemon=True)
        self._hot.start()
        if not self._warm.wait(WARM_UP_MAX_S) or self._error is not None:
            self._fail("warm-up")
        gc.collect()
        gc.freeze()
        self._signatures = compiled_signatures()
        self._side = threading.Thread(target=self._side_main, name="rtctl-side", daemon=True)
        self._side.start()
        atexit.register(self.close)
        self._take_signals()
        self._go.set()
        self._await_first_row()

    def _choose_machine(self) -> tuple[int | None, int | None, int | None]:
        """(core, I/O core, priority) of the hot threads, None where it stays as it is."""
        if not self.plan.realtime:
            return None, None, None
        core, io_core, findings = choose_cores(self.plan.core)
        self.permissions += findings
        if fifo_permitted(self.plan.priority):
            return core, io_core, self.plan.priority
        self.permissions.append(priority_finding())
        return core, io_core, None

    def _fill_loop(self) -> None:
        assert self._link is not None and self._flags is not None
        loop = self.loop
        self._link.fill(loop)
        loop["pacing"] = PACING_NAMES.index(self.plan.pacing)
        loop["pointers"], loop["rows"] = self._pointers.ctypes.data, self._rows.ctypes.data
        loop["control"] = self._control.ctypes.data
        loop["flags"] = np.frombuffer(self._flags.mapped, np.int64).ctypes.data
        loop["side_required"] = 1
        if self.plan.ring is not None:
            loop["ring"] = self.plan.ring.block.__array_interface__["data"][0]
        begin_memory(self.memory)

    def _fail(self, step: str) -> None:
        if isinstance(self._error, RtctlError):
            raise self._error
        raise SetupError(f"{step}: must succeed, got {self._error or 'no end'}. This is a defect of rtctl.") from self._error

    def _await_first_row(self) -> None:
        end_s = time.monotonic() + 1.0
        while self._word("row_count") == 0:
            if time.monotonic() > end_s or not self.alive:
                self._fail("first cycle")
            time.sleep(0.001)

    def close(self) -> None:
        """Stop, release, join the hot thread, then let everything go. Signals stay handled until the end."""
        if self._closed:
            return
        self._closed = True
        joined = self._end_hot_thread()
        self._side_end.set()
        if self._side is not None:
            self._side.join(1.0)
        if self.plan.ring is not None:
            self.plan.ring.close()
        if not joined:
            # It still works in this memory: nothing may be freed. The driver's time-out has taken the arm over.
            _LOST.append(self)
        else:
            for part in (self._link, self._server, self._flags):
                if part is not None:
                    self._close_quietly(part)
        self._machine.close()
        gc.unfreeze()
        atexit.unregister(self.close)
        for number, handler in self._old_handlers.items():
            signal.signal(number, handler)

    @staticmethod
    def _close_quietly(part: Any) -> None:
        try:
            part.close()
        except (OSError, BufferError):
            pass  # at the end of a run there is nothing left to protect; the next start cleans up

    def _end_hot_thread(self) -> bool:
        """Tell the loop to leave and wait for it. True when it has ended."""
        if self._hot is None:
            return True
        self._set_word("leave", 1)
        self._go.set()
        limit_s = (int(self.plan.setup["limits"]["brake_deadline_ns"]) + LEAVE_EXTRA_NS) * 1e-9 + JOIN_EXTRA_S
        end_s = time.monotonic() + limit_s
        while self._hot.is_alive() and time.monotonic() < end_s:
            self._hot.join(LOOK_S)  # in pieces: a second Ctrl-C is handled in between
        return not self._hot.is_alive()

    # ---- threads ---------------------------------------------------------------------------------------------------------------

    def _hot_main(self, core: int | None, priority: int | None) -> None:
        """The hot thread: warms up, prepares itself, waits for the word, runs the loop."""
        assert self._link is not None
        ran = False
        try:
            # At ordinary priority: a warm-up takes a tenth of a second and would stall another arm's loop on the same core.
            warm_up(self.plan, self._link.context)
            self.permissions += prepare_hot_thread(core, priority)
            if self.plan.realtime:
                self._machine.hold_latency()
                self._machine.lock_memory()
                self.permissions += self._machine.findings
            self._warm.set()
            self._go.wait()
            if self._word("leave") == 0:
                ran = True
                self.result = int(run_loop(self.loop, self.plan.setup, self.memory, self._inp, self._torque, self._row))
        except BaseException as error:  # kept for whoever waits; a thread has nobody to raise to
            self._error = error
        finally:
            if ran and self.result != LEFT:
                self._link.send_release(self._torque)
            self._warm.set()

    def _side_main(self) -> None:
        """The side thread: heartbeat and requests."""
        assert self._server is not None
        while not self._side_end.is_set():
            self._set_word("side_beat", self._word("side_beat") + 1)
            self._server.serve(SIDE_PERIOD_MS)

    def _word(self, name: str) -> int:
        return int(self._control[0][name])

    def _set_word(self, name: str, value: int) -> None:
        self._control[0][name] = value  # one aligned 64-bit store

    # ---- signals ---------------------------------------------------------------------------------------------------------------

    def _take_signals(self) -> None:
        if threading.current_thread() is not threading.main_thread():
            return  # Python delivers signals to the main thread only; whoever runs the controller elsewhere handles them
        for number in (signal.SIGINT, signal.SIGTERM, signal.SIGHUP):
            self._old_handlers[number] = signal.signal(number, self._on_signal)

    def _on_signal(self, number: int, frame: FrameType | None) -> None:
        assert self._flags is not None
        if number == signal.SIGINT:
            self.interrupted += 1
            self._flags.request("stop" if self.interrupted == 1 else "estop")
        else:
            self.terminated = True
            self._flags.request("stop_release")

    # ---- requests --------------------------------------------------------------------------------------------------------------

    @property
    def alive(self) -> bool:
        """True as long as the loop runs."""
        return self._hot is not None and self._hot.is_alive()

    @property
    def simulated(self) -> bool:
        """True when the driver says that its arm is simulated."""
        return bool(int(self.driver["status"]) & STATUS_SIMULATED)

    def start(self, wait_s: float = 1.0) -> list[str]:
        """Ask for motion. Returns why it was refused, in sentences; an empty list when it has begun."""
        faults = self._start_faults()
        if faults:
            return faults
        self._set_word("start", 1)
        return [] if self.wait(wait_s, lambda row: int(row["mode"]) == MODE_LIVE) == "met" else why_no_start(self.row())

    def _start_faults(self) -> list[str]:
        """What is wrong with the motion from the pose measured now."""
        if self.plan.check_start is None:
            return []
        n = int(self.plan.setup["model"]["n"])
        return [str(finding) for finding in self.plan.check_start(self.row()["q"][:n])]

    @property
    def motion_done(self) -> bool:
        """True when the reference in force has come to its end."""
        return bool(self.memory["supervisor"]["reference_done"])

    def stop(self, category: int = 2) -> None:
        """Ask for a stop: category 2 brakes and holds with torque, category 1 brakes and releases (IEC 60204-1)."""
        assert self._flags is not None
        self._flags.request(STOP_WORDS[category])

    def estop(self) -> None:
        """Ask for an e-stop: latched until a reset. This is not the hardware emergency stop."""
        assert self._flags is not None
        self._flags.request("estop")

    def reset(self) -> None:
        """Ask to leave `latched`. Starts nothing."""
        self._set_word("reset", 1)

    def set_law(self, name: str) -> None:
        """Exchange the control law between motions. Raises ConfigError for an unknown law, SetupError while a motion goes on."""
        if name not in self.plan.laws:
            raise ConfigError.from_findings([Finding("law", f"one of {', '.join(self.plan.laws)}", name)])
        used = self._word("pointer_used")
        mode = MODE_NAMES[int(self.row()["mode"])]
        if used != self._word("pointer_wanted") or mode in ("live", "braking"):
            raise SetupError(f"law: must be changed between motions, got a controller in {mode}. Stop first.")
        self._pointers[1 - used] = self.plan.laws[name]
        self._set_word("pointer_wanted", 1 - used)
        self._law = name

    def _handle(self, verb: str, request: Any) -> Reply:
        """Answer one request of the control channel, in the side thread. Never waits."""
        if verb == "start":
            faults = self._start_faults()
            if faults:
                return {"text": "\n".join(faults)}
            self._set_word("start", 1)
            return {"ok": True}
        if verb == "reset":
            self.reset()
            return {"ok": True}
        if verb == "law":
            try:
                self.set_law(str(request.get("law")))
            except RtctlError as error:
                return {"text": str(error)}
            return {"ok": True, "law": self._law}
        row = self.row()
        if verb == "why":
            return {"ok": True, "why": explain(row)}
        return {"ok": True, "status": self.status(), "why_no_start": why_no_start(row)}

    # ---- looking ---------------------------------------------------------------------------------------------------------------

    def row(self) -> np.void:
        """A copy of the newest row."""
        while True:
            count = self._word("row_count")
            copy: np.void = self._rows[(count - 1) % 2].copy()
            if self._word("row_count") == count:
                return copy

    def status(self) -> dict[str, Any]:
        """What the controller says about itself, see `status.status_of`."""
        status: dict[str, Any] = {"name": self.plan.name, "alive": self.alive, "law": self._law}
        status |= status_of(self.row(), self.loop)
        status["permissions"] = [str(finding) for finding in self.permissions]
        if self.plan.ring is not None:
            recorder = self.plan.ring.recorder_status()
            status["recorder"] = {"alive": recorder.alive, "state": recorder.state, "lost_row_count": recorder.lost_rows}
        return status

    def wait(self, seconds: float | None, until: Callable[[np.void], bool] | None = None) -> str:
        """Wait in the main thread; signals are handled meanwhile.

        seconds     at most so long; None = as long as it takes
        until       tells from the newest row whether to stop waiting

        Returns "met", "time", "interrupted" (Ctrl-C), "terminated" or "ended" (the loop has ended by itself).
        """
        end_s = time.monotonic() + seconds if seconds is not None else None
        while True:
            if self.interrupted:
                return "interrupted"
            if self.terminated:
                return "terminated"
            if until is not None and until(self.row()):
                return "met"
            if not self.alive:
                return "ended"
            if end_s is not None and time.monotonic() >= end_s:
                return "time"
            time.sleep(min(LOOK_S, 0.001) if until is not None else LOOK_S)

    def wait_at_rest(self, seconds: float) -> None:
        """Wait until no law is in charge and the arm is braked, whatever was pressed meanwhile."""
        end_s = time.monotonic() + seconds
        while time.monotonic() < end_s and self.alive and int(self.row()["mode"]) in (MODE_LIVE, MODE_BRAKING):
            time.sleep(LOOK_S)

    def signatures_unchanged(self) -> bool:
        """True when nothing was compiled since the warm-up."""
        return compiled_signatures() == self._signatures
