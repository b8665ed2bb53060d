"""What the live loop needs to be told before it starts, and which endpoints it accepts."""

from collections.abc import Callable, Mapping
from dataclasses import dataclass, field
from pathlib import Path
from typing import Any

import numpy as np

from rtctl.errors import ConfigError, Finding
from rtctl.loop.blocks import PACING_NAMES
from rtctl.record.ring import Ring

IPC_PATH_MAX = 107  # bytes of a local socket's path, sockaddr_un


@dataclass(frozen=True)
class CurveKeys:
    """Keys of an encrypted link, 40 characters each in the Z85 form of libzmq."""

    public: str
    secret: str
    driver_public: str


@dataclass(frozen=True)
class LoopPlan:
    """Everything the live loop needs, checked and ready. The arrays behind addresses must stay alive: `keep_alive`."""

    name: str  # of the run: names its flag file and its control socket
    setup: np.void  # SETUP
    laws: Mapping[str, np.void]  # law name to POINTERS, references included
    law: str  # in force at the start
    state_endpoint: str
    torque_endpoint: str
    arm_name: str = ""
    pacing: str = "timer"
    core: int | None = None  # of the hot thread; None = the last one this process may use
    priority: int = 80  # SCHED_FIFO, of the hot thread
    realtime: bool = True  # False: core, priority, latency and memory stay as they are, and nothing is reported missing
    driver_wait_s: float = 5.0
    ring: Ring | None = None
    start_recorder: Callable[[], Any] | None = None  # called once, after the compile; what it returns is kept
    curve: CurveKeys | None = None
    # What is wrong with the motion from a measured pose (n,), asked before every start; None = nothing is asked.
    check_start: Callable[[np.ndarray], list[Finding]] | None = None
    folder: Path | None = None  # of flag file and control socket; None = the runtime folder
    keep_alive: tuple[Any, ...] = field(default=(), repr=False)


def check_endpoints(plan: LoopPlan) -> None:
    """Refuse endpoints that would not be safe or cannot exist. Raises ConfigError with all problems."""
    findings = []
    for where, endpoint in (("state endpoint", plan.state_endpoint), ("torque endpoint", plan.torque_endpoint)):
        scheme, _, place = endpoint.partition("://")
        if scheme == "tcp":
            if plan.curve is None:
                findings.append(
                    Finding(
                        where,
                        "encrypted when it is reached over a network",
                        f"{endpoint} without keys",
                        next="Add the CURVE keys of both sides, or use ipc:// on this computer.",
                    )
                )
        elif scheme not in ("ipc", "inproc"):
            findings.append(Finding(where, "ipc://PATH or tcp://HOST:PORT", endpoint))
        elif scheme == "ipc" and len(place.encode()) > IPC_PATH_MAX:
            findings.append(
                Finding(
                    where, f"a path of at most {IPC_PATH_MAX} bytes", f"{len(place.encode())} bytes", next="Use a shorter folder."
                )
            )
    if plan.pacing not in PACING_NAMES:
        findings.append(Finding("pacing", " or ".join(PACING_NAMES), plan.pacing))
    if findings:
        raise ConfigError.from_findings(findings)
