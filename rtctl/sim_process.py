"""The simulated arm as a child process: started by name, waited for with a bound, ended in order."""

import os
import selectors
import signal
import subprocess
import time
from pathlib import Path
from types import TracebackType
from typing import Self

from rtctl.errors import ConfigError, SetupError
from rtctl.places import driver_command

READY = b"ready"  # the line a driver prints once its sockets are bound
READY_WAIT_S = 90.0  # a first start compiles
END_WAIT_S = 5.0


class SimulatedArm:
    """`drivers/sim_arm` for a run file, in a session of its own: Ctrl-C must not end the driver before the controller's brake.

    Use as a context manager: entering returns when the arm's sockets are bound, leaving ends the process.
    """

    def __init__(self, run_path: Path | str, options: tuple[str, ...] = ()) -> None:
        command, environment = driver_command("sim_arm")
        self._command = [*command, str(run_path), *options]
        self._environment = environment
        self._process: subprocess.Popen[bytes] | None = None

    def start(self) -> None:
        """Start the process without waiting for it, so that it compiles beside the caller."""
        self._process = subprocess.Popen(
            self._command, env=self._environment, stdin=subprocess.DEVNULL, stdout=subprocess.PIPE, stderr=subprocess.PIPE,
            start_new_session=True,
        )  # fmt: skip

    def wait_ready(self) -> None:
        """Wait until the sockets are bound. Raises what the process said when it ended instead, SetupError when it was too slow."""
        assert self._process is not None and self._process.stdout is not None
        end_s = time.monotonic() + READY_WAIT_S
        text = b""
        with selectors.DefaultSelector() as selector:
            selector.register(self._process.stdout, selectors.EVENT_READ)
            while READY not in text.splitlines():
                left_s = end_s - time.monotonic()
                if left_s <= 0 or not selector.select(left_s):
                    self.close()
                    raise SetupError(f"simulated arm: must be ready within {READY_WAIT_S:.0f} s, got nothing. Try again.")
                part = os.read(self._process.stdout.fileno(), 4096)
                if not part:
                    self._raise_end()
                text += part

    def _raise_end(self) -> None:
        """The process ended before it was ready: its own words are the error."""
        assert self._process is not None
        _, words = self._process.communicate(timeout=END_WAIT_S)
        text = words.decode(errors="replace").strip() or f"the simulated arm ended with code {self._process.returncode}"
        raise (ConfigError if self._process.returncode == ConfigError.exit_code else SetupError)(text)

    def __enter__(self) -> Self:
        if self._process is None:
            self.start()
        try:
            self.wait_ready()
        except BaseException:
            self.close()
            raise
        return self

    def __exit__(self, kind: type[BaseException] | None, error: BaseException | None, trace: TracebackType | None) -> None:
        self.close()

    def close(self) -> None:
        """Ask the process to end and wait for it; after a while, end it."""
        process = self._process
        if process is None:
            return
        if process.poll() is None:
            process.send_signal(signal.SIGTERM)
            try:
                process.wait(END_WAIT_S)
            except subprocess.TimeoutExpired:
                process.kill()
                process.wait()
        for pipe in (process.stdout, process.stderr):
            if pipe is not None:
                pipe.close()
