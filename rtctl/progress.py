"""Says what a long job is doing and how long it will take: a live line on a terminal, plain lines elsewhere, on standard error.

It runs in the process of the job, at ordinary priority and four times a second: the hot thread holds no interpreter lock.
"""

import sys
import time
from types import TracebackType
from typing import Any, TextIO

REFRESH_HZ = 4.0


class Progress:
    """Stages of a job, one after the other. Use as a context manager; a new stage ends the one before."""

    def __init__(self, stream: TextIO | None = None, silent: bool = False) -> None:
        """Write to `stream` (default: standard error); `silent` says nothing at all."""
        self.stream = stream or sys.stderr
        self.silent = silent
        self.stages: list[str] = []
        self._live: Any = None
        self._task: Any = None
        self._began_s = time.monotonic()

    def __enter__(self) -> "Progress":
        if not self.silent and self.stream.isatty():
            self._live = _live_display(self.stream)
            self._live.start()
        return self

    def __exit__(self, kind: type[BaseException] | None, error: BaseException | None, trace: TracebackType | None) -> None:
        self._end_stage()
        if self._live is not None:
            self._live.stop()
            self._live = None

    def stage(self, text: str, expected_s: float | None = None) -> None:
        """Begin a stage: what is being done, and about how long it takes when that is known (s)."""
        self._end_stage()
        self.stages.append(text)
        self._began_s = time.monotonic()
        if self._live is not None:
            self._task = self._live.add_task(text, total=expected_s)
        elif not self.silent:
            about = f" (about {expected_s:.0f} s)" if expected_s else ""
            print(f"{text}{about} ...", file=self.stream, flush=True)

    def say(self, text: str) -> None:
        """What a job reports: a stage; what the computer does not permit is a warning that stays."""
        if text.startswith("not permitted"):
            self.note(f"warning: {text}")
        else:
            self.stage(text)

    def note(self, text: str) -> None:
        """One line that stays, such as a warning."""
        if self._live is not None:
            self._live.console.print(text, markup=False, highlight=False)
        elif not self.silent:
            print(text, file=self.stream, flush=True)

    def _end_stage(self) -> None:
        if self._live is not None and self._task is not None:
            text = self._live.tasks[-1].description
            self._live.remove_task(self._task)
            self._task = None
            self.note(f"{text}: {time.monotonic() - self._began_s:.1f} s")


def _live_display(stream: TextIO) -> Any:
    from rich.console import Console
    from rich.progress import Progress as Display
    from rich.progress import ProgressColumn, SpinnerColumn, Task, TextColumn
    from rich.text import Text

    class Remaining(ProgressColumn):
        """Time since the stage began, of the time it is expected to take."""

        def render(self, task: Task) -> Text:
            elapsed = f"{task.elapsed or 0.0:.0f} s"
            return Text(f"{elapsed} of about {task.total:.0f} s" if task.total else elapsed)

    return Display(
        SpinnerColumn("line"),
        TextColumn("{task.description}", markup=False),
        Remaining(),
        console=Console(file=stream),
        refresh_per_second=REFRESH_HZ,
        transient=True,
    )
