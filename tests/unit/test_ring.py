"""The ring: numbering, overwriting, what a reader may see, and who may open it."""

import os
import stat
from pathlib import Path

import numpy as np
import pytest

from rtctl.errors import ConfigError, SetupError
from rtctl.record import ring as ring_module
from rtctl.record.ring import CONTROL, CONTROL_BYTES, CONTROL_WORD, Checkpoint, Ring, process_start, ring_bytes
from tests.synthetic_record import TERMS, InventedArm, append_rows

CAPACITY = 8


def make_ring(path: Path, capacity: int = CAPACITY, n: int = 2) -> Ring:
    """A small ring of this process."""
    return Ring.create(path, InventedArm(n=n), TERMS, capacity)  # type: ignore[arg-type]  # stands in for an arm


def test_rows_are_numbered_and_read_once(tmp_path: Path) -> None:
    """A reader that passes on where it stopped gets every row once, in order."""
    ring = make_ring(tmp_path / "ring")
    last, seen = 0, []
    for count in (3, 0, 1, 8, 5):
        append_rows(ring, len(seen), count)
        rows, lost = ring.read_new(last)
        assert lost == 0
        seen.extend(rows["cycle"])
        last += lost + len(rows)
    assert seen == list(range(17))


def test_overwritten_rows_are_counted(tmp_path: Path) -> None:
    """Rows that the reader was too slow for are counted, and what remains is the newest, whole."""
    ring = make_ring(tmp_path / "ring")
    append_rows(ring, 0, 3 * CAPACITY + 2)
    rows, lost = ring.read_new(4)
    assert list(rows["cycle"]) == list(range(2 * CAPACITY + 2, 3 * CAPACITY + 2))
    assert lost == 2 * CAPACITY + 2 - 4


def test_a_limit_leaves_the_newer_rows_for_later(tmp_path: Path) -> None:
    """With a limit the oldest rows come first and nothing counts as lost."""
    ring = make_ring(tmp_path / "ring")
    append_rows(ring, 0, 6)
    rows, lost = ring.read_new(1, limit=2)
    assert (list(rows["cycle"]), lost) == ([1, 2], 0)


@pytest.mark.parametrize("mark", [-1, 2 * CAPACITY + 1])
def test_a_row_that_is_overwritten_while_it_is_read_is_lost_not_wrong(
    tmp_path: Path, mark: int, monkeypatch: pytest.MonkeyPatch
) -> None:
    """A slot that the writer takes between counting and copying is dropped by its sequence word and counted."""
    ring = make_ring(tmp_path / "ring")
    append_rows(ring, 0, CAPACITY)
    fences = []

    def writer_comes_in() -> None:
        fences.append(1)
        if len(fences) == 2:  # after the copy, before the check
            ring._slots[0, 0] = mark

    monkeypatch.setattr(ring_module, "_read_fence", writer_comes_in)
    rows, lost = ring.read_new(0)
    assert lost == 1
    assert list(rows["cycle"]) == list(range(1, CAPACITY))


def test_another_process_opens_the_same_rows(tmp_path: Path) -> None:
    """A second mapping sees what the first wrote, and its shape comes from the control block."""
    ring = make_ring(tmp_path / "ring", n=5)
    append_rows(ring, 0, 4)
    other = Ring.open(tmp_path / "ring")
    rows, lost = other.read_new(0)
    assert (other.n, other.term_count, other.capacity, other.run_key) == (5, 3, CAPACITY, ring.run_key)
    assert (list(rows["cycle"]), lost) == (list(range(4)), 0)


def test_the_file_is_private_and_really_allocated(tmp_path: Path) -> None:
    """Nobody else may read it, and no write into it can find the disk full."""
    make_ring(tmp_path / "ring", capacity=1000)
    info = (tmp_path / "ring").stat()
    assert stat.S_IMODE(info.st_mode) == 0o600
    assert info.st_size == ring_bytes(2, 3, 1000)
    assert info.st_blocks * 512 >= info.st_size


def test_a_ring_never_takes_the_place_of_a_file(tmp_path: Path) -> None:
    """An existing file is refused and left alone."""
    place = tmp_path / "ring"
    place.write_text("mine")
    with pytest.raises(SetupError) as caught:
        make_ring(place)
    assert str(caught.value) == (
        f"{place}: must be a place where a new file of 0.0 MB can be made, got File exists. "
        "Name another folder for the ring, or let it hold fewer rows."
    )
    assert place.read_text() == "mine"


def test_no_room_is_said_and_leaves_nothing_behind(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    """When the folder cannot hold the ring, the half-made file is removed."""

    def full(descriptor: int, offset: int, size: int) -> None:
        raise OSError(28, os.strerror(28))

    monkeypatch.setattr(os, "posix_fallocate", full)
    with pytest.raises(SetupError) as caught:
        make_ring(tmp_path / "ring", capacity=10_000)
    assert str(caught.value) == (
        f"{tmp_path / 'ring'}: must be a place where a new file of {ring_bytes(2, 3, 10_000) / 1e6:.1f} MB can be made, "
        "got No space left on device. Name another folder for the ring, or let it hold fewer rows."
    )
    assert list(tmp_path.iterdir()) == []


def test_the_memory_file_system_is_used_only_with_room_to_spare(monkeypatch: pytest.MonkeyPatch, tmp_path: Path) -> None:
    """A ring larger than half of what is free there goes to the runtime folder."""
    monkeypatch.setenv("XDG_RUNTIME_DIR", str(tmp_path))
    info = os.statvfs("/dev/shm")
    free = info.f_bavail * info.f_frsize
    assert ring_module.default_ring_path(4096).parent == Path("/dev/shm")
    assert ring_module.default_ring_path(free).parent == tmp_path / "rtctl"


@pytest.mark.parametrize(
    ("content", "expected", "got", "then"),
    [
        (b"short", "a ring of rows", "a file of 5 bytes", "Check the path."),
        (bytes(2 * CONTROL_BYTES), "a ring of rows", "another kind of file", "Check the path."),
    ],
)
def test_what_is_no_ring_is_refused(tmp_path: Path, content: bytes, expected: str, got: str, then: str) -> None:
    """Other files are told from rings before anything is mapped as rows."""
    place = tmp_path / "ring"
    place.write_bytes(content)
    with pytest.raises(ConfigError) as caught:
        Ring.open(place)
    assert str(caught.value) == f"{place}: must be {expected}, got {got}. {then}"


def test_a_missing_ring_is_refused(tmp_path: Path) -> None:
    """A wrong path is one sentence."""
    with pytest.raises(ConfigError) as caught:
        Ring.open(tmp_path / "none")
    assert str(caught.value) == (
        f"{tmp_path / 'none'}: must be a ring of a running or ended controller, got No such file or directory. Check the path."
    )


def test_a_cut_ring_is_refused(tmp_path: Path) -> None:
    """Mapping a ring whose slots are missing would end the process; it is refused instead."""
    make_ring(tmp_path / "ring")
    size = ring_bytes(2, 3, CAPACITY)
    os.truncate(tmp_path / "ring", size - 1)
    with pytest.raises(ConfigError) as caught:
        Ring.open(tmp_path / "ring")
    assert (
        str(caught.value) == f"{tmp_path / 'ring'}: must be a whole ring, got a file cut to {size - 1} bytes. Its rows are lost."
    )


@pytest.mark.parametrize("word", ["version", "layout_key"])
def test_a_ring_of_another_version_is_refused(tmp_path: Path, word: str) -> None:
    """Rows of another layout are never read as if they were ours."""
    ring = make_ring(tmp_path / "ring")
    ring.set_control(word, ring.control(word) + 1)
    with pytest.raises(ConfigError) as caught:
        Ring.open(tmp_path / "ring")
    assert str(caught.value) == (
        f"{tmp_path / 'ring'}: must be a ring made by this version of rtctl, got ring version {ring.control('version')} "
        "with another row layout. Run the recorder of the version that made it."
    )


def test_control_words_do_not_overlap() -> None:
    """Each word has one meaning; writer, recorder and checkpoint are on cache lines of their own."""
    taken = np.zeros(CONTROL_BYTES, int)
    assert CONTROL.fields is not None
    for layout, offset, *_ in CONTROL.fields.values():
        taken[offset : offset + layout.itemsize] += 1
    assert taken.max() == 1
    lines = {name: 8 * CONTROL_WORD[name] // 64 for name in ("row_count", "recorder_beat", "checkpoint_count", "writer_pid")}
    assert len(set(lines.values())) == len(lines)


def test_checkpoints_alternate_and_the_newest_counts(tmp_path: Path) -> None:
    """A checkpoint that was not finished leaves the one before in force."""
    ring = make_ring(tmp_path / "ring")
    assert ring.checkpoint() is None
    first, second = Checkpoint(3, 100, 0, bytes(range(32))), Checkpoint(9, 250, 2, bytes(range(1, 33)))
    ring.set_checkpoint(first)
    assert ring.checkpoint() == first
    ring.set_checkpoint(second)
    assert ring.checkpoint() == second
    ring.set_control("checkpoint_count", 1)
    assert ring.checkpoint() == first


def test_the_writer_is_known_by_pid_and_start_time(tmp_path: Path) -> None:
    """A process that reuses the pid of a dead controller is not the controller."""
    ring = make_ring(tmp_path / "ring")
    assert ring.writer_alive()
    ring.set_control("writer_start", ring.control("writer_start") - 1)
    assert not ring.writer_alive()
    assert process_start(2**22 + 1) == 0


def test_without_a_recorder_the_status_says_so(tmp_path: Path) -> None:
    """A controller can tell that nobody records."""
    status = make_ring(tmp_path / "ring").recorder_status()
    assert (status.alive, status.state, status.beat, status.lost_rows) == (False, "none", 0, 0)
