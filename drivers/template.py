"""A driver for hardware in plain Python: copy this file, fill in the three places marked FILL IN, set the numbers of your arm.

As it stands it moves a toy: one joint, a pure inertia with a brake. `python -m rtctl_drivers.template --demo` (in a checkout:
`python drivers/template.py --demo`) publishes its states and obeys torque messages, with the full duty of `WIRE.md`.
`Duty` holds every rule and needs no socket and no clock; `main` is the bus cycle around it. Needs pyzmq and msgpack only.

This is not a safety-rated control. Before the first torque on hardware: drive limits set low, brakes tested, the hardware emergency
stop within reach and tried, nobody in the arm's reach; the risk assessment and the standards that apply come first.
"""

import argparse
import fcntl
import hashlib
import math
import os
import secrets
import signal
import sys
import time
import zlib
from collections import Counter
from typing import Any

import msgpack
import zmq

# ---- your arm: the same names, order and units as in its arm file; numbers from the data sheets --------------------------------

ARM_NAME = "toy"
JOINTS = (("joint1", "rad"),)  # "rad" or "m"
TAU_MAX = (20.0,)  # N m (N), the driver's own limit: torque beyond it is refused
QD_MAX = (6.0,)  # rad/s (m/s), the driver's own limit: beyond it the grant ends
STILL_QD = (0.02,)  # rad/s, below it a joint is still
REST_DAMPING = (4.0,)  # N m s/rad, moving part of the rest policy
REST_MOVING_NS = 2_000_000_000  # after this time the brakes close even if a joint still moves
HAS_BRAKE = True  # still part of the rest policy: brakes; False: no torque (an arm that gravity does not move)
BRAKE_OPEN_NS, BRAKE_CLOSE_NS = 30_000_000, 50_000_000  # until an opened brake is free, until a closed one holds
VALID_MAX_NS = 20_000_000  # longest time a torque counts, from the sample it answers
SILENT_MAX_NS = 200_000_000  # a holder that has not driven yet and is silent for longer loses the grant
STILL_DWELL_NS = 50_000_000
PERIOD_NS = 1_000_000
SIMULATED = True  # False on hardware: `--demo` is then refused

START_NS = time.monotonic_ns()


def clock_ns() -> int:
    """The driver's monotonic clock, counted from its start: counters end at 2^53 ns, 104 days, and computers run for longer."""
    return time.monotonic_ns() - START_NS


class Bus:
    """The three places to fill in. Positive torque accelerates positive motion; all values are on the link side of the gear."""

    def __init__(self) -> None:
        self.q, self.qd, self.tau, self.braked, self.last_ns = 0.0, 0.0, 0.0, True, clock_ns()

    def read_joints(self) -> tuple[list[float], list[float], list[float], int]:
        """FILL IN 1: q, qd, measured torque (or an empty list) and the drives' status bits ENABLED, FAULT, STOP_CHAIN_CLOSED."""
        now_ns = clock_ns()
        dt_s, self.last_ns = 1e-9 * (now_ns - self.last_ns), now_ns
        self.qd = 0.0 if self.braked else self.qd + dt_s * self.tau / 0.5  # a toy: 0.5 kg m^2 and nothing else
        self.q += dt_s * self.qd
        return [self.q], [self.qd], [self.tau], ENABLED | STOP_CHAIN_CLOSED

    def write_torques(self, tau: list[float]) -> None:
        """FILL IN 2: hand the torques to the drives, N m (N). Called in every bus cycle."""
        self.tau = tau[0]

    def set_brake(self, closed: bool) -> None:
        """FILL IN 3: close or open the brakes of all joints. Called in every bus cycle."""
        self.braked = closed


# ---- duty: nothing below needs a change ----------------------------------------------------------------------------------------

ENABLED, BRAKE, FAULT, STOP_CHAIN_CLOSED, GRAVITY_ADDED, SIMULATED_BIT = 1, 2, 4, 8, 16, 32
ASK, DRIVE, RELEASE = 0, 1, 2
HISTORY = 256  # states whose sample time is remembered
DRAIN_MAX = 64
N = len(JOINTS)


def arm_key(name: str, joints: tuple[tuple[str, str], ...]) -> int:
    """First 6 bytes of the SHA-256 of the arm's name and of each joint's name and unit, one line each."""
    text = "\n".join([name, *(f"{joint} {unit}" for joint, unit in joints)])
    return int.from_bytes(hashlib.sha256(text.encode()).digest()[:6], "big")


class Refused(Exception):
    """A message that does not count, and why."""


def unpack_torque(data: bytes) -> list[Any]:
    """The eleven elements before the CRC of a torque message. Raises Refused."""
    if not 1 <= len(data) <= 1024:
        raise Refused("length")
    unpacker = msgpack.Unpacker(max_buffer_size=1024)
    unpacker.feed(data)
    try:
        count = unpacker.read_array_header()
        items = [unpacker.unpack() for _ in range(min(count, 12) - 1)]
        end = unpacker.tell()
        crc = unpacker.unpack()
        whole = unpacker.tell() == len(data)
    except (ValueError, msgpack.UnpackException):
        raise Refused("form") from None
    if not items or items[0] != 1:
        raise Refused("version")
    if count != 12 or not whole or not all(type(item) is int and 0 <= item < 2**53 for item in items[:10]) or items[1] != 2:
        raise Refused("form")
    if type(crc) is not int or crc != zlib.crc32(data[:end]):
        raise Refused("crc")
    tau = items[10]
    if not isinstance(tau, list) or len(tau) != N or not all(type(x) in (int, float) for x in tau):
        raise Refused("length of tau")
    return items


class Duty:
    """Grant, age, limits, rest policy, brakes and echo: what a driver owes a controller, without socket and clock."""

    def __init__(self, session: int, now_ns: int) -> None:
        self.session, self.key = session, arm_key(ARM_NAME, JOINTS)
        self.sequence, self.sample_ns = 0, [0] * HISTORY
        self.holder, self.grant, self.heard_ns = 0, 0, 0
        self.received, self.applied = (0, 0), (0, 0)  # (session, sequence)
        self.tau, self.deadline_ns, self.kept = [0.0] * N, 0, False
        self.phase, self.phase_ns = "moving", now_ns  # moving, closing, still: rest policy; drive: the holder's torque
        self.moved_ns, self.powered, self.bits = now_ns, False, 0
        self.refused: Counter[str] = Counter()

    def receive(self, data: bytes, now_ns: int, only_release: bool = False) -> bool:
        """Take one message; True if it counts. `only_release`: the queue was flooded and nothing else may be used."""
        try:
            self._judge(unpack_torque(data), now_ns, only_release)
        except Refused as why:
            self.refused[str(why)] += 1
            return False
        return True

    def _judge(self, items: list[Any], now_ns: int, only_release: bool) -> None:
        _, _, key, session, sequence, driver_session, _, _, request, _, _ = items
        if key != self.key or session == 0 or driver_session != self.session:
            raise Refused("identity")
        self._check_lapse(now_ns)  # first: a torque that comes too late must not revive its grant
        if self.holder not in (0, session):
            raise Refused("holder")
        if session == self.received[0] and sequence <= self.received[1]:
            raise Refused("sequence")
        if only_release and request != RELEASE:
            raise Refused("flooded")
        self.received, self.heard_ns = (session, sequence), now_ns
        if request == ASK and self.holder == 0 and self.phase == "still" and self.powered and self._still(now_ns):
            self.grant, self.holder = self.grant + 1, session
        elif request == RELEASE and self.holder:
            self.end_grant(now_ns, kept=self._still(now_ns))
        elif request == DRIVE:
            self._judge_drive(items, now_ns)
        elif request > RELEASE:
            raise Refused("request")

    def _judge_drive(self, items: list[Any], now_ns: int) -> None:
        _, _, _, session, sequence, _, answered, grant, _, valid_for_ns, tau = items
        if self.holder == 0 or grant != self.grant:
            raise Refused("grant")
        if not (1 <= answered <= self.sequence and self.sequence - answered < HISTORY):
            raise Refused("answered state")
        deadline_ns = self.sample_ns[answered % HISTORY] + min(valid_for_ns, VALID_MAX_NS)
        if now_ns >= deadline_ns:
            raise Refused("age")
        if not all(-limit <= x <= limit for x, limit in zip(tau, TAU_MAX, strict=True)):  # also catches not-a-number
            raise Refused("limit")
        self.tau, self.deadline_ns, self.applied = [float(x) for x in tau], deadline_ns, (session, sequence)
        if self.phase != "drive":
            self.phase, self.phase_ns = "drive", now_ns

    def _still(self, now_ns: int) -> bool:
        return now_ns - self.moved_ns >= STILL_DWELL_NS

    def _braking(self, now_ns: int) -> bool:
        """True while the brakes hold."""
        return HAS_BRAKE and (self.phase == "still" or self.phase == "drive" and now_ns - self.phase_ns < BRAKE_OPEN_NS)

    def end_grant(self, now_ns: int, kept: bool = False) -> None:
        """The number is over for good; the rest policy takes over. `kept`: the last torque bridges the closing brakes."""
        self.holder, self.kept = 0, kept
        if self.phase == "drive":
            self.phase, self.phase_ns = "moving", now_ns

    def _check_lapse(self, now_ns: int) -> None:
        silent = self.phase != "drive" and now_ns - self.heard_ns >= SILENT_MAX_NS
        if self.holder and (silent or self.phase == "drive" and now_ns >= self.deadline_ns):
            self.end_grant(now_ns)

    def step(self, q: list[float], qd: list[float], status: int, now_ns: int) -> tuple[list[float], bool]:
        """One bus cycle: (torques to write, brake closed), from a fresh measurement and the drives' status bits."""
        finite = all(map(math.isfinite, [*q, *qd]))
        if not all(abs(x) <= still for x, still in zip(qd, STILL_QD, strict=True)):
            self.moved_ns = now_ns
        self.powered = finite and status & (ENABLED | FAULT | STOP_CHAIN_CLOSED) == ENABLED | STOP_CHAIN_CLOSED
        self._check_lapse(now_ns)
        if self.holder and not (self.powered and all(abs(x) <= limit for x, limit in zip(qd, QD_MAX, strict=True))):
            self.end_grant(now_ns)
        rested = self._still(now_ns) or now_ns - self.phase_ns >= REST_MOVING_NS or not self.powered
        if self.phase == "moving" and rested:
            self.phase, self.phase_ns = "closing" if HAS_BRAKE else "still", now_ns
        elif self.phase == "closing" and now_ns - self.phase_ns >= BRAKE_CLOSE_NS:
            self.phase, self.phase_ns = "still", now_ns
        self.bits = status | (BRAKE if self._braking(now_ns) else 0) | (SIMULATED_BIT if SIMULATED else 0)
        return self._torque(qd), HAS_BRAKE and self.phase in ("closing", "still")

    def _torque(self, qd: list[float]) -> list[float]:
        if not self.powered or self.phase == "still":
            return [0.0] * N
        if self.phase == "drive" or (self.phase == "closing" and self.kept):
            return self.tau
        return [max(-limit, min(limit, -d * x)) for x, d, limit in zip(qd, REST_DAMPING, TAU_MAX, strict=True)]

    def state(self, q: list[float], qd: list[float], tau: list[float], sample_ns: int) -> bytes:
        """The next state message. `sample_ns` is when q and qd were measured, in this driver's monotonic clock."""
        self.sequence += 1
        self.sample_ns[self.sequence % HISTORY] = sample_ns
        items = [1, 1, self.key, self.session, self.sequence, sample_ns, self.holder, self.grant]
        body = msgpack.packb([*items, *self.received, *self.applied, self.bits, q, qd, tau, {}, 0])[:-1]
        return bytes(body + msgpack.packb(zlib.crc32(body)))


# ---- sockets and time ----------------------------------------------------------------------------------------------------------


def bind(context: zmq.Context[Any], kind: int, endpoint: str) -> zmq.Socket[Any]:
    """A bound socket. One lock file per endpoint, held until the process ends: libzmq would take it over from a running driver."""
    if not endpoint.startswith("ipc:///"):
        raise SystemExit(
            f"{endpoint}: must be ipc:///..., which stays on this computer; TCP would need keys and a list of clients."
        )
    folder = os.path.dirname(endpoint.removeprefix("ipc://"))
    os.makedirs(folder, mode=0o700, exist_ok=True)
    info = os.stat(folder)
    if info.st_uid != os.getuid() or info.st_mode & 0o077:
        raise SystemExit(f"{endpoint}: must be in a folder only this user can enter. Run: chmod 700 {folder}")
    lock = os.open(endpoint.removeprefix("ipc://") + ".lock", os.O_CREAT | os.O_RDWR | os.O_CLOEXEC, 0o600)
    try:
        fcntl.flock(lock, fcntl.LOCK_EX | fcntl.LOCK_NB)
    except BlockingIOError:
        raise SystemExit(f"{endpoint}: is in use by another driver. End that one first.") from None
    bound: zmq.Socket[Any] = context.socket(kind)
    bound.linger, bound.sndhwm, bound.rcvhwm, bound.maxmsgsize = 0, 4, 4, 1024
    bound.bind(endpoint)
    return bound


def drain(torques: zmq.Socket[Any], duty: Duty) -> None:
    """Take everything that waits. If more than DRAIN_MAX messages wait, only a release among them counts."""
    messages: list[bytes] = []
    while len(messages) < DRAIN_MAX and torques.poll(0):
        parts = torques.recv_multipart()
        messages.append(parts[0] if len(parts) == 1 else b"")
    for message in messages:
        duty.receive(message, clock_ns(), only_release=len(messages) == DRAIN_MAX)


def main() -> int:
    """Run the bus cycle until a signal or `--seconds`; then let the rest policy bring the arm to rest, and end."""
    runtime = os.environ.get("XDG_RUNTIME_DIR")
    folder = f"{runtime}/rtctl" if runtime else f"{os.environ.get('TMPDIR') or '/tmp'}/rtctl-{os.getuid()}"
    options = argparse.ArgumentParser(description="Driver template: a toy joint that obeys torque messages.")
    options.add_argument("--demo", action="store_true", help="run the toy joint")
    options.add_argument("--state", default=f"ipc://{folder}/toy-state", help="endpoint of the state messages")
    options.add_argument("--torque", default=f"ipc://{folder}/toy-torque", help="endpoint of the torque messages")
    options.add_argument("--seconds", type=float, default=math.inf)
    chosen = options.parse_args()
    if chosen.demo != SIMULATED:
        options.error("--demo must be given as long as SIMULATED is True, and only then")

    ended: list[int] = []
    for number in (signal.SIGINT, signal.SIGTERM, signal.SIGHUP):
        signal.signal(number, lambda number, frame: ended.append(number))
    context: zmq.Context[Any] = zmq.Context()
    states = bind(context, zmq.PUB, chosen.state)
    torques = bind(context, zmq.PULL, chosen.torque)
    begin_ns = deadline_ns = clock_ns()
    bus, duty = Bus(), Duty(1 + secrets.randbelow(2**53 - 1), begin_ns)
    print(f"arm key {duty.key}, states on {chosen.state}, torques on {chosen.torque}", flush=True)
    try:
        while not (ended and duty.phase == "still"):
            drain(torques, duty)
            sample_ns = clock_ns()
            q, qd, tau, status = bus.read_joints()
            if ended or sample_ns - begin_ns > 1e9 * chosen.seconds:
                ended.append(0)
                duty.end_grant(sample_ns)
            command, braked = duty.step(q, qd, status, sample_ns)
            bus.write_torques(command)
            bus.set_brake(braked)
            states.send(duty.state(q, qd, tau, sample_ns), zmq.NOBLOCK)
            deadline_ns += PERIOD_NS * max(1, math.ceil((clock_ns() - deadline_ns) / PERIOD_NS))  # late: skip, no burst
            time.sleep(max(0, deadline_ns - clock_ns()) * 1e-9)
    finally:  # whatever fails above: brakes first, then no torque
        bus.set_brake(HAS_BRAKE)
        bus.write_torques([0.0] * N)
    context.destroy()
    print("refused messages:", dict(duty.refused) or "none")
    return 0


if __name__ == "__main__":
    sys.exit(main())
