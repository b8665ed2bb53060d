"""The compiled live loop on sockets inside this process: receiving, pacing, requests, leaving. No time is measured."""

import time
from collections.abc import Iterator

import numpy as np
import pytest
from numba.core.runtime import _nrt_python, rtsys

from rtctl.blocks import MAX_MESSAGE_BYTES, REQUEST_RELEASE
from rtctl.loop.blocks import CYCLES_DONE, MAX_DRAIN, RUN_ENDED, RUN_LIVE
from rtctl.loop.flags import ESTOP_BYTE, STOP_BYTE
from rtctl.loop.live import paced_start, run_loop
from tests.loop_stand import Table

REQUEST = 8  # places in the torque message, drivers/WIRE.md
PATIENCE_S = 20.0


@pytest.fixture
def table() -> Iterator[Table]:
    """The loop at 1 kHz by timer."""
    table = Table()
    yield table
    table.close()


def test_each_cycle_sends_one_torque_and_publishes_one_row(table: Table) -> None:
    """Ten cycles: ten messages with counting sequence, ten rows, and the newest in the slot of the side thread."""
    for _ in range(10):
        table.states.send(table.state())
    assert table.run(10) == CYCLES_DONE
    sent = table.sent()
    assert [message[4] for message in sent] == list(range(1, 11))
    assert int(table.control[0]["row_count"]) == 10
    assert int(table.rows[1]["cycle"]) == 9
    assert int(table.control[0]["run"]) == RUN_ENDED


def test_the_newest_of_several_states_is_used(table: Table) -> None:
    """Three wait, one cycle: the last one counts and nothing is left over."""
    for _ in range(3):
        table.states.send(table.state())
    table.run(1)
    assert int(table.row["state_sequence"]) == table.stand.driver.sequence
    assert int(table.loop["states_total"]) == 3
    table.run(1)
    assert int(table.row["state_new"]) == 0


def test_a_flood_is_drained_with_a_bound_and_not_used(table: Table) -> None:
    """More than 64 waiting messages: exactly 64 are taken in a cycle, and none of them is used."""
    for _ in range(MAX_DRAIN + 20):
        table.states.send(table.state())
    table.run(1)
    assert (int(table.row["flooded"]), int(table.row["state_new"])) == (1, 0)
    assert int(table.loop["states_total"]) == MAX_DRAIN
    table.run(1)
    assert (int(table.row["flooded"]), int(table.row["state_new"])) == (0, 1)


def test_multipart_long_and_broken_messages_are_refused_and_counted(table: Table) -> None:
    """All parts of a multipart message, a message longer than 1 KiB, an empty one and garbage; the valid one is still used."""
    good = table.state()
    table.states.send_multipart([good, good])
    table.states.send(good + bytes(MAX_MESSAGE_BYTES))
    table.states.send(b"")
    table.states.send(b"\xc1" * 50)
    table.states.send(table.state())
    table.run(1)
    assert int(table.row["refused"]) == 5
    assert int(table.loop["refused_parts"]) == 2
    assert int(table.loop["refused_long"]) == 1
    assert int(table.row["state_new"]) == 1
    assert int(table.row["state_sequence"]) == table.stand.driver.sequence


def test_a_late_cycle_skips_whole_periods_and_never_bursts(table: Table) -> None:
    """Deadlines are a period apart or more, by whole periods, and what was skipped is counted in the rows."""
    deadlines, skipped = [], 0
    for k in range(30):
        if k == 10:
            time.sleep(0.02)  # this thread is the loop's: it is late by 20 periods
            table.loop["deadline_ns"] = int(table.loop["deadline_ns"])
        table.run(1)
        deadlines.append(int(table.row["deadline_ns"]))
        skipped += int(table.row["skipped"])
    steps = np.diff(deadlines)
    assert np.all(steps > 0)
    assert int(table.loop["skipped_total"]) == skipped


def test_in_state_pacing_each_state_starts_a_cycle_and_silence_starts_one_without() -> None:
    """With a state waiting the cycle has it; without one the cycle comes after one and a half periods and has none."""
    table = Table("state", period_ns=2_000_000)
    try:
        table.states.send(table.state())
        table.run(1)
        assert int(table.row["state_new"]) == 1
        began = time.monotonic_ns()
        table.run(1)
        assert int(table.row["state_new"]) == 0
        assert time.monotonic_ns() - began >= 1_900_000
    finally:
        table.close()


def test_states_that_come_too_often_do_not_drive_the_loop() -> None:
    """A start counts no earlier than a period less a sixteenth after the one before; a late one counts when it was."""
    assert paced_start(0, 100, 1600) == 1500
    assert paced_start(0, 1700, 1600) == 1700


def test_an_estop_by_the_flag_file_is_taken_in_the_next_cycle(table: Table) -> None:
    """The word is exchanged with 0, the row shows the request, the mode latches."""
    table.flags.view(np.uint8)[ESTOP_BYTE] = 1
    table.states.send(table.state())
    table.run(1)
    assert table.flags[ESTOP_BYTE // 8] == 0
    assert int(table.row["requests"]) & 8
    table.run(1)
    assert int(table.row["mode"]) == 5


def test_leaving_releases_and_returns_without_a_request_left_standing(table: Table) -> None:
    """Told to leave, the loop sends release as its last words and ends by itself; a start asked at the same time is dropped."""
    thread = table.in_thread()
    end_s = time.monotonic() + PATIENCE_S
    while int(table.control[0]["run"]) != RUN_LIVE and time.monotonic() < end_s:
        time.sleep(0.001)
    table.control[0]["start"] = 1
    table.control[0]["leave"] = 1
    thread.join(PATIENCE_S)
    assert not thread.is_alive()
    sent = table.sent()
    assert [message[REQUEST] for message in sent[-3:]] == [REQUEST_RELEASE] * 3
    assert int(table.control[0]["run"]) == RUN_ENDED


def test_a_stop_word_of_any_byte_counts(table: Table) -> None:
    """Requesters write one byte; whatever byte of the word is set, the stop is taken."""
    for byte in range(8):
        table.flags.view(np.uint8)[STOP_BYTE + byte] = 1
        table.run(1)
        assert int(table.row["requests"]) & 2
        assert table.flags[STOP_BYTE // 8] == 0


def test_pointers_are_exchanged_between_cycles_and_only_by_their_index(table: Table) -> None:
    """A new slot is taken as a whole in the next cycle, and the loop says which one it uses."""
    table.pointers[1] = table.stand.pointers
    table.pointers[1]["law_index"] = 3
    table.run(1)
    assert int(table.row["law_index"]) == 0
    table.control[0]["pointer_wanted"] = 1
    table.run(1)
    assert (int(table.row["law_index"]), int(table.control[0]["pointer_used"])) == (3, 1)


def test_no_allocation_and_no_compile_per_cycle(table: Table) -> None:
    """100 and 1,000 cycles make as many numba allocations; one compiled variant serves both. libzmq's own are not counted here."""
    table.stand.setup["period_ns"] = 20_000
    table.run(1)
    _nrt_python.memsys_enable_stats()
    counts = []
    for cycles in (100, 1000):
        before = rtsys.get_allocation_stats()
        table.run(cycles)
        after = rtsys.get_allocation_stats()
        counts.append(after.alloc - before.alloc)
        table.sent()
    assert counts[0] == counts[1]
    assert len(run_loop.signatures) == 1
