"""The whole controller in lock-step against what theory says the closed loop must do."""

import numpy as np
import pytest

from rtctl.blocks import MODE_LIVE
from tests.lockstep_runs import Rehearsal, demo, holding_still
from tests.sources import source

KICK_RAD_S = 1e-3  # small enough for the velocity terms not to matter
W_RAD_S = 15.0  # of the demo's computed torque, damping ratio 1


def kicked_error(rate_hz: float) -> np.ndarray:
    """Error of each joint times w over the kick, for 0.4 s after all joints were given a speed at once under computed torque."""
    rehearsal = Rehearsal(holding_still(demo(), rate_hz), "computed_torque").exact().start()
    rehearsal.plant_memory["qd"][:6] += KICK_RAD_S
    rows = rehearsal.lockstep.advance(round(0.4 * rate_hz))
    assert np.all(rows["mode"] == MODE_LIVE)
    return (rows["q"] - rows["q_ref"])[:, :6] * W_RAD_S / KICK_RAD_S


@source("siciliano2009", "sec. 8.5.2: inverse dynamics control, linear decoupled error")
def test_computed_torque_on_the_exact_model_follows_the_analytic_error() -> None:
    """After a kick every joint follows w t e^(-w t), whatever the others do; the deviation is the sampling's.

    Holding the torque over a period and differencing the position delay by one period T together: the deviation is of first
    order in T, so it shrinks by 4 from 2 kHz to 8 kHz. Tolerance on the ratio: 15 %, for the terms of second order.
    """
    deviations = []
    for rate_hz in (2000.0, 8000.0):
        error = kicked_error(rate_hz)
        t = np.arange(1, len(error) + 1)[:, None] / rate_hz
        deviations.append(np.abs(error - W_RAD_S * t * np.exp(-W_RAD_S * t)).max())
    assert deviations[0] < W_RAD_S / 2000.0
    assert deviations[0] / deviations[1] == pytest.approx(4.0, rel=0.15)


@source("textbook mathematics", "a linear sampled system is stable when its transition matrix has spectral radius < 1")
@pytest.mark.parametrize("delay", [0, 1])
@pytest.mark.parametrize(("share", "stable"), [(0.98, True), (1.02, False)])
def test_the_sampled_stability_limit_separates_stable_from_unstable(share: float, stable: bool, delay: int) -> None:
    """With and without a sample of latency, 2 % below the computed limit of w T the loop settles, 2 % above it grows."""
    rehearsal = Rehearsal(holding_still(demo(), 1000.0), "computed_torque").exact().start()
    rehearsal.plant_setup["torque_delay"] = delay
    w = share * sampled_limit(delay) * 1000.0
    parameters = rehearsal.assembly.pointers["computed_torque"]["law_parameters"]
    for name in ("tau_max", "tau_rate_max", "qd_max", "error_max"):
        rehearsal.setup["limits"][name][:6] = 1e9  # the linear loop is looked at, not the limiters
    rehearsal.plant_setup["tau_max"][:6] = 1e9
    rehearsal.plant_setup["qd_max"][:6] = 1e9
    rehearsal.lockstep.advance(5)
    parameters["Kp"][:6], parameters["Kd"][:6] = w * w, 2.0 * w
    rehearsal.plant_memory["q"][:6] += 1e-9
    rows = rehearsal.lockstep.advance(300)
    error = np.abs(rows["q"] - rows["q_ref"])[:, :6].max(axis=1)
    early, late = error[60:100].max(), error[-40:].max()
    assert (late < early) == stable


def test_the_computed_limits_are_the_known_ones() -> None:
    """0.70 without latency and 0.32 with one sample, critical damping, velocity by backward difference."""
    assert sampled_limit(0) == pytest.approx(0.70, abs=0.01)
    assert sampled_limit(1) == pytest.approx(0.32, abs=0.01)


def sampled_limit(delay: int) -> float:
    """Largest w T for which a double integrator under a held torque and critically damped feedback is stable, by bisection.

    x+ = x + v + u/2, v+ = v + u in units of the period; u = -a^2 x - 2 a (x - x_before), applied `delay` periods later.
    """
    low, high = 0.01, 2.0
    for _ in range(60):
        a = 0.5 * (low + high)
        feedback = np.array([-a * a - 2.0 * a, 0.0, 2.0 * a])  # of (x, v, x_before)
        A = np.array([[1.0, 1.0, 0.0], [0.0, 1.0, 0.0], [1.0, 0.0, 0.0]])
        B = np.array([0.5, 1.0, 0.0])
        if delay == 0:
            A = A + np.outer(B, feedback)
        else:
            A = np.block([[A, B[:, None]], [feedback[None, :], np.zeros((1, 1))]])
        stable = np.abs(np.linalg.eigvals(A)).max() < 1.0
        low, high = (a, high) if stable else (low, a)
    return low
