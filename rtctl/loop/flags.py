"""Stop and e-stop as words in a small mapped file: the way to stop an arm that waits for no socket, no thread and no heavy import.

The running controller makes the file (0600, in the runtime folder of the user), holds a lock on it as long as it lives, and reads
its words in every cycle. Anybody who may open the file may stop the arm. This module imports the standard library only.

The file, little-endian, 4096 bytes:

    0    8 bytes  "rtctflag"
    8    i64      version of this layout
    16   i64      process id of the controller
    64   i64      stop: brake, then hold with torque
    72   i64      stop and release: brake, then release
    80   i64      e-stop: latched until a reset

A request is a word that is not 0; the loop takes it by exchanging the word with 0. Requesters write one byte, which no processor
can tear.
"""

import errno
import fcntl
import mmap
import os
import time
from pathlib import Path

MAGIC = b"rtctflag"
VERSION = 1
SIZE_BYTES = 4096
PID_BYTE = 16
STOP_BYTE = 64
STOP_RELEASE_BYTE = 72
ESTOP_BYTE = 80
WORDS = {"stop": STOP_BYTE, "stop_release": STOP_RELEASE_BYTE, "estop": ESTOP_BYTE}
SUFFIX = ".flags"


def flags_path(name: str, folder: Path | None = None) -> Path:
    """Where the flag file of the controller `name` is."""
    if folder is None:
        from rtctl.config.runtime import runtime_folder

        folder = runtime_folder()
    return folder / f"{name}{SUFFIX}"


def running(folder: Path | None = None) -> list[str]:
    """Names of the controllers of this user that run now, sorted."""
    place = flags_path("any", folder).parent
    return sorted(path.name.removesuffix(SUFFIX) for path in place.glob(f"*{SUFFIX}") if _is_held(path))


def _is_held(path: Path) -> bool:
    """True when a living process holds the file's lock."""
    try:
        descriptor = os.open(path, os.O_RDWR | os.O_CLOEXEC | os.O_NOFOLLOW)
    except OSError:
        return False
    try:
        fcntl.flock(descriptor, fcntl.LOCK_SH | fcntl.LOCK_NB)
    except OSError as error:
        return error.errno in (errno.EAGAIN, errno.EACCES)
    finally:
        os.close(descriptor)
    return False


class Flags:
    """The flag file of one controller, mapped. Made by the controller with `create`, opened by everybody else with `open`."""

    def __init__(self, path: Path, descriptor: int, owner: bool) -> None:
        self.path = path
        self._descriptor = descriptor
        self._owner = owner
        self.mapped = mmap.mmap(descriptor, SIZE_BYTES)

    @classmethod
    def create(cls, path: Path) -> "Flags":
        """Make the file and take its lock. Raises FileExistsError, with the process id in it, while another controller holds it."""
        descriptor = os.open(path, os.O_RDWR | os.O_CREAT | os.O_CLOEXEC | os.O_NOFOLLOW, 0o600)
        try:
            os.fchmod(descriptor, 0o600)
            fcntl.flock(descriptor, fcntl.LOCK_EX | fcntl.LOCK_NB)
            os.posix_fallocate(descriptor, 0, SIZE_BYTES)  # a write into a hole of a full file system would end the process
        except OSError as error:
            pid = int.from_bytes(os.pread(descriptor, 8, PID_BYTE), "little")
            os.close(descriptor)
            if error.errno in (errno.EAGAIN, errno.EACCES):
                raise FileExistsError(errno.EEXIST, f"process {pid}", str(path)) from None
            raise
        flags = cls(path, descriptor, owner=True)
        flags.mapped[:] = bytes(SIZE_BYTES)
        flags._put(8, VERSION)
        flags._put(PID_BYTE, os.getpid())
        flags.mapped[: len(MAGIC)] = MAGIC
        return flags

    @classmethod
    def open(cls, path: Path) -> "Flags":
        """Map the file of a running controller. Raises FileNotFoundError when none runs, ValueError for another kind of file."""
        if not _is_held(path):
            raise FileNotFoundError(errno.ENOENT, "no controller runs here", str(path))
        descriptor = os.open(path, os.O_RDWR | os.O_CLOEXEC | os.O_NOFOLLOW)
        if os.fstat(descriptor).st_size < SIZE_BYTES or os.pread(descriptor, len(MAGIC), 0) != MAGIC:
            os.close(descriptor)
            raise ValueError(f"{path}: must be the flag file of a controller, got another kind of file")
        return cls(path, descriptor, owner=False)

    def _put(self, byte: int, value: int) -> None:
        self.mapped[byte : byte + 8] = value.to_bytes(8, "little")

    @property
    def pid(self) -> int:
        """Process id of the controller."""
        return int.from_bytes(self.mapped[PID_BYTE : PID_BYTE + 8], "little")

    def request(self, what: str) -> None:
        """Ask for `stop`, `stop_release` or `estop`. Returns at once; the loop acts in its next cycle."""
        self.mapped[WORDS[what]] = 1

    def taken(self, what: str) -> bool:
        """True when the loop has taken the request."""
        return not any(self.mapped[WORDS[what] : WORDS[what] + 8])

    def close(self) -> None:
        """Unmap; the owner removes the file first. The compiled loop must have ended."""
        if self._owner:
            self.path.unlink(missing_ok=True)
        self.mapped.close()
        os.close(self._descriptor)


def ask_by_flag(name: str, what: str, folder: Path | None = None, wait_s: float = 0.5) -> bool:
    """Ask the controller `name` for `stop`, `stop_release` or `estop` by its flag file.

    Returns True when the loop took it within `wait_s`, False when it did not: the loop hangs, pull the hardware stop.
    Raises FileNotFoundError when no such controller runs.
    """
    flags = Flags.open(flags_path(name, folder))
    try:
        flags.request(what)
        end_s = time.monotonic() + wait_s
        while not flags.taken(what):
            if time.monotonic() > end_s:
                return False
            time.sleep(0.001)
        return True
    finally:
        flags.close()
