"""What the computer permits: every refusal is a sentence with the command an administrator would use; nothing fails."""

import os
import signal
import threading

import pytest

from rtctl.errors import ConfigError, Finding
from rtctl.loop import machine


def test_the_loop_and_its_sockets_get_different_cores(monkeypatch: pytest.MonkeyPatch) -> None:
    """The last allowed core for the loop, another for the I/O thread."""
    monkeypatch.setattr(os, "sched_getaffinity", lambda pid: {0, 2, 5})
    assert machine.choose_cores(None) == (5, 2, [])
    assert machine.choose_cores(2) == (2, 5, [])


def test_one_core_is_said(monkeypatch: pytest.MonkeyPatch) -> None:
    """The loop runs without a core of its own, and the list says so."""
    monkeypatch.setattr(os, "sched_getaffinity", lambda pid: {3})
    core, io_core, findings = machine.choose_cores(None)
    assert (core, io_core) == (None, None)
    assert [finding.severity for finding in findings] == ["warn"]


def test_a_core_this_process_may_not_use_is_refused(monkeypatch: pytest.MonkeyPatch) -> None:
    """The allowed ones are named."""
    monkeypatch.setattr(os, "sched_getaffinity", lambda pid: {0, 1})
    with pytest.raises(ConfigError) as caught:
        machine.choose_cores(7)
    assert str(caught.value) == "loop core: must be one of 0, 1, got 7. Name a core this process may use."


def test_a_missing_priority_names_the_command() -> None:
    """The line for the limits file, for this user."""
    finding = machine.priority_finding()
    assert "rtprio 90" in finding.next
    assert machine.LIMITS_FILE in finding.next


def test_the_hot_thread_alone_blocks_signals_and_takes_its_core() -> None:
    """What the thread sets for itself does not reach the thread that made it."""
    before = (os.sched_getaffinity(0), signal.pthread_sigmask(signal.SIG_BLOCK, []))
    core = min(before[0])
    seen: list[object] = []

    def hot() -> None:
        seen.append(machine.prepare_hot_thread(core, None))
        seen.append(os.sched_getaffinity(0))
        seen.append(signal.SIGINT in signal.pthread_sigmask(signal.SIG_BLOCK, []))

    thread = threading.Thread(target=hot)
    thread.start()
    thread.join()
    assert seen == [[], {core}, True]
    assert (os.sched_getaffinity(0), signal.pthread_sigmask(signal.SIG_BLOCK, [])) == before


def test_what_cannot_be_held_is_a_warning_with_its_command(monkeypatch: pytest.MonkeyPatch, tmp_path: object) -> None:
    """No latency file, and no permission to lock memory: two warnings, no exception, and closing is harmless."""
    monkeypatch.setattr(machine, "LATENCY_FILE", machine.Path(f"{tmp_path}/none"))
    monkeypatch.setattr(machine.Machine, "_why_not_lock", lambda self: ("not permitted (limit on locked memory)", "run this"))
    held = machine.Machine()
    held.hold_latency()
    held.lock_memory()
    assert [(finding.severity, finding.got) for finding in held.findings] == [
        ("warn", "no such file on this computer"),
        ("warn", "not permitted (limit on locked memory)"),
    ]
    assert all(isinstance(finding, Finding) for finding in held.findings)
    held.close()
