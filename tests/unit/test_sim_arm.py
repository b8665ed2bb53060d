"""What the simulated arm's process does before it runs: locks on its endpoints, refusals, command line."""

import os
import socket
import stat
from pathlib import Path

import pytest

from drivers.sim_arm import Endpoints, bound_sockets, lock_endpoint, main, somebody_answers
from rtctl.errors import SetupError


@pytest.fixture
def folder(tmp_path: Path) -> Path:
    made = tmp_path / "run"
    made.mkdir(mode=0o700)
    return made


def test_an_endpoint_is_locked_for_one_driver_at_a_time(folder):
    """The second driver is told who holds the endpoint; after the first has closed it, it is free again."""
    endpoint = f"ipc://{folder}/state"
    lock = lock_endpoint(endpoint)
    with pytest.raises(SetupError) as error:
        lock_endpoint(endpoint)
    assert str(error.value) == (
        f"{endpoint}: must be free, got in use by a driver with process number {os.getpid()}. "
        f"End it first (kill {os.getpid()}), or choose another endpoint."
    )
    assert error.value.exit_code == 3
    os.close(lock)
    os.close(lock_endpoint(endpoint))
    assert stat.S_IMODE((folder / "state.lock").stat().st_mode) == 0o600


def test_what_a_dead_process_left_behind_is_no_obstacle(folder):
    """A socket file nobody listens on and an old lock file with another process number are taken over."""
    with socket.socket(socket.AF_UNIX, socket.SOCK_STREAM) as dead:
        dead.bind(str(folder / "state"))
    (folder / "state.lock").write_text("1\n")
    assert (folder / "state").exists()
    assert not somebody_answers(folder / "state")
    with bound_sockets(Endpoints(f"ipc://{folder}/state", f"ipc://{folder}/torque"), realtime=False):
        assert (folder / "state.lock").read_text() == f"{os.getpid()}\n"
        assert somebody_answers(folder / "state")
    assert not (folder / "state").exists()
    assert not (folder / "torque").exists()


def test_a_program_without_a_lock_file_is_not_pushed_aside(folder):
    """libzmq would take over the path of a listening program; here it is refused, and the program keeps its socket."""
    endpoint = f"ipc://{folder}/state"
    with socket.socket(socket.AF_UNIX, socket.SOCK_STREAM) as other:
        other.bind(str(folder / "state"))
        other.listen()
        with pytest.raises(SetupError) as error:
            lock_endpoint(endpoint)
        assert somebody_answers(folder / "state")
    assert str(error.value) == (
        f"{endpoint}: must be free, got in use by a program without a lock file. "
        f"End it first (fuser {folder}/state), or choose another endpoint."
    )


def test_both_endpoints_are_given_back_when_the_second_is_in_use(folder):
    """A driver that gets only one of its endpoints keeps neither."""
    lock = lock_endpoint(f"ipc://{folder}/torque")
    with pytest.raises(SetupError), bound_sockets(Endpoints(f"ipc://{folder}/state", f"ipc://{folder}/torque"), realtime=False):
        pass
    os.close(lock)
    os.close(lock_endpoint(f"ipc://{folder}/state"))


def test_a_folder_that_others_can_enter_is_refused(folder):
    """Whoever can enter the folder could command torque."""
    folder.chmod(0o755)
    with pytest.raises(SetupError) as error:
        lock_endpoint(f"ipc://{folder}/state")
    assert str(error.value) == (
        f"ipc://{folder}/state: must be in a folder that only this user can enter, got mode 755. Run: chmod 700 {folder}"
    )


@pytest.mark.parametrize("endpoint", ["tcp://127.0.0.1:5555", "ipc://relative", "state"])
def test_only_local_endpoints_are_bound(endpoint):
    """A network endpoint would need keys and a list of clients; a relative path would depend on where one stands."""
    with pytest.raises(SetupError) as error:
        lock_endpoint(endpoint)
    assert str(error.value) == f"{endpoint}: must be ipc:///PATH, which stays on this computer, got another kind of endpoint."


def test_a_missing_run_file_ends_with_code_2_and_one_message(tmp_path, capsys):
    """Bad input is one message on standard error, never a traceback, and nothing on standard output."""
    assert main([str(tmp_path / "none.toml")]) == 2
    said = capsys.readouterr()
    assert said.out == ""
    assert f"{tmp_path / 'none.toml'}" in said.err
    assert len(said.err.splitlines()) == 1


def test_a_negative_duration_is_refused(capsys):
    """The command line says what was expected."""
    with pytest.raises(SystemExit) as ended:
        main(["run.toml", "--seconds", "-1"])
    assert ended.value.code == 2
    assert "--seconds must be >= 0 s, got -1.0" in capsys.readouterr().err
