"""The process between ring and record: `python -m rtctl.record.recorder RING RECORD HEADER`.

It lives beside the controller in a session of its own and outlives it: it ends when the ring was closed, or when the controller is
gone, and every row is in the record. It ignores Ctrl-C, hang-ups and polite requests to end, because rows would be lost by them.
A recorder that was killed is replaced by starting the same command again: it goes on after the last whole block.

It writes to the record only. Of the ring it changes its own words in the control block, and removes the file at the very end.
"""

import errno
import fcntl
import os
import signal
import subprocess
import sys
import time
from collections.abc import Mapping
from datetime import UTC, datetime
from pathlib import Path
from typing import Any

import msgpack

from rtctl.errors import ConfigError, Finding, RtctlError, SetupError
from rtctl.record.file import CLOSE, NO_SEAL, RECORD_NAME, RECORD_VERSION, pack_object
from rtctl.record.ring import (
    RECORDER_BLOCKED,
    RECORDER_DONE,
    RECORDER_RUNNING,
    Checkpoint,
    Ring,
    process_start,
)

DRAIN_S = 0.02  # between two looks at the ring
SYNC_S = 1.0  # a power cut loses at most about this much
BLOCK_BYTES = 1 << 20  # at most, per block
PATIENCE_S = 5.0  # with a disk that refuses, once the run is over; the ring then stays for another try
MINUTES_WANTED = 10.0  # of free disk, when the length of the run is not known
ENDED_CLEANLY = "the controller closed the run"
ENDED_WITHOUT_CONTROLLER = "the controller was gone"


class Recorder:
    """Drains one ring into one record. `step` until there is nothing more to come, then `finish`."""

    def __init__(self, ring: Ring, path: Path | str, header: Mapping[str, Any]) -> None:
        """Open the record, new or where the recorder before stopped. Raises ConfigError or SetupError."""
        self.ring = ring
        self.path = Path(path)
        self._lock = _lock(ring)
        self._rows_per_block = max(1, BLOCK_BYTES // ring.row_layout.itemsize)
        self._synced_s = time.monotonic()
        checkpoint = ring.checkpoint()
        if checkpoint is None:
            self._begin(header)
        else:
            self._go_on(checkpoint)
        ring.set_control("recorder_pid", os.getpid())
        ring.set_control("recorder_start", process_start(os.getpid()))
        ring.set_control("recorder_starts", ring.control("recorder_starts") + 1)
        ring.set_control("recorder_errno", 0)
        ring.set_control("recorder_state", RECORDER_RUNNING)

    def _begin(self, header: Mapping[str, Any]) -> None:
        if header["run_key"] != self.ring.run_key:
            raise _refusal(self.path, "the record of the run this ring belongs to", "the header of another run")
        try:
            self._file = os.open(self.path, os.O_WRONLY | os.O_CREAT | os.O_EXCL | os.O_CLOEXEC, 0o644)
        except FileExistsError:
            raise _refusal(
                self.path, "a file that does not exist yet", "an existing file", "Records are never overwritten."
            ) from None
        except OSError as error:
            raise _refusal(self.path, "a file that can be made", str(error.strerror), "Name another folder.") from None
        info = os.fstat(self._file)
        self.ring.set_control("record_device", info.st_dev)
        self.ring.set_control("record_inode", info.st_ino)
        self._at = Checkpoint(0, 0, 0, NO_SEAL)
        content = msgpack.packb(dict(header))
        if not self._append(RECORD_NAME, RECORD_VERSION, content, next_row=0, lost=0):
            number = self.ring.control("recorder_errno")
            raise SetupError.from_findings([Finding(str(self.path), "a file that can be written", os.strerror(number))])

    def _go_on(self, checkpoint: Checkpoint) -> None:
        try:
            self._file = os.open(self.path, os.O_WRONLY | os.O_CLOEXEC)
        except OSError as error:
            raise _refusal(self.path, "the record that was begun with this ring", str(error.strerror)) from None
        info = os.fstat(self._file)
        same = (info.st_dev, info.st_ino) == (self.ring.control("record_device"), self.ring.control("record_inode"))
        if not same or info.st_size < checkpoint.record_bytes:
            raise _refusal(self.path, "the record that was begun with this ring", "another or a shorter file")
        os.ftruncate(self._file, checkpoint.record_bytes)  # what the recorder before had not finished is still in the ring
        os.lseek(self._file, 0, os.SEEK_END)
        self._at = checkpoint

    @property
    def next_row(self) -> int:
        """Rows before this number are in the record or counted as lost."""
        return self._at.next_row

    def step(self) -> int:
        """Move what is in the ring into one block. Returns how many rows were new, 0 when there were none or the disk refused."""
        ring = self.ring
        ring.set_control("recorder_beat", ring.control("recorder_beat") + 1)
        rows, lost = ring.read_new(self._at.next_row, self._rows_per_block)
        if len(rows) and self._append(
            self._at.next_row + lost,
            len(rows),
            rows.tobytes(),
            next_row=self._at.next_row + lost + len(rows),
            lost=self._at.lost_rows + lost,
        ):
            self._sync(SYNC_S)
            return len(rows)
        return 0

    def finish(self, reason: str) -> bool:
        """Write the close mark and remove the ring. False when the disk refused: the ring then stays."""
        rows = self._at.next_row - self._at.lost_rows
        note = {
            "lost_rows": self._at.lost_rows,
            "reason": reason,
            "closed_utc": datetime.now(UTC).isoformat(timespec="milliseconds"),
        }
        done = self._append(CLOSE, rows, msgpack.packb(note), next_row=self._at.next_row, lost=self._at.lost_rows)
        if done:
            self._sync(0.0)
            self.ring.set_control("recorder_state", RECORDER_DONE)
            self.ring.remove()
        self.close()
        return done

    def close(self) -> None:
        """Let go of record and ring without ending the record."""
        os.close(self._file)
        os.close(self._lock)

    def _append(self, first: object, second: int, content: bytes, *, next_row: int, lost: int) -> bool:
        data, mark = pack_object(self._at.chain, first, second, content)
        try:
            written = 0
            while written < len(data):
                written += os.write(self._file, memoryview(data)[written:])
        except OSError as error:
            self.ring.set_control("recorder_errno", error.errno or errno.EIO)
            self.ring.set_control("recorder_state", RECORDER_BLOCKED)
            os.ftruncate(self._file, self._at.record_bytes)
            os.lseek(self._file, 0, os.SEEK_END)
            return False
        self._at = Checkpoint(next_row, self._at.record_bytes + len(data), lost, mark)
        self.ring.set_checkpoint(self._at)
        self.ring.set_control("lost_rows", lost)
        self.ring.set_control("recorder_state", RECORDER_RUNNING)
        return True

    def _sync(self, every_s: float) -> None:
        now_s = time.monotonic()
        if now_s - self._synced_s >= every_s:
            self._synced_s = now_s
            try:
                os.fdatasync(self._file)
            except OSError as error:  # the rows are handed to the system all the same: say it, go on
                self.ring.set_control("recorder_errno", error.errno or errno.EIO)


def _refusal(path: Path, expected: str, got: str, next_step: str = "") -> ConfigError:
    return ConfigError.from_findings([Finding(str(path), expected, got, next=next_step)])


def _lock(ring: Ring) -> int:
    """One recorder per ring: the lock goes with the process that holds it."""
    descriptor = os.open(ring.path, os.O_RDONLY | os.O_CLOEXEC)
    try:
        fcntl.flock(descriptor, fcntl.LOCK_EX | fcntl.LOCK_NB)
    except OSError:
        os.close(descriptor)
        raise _refusal(ring.path, "a ring without a recorder", "one that is being recorded") from None
    return descriptor


def record(recorder: Recorder) -> bool:
    """Drain until the run is over, then end the record. False when its end could not be written."""
    ring = recorder.ring
    refused_since_s: float | None = None
    while True:
        closed = ring.control("closed") == 1  # looked at before draining: rows published before this are then seen below
        over = closed or not ring.writer_alive()
        moved = recorder.step()
        if over and recorder.next_row == ring.row_count:
            return recorder.finish(ENDED_CLEANLY if closed else ENDED_WITHOUT_CONTROLLER)
        blocked = ring.control("recorder_state") == RECORDER_BLOCKED
        refused_since_s = (refused_since_s or time.monotonic()) if over and blocked else None
        if refused_since_s is not None and time.monotonic() - refused_since_s > PATIENCE_S:
            recorder.close()
            return False
        if moved == 0 or recorder.next_row == ring.row_count:
            time.sleep(DRAIN_S)


def write_header(path: Path | str, header: Mapping[str, Any]) -> None:
    """Put the header where the recorder finds it."""
    Path(path).write_bytes(msgpack.packb(dict(header)))


def start_recorder(ring: Ring, path: Path | str, header: Mapping[str, Any]) -> "subprocess.Popen[bytes]":
    """Start the recorder process of a ring, or its successor after the first one died. Wait for `recorder_status().alive`."""
    place = header_path(ring)
    if not place.exists():
        write_header(place, header)
    package_folder = str(Path(__file__).resolve().parents[2])
    paths = [package_folder, *filter(None, [os.environ.get("PYTHONPATH")])]
    one_thread = {"OMP_NUM_THREADS": "1", "OPENBLAS_NUM_THREADS": "1"}
    return subprocess.Popen(
        [sys.executable, "-m", "rtctl.record.recorder", str(ring.path), str(path), str(place)],
        stdin=subprocess.DEVNULL,
        env={**os.environ, **one_thread, "PYTHONPATH": os.pathsep.join(paths)},
        start_new_session=True,
    )


def header_path(ring: Ring) -> Path:
    """Where the header lies until the recorder has put it into the record."""
    return ring.path.with_name(ring.path.name + ".header")


def check_record_folder(folder: Path | str, bytes_per_hour: float, duration_s: float | None = None) -> list[Finding]:
    """What is wrong with a folder for records, before the run: missing, not writable, too full.

    bytes_per_hour      rate at which the record grows
    duration_s     s    length of the run, None = not known: room for ten minutes is wanted

    Returns findings, none when all is well.
    """
    place = Path(folder)
    if not place.is_dir():
        got = "a file" if place.exists() else "a path that does not exist"
        return [Finding(str(place), "a folder for records", got, next=f"Run: mkdir -p {place}")]
    probe = place / f".rtctl-probe-{os.getpid()}"
    try:
        os.close(os.open(probe, os.O_WRONLY | os.O_CREAT | os.O_EXCL, 0o600))
        probe.unlink()
    except OSError as error:
        return [Finding(str(place), "a folder that can be written", str(error.strerror), next="Name another folder for records.")]
    info = os.statvfs(place)
    free = info.f_bavail * info.f_frsize
    wanted_s = 60.0 * MINUTES_WANTED if duration_s is None else duration_s
    needed = bytes_per_hour * wanted_s / 3600.0
    if free >= needed:
        return []
    return [
        Finding(
            str(place),
            f"on a disk with at least {needed / 1e6:.0f} MB free ({wanted_s:.0f} s of record)",
            f"{free / 1e6:.0f} MB, enough for {60.0 * free / bytes_per_hour:.1f} minutes",
            next="Make room, or name another folder for records.",
        )
    ]


def main(arguments: list[str]) -> int:
    """Run the recorder. Returns the exit code: 0, 2 for a wrong command, 3 when the record could not be ended."""
    for number in (signal.SIGINT, signal.SIGHUP, signal.SIGTERM):
        signal.signal(number, signal.SIG_IGN)
    if len(arguments) != 3:
        print("usage: python -m rtctl.record.recorder RING RECORD HEADER", file=sys.stderr)
        return 2
    ring_path, record_path, header_file = (Path(argument) for argument in arguments)
    try:
        ring = Ring.open(ring_path)
        recorder = Recorder(ring, record_path, _load_header(header_file, ring))
    except RtctlError as error:
        print(error, file=sys.stderr)
        return error.exit_code
    done = record(recorder)
    if not done:
        why = os.strerror(ring.control("recorder_errno"))
        print(f"{record_path}: could not be written: {why}. The rows are still in {ring_path}.", file=sys.stderr)
        return 3
    header_file.unlink(missing_ok=True)
    return 0


def _load_header(path: Path, ring: Ring) -> dict[str, Any]:
    """The header for a new record; not needed to go on with one."""
    if ring.checkpoint() is not None:
        return {}
    try:
        header = msgpack.unpackb(path.read_bytes())
    except (OSError, ValueError, msgpack.UnpackException) as error:
        raise _refusal(path, "the header of the run", str(error)) from None
    if not isinstance(header, dict) or "run_key" not in header:
        raise _refusal(path, "the header of the run", "something else")
    return header


if __name__ == "__main__":
    sys.exit(main(sys.argv[1:]))
