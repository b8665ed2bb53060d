"""The simulated arm as a driver process in real time: the same messages, rules and refusals as hardware, and nothing that moves.

`python -m rtctl_drivers.sim_arm RUN` (in a checkout also `python drivers/sim_arm.py RUN`) reads the `sim` part of a run file, binds
its two endpoints and prints one ready line. SIGTERM or `--seconds` ends it: first the grant, then the motion, then the process.
Ctrl-C and hang-up are ignored, so that a controller's terminal cannot take the arm away before its brake has ended.
The motion is `rtctl.plant`, the loop `rtctl.loop.plant_loop`; here are sockets, locks, signals and the thread.
"""

import argparse
import contextlib
import fcntl
import json
import os
import secrets
import signal
import socket as sockets
import stat
import sys
import threading
from collections.abc import Iterator
from dataclasses import dataclass
from pathlib import Path
from typing import TYPE_CHECKING, Any

if not __package__:
    # Started as a file in a checkout: the package lies beside this folder.
    sys.path.insert(0, str(Path(__file__).resolve().parents[1]))

from rtctl.errors import RtctlError, SetupError

if TYPE_CHECKING:
    import numpy as np
    import zmq

PRIORITY = 60  # SCHED_FIFO of the loop, below that of a controller's
IO_PRIORITY = 55
QUEUE_LIMIT = 4  # messages; a longer queue only stores old torques
LOOK_S = 0.1  # how often the main thread looks whether its parent still lives
RESULTS = {0: "died", 1: "stopped", 2: "time over", 3: "died"}


@dataclass(frozen=True)
class Endpoints:
    """Where states are published and torques are taken."""

    state: str
    torque: str


def lock_endpoint(endpoint: str) -> int:
    """The lock of an `ipc://` endpoint, held by the descriptor that is returned until it is closed or the process ends.

    libzmq takes over the path of a running driver without an error, hence a lock file beside it. What a dead process left
    behind is no obstacle. Raises SetupError when the endpoint is in use, not local, or open to other users.
    """
    scheme, _, place = endpoint.partition("://")
    path = Path(place)
    if scheme != "ipc" or not path.is_absolute():
        raise SetupError(f"{endpoint}: must be ipc:///PATH, which stays on this computer, got another kind of endpoint.")
    path.parent.mkdir(mode=0o700, parents=True, exist_ok=True)
    info = path.parent.stat()
    if info.st_uid != os.getuid() or stat.S_IMODE(info.st_mode) & 0o077:
        raise SetupError(
            f"{endpoint}: must be in a folder that only this user can enter, got mode {stat.S_IMODE(info.st_mode):o}. "
            f"Run: chmod 700 {path.parent}"
        )
    lock = os.open(f"{path}.lock", os.O_CREAT | os.O_RDWR | os.O_CLOEXEC, 0o600)
    try:
        fcntl.flock(lock, fcntl.LOCK_EX | fcntl.LOCK_NB)
    except BlockingIOError:
        holder = os.read(lock, 20).decode(errors="replace").strip() or "unknown"
        os.close(lock)
        raise _in_use(endpoint, f"a driver with process number {holder}", f"kill {holder}") from None
    if somebody_answers(path):
        os.close(lock)
        raise _in_use(endpoint, "a program without a lock file", f"fuser {path}")
    os.ftruncate(lock, 0)
    os.write(lock, f"{os.getpid()}\n".encode())
    return lock


def _in_use(endpoint: str, who: str, command: str) -> SetupError:
    return SetupError(f"{endpoint}: must be free, got in use by {who}. End it first ({command}), or choose another endpoint.")


def somebody_answers(path: Path) -> bool:
    """True if a program listens on the local socket at `path`."""
    with sockets.socket(sockets.AF_UNIX, sockets.SOCK_STREAM) as probe:
        try:
            probe.connect(str(path))
        except OSError:
            return False
    return True


@contextlib.contextmanager
def bound_sockets(endpoints: Endpoints, realtime: bool) -> Iterator[tuple["zmq.Socket[bytes]", "zmq.Socket[bytes]"]]:
    """(PUB for states, PULL for torques), bound and locked; closed on leaving. Raises SetupError."""
    import zmq

    from rtctl.blocks import MAX_MESSAGE_BYTES

    locks = []
    context: zmq.Context[Any] = zmq.Context()
    if realtime:
        # Before the first socket; libzmq ends the process where this is not permitted, so it was tried.
        context.set(zmq.THREAD_SCHED_POLICY, os.SCHED_FIFO)
        context.set(zmq.THREAD_PRIORITY, IO_PRIORITY)
    try:
        made = []
        for kind, endpoint in ((zmq.PUB, endpoints.state), (zmq.PULL, endpoints.torque)):
            locks.append(lock_endpoint(endpoint))
            made.append(context.socket(kind))
            for option in (zmq.SNDHWM, zmq.RCVHWM):
                made[-1].setsockopt(option, QUEUE_LIMIT)
            made[-1].setsockopt(zmq.LINGER, 0)
            made[-1].setsockopt(zmq.MAXMSGSIZE, MAX_MESSAGE_BYTES)
            try:
                made[-1].bind(endpoint)
            except zmq.ZMQError as error:
                raise SetupError(f"{endpoint}: must be an endpoint that can be bound, got: {error}. Choose another.") from None
        yield made[0], made[1]
    finally:
        context.destroy(linger=0)
        for lock, endpoint in zip(locks, (endpoints.state, endpoints.torque), strict=False):
            Path(endpoint.partition("://")[2]).unlink(missing_ok=True)  # under its lock: nobody else has bound it since
            os.close(lock)


class ArmThread:
    """The blocks of one simulated arm and the thread that runs it. `start`, `stop` and `join`; counts and truth afterwards."""

    def __init__(self, setup: "np.void", memory: "np.void", realtime: bool = True) -> None:
        import numpy as np

        from rtctl.kernels.external import load_libraries
        from rtctl.kernels.layout import new_block
        from rtctl.loop.machine import fifo_permitted
        from rtctl.loop.plant_loop import PLANT_LOOP

        load_libraries()
        self.setup, self.memory, self.loop = setup, memory, new_block(PLANT_LOOP)
        self.realtime = realtime and fifo_permitted(PRIORITY)
        self.result = 0
        self._stop = np.zeros(1, np.int64)
        self._thread: threading.Thread | None = None
        self._warm_up()

    def _warm_up(self) -> None:
        """Compile, or take from the cache: one period on throw-away blocks and sockets."""
        import zmq

        from rtctl.kernels.external import zmq_socket_address
        from rtctl.kernels.layout import new_block
        from rtctl.loop.plant_loop import run_plant
        from rtctl.plant.blocks import PLANT_MEMORY

        with zmq.Context() as context, context.socket(zmq.PUB) as states, context.socket(zmq.PULL) as torques:
            loop, memory = new_block(self.loop.dtype), new_block(PLANT_MEMORY)
            loop["state_socket"], loop["torque_socket"] = zmq_socket_address(states), zmq_socket_address(torques)
            loop["stop"], loop["duration_ns"] = self._stop.ctypes.data, 1
            run_plant(self.setup, memory, loop)

    def start(self, states: "zmq.Socket[bytes]", torques: "zmq.Socket[bytes]", seconds: float = 0.0) -> None:
        """Run in a thread of its own until `stop` or for `seconds` (0 = no limit). Only that thread may use the sockets."""
        from rtctl.kernels.external import zmq_socket_address

        self.loop["state_socket"], self.loop["torque_socket"] = zmq_socket_address(states), zmq_socket_address(torques)
        self.loop["stop"], self.loop["duration_ns"] = self._stop.ctypes.data, int(seconds * 1e9)
        self._thread = threading.Thread(target=self._run, name="plant")
        self._thread.start()

    def _run(self) -> None:
        from rtctl.loop.machine import prepare_hot_thread
        from rtctl.loop.plant_loop import run_plant

        prepare_hot_thread(None, PRIORITY if self.realtime else None)
        self.result = int(run_plant(self.setup, self.memory, self.loop))

    def stop(self) -> None:
        """Ask the arm to end; it comes to rest first."""
        self._stop[0] = 1

    def join(self, timeout_s: float | None = None) -> bool:
        """Wait for the end; False if it still runs."""
        assert self._thread is not None
        self._thread.join(timeout_s)
        return not self._thread.is_alive()

    def summary(self) -> dict[str, Any]:
        """What happened: the driver's counts and the true arm, for the log. Only after the end."""
        from rtctl.plant.truth import refusal_counts, true_state

        counts = ("periods", "skipped", "sent", "send_failed", "received", "refused", "flooded")
        duty = ("grants", "accepted", "lapses", "overspeeds", "saturated", "unsolved")
        truth = true_state(self.setup, self.memory)
        return {
            "ended": RESULTS[self.result],
            **{name: int(self.loop[name]) for name in counts},
            "late_max_s": int(self.loop["late_max_ns"]) * 1e-9,
            **{name: int(self.memory[name]) for name in duty},
            "refused_torques": refusal_counts(self.memory),
            "q": truth.q.tolist(),
            "energy_j": truth.energy_j,
            "work_drive_j": truth.work_drive_j,
            "work_friction_j": truth.work_friction_j,
        }


def serve(
    setup: "np.void",
    memory: "np.void",
    endpoints: Endpoints,
    seconds: float = 0.0,
    as_json: bool = False,
    realtime: bool = True,
    end_with_parent: bool = False,
) -> int:
    """Run a simulated arm on its endpoints until SIGTERM, `seconds` or, if asked for, the end of the parent. Returns an exit code.

    Prints one ready line once both endpoints are bound, and one line at the end. Raises SetupError before anything runs.
    """
    parent = os.getppid()
    for number in (signal.SIGINT, signal.SIGHUP):
        signal.signal(number, signal.SIG_IGN)
    arm = ArmThread(setup, memory, realtime)
    signal.signal(signal.SIGTERM, lambda number, frame: arm.stop())
    with bound_sockets(endpoints, arm.realtime) as (states, torques):
        arm.start(states, torques, seconds)
        ready = {
            "ready": True,
            "pid": os.getpid(),
            "arm_key": int(setup["arm_key"]),
            "session": int(setup["session"]),
            "state_endpoint": endpoints.state,
            "torque_endpoint": endpoints.torque,
            "period_s": int(setup["period_ns"]) * 1e-9,
            "realtime": arm.realtime,
        }
        text = (
            f"simulated arm: states on {endpoints.state}, torques on {endpoints.torque}; end it with: kill {os.getpid()}\nready"
        )
        print(json.dumps(ready) if as_json else text, flush=True)
        while not arm.join(LOOK_S):
            if end_with_parent and os.getppid() != parent:
                arm.stop()
    summary = arm.summary()
    try:
        print(json.dumps(summary) if as_json else _summary_text(summary), flush=True)
    except BrokenPipeError:
        # Whoever started it is gone; keep Python from complaining about it once more at exit.
        os.dup2(os.open(os.devnull, os.O_WRONLY), sys.stdout.fileno())
    return 0 if summary["ended"] != "died" else 1


def _summary_text(summary: dict[str, Any]) -> str:
    refused = ", ".join(f"{count} {name}" for name, count in summary["refused_torques"].items()) or "none"
    return (
        f"ended: {summary['ended']}; {summary['sent']} states sent, {summary['accepted']} torques accepted, refused: {refused}; "
        f"{summary['lapses']} lapses, latest wake-up {1e3 * summary['late_max_s']:.3f} ms late"
    )


def main(arguments: list[str] | None = None) -> int:
    """The command line; returns the exit code: 0 ended in order, 1 died, 2 bad input, 3 the environment does not allow it."""
    options = argparse.ArgumentParser(prog="sim_arm", description="The simulated arm of a run file as a driver process.")
    options.add_argument("run", type=Path, help="run file with a table [sim]")
    options.add_argument("--seconds", type=float, default=0.0, help="end by itself after this time (0: run until SIGTERM)")
    options.add_argument("--seed", type=int, help="fixes the driver's session number; without it a random one, as WIRE.md asks")
    options.add_argument("--json", action="store_true", help="ready line and summary as JSON, one object per line")
    options.add_argument("--no-realtime", action="store_true", help="do not ask for real-time priority")
    options.add_argument("--end-with-parent", action="store_true", help="end when the process that started this one has ended")
    chosen = options.parse_args(arguments)
    if not chosen.seconds >= 0.0:
        options.error(f"--seconds must be >= 0 s, got {chosen.seconds}")
    try:
        return run_sim(chosen.run, chosen.seconds, chosen.seed, chosen.json, not chosen.no_realtime, chosen.end_with_parent)
    except RtctlError as error:
        print(error, file=sys.stderr, flush=True)
        return error.exit_code


def run_sim(
    path: Path,
    seconds: float = 0.0,
    seed: int | None = None,
    as_json: bool = False,
    realtime: bool = True,
    end_with_parent: bool = False,
) -> int:
    """Read a run file and serve its simulated arm; returns an exit code. Raises ConfigError, ModelError or SetupError."""
    from rtctl.config.run_file import load_run
    from rtctl.plant.build import build_plant

    run = load_run(path)
    setup, memory = build_plant(run, secrets.randbits(64) if seed is None else seed)
    endpoints = Endpoints(run.link.state_endpoint, run.link.torque_endpoint)
    return serve(setup, memory, endpoints, seconds, as_json, realtime, end_with_parent)


if __name__ == "__main__":
    sys.exit(main())
