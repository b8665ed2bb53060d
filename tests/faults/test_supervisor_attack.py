"""Seeded attacks on the cycle: lying, restarted and deaf drivers, replayed and reordered states, a second controller, broken laws
and references, clocks that jump, requests at the wrong moment, limits with odd values. `tests/supervisor_judge.py` holds every row
to the rules; a failure prints seed, cycle and the lies in force.
"""

import math
import random
from collections import Counter
from collections.abc import Callable
from typing import Any

import numpy as np
import pytest

from rtctl.blocks import (
    BIT_ESTOP,
    BIT_LEAVE,
    BIT_RESET,
    BIT_START,
    BIT_STOP,
    BIT_STOP_RELEASE,
    MODE_BRAKING,
    MODE_HOLDING,
    MODE_LATCHED,
    MODE_LIVE,
    MODE_NAMES,
    MODE_OFF,
    MODE_READY,
    REQUEST_ASK,
    REQUEST_DRIVE,
    REQUEST_RELEASE,
    STATUS_BRAKE,
    STATUS_ENABLED,
    STATUS_FAULT,
    STATUS_GRAVITY_ADDED,
    STATUS_STOP_CHAIN_CLOSED,
    STOP_FAULT,
    STOP_NOW,
    TORQUE,
    WATCH_NAMES,
)
from rtctl.kernels.compile import callback
from rtctl.kernels.layout import OK, new_block
from rtctl.loop.live import CATCH_UP, paced_start
from rtctl.loop.lockstep import LOST_STATE, LOST_TORQUE
from rtctl.plant.blocks import HISTORY, PHASE_STILL
from rtctl.plant.driver_duty import plant_advance, plant_receive
from rtctl.supervisor.fold import ACTS
from tests.lockstep_runs import Rehearsal, demo
from tests.stand import ARM_KEY, HEALTHY, PERIOD_NS, SESSION, Driver, Stand
from tests.supervisor_judge import LEGAL, Judge, stop_of

SEEDS = (20270101, 20270102, 20270103)
EPISODES = 36  # per seed
CYCLES = 200  # attacked, of one episode
HEALED_CYCLES = 2600  # late cycles need a window of 1000 to be forgotten, twice when their count is full
POISON = (math.nan, math.inf, -math.inf, 1e308, -1e308, 5e-324, 4.0, -4.0, 1e6)
COUNTERS = (0, 1, 2**31, 2**53 - 1)


def failing_begin(parameters: int, memory: int, sample: int) -> int:
    """A reference that cannot begin."""
    return -1


class Liar(Driver):
    """A driver whose messages are spoiled by the lies in force, and whose arm moves as its speeds say."""

    def __init__(self) -> None:
        super().__init__()
        self.lies: dict[str, tuple[int, Callable[[np.void], None]]] = {}  # name -> (last sequence, what it does to a state)
        self.old: list[np.void] = []

    def say(self, state: np.void, now_ns: int) -> None:
        self.q = [q + qd * 1e-3 for q, qd in zip(self.q, self.qd, strict=True)]
        super().say(state, now_ns)
        if self.sequence % 7 == 0:
            self.old = [*self.old[-5:], state.copy()]
        for name, (last, lie) in list(self.lies.items()):
            if self.sequence > last:
                del self.lies[name]
            else:
                lie(state)


class Attack:
    """One run of the stand with everything that can go wrong going wrong, by the dice."""

    def __init__(self, seed: str, odd_limits: bool) -> None:
        self.seed, self.rng, self.odd_limits = seed, random.Random(seed), odd_limits
        self.stand = Stand()
        self.driver = self.stand.driver = Liar()
        self.failing = callback(failing_begin, "failing", 3)
        self.begin = int(self.stand.pointers["reference_begin"])
        self.limits = self.stand.setup["limits"]
        self.good_limits = self.limits.copy()
        self.judge = Judge(self.limits, 2, SESSION, PERIOD_NS, sound_limits=not odd_limits)
        self.cycle = 0
        self.undo: list[tuple[int, Callable[[], None]]] = []
        self.lies_told: Counter[str] = Counter()

    # ---- one cycle -------------------------------------------------------------------------------------------------------------

    def step(self, requests: int = 0) -> None:
        """One cycle of the stand, judged. Fails the test with everything needed to repeat it."""
        self.cycle += 1
        stand = self.stand
        row = stand.step(requests)
        broken = self.judge.broken(row)
        message = stand.torque
        drives = int(message["request"]) == REQUEST_DRIVE
        if int(message["request"]) != int(row["request"]) or message["tau"][:2].tolist() != row["tau_out"][:2].tolist():
            broken.append("the message carries what the row records")
        if (int(message["session"]), int(message["arm_key"]), int(message["n"])) != (SESSION, ARM_KEY, 2):
            broken.append("every message names this controller and this arm")
        if drives and int(message["driver_session"]) != self.judge.driver[0]:
            broken.append("every torque names the driver session it answers")
        if int(message["valid_for_ns"]) != int(self.limits["valid_for_ns"]):
            broken.append("every message is valid for the time of the limits")
        assert not broken, (
            f"seed {self.seed!r}, cycle {self.cycle}, requests {requests}, lies {sorted(self.driver.lies)}, told {self.lies_told}: "
            f"{broken} {MODE_NAMES[int(row['mode'])]} {stand.says()}"
        )

    def later(self, cycles: int, back: Callable[[], None]) -> None:
        """Put something right again after some cycles."""
        self.undo.append((self.cycle + cycles, back))

    def put_right(self, everything: bool = False) -> None:
        due = [back for when, back in self.undo if everything or self.cycle >= when]
        self.undo = [(when, back) for when, back in self.undo if not (everything or self.cycle >= when)]
        for back in due:
            back()

    def for_a_while(self, target: Any, key: Any, value: Any) -> None:
        """target[key] = value for some cycles."""
        before = target[key].copy() if isinstance(target[key], np.ndarray) else target[key]
        target[key] = value
        self.later(self.rng.randint(1, 14), lambda: target.__setitem__(key, before))

    # ---- what can go wrong -----------------------------------------------------------------------------------------------------

    def lie(self) -> None:
        """Begin one more thing that goes wrong."""
        what = self.rng.choice(
            (self.lie_in_state, self.lie_in_state, self.lie_in_input, self.break_law, self.break_driver, self.move, self.move)
        )
        self.lies_told[what()] += 1

    def lie_in_state(self) -> str:
        rng, driver = self.rng, self.driver
        i, poison, counter = rng.randrange(2), rng.choice(POISON), rng.choice(COUNTERS)
        jump, bit = rng.choice((0.005, 0.012, -0.5, 2 * math.pi)), 1 << rng.randrange(7)
        lies: dict[str, Callable[[np.void], None]] = {
            "q": lambda s: s["q"].__setitem__(i, poison),
            "qd": lambda s: s["qd"].__setitem__(i, poison),
            "q jump": lambda s: s["q"].__setitem__(i, s["q"][i] + jump),
            "tau_meas": lambda s: s["tau_meas"].__setitem__(i, math.nan),
            "sequence": lambda s: s.__setitem__("sequence", counter),
            "sequence repeated": lambda s: s.__setitem__("sequence", int(s["sequence"]) - 1),
            "sample": lambda s: s.__setitem__("sample_ns", counter),
            "sample late": lambda s: s.__setitem__("sample_ns", int(s["sample_ns"]) - 9_000_000),
            "sample early": lambda s: s.__setitem__("sample_ns", int(s["sample_ns"]) + 10**10),
            "session": lambda s: s.__setitem__("session", counter),
            "holder": lambda s: s.__setitem__("holder", rng.choice((0, SESSION, SESSION + 1))),
            "grant": lambda s: s.__setitem__("grant", counter),
            "echo": lambda s: s.__setitem__("received_sequence", counter),
            "echo session": lambda s: s.__setitem__("received_session", SESSION + 1),
            "status": lambda s: s.__setitem__("status", int(s["status"]) ^ bit),
            "status none": lambda s: s.__setitem__("status", 0),
            "status all": lambda s: s.__setitem__("status", 2**53 - 1),
            "arm": lambda s: s.__setitem__("arm_key", ARM_KEY + 1),
            "version": lambda s: s.__setitem__("version", 2),
            "joints": lambda s: s.__setitem__("n", rng.choice((0, 1, 3, 16, -1))),
        }
        name = rng.choice((*lies, "replay", "replay"))
        if name == "replay":
            if not driver.old:
                return "nothing"
            old = rng.choice(driver.old).copy()

            def replay(state: np.void) -> None:
                for field in state.dtype.names or ():
                    state[field] = old[field]

            lies[name] = replay
        driver.lies[name] = (driver.sequence + rng.randint(1, 6), lies[name])
        return name

    def lie_in_input(self) -> str:
        rng, stand = self.rng, self.stand
        name = rng.choice(("lost", "late", "little late", "skipped", "suspend", "beat", "send failed", "clock back", "flood"))
        if name == "lost" or name == "flood":
            stand.silent = True
            self.later(rng.randint(1, 6), lambda: setattr(stand, "silent", False))
        elif name == "late" or name == "little late":
            stand.late_ns = rng.choice((600_000, 600_000, 600_000, 11_000_000, 10**12)) if name == "late" else 400_000
            self.later(rng.randint(1, 20), lambda: setattr(stand, "late_ns", 0))
        elif name == "skipped":
            self.for_a_while(stand.input, "skipped", rng.choice((1, 3, 20, 10**6)))
        elif name == "suspend":
            stand.input["boot_offset_ns"] += rng.choice((-1, 1)) * 30_000_000
        elif name == "beat":
            keep = stand.beat
            self.beat_frozen = (self.cycle + 70, keep)
        elif name == "send failed":
            self.for_a_while(stand.input, "send_failed", 1)
        else:
            stand.now_ns -= rng.choice((2_000_000, 10**10))
        return name

    def break_law(self) -> str:
        rng, pointers, parameters = self.rng, self.stand.pointers, self.stand.pointers["law_parameters"]
        name = rng.choice(("status", "constant", "gain", "terms", "begin", "reference"))
        if name == "status":
            self.for_a_while(parameters["extra"], 0, rng.choice((0, 2, -1, 2**40)))
        elif name == "constant":
            self.for_a_while(parameters["Kd"], rng.randrange(2), rng.choice((*POISON, *[41.0, -41.0] * 5)))
        elif name == "gain":
            self.for_a_while(parameters["Kp"], rng.randrange(2), rng.choice((math.nan, math.inf, 1e308, -500.0)))
        elif name == "terms":
            self.for_a_while(pointers, "law_term_count", rng.choice((0, 1, 3, 9, -1, 2**40)))
        elif name == "begin":
            pointers["reference_begin"] = self.failing.address
            self.later(40, lambda: pointers.__setitem__("reference_begin", self.begin))
        else:
            self.stand.memory["reference"]["q_start"][rng.randrange(2)] = rng.choice((math.nan, 1e308, 0.6, 0.6, 0.6))
        return f"law {name}"

    def break_driver(self) -> str:
        rng, driver = self.rng, self.driver
        name = rng.choice(("deaf", "restart", "other holder", "lapse", "chain", "fault", "disabled", "brake", "gravity"))
        bits = {"chain": STATUS_STOP_CHAIN_CLOSED, "fault": STATUS_FAULT, "disabled": STATUS_ENABLED, "brake": STATUS_BRAKE}
        if name == "deaf":
            driver.hears = False
            self.later(rng.randint(1, 15), lambda: setattr(driver, "hears", True))
        elif name == "restart":
            self.restart()
        elif name == "other holder":
            driver.holder, driver.grant = SESSION + 1, driver.grant + 1
            self.later(rng.randint(1, 10), lambda: setattr(driver, "holder", 0))
        elif name == "lapse":
            driver.holder = 0
        else:
            driver.status ^= bits.get(name, STATUS_GRAVITY_ADDED)
            self.later(rng.randint(1, 10), lambda: setattr(driver, "status", HEALTHY | driver.status & STATUS_BRAKE))
        return f"driver {name}"

    def restart(self) -> None:
        """The driver begins anew: another session, the first sequence numbers, nobody holds the grant."""
        driver = self.driver
        driver.session, driver.sequence, driver.holder, driver.received = driver.session + 1, 0, 0, (0, 0)
        driver.status = HEALTHY | STATUS_BRAKE

    def move(self) -> str:
        """The arm moves, within its speed or beyond, and comes to rest again."""
        self.driver.qd = [self.rng.choice((0.01, 0.3, -0.5, 2.9, 3.1)) * self.rng.random() for _ in range(2)]
        self.later(self.rng.randint(1, 40), lambda: setattr(self.driver, "qd", [0.0, 0.0]))
        return "move"

    # ---- episodes --------------------------------------------------------------------------------------------------------------

    def vary_limits(self) -> None:
        """Other limits within reason, or one of them with an odd value."""
        rng, limits = self.rng, self.limits
        for name in limits.dtype.names or ():
            limits[name] = self.good_limits[name]
        limits["ready_dwell_ns"], limits["still_dwell_ns"] = 3_000_000, 2_000_000
        limits["brake_deadline_ns"] = rng.choice((8_000_000, 40_000_000))
        limits["estop_stop"] = rng.choice((STOP_FAULT, STOP_NOW, 0))
        limits["scale_torque"] = rng.randrange(2)
        limits["resend_max"] = rng.choice((0, 1, 3))
        limits["late_max"] = rng.choice((0, 2, 10))
        limits["ramp_ns"] = rng.choice((0, 10_000_000))
        limits["tau_rate_max"][:2] = rng.choice((200.0, 4000.0))
        limits["tau_max"][:2] = rng.choice((12.0, 40.0))
        limits["side_silent_ns"] = 20_000_000
        limits["q_max"][0] = rng.choice((0.301, 2.0))
        limits["brake_damping"][:2] = rng.choice((5.0, 500.0, 1e300))
        if self.odd_limits:
            name = rng.choice([name for name in limits.dtype.names or () if name not in ("n", "arm_key")])
            if limits.dtype[name].shape:
                limits[name][rng.randrange(2)] = rng.choice((0.0, -1.0, math.nan, math.inf, 1e308, 5e-324))
            elif limits.dtype[name].kind == "f":
                limits[name] = rng.choice((0.0, -1.0, math.nan, math.inf, 1e308))
            else:
                limits[name] = rng.choice((0, -1, 1, 2**31, 2**62, 2**63 - 1))

    def ask(self) -> int:
        """What the operator does in this cycle: mostly nothing, a start or a reset, sometimes anything at all."""
        dice = self.rng.random()
        if dice < 0.78:
            return 0
        if dice < 0.88:
            return BIT_START
        if dice < 0.975:
            return BIT_RESET
        if dice < 0.992:
            return self.rng.choice((BIT_STOP, BIT_STOP_RELEASE, BIT_STOP, BIT_ESTOP))
        return self.rng.randrange(64)

    def episode(self) -> None:
        """Some cycles of attack, then everything is put right and a reset alone must lead back to ready, without motion."""
        self.vary_limits()
        self.beat_frozen = (0, 0)
        rate = self.rng.choice((0.02, 0.05, 0.2))
        for _ in range(CYCLES):
            self.put_right()
            if self.rng.random() < rate * (1.0 if self.stand.mode in (MODE_LIVE, MODE_BRAKING, MODE_HOLDING) else 0.2):
                self.lie()
            if self.cycle < self.beat_frozen[0]:
                self.stand.beat = self.beat_frozen[1]
            self.step(self.ask())
        self.heal()

    def heal(self) -> None:
        self.put_right(everything=True)
        for name in self.limits.dtype.names or ():
            self.limits[name] = self.good_limits[name]
        driver, stand = self.driver, self.stand
        driver.lies, driver.hears, driver.q, driver.qd = {}, True, [0.3, -0.2], [0.0, 0.0]
        parameters = stand.pointers["law_parameters"]
        parameters["Kp"][:2], parameters["Kd"][:2], parameters["extra"][0] = (50.0, 20.0), 0.0, 1
        stand.pointers["reference_begin"], stand.pointers["law_term_count"] = self.begin, 2
        stand.input["skipped"], stand.input["send_failed"], stand.late_ns, stand.silent = 0, 0, 0, False
        self.restart()
        reached = set()
        for _ in range(HEALED_CYCLES):
            self.step(BIT_RESET)
            reached.add(stand.mode)
            if stand.mode == MODE_READY and MODE_OFF in reached:
                return
        raise AssertionError(f"seed {self.seed!r}: a healthy arm must get back to ready by a reset, got {stand.says()}")


@pytest.mark.slow
@pytest.mark.parametrize("odd_limits", [False, True], ids=["limits within reason", "odd limits"])
def test_no_attack_breaks_a_rule_of_the_supervisor(odd_limits: bool) -> None:
    """Thousands of attacked cycles hold every rule, and after each episode a reset alone leads back to ready without motion."""
    attacks = [Attack(f"{seed} {odd_limits}", odd_limits) for seed in SEEDS]
    for attack in attacks:
        print("seed", attack.seed)
        for _ in range(EPISODES):
            attack.episode()
    # A campaign that never gets anywhere proves nothing.
    cycles = sum((attack.judge.count for attack in attacks), Counter())
    assert cycles.total() >= 10_000
    assert all(cycles[mode] >= 200 for mode in range(len(MODE_NAMES))), cycles
    moves = set.union(*(attack.judge.seen_moves for attack in attacks))
    assert moves == {(a, b) for a, to in LEGAL.items() for b in to}
    causes = set.union(*(attack.judge.seen_causes for attack in attacks))
    missing = set(WATCH_NAMES) - causes - {"operator_stop"} - (set() if odd_limits else {"gate"})
    assert not missing, missing


def test_the_table_of_stops_is_the_one_written_in_the_judge() -> None:
    """What each condition demands in each mode, written down twice: release, brake or nothing."""
    for w, name in enumerate(WATCH_NAMES):
        if name == "operator_stop":
            continue
        for mode in range(len(MODE_NAMES)):
            demanded = stop_of(name, mode, STOP_FAULT)
            assert int(ACTS[w, mode]) == demanded, (name, MODE_NAMES[mode])


# ---- holes found by looking, each closed and kept closed -------------------------------------------------------------------------


@pytest.mark.parametrize("bad", [math.nan, math.inf, -math.inf])
def test_a_law_torque_that_is_no_number_brakes_the_arm_instead_of_dropping_it(bad: float) -> None:
    """The state and the model are sound, so the arm is braked with finite torque; the cause is the law, not the gate."""
    stand = Stand().to_live()
    stand.pointers["law_parameters"]["Kd"][1] = bad
    row = stand.step()
    assert (stand.mode, stand.cause, int(row["request"])) == (MODE_BRAKING, "law_status", REQUEST_DRIVE)
    assert np.all(np.isfinite(row["tau_out"]))
    assert row["tau_out"][:2].any()


def test_a_reference_that_says_nan_is_a_failure_of_the_reference_even_for_a_law_that_ignores_it() -> None:
    """Without gains the torque stays finite; the position asked for is no number, and that is enough."""
    stand = Stand().to_live()
    stand.pointers["law_parameters"]["Kp"][:2] = 0.0
    stand.memory["reference"]["q_start"][0] = math.nan
    stand.step()
    assert (stand.mode, stand.cause) == (MODE_BRAKING, "law_status")


def test_a_reference_that_cannot_begin_is_not_sampled() -> None:
    """`begin` fails, `sample` would succeed on the memory of an older motion: the arm is braked before the law moves it."""
    stand = Stand()
    failing = callback(failing_begin, "failing", 3)
    stand.pointers["reference_begin"] = failing.address
    stand.until(MODE_READY)
    stand.step(BIT_START)
    stand.step()
    assert (stand.mode, stand.cause) == (MODE_BRAKING, "law_status")


@pytest.mark.parametrize("count", [0, -1, 9, 2**40])
def test_a_law_with_an_impossible_number_of_terms_is_not_called(count: int) -> None:
    """No terms would be zero torque, too many would be memory of somebody else: a failed law either way."""
    stand = Stand().to_live()
    stand.pointers["law_term_count"] = count
    row = stand.step()
    assert (stand.mode, stand.cause, int(row["law_status"])) == (MODE_BRAKING, "law_status", 0)


def test_a_driver_that_never_echoes_never_gets_ready() -> None:
    """It grants by itself and sends sound states, but shows nothing of what it hears: the delay is unknown, so no start."""
    stand = Stand()
    stand.driver.hears, stand.driver.holder = False, SESSION
    for _ in range(100):
        stand.step(BIT_START)
    assert (stand.mode, stand.conditions()) == (MODE_OFF, {"loop_delay"})


def test_a_history_beyond_the_limit_comes_back_inside_at_once() -> None:
    """The magnitude is the last word: the rate limit never keeps a torque outside, whatever left the gate before."""
    stand = Stand().to_live()
    stand.pointers["law_parameters"]["Kd"][0] = 40.0
    for _ in range(20):
        stand.step()
        stand.setup["limits"]["demand_dwell_ns"] = 10**12
    stand.setup["limits"]["tau_max"][0] = 12.0  # as if a larger torque had left before
    row = stand.step()
    assert (stand.mode, float(row["tau_out"][0])) == (MODE_LIVE, 12.0)


def test_an_open_stop_chain_is_named_although_it_also_takes_the_enable_away() -> None:
    """Drives lose their enable when the chain opens: the cause is the chain, which tells the person where to look."""
    stand = Stand().to_live()
    stand.driver.status &= ~(STATUS_STOP_CHAIN_CLOSED | STATUS_ENABLED)
    stand.step()
    assert (stand.mode, stand.cause) == (MODE_LATCHED, "stop_chain")


def test_infinite_limits_do_not_let_an_infinite_torque_out() -> None:
    """Two huge finite torques whose difference overflows, and no limit to clamp them: refused, as all that is no number."""
    stand = Stand().to_live()
    limits = stand.setup["limits"]
    limits["tau_max"][0], limits["tau_rate_max"][0], limits["demand_dwell_ns"] = math.inf, math.inf, 10**12
    for torque in (1e308, -1e308, 1e308):
        stand.pointers["law_parameters"]["Kd"][0] = torque
        row = stand.step()
        assert np.all(np.isfinite(row["tau_out"]))


@pytest.mark.parametrize("bound", [math.nan, -1.0])
def test_a_spring_bound_that_bounds_nothing_lets_no_torque_out(bound: float) -> None:
    """A holding spring without a valid bound would be an unlimited or a constant push."""
    stand = Stand().to_live()
    stand.setup["limits"]["hold_torque_max"][:2] = bound
    stand.step(BIT_STOP)
    for _ in range(60):
        row = stand.step()
        assert stand.mode != MODE_HOLDING
    assert (stand.mode, stand.cause, int(row["request"])) == (MODE_LATCHED, "gate", REQUEST_RELEASE)


@pytest.mark.parametrize("speed", [1e308, -1e308])
def test_an_absurd_speed_brakes_with_full_torque(speed: float) -> None:
    """Damping times a finite speed may overflow; the arm is braked at the torque limit and not dropped."""
    stand = Stand().to_live()
    stand.driver.qd = [speed, 0.0]
    for _ in range(30):
        row = stand.step()
        assert (stand.mode, stand.cause, int(row["request"])) == (MODE_BRAKING, "speed", REQUEST_DRIVE)
    assert float(row["tau_out"][0]) == math.copysign(40.0, -speed)


def test_a_driver_clock_that_runs_ahead_does_not_hide_a_glitch() -> None:
    """A sample time 10 s ahead would let a joint move 90 rad; the reach stays that of the greatest age allowed."""
    stand = Stand().to_live()
    stand.driver.clock_offset_ns += 10**10
    stand.driver.q[0] += 0.5
    stand.step()
    assert (stand.mode, stand.cause) == (MODE_LATCHED, "position_glitch")


def test_a_clock_that_runs_backwards_stops_the_arm() -> None:
    """The loop's own clock 20 ms back: every age and dwell would pass from then on, so the arm is released."""
    stand = Stand().to_live()
    stand.late_ns = -20_000_000
    stand.step()
    assert (stand.mode, stand.cause) == (MODE_LATCHED, "clock_jump")
    stand = Stand().to_live()
    stand.silent, stand.late_ns = True, -3_000_000
    stand.step()
    assert (stand.mode, stand.cause) == (MODE_LATCHED, "state_age")


@pytest.mark.parametrize("late", range(4))
def test_a_start_right_after_a_release_waits_for_a_new_grant(late: int) -> None:
    """States still show the grant that was just given back: a motion on it would be refused by the driver and end in latched."""
    stand = Stand().to_live()
    stand.step(BIT_STOP_RELEASE)
    stand.until(MODE_READY)
    driver, grant = stand.driver, stand.driver.grant
    for k in range(60):
        driver.holder = SESSION if k < 3 else driver.holder if k > 3 else 0  # the release is on its way for three cycles
        stand.step(BIT_START if k == late else 0)
        assert stand.mode in (MODE_OFF, MODE_READY), stand.says()
    assert stand.mode == MODE_READY
    assert driver.grant > grant
    stand.step(BIT_START)
    assert stand.mode == MODE_LIVE


def test_a_restarted_driver_may_grant_the_number_of_the_last_motion_again() -> None:
    """Numbers count per driver session: after a restart the same number is a new grant."""
    stand = Stand().to_live()
    number = stand.driver.grant
    stand.driver.session, stand.driver.sequence, stand.driver.holder, stand.driver.grant = 501, 0, 0, number - 1
    stand.step()
    assert stand.mode == MODE_LATCHED
    for _ in range(100):
        stand.step(BIT_RESET if stand.mode == MODE_LATCHED else 0)
    assert (stand.mode, stand.driver.grant) == (MODE_READY, number)


@pytest.mark.parametrize("late_max", [0, 10])
def test_late_cycles_are_forgotten_within_two_windows_however_many_they_were(late_max: int) -> None:
    """A bad hour at rest, or a single late cycle where none is allowed, does not keep the arm off for ever."""
    stand = Stand()
    stand.setup["limits"]["late_max"] = late_max
    stand.late_ns = 600_000
    for _ in range(5000):
        stand.step()
    assert "late_cycles" in stand.conditions()
    stand.late_ns = 0
    stand.until(MODE_READY, limit=2 * 1000 + 100)


def test_a_driver_twice_as_fast_does_not_make_the_time_of_a_motion_run_twice_as_fast() -> None:
    """With pacing by states, cycles are on average no closer than 15/16 of a period; jitter and late states do not add up."""
    period_ns = 1_000_000
    last_ns = woke_ns = 0
    cycles = 1000
    for _ in range(cycles):  # states every half period: a cycle starts as soon as the loop lets it
        woke_ns = max(woke_ns + period_ns // 2, last_ns + period_ns // 2)
        last_ns = paced_start(last_ns, woke_ns, period_ns)
    assert woke_ns >= (cycles - 1) * period_ns * (CATCH_UP - 1) // CATCH_UP
    rng, last_ns = random.Random(7), 0
    for k in range(1, 1001):  # on time with jitter, one late by 0.4 periods: never ahead of what passed by more than the lateness
        woke_ns = k * period_ns + rng.randrange(50_000) + (400_000 if k == 500 else 0)
        last_ns = paced_start(last_ns, woke_ns, period_ns)
        assert 0 <= last_ns - woke_ns <= (400_000 if 500 < k < 510 else 0) + 50_000


# ---- the whole chain ----------------------------------------------------------------------------------------------------------


@pytest.mark.slow
@pytest.mark.parametrize("seed", [11, 12])
def test_the_simulated_arm_in_lock_step_holds_every_rule_under_attack(seed: int) -> None:
    """Real law, codec and driver: lost messages, requests at any time, an opened stop chain and a fault, 6000 cycles each."""
    rng = random.Random(seed)
    print("seed", seed)
    rehearsal = Rehearsal(demo())
    run, lockstep, plant = rehearsal.run, rehearsal.lockstep, rehearsal.plant_memory
    judge = Judge(rehearsal.setup["limits"], run.arm.n, 7, int(rehearsal.setup["period_ns"]))
    k = 0
    while k < 6000:
        cycles = rng.choice((20, 100, 400))
        plant["stop_chain_closed"], plant["fault"] = int(rng.random() > 0.05), int(rng.random() < 0.05)
        schedule: dict[int, int] = {}
        for j in range(cycles):
            bits = LOST_STATE * (rng.random() < 0.01) + LOST_TORQUE * (rng.random() < 0.01)
            if rng.random() < 0.05:
                bits |= rng.choice((BIT_START,) * 6 + (BIT_RESET,) * 4 + (BIT_STOP, BIT_STOP_RELEASE, BIT_ESTOP, BIT_LEAVE))
            if bits:
                schedule[j] = bits
        for row in lockstep.advance(cycles, schedule):
            broken = judge.broken(row)
            assert not broken, f"seed {seed}, cycle {int(row['cycle'])}: {broken}"
        k += cycles
    assert all(judge.count[mode] > 0 for mode in (MODE_OFF, MODE_READY, MODE_LIVE, MODE_BRAKING, MODE_LATCHED)), judge.count


@pytest.mark.slow
@pytest.mark.parametrize("seed", [21, 22])
def test_the_simulated_driver_applies_only_the_holders_own_fresh_torque_in_a_storm_of_messages(seed: int) -> None:
    """Two controllers, replays and wild numbers, 4000 messages: what is applied keeps every rule of the message contract."""
    rng = random.Random(seed)
    print("seed", seed)
    rehearsal = Rehearsal(demo(), torque_delay=0)  # every message is judged when it arrives
    setup, memory, n = rehearsal.plant_setup, rehearsal.plant_memory, rehearsal.run.arm.n
    now_ns, sent, numbers, last, granted = 10**12, [], Counter(), {}, set()
    for _ in range(4000):
        now_ns += rng.choice((0, 0, 300_000, 1_000_000, 5_000_000))
        assert plant_advance(setup, memory, now_ns) == OK
        before = memory.copy()
        torque = wild_torque(rng, setup, memory, n, sent, numbers)
        status = plant_receive(setup, memory, torque, now_ns)
        session, grant = int(torque["session"]), int(torque["grant"])
        if int(memory["accepted"]) != int(before["accepted"]):
            assert status == OK and int(torque["request"]) == REQUEST_DRIVE
            assert session == int(before["holder"]) == int(memory["holder"]), "only the holder drives"
            assert grant == int(before["grant"]), "only with the current number"
            assert int(torque["driver_session"]) == int(setup["session"]) and int(torque["arm_key"]) == int(setup["arm_key"])
            assert int(torque["sequence"]) > last.get((session, grant), 0), "never an old or repeated message"
            answered = int(memory["sample_ns"][int(torque["state_sequence"]) % HISTORY])
            assert now_ns - answered < min(int(torque["valid_for_ns"]), int(setup["valid_for_max_ns"])), "never an old torque"
            last[(session, grant)] = int(torque["sequence"])
        else:
            assert memory["tau_command"].tolist() == before["tau_command"].tolist(), "what is not accepted changes no torque"
        assert np.all(np.abs(memory["tau_command"][:n]) <= setup["tau_max"][:n]), "finite and within the driver's own limits"
        if int(memory["holder"]) not in (0, int(before["holder"])):
            free = int(before["holder"]) == 0 or int(memory["lapses"]) != int(before["lapses"])
            assert free and int(torque["request"]) == REQUEST_ASK, "a grant is given on request, to one at a time"
            assert int(memory["phase"]) == PHASE_STILL and not memory["qd"][:n].any(), "a grant is given at rest only"
            assert int(memory["grant"]) not in granted, "every grant has a new number"
            granted.add(int(memory["grant"]))
    assert len(granted) > 20 and int(memory["accepted"]) > 200, (len(granted), int(memory["accepted"]))


def wild_torque(
    rng: random.Random, setup: np.void, memory: np.void, n: int, sent: list[np.void], numbers: Counter[int]
) -> np.void:
    """A message of one of two controllers: sound, a little wrong, or a replay of an old one."""
    if sent and rng.random() < 0.15:
        return rng.choice(sent)
    torque = new_block(TORQUE)
    held = int(memory["holder"])
    session = held if held and rng.random() < 0.8 else rng.choice((7, 8))
    newest = int(memory["sequence"])
    torque["version"], torque["arm_key"], torque["n"] = 1, setup["arm_key"], n
    torque["session"], torque["driver_session"] = session, setup["session"]
    numbers[session] += 1
    torque["sequence"] = numbers[session]
    torque["state_sequence"], torque["grant"], torque["valid_for_ns"] = newest, memory["grant"], 20_000_000
    torque["request"] = rng.choice((REQUEST_DRIVE,) * 12 + (REQUEST_RELEASE,)) if held else REQUEST_ASK
    torque["tau"][:n] = [rng.uniform(-0.2, 0.2) * float(bound) for bound in setup["tau_max"][:n]]
    if rng.random() < 0.25:
        field, value = rng.choice(
            (
                ("session", rng.choice((0, 7, 8))),
                ("sequence", rng.choice((0, 1, int(torque["sequence"]) - 1))),
                ("driver_session", int(setup["session"]) + 1),
                ("arm_key", 5),
                ("n", rng.choice((0, n - 1, 16))),
                ("grant", int(memory["grant"]) + rng.choice((-1, 1))),
                ("state_sequence", rng.choice((0, newest + 1, max(newest - 30, 0), max(newest - HISTORY, 0), 2**53 - 1))),
                ("valid_for_ns", rng.choice((0, 1, 2**53 - 1))),
                ("request", rng.choice((REQUEST_ASK, REQUEST_DRIVE, REQUEST_RELEASE, 3))),
                ("tau", rng.choice((math.nan, math.inf, 1e308, -1e6))),
            )
        )
        if field == "tau":
            torque["tau"][rng.randrange(n)] = value
        else:
            torque[field] = value
    sent.append(torque)
    if len(sent) > 200:
        del sent[:100]
    return torque
