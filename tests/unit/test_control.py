"""The control channel: one JSON request, one answer, and nothing that arrives may end the side thread."""

import json
import tempfile
import threading
from collections.abc import Iterator, Mapping
from pathlib import Path
from typing import Any

import pytest
import zmq

from rtctl.errors import SetupError
from rtctl.loop.control import ControlServer, ask, choose_name, control_path
from rtctl.loop.flags import ESTOP_BYTE, Flags, flags_path


class Side:
    """A stand-in controller: flag file, control socket, and a thread that serves both like the side thread and the loop do."""

    def __init__(self, folder: Path) -> None:
        self.folder = folder
        self.flags = Flags.create(flags_path("arm", folder))
        self.server = ControlServer(control_path("arm", folder), self.handle)
        self.asked: list[tuple[str, Any]] = []
        self.mode = "ready"
        self.end = threading.Event()
        self.thread = threading.Thread(target=self._serve)
        self.thread.start()

    def handle(self, verb: str, request: Mapping[str, Any]) -> dict[str, Any]:
        self.asked.append((verb, request.get("law")))
        if verb == "why":
            raise RuntimeError("planted")
        if verb == "start":
            self.mode = "live"
        return {"ok": True, "status": {"mode": self.mode}, "why_no_start": ["It is planted."]}

    def _serve(self) -> None:
        while not self.end.is_set():
            self.server.serve(5)
            if not self.flags.taken("estop"):
                self.flags.mapped[ESTOP_BYTE : ESTOP_BYTE + 8] = bytes(8)

    def close(self) -> None:
        self.end.set()
        self.thread.join()
        self.server.close()
        self.flags.close()


@pytest.fixture
def side() -> Iterator[Side]:
    """In a folder with a short path, as sockets want it."""
    with tempfile.TemporaryDirectory(prefix="rt-", dir="/tmp") as folder:
        side = Side(Path(folder))
        yield side
        side.close()


def test_requests_reach_the_controller_with_their_fields(side: Side) -> None:
    """The only controller is found without a name; a law change carries the law."""
    assert ask(None, "status", side.folder)["status"]["mode"] == "ready"
    assert ask("arm", "law", side.folder, law="pid")["ok"]
    assert side.asked == [("status", None), ("law", "pid")]


def test_a_start_is_answered_when_the_mode_is_live(side: Side) -> None:
    """Not when the request was received: the loop decides."""
    assert ask(None, "start", side.folder)["ok"]
    assert [verb for verb, _ in side.asked] == ["start", "status"]


def test_an_estop_goes_by_the_flag_file_not_by_the_socket(side: Side) -> None:
    """The control socket sees nothing of it."""
    assert ask(None, "estop", side.folder)["ok"]
    assert side.asked == []


def test_what_goes_wrong_is_said_to_the_one_who_asked(side: Side) -> None:
    """An exception in the handler, another version, an unknown verb, no JSON, two parts: an answer each, and service goes on."""
    assert ask(None, "why", side.folder)["text"] == "RuntimeError: planted"
    texts = []
    with zmq.Context() as context, context.socket(zmq.REQ) as socket:
        socket.setsockopt(zmq.LINGER, 0)
        socket.connect(f"ipc://{control_path('arm', side.folder)}")
        for parts in ([b'{"version": 99, "verb": "status"}'], [b'{"version": 1, "verb": "dance"}'], [b"\xff"], [b"{}", b"{}"]):
            socket.send_multipart(parts)
            assert socket.poll(5000)
            texts.append(json.loads(socket.recv())["text"])
    assert texts[0] == "request: version must be 1, got 99. Use the rtctl that runs the controller."
    assert texts[1].startswith("request: verb must be one of ")
    assert texts[2:] == ["request: must be one JSON object, got something else."] * 2
    assert ask(None, "status", side.folder)["ok"]


def test_a_name_that_does_not_run_is_refused_with_those_that_do(side: Side) -> None:
    """And with none, how to start one."""
    with pytest.raises(SetupError) as caught:
        choose_name("leg", side.folder)
    assert str(caught.value) == 'controller "leg": must be one that runs, got arm running. Name one of them.'
    with tempfile.TemporaryDirectory() as empty, pytest.raises(SetupError) as caught:
        choose_name(None, Path(empty))
    assert str(caught.value) == "controller: must be running, got none of this user. Start one: rtctl run RUN"


def test_a_hanging_side_thread_is_a_bounded_wait_that_names_what_still_works(side: Side) -> None:
    """No answer within the time-out: the message says that stop and e-stop work without it."""
    side.end.set()
    side.thread.join()
    with pytest.raises(SetupError) as caught:
        ask("arm", "status", side.folder, timeout_s=0.1)
    assert str(caught.value) == (
        'controller "arm": must answer within 0.1 s, got nothing. '
        "Its side thread hangs; stop and estop work without it: rtctl ask stop"
    )
