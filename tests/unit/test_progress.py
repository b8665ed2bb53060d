"""Progress: plain lines where there is no terminal, one live line where there is one, nothing when silent."""

import io

from rtctl.progress import Progress


class Terminal(io.StringIO):
    """A stream that says it is a terminal."""

    def isatty(self) -> bool:
        return True


def test_plain_lines_without_a_terminal() -> None:
    """Each stage is one line with its expected time; notes are lines of their own."""
    stream = io.StringIO()
    with Progress(stream) as progress:
        progress.stage("compiling", 30.0)
        progress.note("warning: no real-time priority")
        progress.stage("running")
    assert stream.getvalue() == "compiling (about 30 s) ...\nwarning: no real-time priority\nrunning ...\n"


def test_silent_says_nothing_but_keeps_the_stages() -> None:
    """A caller that wants no text still learns what was done."""
    stream = io.StringIO()
    with Progress(stream, silent=True) as progress:
        progress.stage("compiling", 30.0)
        progress.note("x")
    assert stream.getvalue() == ""
    assert progress.stages == ["compiling"]


def test_a_terminal_keeps_one_line_for_each_finished_stage() -> None:
    """What stays on the screen is a line for each stage with the time it took."""
    stream = Terminal()
    with Progress(stream) as progress:
        progress.stage("compiling", 30.0)
        progress.stage("running")
    text = stream.getvalue()
    assert "compiling: 0.0 s" in text
    assert "running: 0.0 s" in text
