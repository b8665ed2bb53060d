"""The running controller against the simulated arm of another process: real sockets, real time, the one-joint run.

Where the computer itself stands still (its causes are listed), a test begins again, at most TRIES times.
"""

import signal
import subprocess
import sys
import tempfile
import time
from collections.abc import Callable, Iterator
from dataclasses import replace
from pathlib import Path
from typing import Any

import pytest

from rtctl.assembly import assemble
from rtctl.blocks import MODE_HOLDING, MODE_LATCHED, MODE_LIVE, MODE_READY
from rtctl.causes import cause
from rtctl.config.run_file import load_run
from rtctl.demo import COMPUTER_CAUSES
from rtctl.errors import ConfigError, SetupError
from rtctl.loop.controller import Controller
from rtctl.loop.plan import LoopPlan
from rtctl.places import shipped_file
from rtctl.sim_process import SimulatedArm

pytestmark = pytest.mark.slow

TRIES = 4
PATIENCE_S = 20.0


class Stalled(Exception):
    """The computer stood still."""


@pytest.fixture
def folder(monkeypatch: pytest.MonkeyPatch) -> Iterator[Path]:
    """A runtime folder of this test alone."""
    with tempfile.TemporaryDirectory(prefix="rt-", dir="/tmp") as place:
        monkeypatch.setenv("XDG_RUNTIME_DIR", place)
        yield Path(place)


def plan() -> LoopPlan:
    """The one-joint run, nothing of the test process locked or pinned."""
    run = load_run(shipped_file("runs/one_joint.toml"))
    assembly = assemble(run, "computed_torque", others=("pid",))
    return LoopPlan(
        name="test",
        setup=assembly.setup,
        laws=assembly.pointers,
        law=assembly.law,
        state_endpoint=run.link.state_endpoint,
        torque_endpoint=run.link.torque_endpoint,
        arm_name=run.arm.name,
        realtime=False,
        check_start=assembly.start_faults,
        keep_alive=(assembly,),
    )


def reach(controller: Controller, mode: int) -> None:
    """Wait for a mode; a stop that the computer caused is Stalled."""
    if controller.wait(PATIENCE_S, lambda row: int(row["mode"]) in (mode, MODE_LATCHED)) != "met":
        raise AssertionError(controller.status())
    row = controller.row()
    if mode != MODE_LATCHED and int(row["mode"]) == MODE_LATCHED:
        raise Stalled(cause(int(row["first_cause"])).name)


def rehearse(act: Callable[[Controller], None], make: Callable[[], LoopPlan] = plan) -> None:
    """Driver, controller, and what the test does with them."""
    for _ in range(TRIES):
        with SimulatedArm(shipped_file("runs/one_joint.toml"), ("--end-with-parent",)), Controller(make()) as controller:
            try:
                reach(controller, MODE_READY)
                act(controller)
            except Stalled as stall:
                assert str(stall) in COMPUTER_CAUSES, stall
                continue
            return
    pytest.fail(f"the computer stood still {TRIES} times")


def begin(controller: Controller) -> None:
    refusals = controller.start()
    if int(controller.row()["mode"]) == MODE_LATCHED:
        raise Stalled(cause(int(controller.row()["first_cause"])).name)
    assert refusals == []


def test_a_day_of_a_controller(folder: Path) -> None:
    """Ready, start, stop, hold, law exchanged, start, e-stop, latched, reset, ready; and nothing was compiled on the way."""

    def act(controller: Controller) -> None:
        assert controller.simulated
        begin(controller)
        with pytest.raises(SetupError, match="law: must be changed between motions, got a controller in live"):
            controller.set_law("pid")
        controller.stop()
        reach(controller, MODE_HOLDING)
        controller.set_law("pid")
        begin(controller)
        assert controller.status()["law"] == "pid"
        controller.estop()
        reach(controller, MODE_LATCHED)
        if cause(int(controller.row()["first_cause"])).name != "estop":
            raise Stalled(cause(int(controller.row()["first_cause"])).name)
        assert controller.start() == ["Latched: An e-stop was asked for. Find the cause, then reset."]
        end_s = time.monotonic() + PATIENCE_S
        while int(controller.row()["mode"]) == MODE_LATCHED and time.monotonic() < end_s:
            controller.reset()  # not taken before the arm is still
            time.sleep(0.02)
        reach(controller, MODE_READY)
        assert controller.signatures_unchanged()

    rehearse(act)


def test_an_unknown_law_is_refused(folder: Path) -> None:
    """With the laws of the run."""

    def act(controller: Controller) -> None:
        with pytest.raises(ConfigError, match="law: must be one of computed_torque, pid, got pd"):
            controller.set_law("pd")

    rehearse(act)


def test_a_motion_that_leaves_the_limits_is_refused_at_the_start(folder: Path) -> None:
    """Asked with the pose that is measured then; the mode stays ready."""

    def act(controller: Controller) -> None:
        assert controller.start() == ["planted"]
        assert int(controller.row()["mode"]) == MODE_READY

    rehearse(act, lambda: replace(plan(), check_start=lambda q: ["planted"]))  # type: ignore[list-item,return-value]


def test_a_silent_side_thread_stops_the_arm(folder: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    """A request that hangs holds the side thread: the loop brakes and latches by itself, with that cause."""
    monkeypatch.setattr(Controller, "_handle", lambda self, verb, request: time.sleep(2.0) or {"ok": True})

    def act(controller: Controller) -> None:
        from threading import Thread

        from rtctl.loop.control import ask

        begin(controller)
        asker = Thread(target=ask, args=("test", "status"), kwargs={"timeout_s": 5.0})
        asker.start()
        reach(controller, MODE_LATCHED)
        name = cause(int(controller.row()["first_cause"])).name
        asker.join()
        if name != "side_thread":
            raise Stalled(name)

    rehearse(act)


def test_an_exception_stops_and_releases(folder: Path) -> None:
    """Leaving the block by an exception joins the hot thread first, and the last word to the driver is release."""
    with SimulatedArm(shipped_file("runs/one_joint.toml"), ("--end-with-parent",)):
        with pytest.raises(RuntimeError, match="planted"), Controller(plan()) as controller:
            reach(controller, MODE_READY)
            begin(controller)
            raise RuntimeError("planted")
        assert not controller.alive
        assert int(controller._torque["request"]) == 2


@pytest.mark.parametrize(("presses", "ended_cause"), [(1, "none"), (2, "estop")])
def test_ctrl_c_once_stops_and_twice_latches(folder: Path, tmp_path: Path, presses: int, ended_cause: str) -> None:
    """Once: a commanded stop, no fault, exit code 0. Twice while it moves or brakes: an e-stop, exit code 1."""
    import json

    for _ in range(TRIES):
        process = subprocess.Popen(
            [sys.executable, "-m", "rtctl.cli", "run", str(shipped_file("runs/one_joint.toml")), "--sim", "--start"]
            + ["--records", str(tmp_path), "--json"],
            stdout=subprocess.PIPE,
            stderr=subprocess.PIPE,
            text=True,
        )
        assert process.stderr is not None
        for line in process.stderr:
            if "moving" in line:
                break
        time.sleep(0.3)
        for _ in range(presses):
            process.send_signal(signal.SIGINT)
            time.sleep(0.004)
        out, err = process.communicate(timeout=60)
        assert "Traceback" not in err, err
        outcome: dict[str, Any] = json.loads(out)
        if outcome["cause"] in COMPUTER_CAUSES:
            continue
        assert outcome["ended"] == "interrupted", outcome
        assert outcome["cause"] == ended_cause
        assert process.returncode == (0 if ended_cause == "none" else 1)
        return
    pytest.fail(f"the computer stood still {TRIES} times")


def test_two_controllers_of_one_name_are_not_possible(folder: Path) -> None:
    """The second is refused with the process that runs, before it opens a socket."""

    def act(controller: Controller) -> None:
        with pytest.raises(SetupError, match='controller "test": must run only once'), Controller(plan()):
            pass
        assert controller.alive

    rehearse(act)


def test_a_second_controller_gets_nothing_while_the_first_holds_the_grant(folder: Path) -> None:
    """Under another name it runs, but stays in off and says why; the first is not disturbed."""

    def act(controller: Controller) -> None:
        begin(controller)
        with Controller(replace(plan(), name="second")) as second:
            time.sleep(0.5)
            assert int(second.row()["mode"]) not in (MODE_READY, MODE_LIVE)
            assert "grant" in second.status()["conditions"]
            assert not second.row()["tau_out"].any()
        if int(controller.row()["mode"]) == MODE_LATCHED:
            raise Stalled(cause(int(controller.row()["first_cause"])).name)
        assert int(controller.row()["mode"]) == MODE_LIVE

    rehearse(act)
