"""The private folder of sockets and control files of running controllers and drivers."""

import os
import stat
from pathlib import Path

from rtctl.errors import SetupError


def runtime_folder() -> Path:
    """`$XDG_RUNTIME_DIR/rtctl` or a folder of this user below the temporary folder; made if missing, 0700.

    Raises SetupError when it belongs to somebody else or others can enter it.
    """
    base = os.environ.get("XDG_RUNTIME_DIR")
    folder = Path(base) / "rtctl" if base else Path(os.environ.get("TMPDIR") or "/tmp") / f"rtctl-{os.getuid()}"
    folder.mkdir(mode=0o700, parents=True, exist_ok=True)
    info = folder.lstat()
    if not stat.S_ISDIR(info.st_mode) or info.st_uid != os.getuid() or stat.S_IMODE(info.st_mode) & 0o077:
        raise SetupError(
            f"{folder}: must be a folder of this user that nobody else may enter, got owner {info.st_uid} "
            f"and mode {stat.S_IMODE(info.st_mode):o}. Remove it, or set XDG_RUNTIME_DIR to a private folder."
        )
    return folder


def socket_endpoint(endpoint: str) -> str:
    """The full endpoint of a run file's `ipc://NAME`: a name without a slash lies in the runtime folder."""
    scheme, _, place = endpoint.partition("://")
    if scheme == "ipc" and "/" not in place:
        return f"ipc://{runtime_folder() / place}"
    return endpoint
