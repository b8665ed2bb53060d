"""The recorder: going on after a death, a disk that refuses, folders that cannot take a record. In this process."""

import errno
import os
from pathlib import Path

import pytest

from rtctl.errors import ConfigError, Finding
from rtctl.record import recorder as recorder_module
from rtctl.record.reader import read_record
from rtctl.record.recorder import ENDED_CLEANLY, Recorder, check_record_folder, main, record
from rtctl.record.ring import Ring
from tests.synthetic_record import TERMS, InventedArm, append_rows, run_header

ARM = InventedArm()


@pytest.fixture
def ring(tmp_path: Path) -> Ring:
    """An empty ring of 64 rows."""
    return Ring.create(tmp_path / "ring", ARM, TERMS, 64)  # type: ignore[arg-type]  # stands in for an arm


def start(ring: Ring) -> Recorder:
    """A recorder of that ring."""
    return Recorder(ring, ring.path.with_name("run.record"), run_header(ring, ARM, TERMS))


def test_a_closed_ring_is_drained_and_removed(ring: Ring) -> None:
    """The record takes all rows and is ended; then the ring is not needed any more."""
    recorder = start(ring)
    append_rows(ring, 0, 50)
    ring.close()
    assert record(recorder)
    found = read_record(recorder.path)
    assert (found.row_count, found.complete, found.reason) == (50, True, ENDED_CLEANLY)
    assert not ring.path.exists()
    assert ring.recorder_status().state == "done"


def test_a_run_ends_only_when_the_last_row_is_in_the_record(ring: Ring) -> None:
    """With more rows left at the end than one block takes, the close mark waits for all of them."""
    recorder = start(ring)
    recorder._rows_per_block = 8
    append_rows(ring, 0, 50)
    ring.close()
    assert record(recorder)
    found = read_record(recorder.path)
    assert (list(found.columns["cycle"]), found.complete) == (list(range(50)), True)


def test_an_ended_controller_ends_the_record(ring: Ring) -> None:
    """Without the process that made the ring there are no more rows to wait for."""
    recorder = start(ring)
    append_rows(ring, 0, 5)
    ring.set_control("writer_start", 1)
    assert record(recorder)
    assert read_record(recorder.path).reason == "the controller was gone"


def test_a_second_recorder_goes_on_where_the_first_stopped(ring: Ring) -> None:
    """A torn block at the end is replaced from the ring: no row is lost and none is there twice."""
    first = start(ring)
    append_rows(ring, 0, 30)
    first.step()
    first.close()
    with first.path.open("ab") as file:
        file.write(b"\x94\x1e\x14half a block")
    append_rows(ring, 30, 30)
    second = start(ring)
    second.step()
    assert second.finish(ENDED_CLEANLY)
    found = read_record(first.path)
    assert (list(found.columns["cycle"]), found.lost_rows, found.complete) == (list(range(60)), 0, True)
    assert ring.recorder_status().starts == 2


def test_rows_overwritten_between_two_recorders_are_counted(ring: Ring) -> None:
    """With nobody recording for longer than the ring holds, the gap is counted in ring and record."""
    first = start(ring)
    append_rows(ring, 0, 30)
    first.step()
    first.close()
    append_rows(ring, 30, 100)
    second = start(ring)
    second.step()
    assert ring.recorder_status().lost_rows == 36
    assert second.finish(ENDED_CLEANLY)
    found = read_record(first.path)
    assert (found.row_count, found.lost_rows) == (94, 36)


def test_two_recorders_at_once_are_refused(ring: Ring) -> None:
    """A ring has one recorder; the second is told so."""
    recorder = start(ring)
    with pytest.raises(ConfigError) as caught:
        start(ring)
    assert str(caught.value) == f"{ring.path}: must be a ring without a recorder, got one that is being recorded."
    recorder.close()


def test_an_existing_file_is_never_overwritten(ring: Ring) -> None:
    """A record of another run keeps its name."""
    path = ring.path.with_name("run.record")
    path.write_bytes(b"last week")
    with pytest.raises(ConfigError) as caught:
        start(ring)
    assert (
        str(caught.value)
        == f"{path}: must be a file that does not exist yet, got an existing file. Records are never overwritten."
    )
    assert path.read_bytes() == b"last week"


def test_going_on_with_another_file_is_refused(ring: Ring) -> None:
    """The ring remembers which file it was recorded into."""
    first = start(ring)
    first.close()
    other = ring.path.with_name("other.record")
    other.write_bytes(first.path.read_bytes())
    with pytest.raises(ConfigError) as caught:
        Recorder(ring, other, {})
    assert str(caught.value) == f"{other}: must be the record that was begun with this ring, got another or a shorter file."


def test_the_header_of_another_run_is_refused(ring: Ring) -> None:
    """Ring and header carry the same run key."""
    path = ring.path.with_name("run.record")
    header = {**run_header(ring, ARM, TERMS), "run_key": ring.run_key + 1}
    with pytest.raises(ConfigError) as caught:
        Recorder(ring, path, header)
    assert str(caught.value) == f"{path}: must be the record of the run this ring belongs to, got the header of another run."
    assert not path.exists()


def test_a_full_disk_is_seen_and_a_freed_one_is_used(ring: Ring, monkeypatch: pytest.MonkeyPatch) -> None:
    """While the disk refuses, the ring says so and rows wait in it; half-written bytes are taken back."""
    recorder = start(ring)
    append_rows(ring, 0, 10)
    recorder.step()
    whole = recorder.path.stat().st_size
    real = os.write

    def full(descriptor: int, data: bytes) -> int:
        real(descriptor, data[:7])
        raise OSError(errno.ENOSPC, os.strerror(errno.ENOSPC))

    append_rows(ring, 10, 10)
    with monkeypatch.context() as patch:
        patch.setattr(os, "write", full)
        assert recorder.step() == 0
    status = ring.recorder_status()
    assert (status.state, status.errno, status.lost_rows) == ("blocked", errno.ENOSPC, 0)
    assert recorder.path.stat().st_size == whole
    assert recorder.step() == 10
    assert ring.recorder_status().state == "running"
    assert recorder.finish(ENDED_CLEANLY)
    assert read_record(recorder.path).row_count == 20


def test_a_disk_that_stays_full_keeps_the_ring(ring: Ring, monkeypatch: pytest.MonkeyPatch) -> None:
    """When the run is over and nothing can be written, the recorder gives up but the rows stay where they are."""
    recorder = start(ring)
    append_rows(ring, 0, 10)
    ring.close()

    def full(descriptor: int, data: bytes) -> int:
        raise OSError(errno.ENOSPC, os.strerror(errno.ENOSPC))

    with monkeypatch.context() as patch:
        patch.setattr(os, "write", full)
        patch.setattr(recorder_module, "PATIENCE_S", 0.0)
        assert not record(recorder)
    assert ring.path.exists()
    assert record(Recorder(ring, recorder.path, {}))
    assert read_record(recorder.path).complete


def test_wrong_commands_end_with_code_2(
    tmp_path: Path, capfd: pytest.CaptureFixture[str], monkeypatch: pytest.MonkeyPatch
) -> None:
    """A wrong path or a wrong number of arguments is a sentence, not a traceback."""
    monkeypatch.setattr(recorder_module.signal, "signal", lambda number, action: None)
    assert main([]) == 2
    assert capfd.readouterr().err == "usage: python -m rtctl.record.recorder RING RECORD HEADER\n"
    assert main([str(tmp_path / "ring"), "b", "c"]) == 2
    assert capfd.readouterr().err.startswith(f"{tmp_path / 'ring'}: must be a ring of a running or ended controller")


def test_a_header_that_is_none_is_refused(ring: Ring, capfd: pytest.CaptureFixture[str], monkeypatch: pytest.MonkeyPatch) -> None:
    """Without a header nothing could be read later, so nothing is recorded."""
    monkeypatch.setattr(recorder_module.signal, "signal", lambda number, action: None)
    header = ring.path.with_name("header")
    header.write_bytes(b"\x07")
    assert main([str(ring.path), str(ring.path.with_name("run.record")), str(header)]) == 2
    assert capfd.readouterr().err == f"{header}: must be the header of the run, got something else.\n"


def test_a_usable_folder_has_no_findings(tmp_path: Path) -> None:
    """Nothing is said, and nothing is left behind."""
    assert check_record_folder(tmp_path, 1e6) == []
    assert list(tmp_path.iterdir()) == []


def test_a_missing_folder_is_found_before_the_run(tmp_path: Path) -> None:
    """The finding gives the command that makes it."""
    place = tmp_path / "records"
    found = [Finding(str(place), "a folder for records", "a path that does not exist", next=f"Run: mkdir -p {place}")]
    assert check_record_folder(place, 1e9) == found
    place.write_text("")
    assert check_record_folder(place, 1e9)[0].got == "a file"


def test_a_folder_without_permission_is_found_before_the_run(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    """A read-only place is told from a full one."""

    def refuse(*arguments: object) -> int:
        raise OSError(errno.EROFS, os.strerror(errno.EROFS))

    with monkeypatch.context() as patch:
        patch.setattr(os, "open", refuse)
        found = check_record_folder(tmp_path, 1e9)
    assert [str(finding) for finding in found] == [
        f"{tmp_path}: must be a folder that can be written, got Read-only file system. Name another folder for records."
    ]


def test_a_nearly_full_disk_says_how_many_minutes_are_left(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    """3.6 GB per hour is 1 MB per second: 120 MB free last two minutes, and a run of 300 s needs 300 MB."""

    class Disk:
        f_bavail, f_frsize = 120_000, 1000

    monkeypatch.setattr(os, "statvfs", lambda path: Disk)
    assert check_record_folder(tmp_path, 3.6e9, duration_s=100.0) == []
    assert [str(finding) for finding in check_record_folder(tmp_path, 3.6e9, duration_s=300.0)] == [
        f"{tmp_path}: must be on a disk with at least 300 MB free (300 s of record), got 120 MB, enough for 2.0 minutes. "
        "Make room, or name another folder for records."
    ]
    assert "at least 600 MB free" in str(check_record_folder(tmp_path, 3.6e9)[0])
