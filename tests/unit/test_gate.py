"""The gate under attack: whatever comes in, nothing outside the limits goes out."""

import itertools
import math
import random

import numpy as np
import pytest

from rtctl.blocks import LIMITER_MAGNITUDE, LIMITER_RATE, MODE_BRAKING, MODE_HOLDING, MODE_LIVE, ROW, SETUP
from rtctl.kernels.layout import MAX_JOINTS, OK, new_block
from rtctl.supervisor.gate import REFUSED, pass_gate

TAU_MAX = (40.0, 10.0)
RATE = (2000.0, 500.0)
BRAKE_RATE = (4000.0, 1000.0)
PERIOD_NS = 1_000_000
# One rounding of tau_last + step and one of its difference, at torques up to 40 N m.
ROUNDING = 4 * np.spacing(40.0)
POISON = (math.nan, math.inf, -math.inf, -0.0, 5e-324, 1e308, -1e308, 40.0, 40.0 + np.spacing(40.0), 3.0)


def gate_setup(scale: int = 0) -> np.void:
    setup = new_block(SETUP)
    setup["model"]["n"] = 2
    setup["period_ns"] = PERIOD_NS
    limits = setup["limits"]
    limits["tau_max"][:2] = TAU_MAX
    limits["tau_rate_max"][:2] = RATE
    limits["brake_tau_rate_max"][:2] = BRAKE_RATE
    limits["scale_torque"] = scale
    return setup


def through(setup: np.void, mode: int, tau: tuple[float, ...], last: tuple[float, ...], gravity: tuple[float, ...] = (0.0, 0.0)):
    row = new_block(ROW)
    wide = [np.zeros(MAX_JOINTS) for _ in range(3)]
    for array, values in zip(wide, (tau, gravity, last), strict=True):
        array[: len(values)] = values
    status = pass_gate(setup, mode, *wide, row)
    return status, row["tau_out"][:2].copy(), row["limiters"][:2].copy()


@pytest.mark.parametrize("scale", [0, 1])
@pytest.mark.parametrize("mode", [MODE_LIVE, MODE_BRAKING, MODE_HOLDING])
def test_no_input_yields_a_torque_outside_the_limits(mode: int, scale: int) -> None:
    """Every poison value in every input and joint, alone and in pairs: finite, within the limit, within the rate of the mode."""
    setup = gate_setup(scale)
    rate = RATE if mode == MODE_LIVE else BRAKE_RATE
    for tau in itertools.product(POISON, repeat=2):
        for last in itertools.product((0.0, 39.0, -9.0, math.nan, math.inf), repeat=2):
            for gravity in ((0.0, 0.0), (30.0, math.nan), (math.inf, 2.0)):
                status, out, _ = through(setup, mode, tau, last, gravity)
                assert np.all(np.isfinite(out))
                assert np.all(np.abs(out) <= TAU_MAX)
                if status != OK:
                    assert np.all(out == 0.0)
                elif np.all(np.abs(last) <= np.array(TAU_MAX)):
                    assert np.all(np.abs(out - last) <= np.array(rate) * 1e-3 + ROUNDING)


@pytest.mark.parametrize("bad", [math.nan, math.inf, -math.inf])
def test_a_number_that_is_not_finite_is_refused(bad: float) -> None:
    """Not clamped to full torque, not sent as zero torque under a grant: refused."""
    for tau, last in (((bad, 0.0), (0.0, 0.0)), ((0.0, bad), (0.0, 0.0)), ((0.0, 0.0), (bad, 0.0))):
        status, out, _ = through(gate_setup(), MODE_LIVE, tau, last)
        assert status == REFUSED
        assert out.tolist() == [0.0, 0.0]


def test_a_limit_that_is_not_a_number_is_refused() -> None:
    """A torque limit of NaN or below zero lets nothing out."""
    for bad in (math.nan, -1.0):
        setup = gate_setup()
        setup["limits"]["tau_max"][1] = bad
        assert through(setup, MODE_LIVE, (0.0, 0.0), (0.0, 0.0))[0] == REFUSED


def test_a_rate_that_is_not_a_number_lets_nothing_out() -> None:
    """A rate limit of NaN makes no torque at all, never an unlimited step."""
    setup = gate_setup()
    setup["limits"]["tau_rate_max"][0] = math.nan
    status, out, _ = through(setup, MODE_LIVE, (10.0, 0.0), (0.0, 0.0))
    assert (status, out.tolist()) == (REFUSED, [0.0, 0.0])


def test_torque_inside_the_limits_passes_unchanged() -> None:
    """To the last bit, with no limiter marked."""
    tau = (0.1 + 0.2, -1.0 / 3.0)
    status, out, limiters = through(gate_setup(), MODE_LIVE, tau, (0.0, 0.0))
    assert status == OK
    assert tuple(out) == tau
    assert limiters.tolist() == [0, 0]


def test_limiters_are_named_per_joint() -> None:
    """Magnitude on joint 1, rate on joint 2."""
    _, out, limiters = through(gate_setup(), MODE_LIVE, (50.0, 9.0), (39.5, 0.0))
    assert limiters.tolist() == [LIMITER_MAGNITUDE, LIMITER_RATE]
    assert out.tolist() == [40.0, 0.5]


def test_scaling_keeps_gravity_and_the_direction_of_the_rest() -> None:
    """With scaling, gravity stays whole and what exceeds it shrinks by one factor for all joints."""
    setup = gate_setup(scale=1)
    setup["limits"]["tau_rate_max"][:2] = 1e9
    gravity = (20.0, 4.0)
    _, out, _ = through(setup, MODE_LIVE, (20.0 + 40.0, 4.0 + 3.0), (0.0, 0.0), gravity)
    assert out == pytest.approx([20.0 + 20.0, 4.0 + 1.5], rel=1e-12)


def test_ten_thousand_seeded_pairs_stay_inside() -> None:
    """Random torques and histories over 600 decades: never outside the limit, never over the rate."""
    rng = random.Random(20261201)
    setup = gate_setup()
    for _ in range(10_000):
        tau = tuple(rng.choice((-1, 1)) * 10.0 ** rng.uniform(-300, 300) for _ in range(2))
        last = tuple(rng.uniform(-bound, bound) for bound in TAU_MAX)
        status, out, _ = through(setup, MODE_LIVE, tau, last)
        assert status == OK
        assert np.all(np.abs(out) <= TAU_MAX)
        assert np.all(np.abs(out - last) <= np.array(RATE) * 1e-3 + ROUNDING)
