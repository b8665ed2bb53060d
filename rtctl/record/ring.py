"""Rows shared between the loop and the recorder process: a file of fixed size, mapped by both, overwriting its oldest rows.

The file, in 8-byte little-endian words:

    0        control block, 4096 bytes, see `CONTROL`
    4096     slot 0, slot 1, ... slot capacity-1

A slot is one sequence word followed by one compact row (`rtctl.record.rows`). Row number r (from 0) goes to slot r % capacity; its
sequence word is r + 1 when the row is whole, -1 while it is being written, 0 when the slot was never used. The writer sets -1,
copies the row, sets r + 1 and then `row_count` to r + 1. A slot never holds an earlier number again, so a reader that has
copied row r, and then still finds r + 1 in the slot, has a whole row. The writer never waits for a reader.

The file is really allocated: writing into a mapped hole of a full memory file system would end the process with SIGBUS.
It is removed by the recorder, and only after the record that took all its rows was closed.
"""

import mmap
import os
import secrets
import threading
from collections.abc import Mapping, Sequence
from dataclasses import dataclass
from pathlib import Path
from typing import TYPE_CHECKING

import numpy as np

from rtctl.blocks import ROW
from rtctl.errors import ConfigError, Finding, SetupError
from rtctl.kernels.layout import new_block
from rtctl.record.rows import WORD_BYTES, compact_layout, layout_key, segments

if TYPE_CHECKING:
    from rtctl.arm import Arm

RING_MAGIC = int.from_bytes(b"rtctring", "little")
RING_VERSION = 1
CONTROL_BYTES = 4096
SLOT_BEING_WRITTEN = -1
MAX_SEGMENTS = 128
DEFAULT_CAPACITY = 16384  # rows: 16 s at 1 kHz, long enough to start another recorder

RECORDER_NONE = 0  # no recorder has opened this ring
RECORDER_RUNNING = 1
RECORDER_DONE = 2  # everything is in the record and the record is closed
RECORDER_BLOCKED = 3  # the record cannot be written, `recorder_errno` says why; it keeps trying
RECORDER_STATE_NAMES = ("none", "running", "done", "blocked")

_FIELDS = (  # name, byte offset, words. Writer, recorder and checkpoint stand on cache lines of their own.
    ("magic", 0, 1),  # RING_MAGIC
    ("version", 8, 1),  # RING_VERSION
    ("capacity", 16, 1),  # slots
    ("slot_words", 24, 1),  # 1 + words of a compact row
    ("joint_count", 32, 1),
    ("term_count", 40, 1),
    ("layout_key", 48, 1),  # of the compact row
    ("run_key", 56, 1),  # random number of this run, below 2^48; the header of the record carries it too
    ("writer_pid", 64, 1),
    ("writer_start", 72, 1),  # start time of that process, clock ticks since boot: a reused pid is not the same process
    ("row_count", 128, 1),  # rows published so far
    ("closed", 136, 1),  # 1: no more rows will come
    ("recorder_pid", 256, 1),
    ("recorder_start", 264, 1),
    ("recorder_beat", 272, 1),  # grows as long as the recorder lives
    ("recorder_state", 280, 1),  # RECORDER_
    ("recorder_errno", 288, 1),
    ("recorder_starts", 296, 1),  # recorders that have opened this ring
    ("lost_rows", 304, 1),  # rows overwritten before they were recorded
    ("record_device", 384, 1),  # the record file that the checkpoint is about
    ("record_inode", 392, 1),
    ("checkpoint_count", 400, 1),  # checkpoints written; the newest is in place checkpoint_count % 2
    ("checkpoint_0", 448, 7),  # next row, bytes of whole blocks in the record, lost rows, chain hash (4 words)
    ("checkpoint_1", 512, 7),
)
CONTROL_WORD = {name: offset // WORD_BYTES for name, offset, _ in _FIELDS}
CONTROL = np.dtype(
    {
        "names": [name for name, _, _ in _FIELDS],
        "formats": [("<i8", (words,)) if words > 1 else "<i8" for _, _, words in _FIELDS],
        "offsets": [offset for _, offset, _ in _FIELDS],
        "itemsize": CONTROL_BYTES,
    }
)

RING = np.dtype(  # what the compiled writer needs
    [
        ("control", "i8"),  # address of the control block
        ("slots", "i8"),  # address of slot 0
        ("capacity", "i8"),
        ("slot_words", "i8"),
        ("full_words", "i8"),  # of a full-width row
        ("segment_count", "i8"),
        ("source", "i8", MAX_SEGMENTS),
        ("target", "i8", MAX_SEGMENTS),
        ("words", "i8", MAX_SEGMENTS),
    ],
    align=True,
)


@dataclass(frozen=True)
class Checkpoint:
    """How far the record is whole: lets a restarted recorder go on without reading the record again."""

    next_row: int
    record_bytes: int
    lost_rows: int
    chain: bytes  # SHA-256 of the last whole block


@dataclass(frozen=True)
class RecorderStatus:
    """What the controller can see of its recorder."""

    alive: bool
    pid: int
    beat: int
    state: str  # RECORDER_STATE_NAMES
    errno: int
    starts: int
    written_rows: int  # rows before this number are in the record or counted as lost
    lost_rows: int


def process_start(pid: int) -> int:
    """Start time of a process in clock ticks since boot, 0 when it is gone or only its exit status is left."""
    try:
        text = Path(f"/proc/{pid}/stat").read_text(encoding="utf-8", errors="replace")
    except OSError:
        return 0
    fields = text.rpartition(")")[2].split()  # the name in parentheses may hold spaces
    return 0 if fields[0] in ("Z", "X") else int(fields[19])


_FENCE = threading.Lock()


def _read_fence() -> None:
    """Keep reads of shared memory in order on processors that reorder them: a lock taken and released twice is a full fence."""
    for _ in range(2):
        _FENCE.acquire()
        _FENCE.release()


def ring_bytes(n: int, term_count: int, capacity_rows: int) -> int:
    """Size of the file for that many rows."""
    return CONTROL_BYTES + capacity_rows * (WORD_BYTES + compact_layout(n, term_count).itemsize)


def default_ring_path(size_bytes: int) -> Path:
    """A fresh path in the memory file system if it has room for twice the size, else in the runtime folder of this user."""
    memory = Path("/dev/shm")
    name = f"rtctl-ring-{os.getpid()}-{secrets.token_hex(4)}"
    try:
        info = os.statvfs(memory)
        if os.access(memory, os.W_OK) and info.f_bavail * info.f_frsize >= 2 * size_bytes:
            return memory / name
    except OSError:
        pass  # no memory file system here: the runtime folder does as well
    from rtctl.config.runtime import runtime_folder

    return runtime_folder() / name


class Ring:
    """A mapped ring. The writer makes it with `create` and hands `block` to `ring_append`; readers `open` it."""

    def __init__(self, path: Path, mapped: mmap.mmap) -> None:
        self.path = path
        self._mapped = mapped
        self._words = np.frombuffer(mapped, "<i8")
        control = {name: int(self._words[word]) for name, word in CONTROL_WORD.items()}
        self.n = control["joint_count"]
        self.term_count = control["term_count"]
        self.capacity = control["capacity"]
        self.run_key = control["run_key"]
        self.row_layout = compact_layout(self.n, self.term_count)
        slot_words = control["slot_words"]
        first = CONTROL_BYTES // WORD_BYTES
        self._slots = self._words[first : first + self.capacity * slot_words].reshape(self.capacity, slot_words)
        self._touched = int(self._words[:: mmap.PAGESIZE // WORD_BYTES].sum())  # brings every page in before the first cycle
        self.block = self._make_block()

    def _make_block(self) -> np.void:
        block = new_block(RING)
        pieces = segments(self.n, self.term_count)
        assert len(pieces) <= MAX_SEGMENTS
        block["control"] = self._words.ctypes.data
        block["slots"] = self._slots.ctypes.data
        block["capacity"], block["slot_words"] = self._slots.shape
        block["full_words"] = ROW.itemsize // WORD_BYTES
        block["segment_count"] = len(pieces)
        for k, piece in enumerate(pieces):
            block["source"][k], block["target"][k], block["words"][k] = piece.source, piece.target, piece.words
        return block

    # ---- making and opening ---------------------------------------------------------------------------------------------------

    @classmethod
    def create(
        cls,
        path: Path | str | None,
        arm: "Arm",
        term_names: Mapping[str, Sequence[str]],
        capacity_rows: int = DEFAULT_CAPACITY,
    ) -> "Ring":
        """Make the ring of this process, owned and readable by this user only.

        path            where; None = memory file system, or the runtime folder when that is too small
        arm             gives the number of joints
        term_names      law name to its ordered term names, for every law of the run
        capacity_rows   rows it holds

        Raises SetupError when the place has no room or does not allow it.
        """
        term_count = max((len(names) for names in term_names.values()), default=0)
        size = ring_bytes(arm.n, term_count, capacity_rows)
        place = Path(path) if path is not None else default_ring_path(size)
        mapped = _allocate(place, size)
        words = np.frombuffer(mapped, "<i8")
        words[:] = 0  # touches every page for writing
        values = {
            "version": RING_VERSION,
            "capacity": capacity_rows,
            "slot_words": 1 + compact_layout(arm.n, term_count).itemsize // WORD_BYTES,
            "joint_count": arm.n,
            "term_count": term_count,
            "layout_key": layout_key(arm.n, term_count),
            "run_key": secrets.randbits(48),
            "writer_pid": os.getpid(),
            "writer_start": process_start(os.getpid()),
            "magic": RING_MAGIC,
        }
        for name, value in values.items():
            words[CONTROL_WORD[name]] = value
        return cls(place, mapped)

    @classmethod
    def open(cls, path: Path | str) -> "Ring":
        """Map a ring that another process made. Raises ConfigError when the file is not one or was made by another version."""
        place = Path(path)
        try:
            descriptor = os.open(place, os.O_RDWR | os.O_CLOEXEC | os.O_NOFOLLOW)
        except OSError as error:
            raise _refusal(place, "a ring of a running or ended controller", f"{error.strerror}", "Check the path.") from None
        try:
            size = os.fstat(descriptor).st_size
            if size < CONTROL_BYTES:
                raise _refusal(place, "a ring of rows", f"a file of {size} bytes", "Check the path.")
            mapped = mmap.mmap(descriptor, size)
        finally:
            os.close(descriptor)
        words = np.frombuffer(mapped, "<i8", CONTROL_BYTES // WORD_BYTES)
        control = {name: int(words[word]) for name, word in CONTROL_WORD.items()}
        if control["magic"] != RING_MAGIC:
            raise _refusal(place, "a ring of rows", "another kind of file", "Check the path.")
        n, term_count = control["joint_count"], control["term_count"]
        if control["version"] != RING_VERSION or control["layout_key"] != layout_key(n, term_count):
            raise _refusal(
                place,
                "a ring made by this version of rtctl",
                f"ring version {control['version']} with another row layout",
                "Run the recorder of the version that made it.",
            )
        if size < ring_bytes(n, term_count, control["capacity"]):
            raise _refusal(place, "a whole ring", f"a file cut to {size} bytes", "Its rows are lost.")
        return cls(place, mapped)

    # ---- writer ---------------------------------------------------------------------------------------------------------------

    def close(self) -> None:
        """Writer: no more rows will come. The recorder drains the ring, closes the record and removes the ring."""
        self._words[CONTROL_WORD["closed"]] = 1

    def recorder_status(self) -> RecorderStatus:
        """Writer: is somebody recording? `beat` must have grown since the last look, a fraction of a second ago."""
        pid = self.control("recorder_pid")
        checkpoint = self.checkpoint()
        return RecorderStatus(
            alive=pid != 0 and process_start(pid) == self.control("recorder_start") != 0,
            pid=pid,
            beat=self.control("recorder_beat"),
            state=RECORDER_STATE_NAMES[self.control("recorder_state")],
            errno=self.control("recorder_errno"),
            starts=self.control("recorder_starts"),
            written_rows=checkpoint.next_row if checkpoint else 0,
            lost_rows=self.control("lost_rows"),
        )

    # ---- reader ---------------------------------------------------------------------------------------------------------------

    def control(self, name: str) -> int:
        """One word of the control block."""
        return int(self._words[CONTROL_WORD[name]])

    def set_control(self, name: str, value: int) -> None:
        """Set one word of the control block. Each word has one writing side, see `CONTROL`."""
        self._words[CONTROL_WORD[name]] = value

    @property
    def row_count(self) -> int:
        """Rows published so far."""
        return self.control("row_count")

    def writer_alive(self) -> bool:
        """Is the process that made the ring still there?"""
        start = process_start(self.control("writer_pid"))
        return start != 0 and start == self.control("writer_start")

    def read_new(self, last: int, limit: int | None = None) -> tuple[np.ndarray, int]:
        """Rows published since row number `last`, oldest first, and how many before them were overwritten unread.

        last    number of the next row wanted: 0 at first, then last + lost + len(rows)
        limit   at most that many rows

        Returns (rows, lost): a structured array of the ring's `row_layout` (a copy), and a count.
        """
        count = self.row_count
        _read_fence()
        first = max(last, count - self.capacity)
        taken = max(0, count - first) if limit is None else min(limit, max(0, count - first))
        index = np.arange(first, first + taken) % self.capacity
        words = self._slots[index, 1:]  # a copy
        _read_fence()
        whole = self._slots[index, 0] == np.arange(first, first + taken) + 1
        overwritten = 0 if whole.all() else int(np.flatnonzero(~whole)[-1]) + 1  # the oldest go first
        rows = np.ascontiguousarray(words[overwritten:]).view(self.row_layout).reshape(-1)
        return rows, first - last + overwritten

    def checkpoint(self) -> Checkpoint | None:
        """How far the record is whole, None before the first block."""
        count = self.control("checkpoint_count")
        if count == 0:
            return None
        _read_fence()
        start = CONTROL_WORD[f"checkpoint_{count % 2}"]
        words = self._words[start : start + 7].copy()
        return Checkpoint(int(words[0]), int(words[1]), int(words[2]), words[3:].tobytes())

    def set_checkpoint(self, checkpoint: Checkpoint) -> None:
        """Recorder: the record is whole up to here. A recorder killed in between leaves the checkpoint before in force."""
        count = self.control("checkpoint_count") + 1
        start = CONTROL_WORD[f"checkpoint_{count % 2}"]
        self._words[start : start + 3] = (checkpoint.next_row, checkpoint.record_bytes, checkpoint.lost_rows)
        self._words[start + 3 : start + 7] = np.frombuffer(checkpoint.chain, "<i8")
        _read_fence()
        self._words[CONTROL_WORD["checkpoint_count"]] = count

    def remove(self) -> None:
        """Remove the file. Only for whoever has put every row elsewhere, or made the ring for nothing."""
        self.path.unlink(missing_ok=True)


def _refusal(path: Path, expected: str, got: str, next_step: str) -> ConfigError:
    return ConfigError.from_findings([Finding(str(path), expected, got, next=next_step)])


def _allocate(path: Path, size: int) -> mmap.mmap:
    """Make the file, give it every block it will ever need, map it."""
    try:
        descriptor = os.open(path, os.O_RDWR | os.O_CREAT | os.O_EXCL | os.O_CLOEXEC | os.O_NOFOLLOW, 0o600)
    except OSError as error:
        raise _no_room(path, size, error) from None
    try:
        os.fchmod(descriptor, 0o600)
        os.posix_fallocate(descriptor, 0, size)
        return mmap.mmap(descriptor, size)
    except OSError as error:
        path.unlink(missing_ok=True)
        raise _no_room(path, size, error) from None
    finally:
        os.close(descriptor)


def _no_room(path: Path, size: int, error: OSError) -> SetupError:
    return SetupError.from_findings(
        [
            Finding(
                str(path),
                f"a place where a new file of {size / 1e6:.1f} MB can be made",
                str(error.strerror),
                next="Name another folder for the ring, or let it hold fewer rows.",
            )
        ]
    )
