"""The driver template: its duty rule by rule on a stepped clock, and once as a process with real sockets."""

import os
import shutil
import signal
import subprocess
import sys
import tempfile
import zlib
from pathlib import Path

import msgpack
import numpy as np
import pytest
import zmq

from drivers import template
from drivers.template import ASK, BRAKE, DRIVE, ENABLED, FAULT, RELEASE, STOP_CHAIN_CLOSED, Duty
from rtctl.blocks import STATE, STATUS_SIMULATED
from rtctl.kernels.layout import OK, new_block
from rtctl.wire.codec import decode_state
from tests.messages import array_header, bytes_in, integer_forms, joined, number_forms, packed

MS = 1_000_000
HEALTHY = ENABLED | STOP_CHAIN_CLOSED
ME, OTHER, DRIVER = 1001, 2002, 77


class Stand:
    """A Duty with a bus cycle of 1 ms by hand, and a controller that answers its newest state."""

    def __init__(self):
        self.now_ns = 10_000 * MS
        self.duty = Duty(DRIVER, self.now_ns)
        self.sequence = 0
        self.qd = 0.0
        self.status = HEALTHY
        self.cycle()

    def cycle(self, count=1):
        """`count` bus cycles; the last command."""
        for _ in range(count):
            self.now_ns += MS
            self.command, self.closed = self.duty.step([0.1], [self.qd], self.status, self.now_ns)
            self.state = decoded(self.duty.state([0.1], [self.qd], [], self.now_ns))
        return self.command[0]

    def message(self, wanted, value=0.0, **changes):
        """A torque message that answers the newest state; `changes` replace fields."""
        self.sequence += 1
        fields = {
            "version": 1,
            "kind": 2,
            "arm_key": self.duty.key,
            "session": ME,
            "sequence": self.sequence,
            "driver_session": DRIVER,
            "state_sequence": self.duty.sequence,
            "grant": self.duty.grant,
            "request": wanted,
            "valid_for_ns": 10 * MS,
            "tau": [value],
        }
        return packed(list((fields | changes).values()))

    def send(self, wanted, value=0.0, **changes):
        """Send one message now; True if it counts."""
        return self.duty.receive(self.message(wanted, value, **changes), self.now_ns)

    def at_rest(self):
        """Brakes closed, joints still, nobody holds the grant."""
        self.cycle(200)
        assert self.duty.phase == "still"
        return self

    def granted(self):
        """This controller holds the grant and has not driven yet."""
        self.at_rest()
        assert self.send(ASK)
        assert self.duty.holder == ME
        return self

    def driving(self, tau=3.0):
        """This controller drives and the brakes are open."""
        self.granted()
        for _ in range(60):
            assert self.send(DRIVE, tau)
            self.cycle()
        assert self.state["status"] & BRAKE == 0
        return self


def decoded(data):
    """The state message as a block, by the compiled decoder."""
    state = new_block(STATE)
    assert decode_state(bytes_in(data), len(data), state) == OK
    return state


@pytest.fixture
def stand():
    """A driver just started."""
    return Stand()


def test_states_are_published_from_the_start(stand):
    """Before any controller speaks, states count up, carry the sample time and say who holds the grant: nobody."""
    first = stand.state
    stand.cycle()
    state = stand.state
    assert (state["arm_key"], state["session"], state["n"], state["tau_count"]) == (stand.duty.key, DRIVER, 1, 0)
    assert (state["sequence"], state["sample_ns"]) == (first["sequence"] + 1, first["sample_ns"] + MS)
    assert (state["holder"], state["grant"], state["received_session"], state["applied_session"]) == (0, 0, 0, 0)
    assert state["status"] == HEALTHY | STATUS_SIMULATED


def test_a_new_driver_comes_to_rest_by_itself(stand):
    """Without any message the joints are damped, then the brakes close, and the status says what holds."""
    stand.qd = 0.5
    assert stand.cycle(10) == pytest.approx(-template.REST_DAMPING[0] * 0.5, abs=0)
    assert not stand.closed
    stand.qd = 0.0
    stand.cycle(60)
    assert (stand.duty.phase, stand.closed, stand.state["status"] & BRAKE) == ("closing", True, 0)
    stand.cycle(60)
    assert (stand.duty.phase, stand.closed, stand.state["status"] & BRAKE) == ("still", True, BRAKE)
    assert stand.command == [0.0]


def test_damping_is_bounded_and_ends_after_its_time(stand):
    """A joint that does not come to rest is damped within the torque limit; after the stated time the brakes close anyway."""
    stand.qd = 100.0
    assert stand.cycle(100) == -template.TAU_MAX[0]
    stand.cycle(template.REST_MOVING_NS // MS)
    assert stand.closed


def test_the_grant_needs_an_ask_at_rest(stand):
    """`ask` is answered with a numbered grant only at rest; `drive` and `release` never earn one."""
    assert stand.send(ASK)
    assert stand.duty.holder == 0  # still moving into the rest policy
    stand.at_rest()
    assert not stand.send(DRIVE, 1.0, grant=0)
    assert stand.send(RELEASE)
    assert stand.duty.holder == 0
    assert stand.send(ASK)
    stand.cycle()
    assert (stand.state["holder"], stand.state["grant"]) == (ME, 1)
    assert stand.command == [0.0]
    assert stand.closed


@pytest.mark.parametrize("status", [0, ENABLED, STOP_CHAIN_CLOSED, HEALTHY | FAULT])
def test_no_grant_without_healthy_drives(stand, status):
    """Drives without enable, with a fault or with an open stop chain get no grant."""
    stand.status = status
    stand.at_rest()
    assert stand.send(ASK)
    assert stand.duty.holder == 0


def test_no_grant_while_a_joint_moves(stand):
    """A joint that creeps although the brakes are closed keeps the grant away."""
    stand.at_rest()
    stand.qd = 0.03
    stand.cycle()
    stand.send(ASK)
    assert stand.duty.holder == 0


def test_a_second_controller_gets_nothing(stand):
    """While somebody holds the grant, another session's messages are refused and not echoed."""
    stand.driving()
    received = stand.duty.received
    for request in (ASK, DRIVE, RELEASE):
        assert not stand.send(request, 1.0, session=OTHER)
    stand.cycle()
    assert stand.duty.refused["holder"] == 3
    assert (stand.duty.holder, stand.duty.received, stand.command) == (ME, received, [3.0])


def test_torque_overlaps_with_the_opening_brake(stand):
    """The first accepted `drive` opens the brake and acts at once; the status says closed until the brake is free."""
    stand.granted()
    for k in range(40):
        assert stand.send(DRIVE, 3.0)
        assert stand.cycle() == 3.0
        assert not stand.closed
        assert bool(stand.state["status"] & BRAKE) == ((k + 1) * MS < template.BRAKE_OPEN_NS)


def test_the_echo_shows_received_and_applied(stand):
    """The newest message is echoed as received even when its torque is refused; applied is the one that acts."""
    stand.driving()
    applied = stand.sequence
    assert not stand.send(DRIVE, 1e6)
    assert stand.cycle() == 3.0
    assert (stand.state["received_session"], stand.state["received_sequence"]) == (ME, applied + 1)
    assert (stand.state["applied_session"], stand.state["applied_sequence"]) == (ME, applied)


@pytest.mark.parametrize(
    ("changes", "reason"),
    [
        ({"version": 2}, "version"),
        ({"kind": 1}, "form"),
        ({"arm_key": 5}, "identity"),
        ({"session": 0}, "identity"),
        ({"driver_session": DRIVER + 1}, "identity"),
        ({"sequence": 1}, "sequence"),
        ({"state_sequence": 0}, "answered state"),
        ({"state_sequence": 10**6}, "answered state"),
        ({"grant": 0}, "grant"),
        ({"grant": 2}, "grant"),
        ({"request": 3}, "request"),
        ({"valid_for_ns": 0}, "age"),
        ({"valid_for_ns": -1}, "form"),
        ({"valid_for_ns": 1e6}, "form"),
        ({"grant": True}, "form"),
        ({"tau": []}, "length of tau"),
        ({"tau": [1.0, 1.0]}, "length of tau"),
        ({"tau": [None]}, "length of tau"),
        ({"tau": 1.0}, "length of tau"),
        ({"tau": [float("nan")]}, "limit"),
        ({"tau": [float("inf")]}, "limit"),
        ({"tau": [20.000001]}, "limit"),
        ({"tau": [-20.000001]}, "limit"),
    ],
)
def test_a_drive_that_breaks_one_rule_is_refused(stand, changes, reason):
    """Each rule refuses by itself, is counted, and leaves the last valid torque in force until it runs out."""
    stand.driving()
    assert not stand.send(DRIVE, 5.0, **changes)
    assert stand.duty.refused == {reason: 1}
    assert stand.cycle() == 3.0
    assert stand.send(DRIVE, 5.0)
    assert stand.cycle() == 5.0


def test_a_repeated_message_is_refused(stand):
    """The same bytes a second time do not count: an equal sequence is an old one."""
    stand.driving()
    message = stand.message(DRIVE, 5.0)
    assert stand.duty.receive(message, stand.now_ns)
    assert not stand.duty.receive(message, stand.now_ns)
    assert stand.duty.refused == {"sequence": 1}


def test_a_state_too_long_ago_is_not_mistaken_for_a_fresh_one(stand):
    """An answered state whose sample time is forgotten is refused, although a newer state has taken its place in the list."""
    stand.granted()
    for _ in range(300):
        stand.send(ASK)
        stand.cycle()
    assert not stand.send(DRIVE, 5.0, state_sequence=stand.duty.sequence - template.HISTORY)
    assert stand.duty.refused == {"answered state": 1}


def test_a_damaged_frame_is_refused(stand):
    """A wrong CRC, a byte behind the message and a message in another shape are refused and counted."""
    stand.driving()
    message = stand.message(DRIVE, 5.0)
    for data, reason in (
        (message[:-1] + bytes([message[-1] ^ 1]), "crc"),
        (message + b"\x00", "form"),
        (message[:-1], "form"),
        (b"", "length"),
        (bytes(1025), "length"),
        (b"\xc0", "form"),
        (b"\x90", "form"),
        (msgpack.packb([1] * 13), "form"),
    ):
        stand.duty.refused.clear()
        assert not stand.duty.receive(data, stand.now_ns)
        assert stand.duty.refused == {reason: 1}
    assert stand.duty.receive(message, stand.now_ns)


def test_validity_runs_from_the_answered_sample(stand):
    """A torque counts until sample time plus the smaller of valid-for and the driver's maximum, however late it was sent."""
    stand.driving()
    sample_ns = stand.now_ns
    for valid_ns, end_ns in ((10 * MS, 10 * MS), (10**12, template.VALID_MAX_NS)):
        for age_ns, counts in ((end_ns - 1, True), (end_ns, False)):
            stand = Stand().driving()
            sample_ns = stand.duty.sample_ns[stand.duty.sequence % template.HISTORY]
            stand.duty.deadline_ns = sample_ns + 10**12  # keep the grant alive while time passes
            message = stand.message(DRIVE, 5.0, valid_for_ns=valid_ns)
            assert stand.duty.receive(message, sample_ns + age_ns) == counts
            assert stand.duty.refused["age"] == (not counts)


def test_a_lapse_ends_the_grant_for_good(stand):
    """When torque runs out the rest policy starts by itself; the old number never counts again, a new grant has a new one."""
    stand.driving()
    assert stand.cycle(8) == 3.0
    stand.qd = 0.5
    assert stand.cycle(3) == pytest.approx(-template.REST_DAMPING[0] * 0.5, abs=0)
    assert stand.state["holder"] == 0
    assert not stand.send(DRIVE, 3.0)
    assert not stand.send(DRIVE, 3.0, grant=1)
    stand.send(ASK)
    assert stand.duty.holder == 0
    stand.qd = 0.0
    stand.at_rest()
    stand.send(ASK)
    assert (stand.duty.holder, stand.duty.grant) == (ME, 2)
    assert not stand.send(DRIVE, 3.0, grant=1)


def test_a_late_torque_does_not_revive_its_grant(stand):
    """A torque that answers a fresh state but comes after the lapse is refused, even between two bus cycles."""
    stand.driving()
    stand.now_ns += 11 * MS
    stand.duty.state([0.1], [0.0], [], stand.now_ns)
    assert not stand.send(DRIVE, 5.0)
    assert stand.duty.holder == 0


def test_asking_does_not_keep_torque_alive(stand):
    """A holder that has driven and only asks loses its grant like one that is silent."""
    stand.driving()
    for _ in range(12):
        stand.send(ASK)
        stand.cycle()
    assert stand.duty.holder == 0


def test_a_silent_holder_loses_the_grant(stand):
    """A holder that has not driven keeps the grant by asking, and loses it when it is silent."""
    stand.granted()
    for _ in range(300):
        stand.send(ASK)
        stand.cycle()
    assert (stand.duty.holder, stand.duty.grant) == (ME, 1)
    stand.cycle(template.SILENT_MAX_NS // MS)
    assert stand.duty.holder == 0


def test_release_at_rest_keeps_torque_until_the_brake_holds(stand):
    """An arm released at rest does not drop: the last torque stays until the closing brakes hold."""
    stand.driving()
    assert stand.send(RELEASE)
    assert stand.duty.holder == 0
    for _ in range(template.BRAKE_CLOSE_NS // MS):
        assert stand.cycle() == 3.0
        assert stand.closed
        assert stand.state["status"] & BRAKE == 0
    assert stand.cycle() == 0.0
    assert stand.state["status"] & BRAKE == BRAKE


def test_release_in_motion_damps_first(stand):
    """Brakes never close on a moving joint: a release in motion is damped until the joint is still."""
    stand.driving()
    stand.qd = 0.5
    stand.send(DRIVE, 3.0)
    stand.cycle()
    assert stand.send(RELEASE, valid_for_ns=0, grant=0, state_sequence=0)
    assert stand.cycle() == pytest.approx(-template.REST_DAMPING[0] * 0.5, abs=0)
    assert not stand.closed
    stand.qd = 0.0
    stand.cycle(60)
    assert (stand.duty.phase, stand.closed) == ("closing", True)
    assert stand.command == [0.0]  # the torque from the motion is not kept


@pytest.mark.parametrize("trouble", ["fault", "not enabled", "stop chain", "position", "velocity"])
def test_lost_power_or_measurement_ends_torque_at_once(stand, trouble):
    """With a fault, a lost enable, an open chain or no measurement: no torque, brakes close, the grant is over."""
    stand.driving()
    status = {"fault": HEALTHY | FAULT, "not enabled": STOP_CHAIN_CLOSED, "stop chain": ENABLED}.get(trouble, HEALTHY)
    q = float("nan") if trouble == "position" else 0.1
    qd = float("nan") if trouble == "velocity" else 0.0
    assert stand.send(DRIVE, 3.0)
    assert stand.duty.step([q], [qd], status, stand.now_ns + MS) == ([0.0], True)
    assert stand.duty.holder == 0


def test_overspeed_ends_the_grant(stand):
    """Beyond the driver's own speed limit the rest policy takes over."""
    stand.driving()
    stand.send(DRIVE, 3.0)
    stand.qd = template.QD_MAX[0] * 1.001
    assert stand.cycle() == -template.TAU_MAX[0]
    assert stand.duty.holder == 0


def test_only_a_release_counts_in_a_flood(stand):
    """When the drain bound is reached nothing is used but a release."""
    stand.driving()
    assert not stand.duty.receive(stand.message(DRIVE, 5.0), stand.now_ns, only_release=True)
    assert stand.cycle() == 3.0
    assert stand.duty.receive(stand.message(RELEASE), stand.now_ns, only_release=True)
    assert stand.duty.holder == 0


def test_every_legal_form_is_understood(stand):
    """A controller may write counters and torques in any MessagePack form."""
    stand.driving()
    for k in range(12):
        items = msgpack.unpackb(stand.message(DRIVE, 4.0))[:-1]
        elements = [forms[k % len(forms)] for forms in map(integer_forms, items[:-1])]
        forms = number_forms(4.0)
        elements.append(array_header(1, bool(k % 2)) + forms[k % len(forms)])
        assert stand.duty.receive(joined(elements, crc_form=k, wide=bool(k % 2)), stand.now_ns), stand.duty.refused
        assert stand.cycle() == 4.0


@pytest.mark.slow
def test_hostile_bytes_are_counted_and_never_act():
    """Of 3,000 seeded damaged, cut and resealed messages none raises, and none brings out a torque beyond the limit."""
    rng = np.random.default_rng(7)
    stand = Stand().driving()
    for k in range(3_000):
        if not stand.send(DRIVE, 3.0):
            stand = Stand().driving()  # a resealed message was legal: it raised the sequence or released
        data = bytearray(stand.message(DRIVE, 19.0))
        if k % 2:
            del data[-5:]  # the CRC
        for _ in range(int(rng.integers(1, 4))):
            data[int(rng.integers(len(data)))] ^= int(rng.integers(1, 256))
        if k % 4 == 3:
            data = data[: int(rng.integers(1, len(data)))]
        if k % 2:
            data += msgpack.packb(zlib.crc32(data))
        counted = stand.duty.receive(bytes(data), stand.now_ns)
        assert k % 2 or not counted
        assert -template.TAU_MAX[0] <= stand.cycle() <= template.TAU_MAX[0]
    assert not stand.duty.receive(b"", stand.now_ns)
    assert not stand.duty.receive(bytes(1025), stand.now_ns)


# ---- as a process ----------------------------------------------------------------------------------------------------------------


@pytest.fixture
def folder():
    """A short private folder: ipc paths are limited to about a hundred characters."""
    path = tempfile.mkdtemp(prefix="rtctl-test-")
    yield path
    shutil.rmtree(path)


def start(folder, *options):
    """The template as a process of its own."""
    command = [
        sys.executable,
        template.__file__,
        "--demo",
        "--state",
        f"ipc://{folder}/state",
        "--torque",
        f"ipc://{folder}/torque",
    ]
    return subprocess.Popen([*command, *options], stdout=subprocess.PIPE, stderr=subprocess.STDOUT, text=True)


@pytest.mark.slow
def test_the_template_moves_its_toy_over_real_sockets(folder):
    """A controller asks, moves the toy joint by 0.3 rad and releases; the brakes close; a signal ends the driver in order."""
    process = start(folder, "--seconds", "30")
    context = zmq.Context()
    try:
        assert process.stdout.readline().startswith("arm key")
        states, torques = context.socket(zmq.SUB), context.socket(zmq.PUSH)
        states.subscribe(b"")
        torques.immediate = True
        for endpoint, name in ((states, "state"), (torques, "torque")):
            endpoint.linger, endpoint.rcvhwm, endpoint.sndhwm = 0, 4, 4
            endpoint.connect(f"ipc://{folder}/{name}")

        second = start(folder)
        assert "in use by another driver" in second.communicate(timeout=10)[0]
        assert second.returncode != 0

        sequence, driven, goal, released = 0, 0, None, False
        for _ in range(6000):  # at most six seconds of states
            assert states.poll(2000)
            state = decoded(states.recv())
            held = state["holder"] == ME
            q, qd = state["q"][0], state["qd"][0]
            goal = q + 0.3 if goal is None else goal
            request, tau = ASK, 0.0
            if released:
                request = RELEASE
                if state["status"] & BRAKE:
                    break
            elif held:
                request, tau, driven = DRIVE, 20.0 * (goal - q) - 6.0 * qd, driven + 1
                released = driven > 300 and abs(goal - q) < 0.003 and abs(qd) < 0.01
            sequence += 1
            items = [1, 2, state["arm_key"], ME, sequence, state["session"], state["sequence"], state["grant"], request, 15 * MS]
            if torques.poll(0, zmq.POLLOUT):
                torques.send(packed([*(int(item) for item in items), [float(tau)]]), zmq.NOBLOCK)
        assert released
        assert state["holder"] == 0
        assert state["status"] & BRAKE
        assert state["grant"] >= 1  # on a busy computer a grant may lapse on the way; the next one is asked for
        assert state["applied_session"] == state["received_session"] == ME
        assert abs(q - goal) < 0.01  # a toy without gravity stays where it was released

        process.send_signal(signal.SIGTERM)
        output = process.communicate(timeout=10)[0]
        assert process.returncode == 0, output
        assert "refused messages" in output
    finally:
        process.kill()
        process.communicate()
        context.destroy(linger=0)


@pytest.mark.slow
def test_an_endpoint_others_could_reach_is_refused(folder):
    """A folder that others can enter, and a TCP endpoint, are refused before anything is bound."""
    os.chmod(folder, 0o755)
    output = start(folder).communicate(timeout=10)[0]
    assert f"must be in a folder only this user can enter. Run: chmod 700 {folder}" in output
    assert not (Path(folder) / "state").exists()
    command = [sys.executable, template.__file__, "--demo", "--state", "tcp://127.0.0.1:5555"]
    run = subprocess.run(command, capture_output=True, text=True, timeout=10, cwd=folder)
    assert run.returncode != 0
    assert "TCP would need keys" in run.stderr
    assert not list(Path(folder).iterdir())
