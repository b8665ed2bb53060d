"""Waiting for the driver before the loop starts: a bounded time, and an error that says what was seen instead of a usable state."""

import time
from collections import Counter
from collections.abc import Callable
from dataclasses import dataclass, field

import numpy as np
import zmq

from rtctl.blocks import STATE, WIRE_VERSION
from rtctl.errors import Finding, RtctlError, SetupError, WireError
from rtctl.kernels.layout import OK, new_block
from rtctl.loop.plan import LoopPlan
from rtctl.wire.codec import decode_state
from rtctl.wire.refusals import VERSION, describe_refusal


@dataclass
class _Seen:
    """What came in while waiting for a usable state."""

    refused: Counter[str] = field(default_factory=Counter)
    versions: set[int] = field(default_factory=set)
    others: dict[tuple[int, int], int] = field(default_factory=dict)  # (arm key, joints) of other arms


def wait_for_driver(
    socket: "zmq.Socket[bytes]",
    plan: LoopPlan,
    stop: Callable[[], bool] = lambda: False,
) -> np.void:
    """The first valid state of the right arm, as a STATE block.

    Raises SetupError when nothing came within `plan.driver_wait_s`, WireError when only unusable messages came.
    """
    limits = plan.setup["limits"]
    wanted = (int(limits["arm_key"]), int(limits["n"]))
    state = new_block(STATE)
    seen = _Seen()
    end_s = time.monotonic() + plan.driver_wait_s
    while (left_s := end_s - time.monotonic()) > 0 and not stop():
        if not socket.poll(int(1000 * min(left_s, 0.05)) + 1):
            continue
        parts = socket.recv_multipart()
        if len(parts) > 1:
            seen.refused["parts: A message must be one part."] += 1
            continue
        status = int(decode_state(np.frombuffer(bytearray(parts[0] or b"\0"), np.uint8), len(parts[0]), state))
        if status == OK:
            got = (int(state["arm_key"]), int(state["n"]))
            if got == wanted:
                return state
            seen.others[got] = seen.others.get(got, 0) + 1
        else:
            seen.refused[describe_refusal(status)] += 1
            if status == VERSION:
                seen.versions.add(_version_of(parts[0]))
    raise _no_driver(plan, wanted, seen)


def _version_of(message: bytes) -> int:
    """The version a message says it has, -1 when it cannot be read."""
    import msgpack

    try:
        return int(msgpack.unpackb(message)[0])
    except (ValueError, TypeError, IndexError, msgpack.UnpackException):
        return -1


def _no_driver(plan: LoopPlan, wanted: tuple[int, int], seen: _Seen) -> RtctlError:
    """The error that says what was seen instead of a usable state."""
    arm = f'arm "{plan.arm_name}"' if plan.arm_name else "the arm"
    expected = f"a driver that sends states of {arm} within {plan.driver_wait_s:g} s"
    findings = []
    if seen.others:
        text = " and ".join(f"key {key} with {n} joints ({count} messages)" for (key, n), count in seen.others.items())
        findings.append(
            Finding(
                plan.state_endpoint,
                f"{expected} (key {wanted[0]}, {wanted[1]} joints)",
                f"states of another arm: {text}",
                "The arm file and the driver differ in arm name, joint order or units.",
                "Use the arm file of the arm that is connected.",
            )
        )
    if seen.versions:
        text = ", ".join(map(str, sorted(seen.versions)))
        findings.append(
            Finding(
                plan.state_endpoint,
                f"a driver that speaks version {WIRE_VERSION} of the messages",
                f"version {text}",
                next="Install the same version on both sides.",
            )
        )
    others = {text: count for text, count in seen.refused.items() if not (seen.versions and text == describe_refusal(VERSION))}
    if others:
        text = "; ".join(f"{count} x {reason}" for reason, count in others.items()).rstrip(".")
        findings.append(
            Finding(
                plan.state_endpoint, expected, f"messages that were refused: {text}", next="Check the driver against WIRE.md."
            )
        )
    if not findings:
        return SetupError.from_findings(
            [
                Finding(
                    plan.state_endpoint,
                    expected,
                    "no message",
                    "The driver is not running, or it publishes on another endpoint.",
                    "Start the driver, or the simulated arm with: rtctl sim RUN",
                )
            ]
        )
    return WireError.from_findings(findings)
