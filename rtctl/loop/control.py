"""The control channel: requests and answers between `rtctl ask` and the side thread of a running controller.

One request, one answer, each a JSON object in one message, over a local socket in the folder of the user. Stop and e-stop do not
travel here but through the flag file: `ask` then imports the standard library only, and works with a dead side thread.
"""

import json
import time
from collections.abc import Callable, Mapping
from pathlib import Path
from typing import Any

from rtctl.errors import SetupError
from rtctl.loop.flags import WORDS, ask_by_flag, flags_path, running

CONTROL_VERSION = 1
REQUEST_BYTES_MAX = 4096
VERBS = ("start", "reset", "law", "status", "why")
START_WAIT_S = 1.0
Reply = dict[str, Any]


def control_path(name: str, folder: Path | None = None) -> Path:
    """Where the control socket of the controller `name` is."""
    return flags_path(name, folder).with_suffix(".control")


# ---- the controller's side ---------------------------------------------------------------------------------------------------


class ControlServer:
    """Answers requests on the control socket. One thread only."""

    def __init__(self, path: Path, handle: Callable[[str, Mapping[str, Any]], Reply]) -> None:
        """Bind. `handle(verb, request)` returns the answer's fields, among them `ok` and `text`."""
        import zmq

        self._handle = handle
        self._context = zmq.Context()
        self._socket = self._context.socket(zmq.REP)
        self._socket.setsockopt(zmq.LINGER, 0)
        self._socket.setsockopt(zmq.MAXMSGSIZE, REQUEST_BYTES_MAX)
        self._path = path
        try:
            self._socket.bind(f"ipc://{path}")
        except zmq.ZMQError as error:
            self._context.destroy(linger=0)
            raise SetupError(
                f"{path}: must be a place for the control socket, got {error}. Set XDG_RUNTIME_DIR to a shorter folder of yours."
            ) from None

    def serve(self, wait_ms: int) -> bool:
        """Answer at most one request, waiting at most so long for it. Returns True when there was one."""
        if not self._socket.poll(wait_ms):
            return False
        self._socket.send(json.dumps(self._answer(self._socket.recv_multipart())).encode())
        return True

    def _answer(self, parts: list[bytes]) -> Reply:
        """What a request gets: nothing that arrives here may end the side thread."""
        reply: Reply = {"version": CONTROL_VERSION, "ok": False, "text": ""}
        try:
            request = json.loads(parts[0]) if len(parts) == 1 else None
        except ValueError:
            request = None
        if not isinstance(request, dict):
            reply["text"] = "request: must be one JSON object, got something else."
        elif request.get("version") != CONTROL_VERSION:
            reply["text"] = (
                f"request: version must be {CONTROL_VERSION}, got {request.get('version')}. Use the rtctl that runs the controller."
            )
        elif request.get("verb") not in VERBS:
            reply["text"] = f"request: verb must be one of {', '.join(VERBS)}, got {request.get('verb')}."
        else:
            try:
                reply |= self._handle(request["verb"], request)
            except Exception as error:  # said to the one who asked; the heartbeat must go on
                reply["text"] = f"{type(error).__name__}: {error}"
        return reply

    def close(self) -> None:
        """Close and remove the socket."""
        self._context.destroy(linger=0)
        self._path.unlink(missing_ok=True)


# ---- the asking side ---------------------------------------------------------------------------------------------------------


def choose_name(name: str | None, folder: Path | None = None) -> str:
    """The named controller, or the only one that runs. Raises SetupError when that is none or not clear."""
    names = running(folder)
    if name is not None and name in names:
        return name
    if name is None and len(names) == 1:
        return names[0]
    what = f'controller "{name}"' if name is not None else "controller"
    if not names:
        raise SetupError(f"{what}: must be running, got none of this user. Start one: rtctl run RUN")
    raise SetupError(f"{what}: must be one that runs, got {', '.join(names)} running. Name one of them.")


def ask(name: str | None, verb: str, folder: Path | None = None, timeout_s: float = 2.0, **fields: Any) -> Reply:
    """Ask a running controller: `stop`, `stop_release`, `estop`, `start`, `reset`, `law` (law=NAME), `status`, `why`.

    Returns the answer: `ok`, `text`, and what the verb brings. Raises SetupError when no controller answers.
    """
    chosen = choose_name(name, folder)
    if verb in WORDS:
        taken = ask_by_flag(chosen, verb, folder, wait_s=timeout_s)
        text = "" if taken else "The loop did not take the request. Use the hardware emergency stop."
        return {"version": CONTROL_VERSION, "ok": taken, "text": text}
    reply = _exchange(chosen, verb, folder, timeout_s, fields)
    if verb == "start" and reply["ok"]:
        reply = _await_start(chosen, folder, timeout_s)
    return reply


def _await_start(name: str, folder: Path | None, timeout_s: float) -> Reply:
    """Whether the start was accepted: the loop decides, in its next cycles."""
    end_s = time.monotonic() + START_WAIT_S
    while True:
        reply = _exchange(name, "status", folder, timeout_s, {})
        if reply["status"]["mode"] == "live":
            return reply
        if time.monotonic() > end_s:
            return {**reply, "ok": False, "text": " ".join(reply["why_no_start"])}
        time.sleep(0.01)


def _exchange(name: str, verb: str, folder: Path | None, timeout_s: float, fields: Mapping[str, Any]) -> Reply:
    import zmq

    with zmq.Context() as context, context.socket(zmq.REQ) as socket:
        socket.setsockopt(zmq.LINGER, 0)
        socket.connect(f"ipc://{control_path(name, folder)}")
        socket.send(json.dumps({"version": CONTROL_VERSION, "verb": verb, **fields}).encode())
        if not socket.poll(int(timeout_s * 1000)):
            raise SetupError(
                f'controller "{name}": must answer within {timeout_s:g} s, got nothing. '
                "Its side thread hangs; stop and estop work without it: rtctl ask stop"
            )
        reply = json.loads(socket.recv())
    if not isinstance(reply, dict) or reply.get("version") != CONTROL_VERSION:
        raise SetupError(
            f'controller "{name}": must answer in version {CONTROL_VERSION}, got another. Use the rtctl that runs it.'
        )
    return reply
