"""How the tracking error moves under computed torque on the exact model, in lock-step: the linear theory, number by number.

Each of the six joints of the demonstration arm gets other gains, so every run also shows that the joints do not act on each other.
What holding the torque and differencing the position add is of first order in the period: a test either measures that order, or
takes two rates and extrapolates to none.
"""

import math
from collections.abc import Sequence
from functools import cache

import numpy as np
import pytest

from rtctl.blocks import MODE_LIVE
from tests.lockstep_runs import Rehearsal, demo, holding_still
from tests.sources import source

Gains = tuple[float, float, float]  # Kp, Kd, Ki for a natural frequency of 1
W = 15.0  # rad/s
OFFSET_RAD = 1e-6  # small enough for the velocity torques not to matter
RATES_HZ = (4000.0, 8000.0)


def second_order(damping_ratio: float) -> Gains:
    return 1.0, 2.0 * damping_ratio, 0.0


TRIPLE = (3.0, 3.0, 1.0)
ITAE_1953 = (2.15, 1.75, 1.0)
ISE = (2.0, 1.0, 1.0)
BUTTERWORTH = (2.0, 2.0, 1.0)


class Errors:
    """Errors of the six joints after each was set off its reference, as shares of the offset; time counted in 1/w."""

    def __init__(self, gains: Sequence[Gains], rate_hz: float, seconds: float) -> None:
        """The integral starts at Kp times the offset: position, speed and acceleration begin as in a step of the reference."""
        rehearsal = Rehearsal(holding_still(demo(), rate_hz), "computed_torque").exact().start()
        parameters = rehearsal.assembly.pointers["computed_torque"]["law_parameters"]
        for joint, (Kp, Kd, Ki) in enumerate(gains):
            parameters["Kp"][joint], parameters["Kd"][joint], parameters["Ki"][joint] = Kp * W**2, Kd * W, Ki * W**3
            if Ki > 0.0:
                rehearsal.lockstep.memory["law"]["values"][joint] = Kp * W**2 * OFFSET_RAD
        parameters["integral_max"][:6] = 1e9
        rehearsal.plant_memory["q"][:6] += OFFSET_RAD
        rehearsal.plant_memory["q_meas"][:6] += OFFSET_RAD  # no speed from the offset itself
        rows = rehearsal.lockstep.advance(round(seconds * rate_hz))
        assert np.all(rows["mode"] == MODE_LIVE)
        self.e = (rows["q"] - rows["q_ref"])[:, :6] / OFFSET_RAD
        self.x = np.arange(len(rows)) * W / rate_hz

    def overshoot(self, joint: int) -> float:
        """How far the error passes through zero, by a parabola through the lowest sample and its neighbours."""
        e = self.e[:, joint]
        k = int(np.argmin(e))
        before, lowest, after = e[k - 1 : k + 2]
        return float(-(lowest - (after - before) ** 2 / (8.0 * (before - 2.0 * lowest + after))))

    def settling(self, joint: int) -> float:
        """w times the time after which the error stays below 2 %, by the straight line between two samples."""
        e = np.abs(self.e[:, joint])
        k = int(np.flatnonzero(e > 0.02)[-1])
        share = (e[k] - 0.02) / (e[k] - e[k + 1])
        return float(self.x[k] + share * (self.x[k + 1] - self.x[k]))


@cache
def runs(gains: tuple[Gains, ...], seconds: float) -> tuple[Errors, Errors]:
    """The same at two rates."""
    coarse, fine = (Errors(gains, rate_hz, seconds) for rate_hz in RATES_HZ)
    return coarse, fine


def extrapolated(coarse: float, fine: float) -> float:
    """The value without sampling: what is of first order in the period halves from one rate to the next."""
    return 2.0 * fine - coarse


FIRST = tuple(second_order(z) for z in (0.1, 0.2, 0.3, 0.4, 0.5, 0.6))
SECOND = (second_order(0.7), second_order(math.sqrt(0.5)), second_order(0.8), second_order(0.9), second_order(1.0), TRIPLE)
THIRD = (TRIPLE, ITAE_1953, ISE, BUTTERWORTH, TRIPLE, ITAE_1953)
SECONDS = {FIRST: 1.6, SECOND: 0.8, THIRD: 1.2}

# Gains, group, joint: the order is the test's, the numbers are the theory's.
OVERSHOOTS = [
    *((FIRST, k, value) for k, value in enumerate((0.729248, 0.526621, 0.372326, 0.253827, 0.163034, 0.094780))),
    (SECOND, 1, 0.043214),
    (SECOND, 2, 0.015165),
    (SECOND, 3, 0.001524),
]
SETTLINGS = [
    *((FIRST, k, value) for k, value in ((1, 19.602), (3, 8.409), (4, 8.076), (5, 5.943))),
    *((SECOND, k, value) for k, value in enumerate((5.979, 5.963, 3.756, 4.700, 5.83392170, 7.51660388))),
]


@source("siciliano2009", "second-order system: overshoot exp(-pi z / sqrt(1 - z^2))")
@pytest.mark.parametrize(("gains", "joint", "expected"), OVERSHOOTS)
def test_overshoot_of_a_damping_ratio(gains: tuple[Gains, ...], joint: int, expected: float) -> None:
    """From z = 0.1 to 0.9 the error passes zero by the textbook's share of the offset."""
    z = gains[joint][1] / 2.0
    assert math.exp(-math.pi * z / math.sqrt(1.0 - z * z)) == pytest.approx(expected, abs=5e-7)
    coarse, fine = runs(gains, SECONDS[gains])
    # Second order in w T = 0.002 to 0.004, extrapolated; 1e-4 of the offset.
    assert extrapolated(coarse.overshoot(joint), fine.overshoot(joint)) == pytest.approx(expected, abs=1e-4)


@source("textbook mathematics", "last time at which the exact response of the linear equation differs by 2 %, solved numerically")
@pytest.mark.parametrize(("gains", "joint", "expected"), SETTLINGS)
def test_settling_time(gains: tuple[Gains, ...], joint: int, expected: float) -> None:
    """The exact 2 % settling time, not the rule 4 / (z w): from lightly damped to the triple pole."""
    coarse, fine = runs(gains, SECONDS[gains])
    assert extrapolated(coarse.settling(joint), fine.settling(joint)) == pytest.approx(expected, abs=2e-3)


@source(
    "graham-lathrop1953",
    "third-order standard form 1.75, 2.15; its response, and those of ISE 1, 2 and Butterworth 2, 2, computed",
)
@pytest.mark.parametrize(
    ("joint", "overshoot", "settling"),
    [(1, 0.01980, 7.542), (2, 0.0727, 13.52), (3, 0.0815, None)],
    ids=["itae", "ise", "maxflat"],
)
def test_standard_forms_of_third_order(joint: int, overshoot: float, settling: float | None) -> None:
    """Kd, Kp, Ki of the published forms give their overshoot and settling time as gains of the law."""
    coarse, fine = runs(THIRD, SECONDS[THIRD])
    assert extrapolated(coarse.overshoot(joint), fine.overshoot(joint)) == pytest.approx(overshoot, abs=1.5e-4)
    if settling is not None:
        assert extrapolated(coarse.settling(joint), fine.settling(joint)) == pytest.approx(settling, abs=1e-2)


@source("textbook mathematics", "integrals of (1 + x + x^2/2) e^-x squared, absolute, and absolute times x: 2.0625, 3 and 6")
def test_error_integrals_of_a_triple_pole() -> None:
    """w ISE = 2.0625, w IAE = 3, w^2 ITAE = 6, and no overshoot."""
    found = []
    for errors in runs(THIRD, SECONDS[THIRD]):
        e, x = errors.e[:, 0], errors.x
        assert e.min() > -1e-6
        found.append([np.trapezoid(y, x) for y in (e * e, np.abs(e), x * np.abs(e))])
    assert extrapolated(*np.array(found)) == pytest.approx([2.0625, 3.0, 6.0], rel=1e-3)


@source("siciliano2009", "computed torque with an integral: e''' + Kd e'' + Kp e' + Ki e = 0 in every joint")
def test_third_order_error_equation_and_its_convergence() -> None:
    """All joints follow (1 + w t + (w t)^2 / 2) e^(-w t); the deviation shrinks in proportion to the period, from 2 to 8 kHz."""
    deviations = []
    for rate_hz in (2000.0, 4000.0, 8000.0):
        errors = Errors((TRIPLE,) * 6, rate_hz, 0.6)
        exact = (1.0 + errors.x + errors.x**2 / 2.0) * np.exp(-errors.x)
        deviations.append(np.abs(errors.e - exact[:, None]).max(axis=0))
    assert np.all(deviations[0] < W / 2000.0)
    orders = np.log2(np.divide(deviations[:-1], deviations[1:]))
    assert orders == pytest.approx(np.ones((2, 6)), abs=0.05)


@source("routh", "e''' + Kd e'' + Kp e' + Ki e = 0 is stable for Ki < Kd Kp; at the bound it swings at sqrt(Kp)")
def test_rouths_bound_separates_stable_from_unstable() -> None:
    """Joints with 1.5 % less integral gain than the bound settle, with 1.5 % more they run away; all swing at sqrt(Kp).

    The sampled loop lags by about a period T more than the equation, which moves its bound by some Kd T = 0.4 %.
    """
    unstable = np.array([False, True, False, True, True, False])
    gains = [(4.0, 2.0, (1.015 if beyond else 0.985) * 4.0 * 2.0) for beyond in unstable]
    errors = Errors(gains, 8000.0, 4.0)
    part = len(errors.e) // 4
    early, late = (np.abs(errors.e[begin : begin + part]).max(axis=0) for begin in (part, 3 * part))
    assert ((late > early) == unstable).all()
    for joint in range(6):
        e = errors.e[part:, joint]
        crossings = np.flatnonzero((e[:-1] < 0.0) & (e[1:] >= 0.0))
        turns = len(crossings) - 1
        seconds = (crossings[-1] - crossings[0]) / 8000.0
        assert 2.0 * math.pi * turns / seconds == pytest.approx(2.0 * W, rel=0.005)
