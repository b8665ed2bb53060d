"""Stop and e-stop by a mapped file: no socket, no thread, no heavy import."""

import subprocess
import sys
import threading
import time
from pathlib import Path

import pytest

from rtctl.loop.flags import ESTOP_BYTE, Flags, ask_by_flag, flags_path, running
from tests.structure.sources_of import TOP


def test_a_request_is_a_word_that_is_not_zero(tmp_path: Path) -> None:
    """Each request sets its own word and leaves the others alone; it counts as taken once the word is 0 again."""
    flags = Flags.create(tmp_path / "arm.flags")
    flags.request("estop")
    assert flags.mapped[ESTOP_BYTE] == 1
    assert flags.taken("stop") and flags.taken("stop_release") and not flags.taken("estop")
    flags.mapped[ESTOP_BYTE : ESTOP_BYTE + 8] = bytes(8)
    assert flags.taken("estop")
    flags.close()


def test_the_file_is_private_and_gone_after_its_owner(tmp_path: Path) -> None:
    """0600 while it lives, whatever the umask; the owner removes it."""
    path = tmp_path / "arm.flags"
    flags = Flags.create(path)
    assert path.stat().st_mode & 0o777 == 0o600
    assert running(tmp_path) == ["arm"]
    flags.close()
    assert not path.exists()
    assert running(tmp_path) == []


def test_a_second_controller_of_that_name_is_told_who_runs(tmp_path: Path) -> None:
    """The lock is the owner's; the error carries its process number."""
    flags = Flags.create(tmp_path / "arm.flags")
    with pytest.raises(FileExistsError, match=f"process {flags.pid}"):
        Flags.create(tmp_path / "arm.flags")
    flags.close()


def test_the_file_of_a_dead_controller_is_no_controller(tmp_path: Path) -> None:
    """A file without a lock is left over: it is neither listed nor opened, and a new owner starts with all words at 0."""
    path = tmp_path / "arm.flags"
    path.write_bytes(b"\xff" * 4096)
    assert running(tmp_path) == []
    with pytest.raises(FileNotFoundError):
        Flags.open(path)
    flags = Flags.create(path)
    assert flags.taken("estop")
    flags.close()


def test_asking_waits_until_the_loop_has_taken_it(tmp_path: Path) -> None:
    """True once the word was exchanged with 0, False when nobody takes it: then the hardware stop is what is left."""
    flags = Flags.create(flags_path("arm", tmp_path))
    assert not ask_by_flag("arm", "stop", tmp_path, wait_s=0.01)

    def take() -> None:
        while flags.taken("estop"):
            time.sleep(0.001)
        flags.mapped[ESTOP_BYTE : ESTOP_BYTE + 8] = bytes(8)

    thread = threading.Thread(target=take)
    thread.start()
    assert ask_by_flag("arm", "estop", tmp_path, wait_s=5.0)
    thread.join()
    flags.close()


def test_asking_a_stop_imports_nothing_heavy() -> None:
    """The module of the stop needs no numpy, no compiler and no sockets."""
    code = (
        "import sys, rtctl.loop.flags; "
        "print([name for name in ('numpy', 'numba', 'zmq', 'pydantic', 'click', 'rich') if name in sys.modules])"
    )
    done = subprocess.run([sys.executable, "-c", code], capture_output=True, text=True, cwd=TOP, check=True)
    assert done.stdout.strip() == "[]"
