"""The demonstration, with lock-step in place of real time: its numbers, its report, its repeats. Real processes: tests/process."""

from dataclasses import replace
from pathlib import Path
from typing import Any

import pytest

from rtctl import demo
from rtctl.run import RunOutcome, run_lockstep
from tests.sources import source

pytestmark = pytest.mark.slow


def in_lockstep(run: Any, *, law: str, record_folder: Path, progress: Any, **_: Any) -> RunOutcome:
    """A run of the demonstration without real time."""
    return run_lockstep(run, law=law, record_folder=record_folder, progress=progress)


@pytest.fixture(scope="module")
def outcome(tmp_path_factory: pytest.TempPathFactory) -> demo.DemoOutcome:
    """One demonstration for all tests that only look."""
    with pytest.MonkeyPatch.context() as patch:
        patch.setattr(demo, "run_live", in_lockstep)
        return demo.run_demo(tmp_path_factory.mktemp("demo"))


def test_every_law_ran_and_is_counted(outcome: demo.DemoOutcome) -> None:
    """Four laws with error and effort by name, nothing against comparing them, verdict pass."""
    data = outcome.as_json()
    assert list(data["laws"]) == list(demo.LAWS)
    assert all(metrics["rms_error_rad"] > 0.0 and metrics["effort_nm2_s"] > 0.0 for metrics in data["laws"].values())
    assert data["findings"] == []
    assert data["verdict"] == "pass"
    assert data["repeats"] == []


def test_records_and_report_are_where_the_result_says(outcome: demo.DemoOutcome) -> None:
    """One record for each law and one page, all in the folder that was asked for."""
    data = outcome.as_json()
    assert Path(data["report_path"]).read_text().startswith("<!doctype html>")
    assert len({metrics["record_path"] for metrics in data["laws"].values()}) == len(demo.LAWS)
    assert all(Path(metrics["record_path"]).parent == outcome.report_path.parent for metrics in data["laws"].values())


@source("common practice", "with a fair model, computed torque tracks better than feedforward alone, PID and PD with gravity")
def test_the_model_earns_its_place(outcome: demo.DemoOutcome) -> None:
    """On the demonstration's arm, whose model is fair but wrong, computed torque has the least error."""
    errors = {law: metrics["rms_error_rad"] for law, metrics in outcome.as_json()["laws"].items()}
    assert min(errors, key=lambda law: errors[law]) == "computed_torque"


def test_a_run_spoiled_by_the_computer_is_repeated_and_said(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    """A late computer costs a repeat, at most two; a fault of the law is kept as it is."""
    spoiled = {"feedforward": ["state_age"], "pid": ["tracking_error"], "pd_gravity": ["grant"] * 9}
    runs: list[str] = []

    def run(config: Any, *, law: str, record_folder: Path, progress: Any, **_: Any) -> RunOutcome:
        runs.append(law)
        result = run_lockstep(config, law=law, record_folder=record_folder, progress=progress)
        causes = spoiled.get(law, [])
        return replace(result, cause=causes.pop(0) if causes else "none")

    monkeypatch.setattr(demo, "run_live", run)
    outcome = demo.run_demo(tmp_path)
    assert runs == ["feedforward"] * 2 + ["pid"] + ["pd_gravity"] * 3 + ["computed_torque"]
    assert [text.split(":")[0] for text in outcome.repeats] == ["feedforward", "pd_gravity", "pd_gravity"]
    assert "the computer was too busy (state_age)" in outcome.repeats[0]
    assert outcome.verdict == "refuse"


def test_ctrl_c_ends_the_demonstration(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    """An interrupted run is not followed by the next law."""
    runs: list[str] = []

    def run(config: Any, *, law: str, record_folder: Path, progress: Any, **_: Any) -> RunOutcome:
        runs.append(law)
        result = run_lockstep(config, law=law, record_folder=record_folder, progress=progress, seconds=0.1)
        return replace(result, ended="interrupted")

    monkeypatch.setattr(demo, "run_live", run)
    with pytest.raises(KeyboardInterrupt):
        demo.run_demo(tmp_path)
    assert runs == ["feedforward"]
