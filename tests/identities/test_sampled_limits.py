"""How fast feedback may be for its period: known stability limits, and the laws and the whole cycle held to them.

The known limits are those of position and velocity measured at the same instant. The driver of the simulated arm, as most drivers,
takes the velocity from two positions; its limits come from the same matrix with that difference in place of the velocity.
"""

import math
from collections.abc import Callable

import numpy as np
import pytest

from tests.law_loop import LawLoop
from tests.lockstep_runs import Rehearsal, demo, holding_still
from tests.plants import oblique_model
from tests.sampled_loop import Gains, critically_damped, limit, spectral_radius, triple_pole
from tests.sources import source

PRINTED = 5e-8  # seven digits
MARGIN = 0.01  # the limits are bracketed this closely
KICK_RAD = 1e-9  # small enough for the velocity torques not to matter while unstable loops grow
E_FOLDS = 4.0  # of growth or decay that a run must show

LIMITS = [  # form of the gains, periods of latency, least unstable w T (or L T)
    (critically_damped, 0, 1.0),
    (critically_damped, 1, 0.4261589),
    (critically_damped, 2, 0.2578499),
    (triple_pole, 0, 2.0 / 3.0),
    (triple_pole, 1, 0.2735726),
    (triple_pole, 2, 0.1639444),
]
NAMES = [f"{form.__name__}-{delay}" for form, delay, _ in LIMITS]


def cycles_to_tell(gains: Gains, delay: int, difference: bool) -> int:
    """Cycles in which the slowest mode grows or decays by E_FOLDS, after the others have died out."""
    return 50 + math.ceil(E_FOLDS / abs(math.log(spectral_radius(gains, delay, difference))))


def grows(errors: np.ndarray) -> np.ndarray:
    """For each column: is the last fifth of the run larger than the first fifth after the start?"""
    part = len(errors) // 5
    return np.abs(errors[-part:]).max(axis=0) > np.abs(errors[30 : 30 + part]).max(axis=0)


# ---- true velocity --------------------------------------------------------------------------------------------------------------


@source("franklin1998", "exactly sampled double integrator with held torque; limits computed from its transition matrix")
@pytest.mark.parametrize(("form", "delay", "known"), LIMITS, ids=NAMES)
def test_known_limits(form: Callable[[float], Gains], delay: int, known: float) -> None:
    """w T < 1, 0.4261589 and 0.2578499 with 0, 1 and 2 periods of latency; with an integral 2/3, 0.2735726 and 0.1639444."""
    assert limit(form, delay, difference=False) == pytest.approx(known, abs=PRINTED)


def law_loop(gains: Gains, delay: int) -> LawLoop:
    """Computed torque on an exact arm of three crossing joints, these gains on each, disturbed."""
    Kp, Kd, Ki = (gain / 1e-3**power for gain, power in zip(gains, (2, 1, 3), strict=True))
    table: dict[str, float] = {"kp_1_s2": Kp, "kd_1_s": Kd}
    if Ki > 0.0:
        table |= {"ki_1_s3": Ki, "integral_max_rad_s2": 1e12}
    model = oblique_model(3, gravity=0.0)
    loop = LawLoop("computed_torque", model, table, q_ref=[0.2, 0.4, -0.3], period_s=1e-3, delay=delay)
    loop.memory["q"][:3] = np.array([0.2, 0.4, -0.3]) + KICK_RAD
    return loop


@source("franklin1998", "exactly sampled double integrator with held torque; limits computed from its transition matrix")
@pytest.mark.parametrize(("form", "delay", "known"), LIMITS, ids=NAMES)
def test_computed_torque_is_stable_up_to_the_known_limit(form: Callable[[float], Gains], delay: int, known: float) -> None:
    """The law on the simulated arm settles 1 % below each limit and runs away 1 % above it, in every joint."""
    for share, unstable in ((1.0 - MARGIN, False), (1.0 + MARGIN, True)):
        gains = form(share * known)
        errors = law_loop(gains, delay).run(cycles_to_tell(gains, delay, difference=False))
        assert (grows(errors) == unstable).all(), (share, errors[-1])


@source("franklin1998", "PD on a sampled double integrator: Kp T / 2 < Kd < 2 / T; computed from its transition matrix")
@pytest.mark.parametrize(
    ("Kp", "Kd", "unstable"), [(0.5, 0.2525, False), (0.5, 0.2475, True), (1.0, 1.98, False), (1.0, 2.02, True)]
)
def test_damping_has_a_lower_and_an_upper_limit(Kp: float, Kd: float, unstable: bool) -> None:
    """Damping 1 % inside either end of the range settles, 1 % outside it runs away."""
    gains = (Kp, Kd, 0.0)
    errors = law_loop(gains, 0).run(cycles_to_tell(gains, 0, difference=False))
    assert (grows(errors) == unstable).all()


@source("franklin1998", "delay margin = phase margin / crossover of the open loop, computed in the test from its polynomials")
@pytest.mark.parametrize(
    ("form", "crossover", "phase_deg", "margin"),
    [(critically_damped, 2.0581710, 76.3454, 0.6474092), (triple_pole, 3.0549834, 71.2498, 0.4070542)],
)
def test_delay_margin(form: Callable[[float], Gains], crossover: float, phase_deg: float, margin: float) -> None:
    """At a hundredth of the sampling limit the latency that a loop bears is its continuous delay margin, less half a period.

    PD: w_c^2 = w^2 (2 + sqrt 5), margin 0.6474092 / w; with an integral and a triple pole -L: 0.4070542 / L.
    """
    Kp, Kd, Ki = form(1.0)
    open_loop = (Kd * (1j * crossover) ** 2 + Kp * 1j * crossover + Ki) / (1j * crossover) ** 3
    assert abs(open_loop) == pytest.approx(1.0, abs=1e-7)
    assert 180.0 + np.degrees(np.angle(open_loop)) == pytest.approx(phase_deg, abs=5e-5)
    assert math.radians(phase_deg) / crossover == pytest.approx(margin, abs=5e-7)
    if form is critically_damped:
        assert math.sqrt(2.0 + math.sqrt(5.0)) == pytest.approx(crossover, abs=PRINTED)
    a = 0.01
    bearable = margin / a - 0.5  # holding the torque counts as half a period
    for share, unstable in ((0.98, False), (1.02, True)):
        delay = round(share * bearable)
        gains = form(a)
        assert (spectral_radius(gains, delay, difference=False) > 1.0) == unstable
        errors = law_loop(gains, delay).run(3000)[200:]
        assert (grows(errors) == unstable).all()


# ---- the whole cycle, velocity by difference -----------------------------------------------------------------------------------


def loosened(delay: int) -> Rehearsal:
    """The demo's arm held by computed torque on the exact model, a latency, and limits that do not act."""
    rehearsal = Rehearsal(holding_still(demo(), 1000.0), "computed_torque").exact().start()
    rehearsal.plant_setup["torque_delay"] = delay
    for name in ("tau_max", "tau_rate_max", "qd_max", "error_max"):
        rehearsal.setup["limits"][name][:6] = 1e9
    rehearsal.plant_setup["tau_max"][:6], rehearsal.plant_setup["qd_max"][:6] = 1e9, 1e9
    rehearsal.lockstep.advance(5)
    return rehearsal


@source("textbook mathematics", "spectral radius of the sampled loop's transition matrix")
@pytest.mark.parametrize(("form", "delay"), [(form, delay) for form, delay, _ in LIMITS], ids=NAMES)
def test_the_cycle_is_stable_up_to_its_own_limit(form: Callable[[float], Gains], delay: int) -> None:
    """In lock-step, messages and all, joints 1 % below the limit settle while their neighbours 1 % above it run away."""
    rehearsal = loosened(delay)
    known = limit(form, delay, difference=True)
    parameters = rehearsal.assembly.pointers["computed_torque"]["law_parameters"]
    unstable = np.array([False, True, True, False, True, False])
    cycles = 0
    for joint in range(6):
        gains = form((1.0 + (MARGIN if unstable[joint] else -MARGIN)) * known)
        for name, gain, power in zip(("Kp", "Kd", "Ki"), gains, (2, 1, 3), strict=True):
            parameters[name][joint] = gain * 1000.0**power
        cycles = max(cycles, cycles_to_tell(gains, delay, difference=True))
    parameters["integral_max"][:6] = 1e12
    rehearsal.plant_memory["q"][:6] += KICK_RAD
    rows = rehearsal.lockstep.advance(cycles)
    assert (grows((rows["q"] - rows["q_ref"])[:, :6]) == unstable).all()
