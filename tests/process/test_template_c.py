"""Both driver templates: the one in C rule by rule and byte by byte, then both as processes, alone and with the real controller.

The rules are the tests of `tests/unit/test_template.py`, run once more with the C functions in place of the Python ones.
"""

import inspect
import json
import os
import re
import signal
import subprocess
import sys
import tempfile
import time
from collections.abc import Callable, Iterator
from pathlib import Path
from typing import Any

import numpy as np
import pytest
import zmq

from drivers import template
from drivers.template import ASK, BRAKE, DRIVE, RELEASE
from rtctl.blocks import MODE_LIVE, TORQUE
from rtctl.demo import COMPUTER_CAUSES
from rtctl.kernels.layout import OK, new_block
from rtctl.record.reader import read_record
from rtctl.wire import refusals
from rtctl.wire.codec import decode_torque, encode_state
from tests import messages
from tests.c_driver import TEMPLATE, CDuty, Library, build_program
from tests.sources import source
from tests.structure.sources_of import TOP
from tests.structure.test_wire_text import EXAMPLES
from tests.unit import test_template as rules

pytestmark = pytest.mark.slow

MS = 1_000_000
ME, OTHER = 1001, 2002
WIRE = (TOP / "drivers/WIRE.md").read_text()
PATIENCE_S = 20.0  # for what a driver does within milliseconds on an idle computer
RUN_PATIENCE_S = 120.0  # a first start of the controller compiles
ATTEMPTS = 4  # of what a pause of the computer of more than 20 ms spoils; such pauses were measured, up to 26 ms
TRACKING_MAX_RAD = 0.01  # measured 0.001 rad: the model is exact, what remains is delay and the time steps of the toy


# ---- the C template, built -------------------------------------------------------------------------------------------------------


@pytest.fixture(scope="session")
def program(tmp_path_factory: pytest.TempPathFactory) -> Path:
    """The C template as a program, without a single warning."""
    return build_program(tmp_path_factory.mktemp("program"))


@pytest.fixture(scope="session")
def libraries(tmp_path_factory: pytest.TempPathFactory) -> dict[int, Library]:
    """The C template's functions for arms of 1, 2, 15 and 16 joints: 15 is the longest fixarray."""
    folder = tmp_path_factory.mktemp("libraries")
    return {n: Library(folder, n) for n in (1, 2, 15, 16)}


@pytest.fixture(autouse=True)
def c_duty(monkeypatch: pytest.MonkeyPatch, libraries: dict[int, Library]) -> None:
    """The tests of the Python template find the C functions in place of its class."""
    monkeypatch.setattr(CDuty, "library", libraries[1], raising=False)
    monkeypatch.setattr(rules, "Duty", CDuty)


@pytest.fixture
def stand() -> rules.Stand:
    """A driver in C, just started, on a clock by hand."""
    made = rules.Stand()
    assert isinstance(made.duty, CDuty)
    return made


RULES = [
    name for name, test in vars(rules).items() if name.startswith("test_") and "folder" not in inspect.signature(test).parameters
]
globals().update({name: getattr(rules, name) for name in RULES})


def test_the_rules_of_the_python_template_are_here():
    """What was taken over above are tests, and all of its tests but those of its process."""
    assert len(RULES) >= 25
    assert "test_a_lapse_ends_the_grant_for_good" in RULES


# ---- text ------------------------------------------------------------------------------------------------------------------------


def shell_blocks() -> list[str]:
    """The gcc blocks of WIRE.md."""
    return [re.sub("^  ", "", block, flags=re.M) for block in re.findall(r"```sh\n(.*?)```", WIRE, re.S) if "gcc" in block]


def test_it_stays_short():
    """Under 400 lines of at most 130 characters, and exactly three places to fill in."""
    lines = TEMPLATE.read_text().splitlines()
    assert len(lines) < 400
    assert max(map(len, lines)) <= 130
    assert re.findall(r"^/\* FILL IN (\d)", TEMPLATE.read_text(), re.M) == ["1", "2", "3"]


def test_the_gcc_line_of_the_text_is_that_of_the_file():
    """WIRE.md and the top of the file show the same line."""
    line = shell_blocks()[0].splitlines()[0]
    assert line in TEMPLATE.read_text().splitlines()[2]


def test_the_lines_for_pyzmqs_own_library_build_it(tmp_path):
    """The block of WIRE.md for a computer without libzmq's header, pasted into a shell, gives a program that starts."""
    (tmp_path / "template.c").write_text(TEMPLATE.read_text())
    block = shell_blocks()[1].replace("-Wextra", "-Wextra -Werror")
    path = f"{Path(sys.executable).parent}{os.pathsep}{os.environ['PATH']}"
    done = subprocess.run(
        ["bash", "-e"], input=block, cwd=tmp_path, env={**os.environ, "PATH": path}, capture_output=True, text=True
    )
    assert (done.returncode, done.stderr) == (0, "")
    refused = subprocess.run([tmp_path / "driver"], capture_output=True, text=True)
    assert (refused.returncode, refused.stderr) == (
        2,
        "driver: --demo must be given as long as SIMULATED is true, and only then.\n",
    )


def test_the_declarations_without_a_header_are_those_of_libzmq():
    """Each option and kind has the number that pyzmq, built with the header, knows."""
    declared = dict(re.findall(r"ZMQ_(\w+) = (\d+)", TEMPLATE.read_text()))
    assert set(declared) == {"PUB", "PULL", "DONTWAIT", "RCVMORE", "LINGER", "MAXMSGSIZE", "SNDHWM", "RCVHWM"}
    assert {name: int(getattr(zmq, name)) for name in declared} == {name: int(value) for name, value in declared.items()}


def test_with_a_header_it_compiles_without_its_own_declarations(tmp_path):
    """A zmq.h in the search path takes the place of the declarations; nothing else changes."""
    declarations = re.search(r"#else /\*.*?\n(.*?)#endif", TEMPLATE.read_text(), re.S)
    (tmp_path / "zmq.h").write_text("#include <stddef.h>\n" + declarations[1])
    command = ["gcc", "-std=c11", "-Wall", "-Wextra", "-Werror", "-O2", "-I.", "-c", "-o", "driver.o", str(TEMPLATE)]
    done = subprocess.run(command, cwd=tmp_path, capture_output=True, text=True)
    assert (done.returncode, done.stderr) == (0, "")


def test_both_templates_are_of_the_same_arm(libraries):
    """Arm key, limits and times agree, and the comment of the key shows the text that gives it."""
    assert libraries[1].key == template.arm_key(template.ARM_NAME, template.JOINTS)
    text = TEMPLATE.read_text()
    shown = "\\n".join([template.ARM_NAME, *(f"{name} {unit}" for name, unit in template.JOINTS)])
    command = f"printf '{shown}' | sha256sum | cut -c1-12"
    assert command in text
    assert int(subprocess.run(["bash", "-c", command], capture_output=True, text=True, check=True).stdout, 16) == libraries[1].key
    for name in ("TAU_MAX", "QD_MAX", "STILL_QD", "REST_DAMPING"):
        assert f"{name}[N] = {{{getattr(template, name)[0]}}};" in text
    names = ("REST_MOVING_NS", "BRAKE_OPEN_NS", "BRAKE_CLOSE_NS", "VALID_MAX_NS", "SILENT_MAX_NS", "STILL_DWELL_NS", "PERIOD_NS")
    for name in names:
        assert f"{name} = {getattr(template, name) // MS} * MS" in text


# ---- bytes -----------------------------------------------------------------------------------------------------------------------


@source("msgpack-python", "packb")
@pytest.mark.parametrize("n", [1, 2, 15, 16])
def test_states_agree_byte_for_byte(monkeypatch, libraries, n):
    """A state in C has the bytes of the msgpack package and of the compiled encoder, counters of every width."""
    monkeypatch.setattr(CDuty, "library", libraries[n])
    buffer = np.zeros(1024, np.uint8)
    for seed in range(50):
        state = messages.example_state(n, seed, with_tau=bool(seed % 2))
        state["arm_key"] = libraries[n].key
        state["sequence"] = max(1, int(state["sequence"]))
        duty = CDuty(0, 0)
        duty.set_counters(**{name: int(state[name]) for name in messages.STATE_COUNTERS if name not in ("arm_key", "sample_ns")})
        duty.set_counters(sequence=int(state["sequence"]) - 1)
        q, qd, tau = (state[name][:count].tolist() for name, count in (("q", n), ("qd", n), ("tau_meas", state["tau_count"])))
        written = duty.state(q, qd, tau, int(state["sample_ns"]))
        assert written == messages.packed(messages.state_items(state))
        assert written == buffer[: encode_state(state, buffer)].tobytes()


@source("msgpack-spec", "formats of int, float and array")
def test_values_on_the_edges_of_every_form(libraries, monkeypatch):
    """Counters at the ends of every width and numbers that are special, written as the msgpack package writes them."""
    monkeypatch.setattr(CDuty, "library", libraries[2])
    for value in (0, 127, 128, 255, 256, 65535, 65536, 2**32 - 1, 2**32, 2**53 - 1):
        duty = CDuty(value, 0)
        written = duty.state([float("inf"), -0.0], [5e-324, float("nan")], [], value)
        items = [1, 1, libraries[2].key, value, 1, value, *[0] * 7, [float("inf"), -0.0], [5e-324, float("nan")], [], {}]
        assert written == messages.packed(items)


def test_the_torque_example_of_the_text_is_understood(libraries):
    """The bytes of the example in WIRE.md give its values, and its state comes out of the C writer."""
    (_, torque), *_ = EXAMPLES["torque"]
    block = EXAMPLES["torque"][3]
    counters = [int(block[name]) for name in messages.TORQUE_COUNTERS]
    assert libraries[2].read_torque(torque) == ("counts", counters, block["tau"][:2].tolist())


@source("msgpack-spec", "formats of int, float and array")
@pytest.mark.parametrize("n", [1, 2, 15, 16])
def test_every_legal_form_is_read(libraries, n):
    """Counters in every integer form and torques in every number form give the values they were written from."""
    numbers = [0.0, -0.0, 1.0, -1.0, -32.0, -33.0, 127.0, 128.0, -128.0, -129.0, 40000.0, -40000.0, 3e9, -3e9, 2.0**62, 0.1]
    for k in range(12):
        torque = messages.example_torque(n, k)
        torque["tau"][:n] = np.roll(numbers, k)[:n]
        items = messages.torque_items(torque)
        elements = [forms[k % len(forms)] for forms in map(messages.integer_forms, items[:-1])]
        numbers_as = [forms[k % len(forms)] for forms in map(messages.number_forms, items[-1])]
        elements.append(messages.array_header(n, bool(k % 2)) + b"".join(numbers_as))
        verdict, counters, tau = libraries[n].read_torque(messages.joined(elements, crc_form=k, wide=bool(k % 2)))
        assert verdict == "counts"
        assert counters == items[2:-1]
        assert tau == items[-1]


@pytest.mark.parametrize("n", [1, 2, 16])
def test_it_accepts_and_refuses_what_the_compiled_decoder_does(libraries, n):
    """Of 4,000 seeded damaged, cut and resealed messages both readers accept the same ones, with the same values."""
    rng = np.random.default_rng(100 + n)
    block = new_block(TORQUE)
    accepted = 0
    for k in range(4_000):
        data = bytearray(messages.packed(messages.torque_items(messages.example_torque(n, k))))
        if k % 8:
            del data[-5:]
            for _ in range(int(rng.integers(1, 4))):
                data[int(rng.integers(len(data)))] = int(rng.integers(256))
        if k % 8 == 3:
            del data[int(rng.integers(1, len(data))) :]
        if k % 8:
            data = bytearray(messages.sealed(bytes(data)))
        status = int(decode_torque(messages.bytes_in(bytes(data)), len(data), block))
        verdict, counters, tau = libraries[n].read_torque(bytes(data))
        if status == refusals.REQUEST:
            continue  # the C template judges the request later, see the rules
        assert (verdict == "counts") == (status == OK and block["n"] == n), (verdict, status, bytes(data).hex())
        if verdict == "counts":
            accepted += 1
            expected = messages.block_values(block, 2)
            assert counters == expected[0]
            assert np.array_equal(tau, expected[1][0], equal_nan=True)
    assert 500 < accepted < 3_500


@source("crc-check", "check value of 123456789")
def test_length_bounds_and_the_check_value(libraries):
    """Nothing and 1025 bytes are refused unread; the CRC of a known text is the published one."""
    assert libraries[1].read_torque(b"")[0] == "length"
    assert libraries[1].read_torque(bytes(1025))[0] == "length"
    assert libraries[1].read_torque(bytes(1024))[0] == "form"
    assert messages.sealed(b"123456789")[-4:] == bytes.fromhex("cbf43926")  # the sealing used above


@pytest.mark.parametrize("age_ms", [19, 20])
def test_a_valid_time_a_little_longer_than_the_drivers_own_is_cut(stand, age_ms):
    """Valid-for one nanosecond above the driver's 20 ms counts as 20 ms."""
    stand.granted()
    message = stand.message(DRIVE, 5.0, valid_for_ns=20 * MS + 1)
    assert stand.duty.receive(message, stand.now_ns + age_ms * MS) == (age_ms == 19)


# ---- the queue -------------------------------------------------------------------------------------------------------------------


@pytest.fixture
def queue() -> Iterator[tuple[Any, Any]]:
    """(PUSH, PULL) within this process; all that is sent waits."""
    with zmq.Context() as context, context.socket(zmq.PULL) as pull, context.socket(zmq.PUSH) as push:
        pull.bind("inproc://queue")
        push.connect("inproc://queue")
        yield push, pull


def send_asks(stand: rules.Stand, push: Any, count: int) -> None:
    for _ in range(count):
        push.send(stand.message(ASK))


def test_a_queue_below_the_bound_is_taken_in_order(stand, queue):
    """63 messages all count, the newest last."""
    stand.granted()
    send_asks(stand, queue[0], 63)
    stand.duty.drain(queue[1], stand.now_ns)
    assert stand.duty.received == (ME, stand.sequence)
    assert stand.duty.verdicts() == {"counts": 63 + 1}
    assert not queue[1].poll(0)


def test_at_the_bound_nothing_but_a_release_counts(stand, queue):
    """64 messages are flooded and the rest waits; a release among the next 64 ends the grant."""
    stand.granted()
    before = stand.duty.received
    send_asks(stand, queue[0], 64 + 10)
    stand.duty.drain(queue[1], stand.now_ns)
    assert stand.duty.verdicts() == {"counts": 1, "flooded": 64}
    assert (stand.duty.holder, stand.duty.received) == (ME, before)
    queue[0].send(stand.message(RELEASE))
    send_asks(stand, queue[0], 60)
    stand.duty.drain(queue[1], stand.now_ns)
    assert stand.duty.holder == 0
    assert stand.duty.verdicts()["counts"] == 2


def test_messages_of_several_parts_are_refused_whole(stand, queue):
    """Neither their first nor their last part counts, also when the bound cuts them in two; the next message counts again."""
    stand.granted()
    for parts in (2, 3, 100):
        queue[0].send_multipart([stand.message(RELEASE) for _ in range(parts)])
        send_asks(stand, queue[0], 1)
        for _ in range(3):
            stand.duty.drain(queue[1], stand.now_ns)
        assert stand.duty.holder == ME
        assert stand.duty.received == (ME, stand.sequence)
    assert stand.duty.verdicts() == {"counts": 1 + 3, "length": 3}


def test_a_message_above_the_bound_is_refused(stand, queue):
    """1025 bytes and more are refused even where the socket does not keep them away."""
    stand.granted()
    queue[0].send(stand.message(RELEASE).ljust(5000, b"\0"))
    stand.duty.drain(queue[1], stand.now_ns)
    assert stand.duty.verdicts() == {"counts": 1, "length": 1}


# ---- both templates as processes -------------------------------------------------------------------------------------------------


class Rig:
    """Drivers of one kind, with sockets in a folder of their own, and a controller by hand that answers the newest state."""

    def __init__(self, command: list[str], folder: Path) -> None:
        self.command = command
        self.environment = {**os.environ, "XDG_RUNTIME_DIR": str(folder)}
        self.sockets = folder / "rtctl"
        self.started: list[subprocess.Popen[str]] = []
        self.context: zmq.Context[Any] = zmq.Context()
        self.states = self.torques = None
        self.sequence = 0

    def start(self, options: tuple[str, ...] = ("--demo",), command: list[str] | None = None) -> "subprocess.Popen[str]":
        """One more process."""
        process = subprocess.Popen(
            [*(command or self.command), *options],
            env=self.environment,
            stdout=subprocess.PIPE,
            stderr=subprocess.STDOUT,
            text=True,
        )
        self.started.append(process)
        return process

    def start_ready(self) -> "subprocess.Popen[str]":
        """One more process, bound, and this controller connected to it; its first state seen."""
        process = self.start()
        assert process.stdout.readline().startswith(f"arm key {template.arm_key(template.ARM_NAME, template.JOINTS)}, ")
        self.connect()
        self.look()
        return process

    def connect(self) -> None:
        """Fresh sockets."""
        for socket in (self.states, self.torques):
            if socket is not None:
                socket.close(linger=0)
        self.states, self.torques = self.context.socket(zmq.SUB), self.context.socket(zmq.PUSH)
        self.states.subscribe(b"")
        for socket, name in ((self.states, "toy-state"), (self.torques, "toy-torque")):
            socket.linger, socket.rcvhwm, socket.sndhwm = 0, 4, 4
            socket.connect(f"ipc://{self.sockets}/{name}")

    def look(self) -> np.void:
        """The next state."""
        assert self.states.poll(PATIENCE_S * 1000)
        self.state = rules.decoded(self.states.recv())
        return self.state

    def message(self, request: int, value: float = 0.0, **changes: Any) -> bytes:
        """A torque message that answers the newest state; `changes` replace fields."""
        self.sequence += 1
        fields = {
            "version": 1,
            "kind": 2,
            "arm_key": int(self.state["arm_key"]),
            "session": ME,
            "sequence": self.sequence,
            "driver_session": int(self.state["session"]),
            "state_sequence": int(self.state["sequence"]),
            "grant": int(self.state["grant"]),
            "request": request,
            "valid_for_ns": 15 * MS,
            "tau": [value],
        }
        return messages.packed(list((fields | changes).values()))

    def send(self, request: int, value: float = 0.0, **changes: Any) -> None:
        """Send a message."""
        self.torques.send(self.message(request, value, **changes))

    def until(self, condition: Callable[[np.void], bool], request: int | None = None, value: float = 0.0) -> np.void:
        """Look, and answer each state with a request, until a state meets the condition."""
        end_s = time.monotonic() + PATIENCE_S
        while not condition(self.look()):
            assert time.monotonic() < end_s, self.state
            if request is not None and self.torques.poll(0, zmq.POLLOUT):
                self.send(request, value)
        return self.state

    def echoed(self) -> np.void:
        """The first state that says the last message was received; an `ask` before keeps no torque alive."""
        return self.until(lambda state: (state["received_session"], state["received_sequence"]) == (ME, self.sequence))

    def at_rest(self) -> np.void:
        """Nobody holds the grant and the brake holds."""
        return self.until(lambda state: state["holder"] == 0 and bool(state["status"] & BRAKE))

    def granted(self) -> np.void:
        """This controller holds the grant, and has not driven."""
        self.at_rest()
        return self.until(lambda state: state["holder"] == ME, ASK)

    def driven(self, seconds: float = 0.06) -> np.void:
        """This controller drives with 1 N m, and the brake is open. A pause of the computer may spoil an attempt."""
        for _ in range(ATTEMPTS):
            begin_ns = int(self.granted()["sample_ns"])
            state = self.until(
                lambda state, begin_ns=begin_ns: state["holder"] != ME or state["sample_ns"] > begin_ns + seconds * 1e9,
                DRIVE,
                1.0,
            )
            if state["holder"] == ME and not state["status"] & BRAKE:
                return state
        raise AssertionError("the grant was lost in every attempt")

    def ended(self, process: "subprocess.Popen[str]", number: int = signal.SIGTERM) -> str:
        """Signal a driver; what it said, after it has ended in order."""
        process.send_signal(number)
        output, _ = process.communicate(timeout=PATIENCE_S)
        assert process.returncode == 0, output
        return output

    def close(self) -> None:
        """End everything."""
        for process in self.started:
            if process.poll() is None:
                process.kill()
            process.communicate()
        self.context.destroy(linger=0)


@pytest.fixture(params=["c", "python"])
def rig(request: pytest.FixtureRequest, program: Path) -> Iterator[Rig]:
    """A rig for each template; its folder is short, because a socket's path is."""
    with tempfile.TemporaryDirectory(prefix="rt-", dir="/tmp") as folder:
        made = Rig([str(program)] if request.param == "c" else [sys.executable, template.__file__], Path(folder))
        yield made
        made.close()


def test_the_grant_comes_on_an_ask_only(rig):
    """At rest `drive` and `release` are echoed and change nothing; an `ask` gets grant 1, and the brake stays closed."""
    process = rig.start_ready()
    rig.at_rest()
    for request in (DRIVE, RELEASE):
        rig.send(request, 1.0)
        state = rig.echoed()
        assert (state["holder"], state["grant"], state["applied_session"]) == (0, 0, 0)
    rig.send(ASK)
    state = rig.echoed()
    assert (state["holder"], state["grant"]) == (ME, 1)
    assert state["status"] & BRAKE
    rig.ended(process)


def test_a_drive_that_breaks_a_rule_is_not_applied(rig):
    """Wrong grant, answered state, age, value or limit: echoed as received, never applied; the joint does not move."""
    rig.start_ready()
    q = rig.granted()["q"][0]
    for changes in (
        {"grant": 0},
        {"grant": 2},
        {"state_sequence": 0},
        {"state_sequence": 10**9},
        {"valid_for_ns": 0},
        {"tau": [float("nan")]},
        {"tau": [float("inf")]},
        {"tau": [20.000001]},
        {"tau": [-20.000001]},
    ):
        rig.until(lambda state: state["holder"] == ME, ASK)
        rig.send(DRIVE, 1.0, **changes)
        state = rig.echoed()
        assert state["applied_session"] == 0, changes
        assert state["status"] & BRAKE
        assert state["q"][0] == q


def test_messages_of_others_and_old_ones_are_not_even_echoed(rig):
    """Wrong session, driver session, arm, version or CRC, and a sequence that is not newer, are as if they had not come."""
    rig.start_ready()
    rig.granted()
    for changes in (
        {"session": OTHER},
        {"session": 0},
        {"driver_session": 5},
        {"arm_key": 5},
        {"version": 2},
        {"kind": 1},
        {"sequence": 1},
        {"tau": []},
        {"tau": [1.0, 1.0]},
    ):
        rig.until(lambda state: state["holder"] == ME, ASK)
        for request in (DRIVE, RELEASE):
            rig.send(request, 1.0, **changes)
        broken = rig.message(DRIVE, 1.0)
        rig.torques.send(broken[:-1] + bytes([broken[-1] ^ 1]))
        rig.send(ASK)
        state = rig.echoed()
        assert (state["holder"], state["received_session"], state["applied_session"]) == (ME, ME, 0), changes


def test_torque_lapses_by_the_drivers_own_clock(rig):
    """The holder keeps the grant up to the deadline of its last torque and not at or after it; the number is void for good."""
    rig.start_ready()
    answered_ns = int(rig.driven()["sample_ns"])
    number = int(rig.state["grant"])
    rig.send(DRIVE, 1.0)  # the last one
    seen = []
    rig.until(lambda state: seen.append(state) or state["holder"] == 0)
    deadline_ns = answered_ns + 15 * MS  # no message before it has a later one
    for state in seen:
        if state["sample_ns"] >= deadline_ns:
            assert state["holder"] == 0
        elif state["applied_sequence"] == rig.sequence:
            assert state["holder"] == ME
    assert rig.at_rest()["grant"] == number
    rig.send(DRIVE, 1.0, grant=number)
    state = rig.echoed()
    assert (state["holder"], state["grant"]) == (0, number)
    assert state["applied_sequence"] < rig.sequence
    assert rig.granted()["grant"] == number + 1


def test_release_gives_the_grant_back_at_once(rig):
    """The state that echoes the release shows no holder; the arm comes to rest by itself and the brake closes."""
    process = rig.start_ready()
    rig.driven()
    assert rig.state["qd"][0] > 0.0
    rig.send(RELEASE)
    assert rig.echoed()["holder"] == 0
    state = rig.at_rest()
    assert abs(state["qd"][0]) <= template.STILL_QD[0]
    rig.ended(process)


@pytest.mark.parametrize("number", [signal.SIGTERM, signal.SIGINT, signal.SIGHUP])
def test_a_signal_in_motion_brings_the_arm_to_rest_first(rig, number):
    """The grant ends although its holder goes on, the joint is damped, the brake closes, then the process ends with code 0."""
    process = rig.start_ready()
    moved = rig.driven()
    process.send_signal(number)
    last = moved
    while rig.states.poll(500):
        last = rig.look()
        if rig.torques.poll(0, zmq.POLLOUT):
            rig.send(DRIVE, 1.0)
    output, _ = process.communicate(timeout=PATIENCE_S)
    assert process.returncode == 0, output
    assert last["holder"] == 0
    assert last["status"] & BRAKE
    # Damping takes 0.2 s, the brake 0.1 s; torque that went on would end in overspeed after 3 s.
    assert template.BRAKE_CLOSE_NS < last["sample_ns"] - moved["sample_ns"] < 1_500 * MS


def test_garbage_leaves_it_running(rig):
    """After 3,000 seeded messages of any length, of several parts, too long: states go on, and a grant is to be had."""
    process = rig.start_ready()
    rig.at_rest()
    rng = np.random.default_rng(3)
    for k in range(3_000):
        parts = [rng.bytes(int(rng.integers(0, 1025))) for _ in range(1 + k % 3 // 2)]
        if k % 5 == 0:
            parts[0] = messages.sealed(rng.bytes(int(rng.integers(0, 200))))
        if rig.torques.poll(100, zmq.POLLOUT):
            rig.torques.send_multipart(parts)
    rig.torques.send(bytes(5000))  # libzmq closes the connection over it and a new one is made
    before = int(rig.look()["sequence"])
    state = rig.granted()
    assert state["sequence"] > before
    assert (state["received_session"], state["grant"]) == (ME, 1)
    output = rig.ended(process)
    assert re.search(r"\bform\W+[1-9]", output), output


def test_endpoints_are_locked_until_their_holder_is_gone(rig, program):
    """A second driver, in C or Python, is refused; after kill -9 a new one takes over, and torque for the old session is void."""
    first = rig.start_ready()
    old_session = int(rig.state["session"])
    for command in ([str(program)], [sys.executable, template.__file__]):
        second = rig.start(command=command)
        output, _ = second.communicate(timeout=PATIENCE_S)
        assert second.returncode != 0
        assert "is in use by another driver" in output
    rig.look()
    rig.driven()
    first.kill()
    first.wait()
    assert (rig.sockets / "toy-state").exists()
    assert (rig.sockets / "toy-state.lock").exists()

    again = rig.start_ready()
    assert rig.state["session"] != old_session
    rig.at_rest()
    rig.send(ASK, driver_session=old_session)
    rig.send(RELEASE)
    assert rig.echoed()["grant"] == 0
    assert rig.granted()["grant"] == 1
    rig.ended(again)


def test_it_needs_a_private_folder_and_its_flag(rig):
    """A folder that others can enter is refused before anything is bound; so is a start without --demo while it is a toy."""
    rig.sockets.mkdir(mode=0o755)
    output, _ = (process := rig.start()).communicate(timeout=PATIENCE_S)
    assert process.returncode != 0
    assert "only this user can enter" in output
    assert not list(rig.sockets.iterdir())
    output, _ = (process := rig.start(())).communicate(timeout=PATIENCE_S)
    assert process.returncode == 2
    assert "--demo must be given" in output


# ---- with the real controller ----------------------------------------------------------------------------------------------------


def run_controller(rig: Rig, records: Path) -> dict[str, Any]:
    """One real-time run of the shipped toy run against the driver that runs; what the controller says about it."""
    command = [sys.executable, "-m", "rtctl.cli", "run", "configs/runs/toy.toml", "--start", "--records", str(records), "--json"]
    done = subprocess.run(command, cwd=TOP, env=rig.environment, capture_output=True, text=True, timeout=RUN_PATIENCE_S)
    assert "Traceback" not in done.stderr, done.stderr
    return json.loads(done.stdout)


def test_the_real_controller_moves_the_toy(rig, tmp_path):
    """Ready, grant, a timed turn of 0.6 rad within the tolerance, holding, release; the brake is closed when all is over."""
    process = rig.start_ready()
    for _ in range(ATTEMPTS):
        outcome = run_controller(rig, tmp_path)
        rig.connect()  # without the states that waited all the time
        state = rig.at_rest()
        if outcome["cause"] not in COMPUTER_CAUSES:
            break
    assert (outcome["verdict"], outcome["ended"], outcome["mode"]) == ("pass", "motion", "holding"), outcome
    assert outcome["simulated"] is True
    assert outcome["status"]["timing"]["refused_count"] == 0

    assert abs(state["q"][0] - 0.6) < TRACKING_MAX_RAD
    assert state["received_session"] == state["applied_session"] != 0
    columns = read_record(outcome["record_path"]).columns
    live = columns["mode"] == MODE_LIVE
    assert live.sum() > 900
    assert np.abs(columns["q_ref"][live] - columns["q"][live]).max() < TRACKING_MAX_RAD
    output = rig.ended(process)
    assert "limit" not in output
