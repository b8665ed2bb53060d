"""`rtctl ask`: what may be asked, what the answer says, and that a stop waits for nothing heavy."""

import json
import subprocess
import sys
from typing import Any

import pytest

from rtctl.causes import cause_named
from rtctl.cli import run_command
from rtctl.loop import control
from tests.structure.sources_of import TOP

STATUS = {
    "name": "demo",
    "mode": "live",
    "law": "pid",
    "t_s": 1.25,
    "cause": "none",
    "age_ns": 150_000,
    "loop_delay_ns": 1_200_000,
    "driver": {"simulated": False, "brake_closed": False},
    "timing": {"cycle_count": 1250, "late_p50_us": 20.0, "late_p99_us": 51.0, "late_max_us": 130.0, "skipped_count": 0},
    "margins": {"speed": 0.8, "tracking_error": 0.42},
}


@pytest.fixture
def asked(monkeypatch: pytest.MonkeyPatch) -> list[tuple[Any, ...]]:
    """Every request that would have gone to a controller."""
    seen: list[tuple[Any, ...]] = []

    def answer(name: str | None, verb: str, **fields: Any) -> dict[str, Any]:
        seen.append((name, verb, fields))
        entry = cause_named("tracking_error")
        why = {"code": entry.code, "sentence": entry.sentence, "likely": list(entry.likely), "next": entry.next}
        return {"ok": verb != "start", "text": "Latched.", "status": STATUS, "why_no_start": [], "why": why, "law": "pid"}

    monkeypatch.setattr(control, "ask", answer)
    return seen


@pytest.mark.parametrize("verb", ["stop", "estop", "reset", "status", "why"])
def test_requests_go_through_by_name(verb: str, asked: list[tuple[Any, ...]]) -> None:
    """Each request reaches the controller under its own name and passes."""
    assert run_command(["ask", verb]) == 0
    assert asked == [(None, verb, {})]


def test_stop_with_release_is_another_request(asked: list[tuple[Any, ...]]) -> None:
    """Category 1 is asked for in words, and only with stop."""
    assert run_command(["ask", "stop", "--release", "--controller", "demo"]) == 0
    assert asked == [("demo", "stop_release", {})]
    assert run_command(["ask", "start", "--release"]) == 2


def test_a_law_needs_its_name_and_nothing_else_takes_one(asked: list[tuple[Any, ...]]) -> None:
    """`ask law` without a name, or a name with another request, is bad input and reaches nobody."""
    assert run_command(["ask", "law", "pid"]) == 0
    assert asked == [(None, "law", {"law": "pid"})]
    assert run_command(["ask", "law"]) == 2
    assert run_command(["ask", "stop", "pid"]) == 2
    assert len(asked) == 1


def test_a_refused_start_is_a_negative_verdict(asked: list[tuple[Any, ...]], capsys: pytest.CaptureFixture[str]) -> None:
    """The reason is said, and the exit code is 1."""
    assert run_command(["ask", "start"]) == 1
    assert capsys.readouterr().out == "start: not done. Latched.\n"
    assert run_command(["ask", "start", "--json"]) == 1
    assert json.loads(capsys.readouterr().out)["verdict"] == "refuse"


def test_status_says_first_that_an_arm_is_real(asked: list[tuple[Any, ...]], capsys: pytest.CaptureFixture[str]) -> None:
    """Identity, mode, cause, link, timing and the least margin, one line each."""
    run_command(["ask", "status"])
    assert capsys.readouterr().out == (
        "controller  demo, REAL ARM, brake open\n"
        "mode        live, law pid, 1.25 s into the motion\n"
        "cause       none\n"
        "link        state 0.15 ms old, torque to state 1.20 ms\n"
        "timing      1250 cycles, late p50 20 us, p99 51 us, max 130 us, 0 periods skipped\n"
        "margin      least 0.42 (tracking_error); 1 is far from the limit, 0 at it\n"
    )


def test_why_gives_reasons_in_order_and_the_next_step(asked: list[tuple[Any, ...]], capsys: pytest.CaptureFixture[str]) -> None:
    """The closed table of causes speaks, nothing else."""
    run_command(["ask", "why"])
    entry = cause_named("tracking_error")
    lines = capsys.readouterr().out.splitlines()
    assert lines[0] == entry.sentence
    assert lines[2 : 2 + len(entry.likely)] == [f"  - {reason}" for reason in entry.likely]
    assert lines[-1] == f"Next: {entry.next}"


@pytest.mark.slow
@pytest.mark.parametrize("verb", ["stop", "estop"])
def test_a_stop_imports_nothing_heavy(verb: str) -> None:
    """The way to stop an arm loads no arrays, no compiler, no sockets and no tables."""
    script = (
        f"import sys; from rtctl.cli import run_command; run_command(['ask', '{verb}', '--controller', 'nobody']); "
        "print(*[m for m in ('numpy', 'numba', 'zmq', 'pydantic', 'rich', 'msgpack') if m in sys.modules])"
    )
    done = subprocess.run([sys.executable, "-c", script], cwd=TOP, capture_output=True, text=True, check=True)
    assert done.stdout == "\n"
    assert 'controller "nobody": must be' in done.stderr
