"""The true arm's motion against closed forms: energy and order, pendulum period, stopping under friction, sticking, hard stops."""

import math

import numpy as np
import pytest
from scipy.special import ellipk

from rtctl.kernels.layout import OK
from rtctl.plant.physics import substep, substeps, true_energy
from tests.plants import GRAVITY, chain_model, oblique_model, slider_model, true_arm
from tests.sources import source

EVENT = 2  # substeps: where within a substep an event falls is not resolved


def placed(setup: np.void, memory: np.void, q: list[float], qd: list[float]) -> None:
    """Put the arm somewhere with the brakes open."""
    memory["q"][: len(q)] = q
    memory["qd"][: len(qd)] = qd
    memory["brake"] = 2


def run(setup: np.void, memory: np.void, seconds: float, dt: float) -> None:
    assert substeps(setup, memory, dt, round(seconds / dt)) == OK


def energy(setup: np.void, memory: np.void) -> float:
    parts = np.zeros(3)
    assert true_energy(setup, memory, parts) == OK
    return float(parts.sum())


# ---- without friction ----------------------------------------------------------------------------------------------------------


@pytest.mark.parametrize("model", [chain_model(2), oblique_model(6), oblique_model(7)], ids=["planar2", "oblique6", "oblique7"])
def test_energy_error_falls_with_the_square_of_the_step(model):
    """Free fall of an arm without friction: halving the step divides the worst energy error by four (second order)."""
    n = int(model["n"])
    worst = []
    for dt in (4e-4, 2e-4, 1e-4):
        setup, memory = true_arm(model)
        placed(setup, memory, [0.9 - 0.2 * i for i in range(n)], [0.3 * (-1) ** i for i in range(n)])
        start = energy(setup, memory)
        errors = []
        for _ in range(round(0.4 / 4e-4)):
            run(setup, memory, 4e-4, dt)
            errors.append(abs(energy(setup, memory) - start))
        worst.append(max(errors))
    for coarse, fine in zip(worst, worst[1:], strict=False):
        assert 3.6 < coarse / fine < 4.4
    assert memory["unsolved"] == 0


def test_energy_does_not_drift_over_a_hundred_seconds():
    """The error of a swinging double pendulum stays bounded: the last tenth of 100 s is no worse than three times the first."""
    setup, memory = true_arm(chain_model(2))
    placed(setup, memory, [1.0, 0.5], [0.0, 0.0])
    start = energy(setup, memory)
    errors = []
    for _ in range(1000):
        run(setup, memory, 0.1, 1e-3)
        errors.append(abs(energy(setup, memory) - start))
    assert max(errors[-100:]) < 3.0 * max(errors[:100])


@source("abramowitz1964", "17.3.1 (period of the plane pendulum by the complete elliptic integral)")
@pytest.mark.parametrize("amplitude_deg", [20.0, 90.0, 170.0])
def test_period_of_a_large_pendulum_swing(amplitude_deg):
    """A uniform rod released at rest: quarter period T0/4 (2/pi) K(sin^2(a/2)), T0 = 2 pi sqrt(2 L / 3 g)."""
    length_m, dt = 1.0, 1e-4
    setup, memory = true_arm(chain_model(1, length_m=length_m))
    placed(setup, memory, [math.radians(amplitude_deg)], [0.0])
    ratio = 2.0 / math.pi * ellipk(math.sin(math.radians(amplitude_deg) / 2.0) ** 2)
    quarter_s = math.pi / 2.0 * math.sqrt(2.0 * length_m / (3.0 * GRAVITY)) * ratio
    steps = 0
    while memory["q"][0] > 0.0:
        before = float(memory["q"][0])
        run(setup, memory, dt, dt)
        steps += 1
    crossing_s = (steps - 1 + before / (before - memory["q"][0])) * dt
    # Second order: the relative phase error is (w dt)^2/24 of one period, w < 5.5 rad/s.
    assert crossing_s == pytest.approx(quarter_s, rel=1e-6)


@source("cgpm1901", "standard gravity; rod falling from horizontal, speed at the bottom sqrt(3 g / L)")
def test_speed_of_a_rod_fallen_from_horizontal():
    """All potential energy is kinetic at the bottom: 5.4240160398 rad/s for one metre."""
    setup, memory = true_arm(chain_model(1, length_m=1.0))
    placed(setup, memory, [math.pi / 2], [0.0])
    while memory["q"][0] > 0.0:
        run(setup, memory, 1e-4, 1e-4)
    assert memory["qd"][0] == pytest.approx(-5.4240160398, rel=1e-6)


def test_work_of_the_drives_is_the_gain_in_energy():
    """Without friction the booked work of a varying torque equals the change of energy, to the order of the step."""
    gaps = []
    for dt in (2e-4, 1e-4):
        setup, memory = true_arm(oblique_model(6))
        placed(setup, memory, [0.3] * 6, [0.0] * 6)
        start = energy(setup, memory)
        for k in range(round(0.5 / dt)):
            for i in range(6):
                memory["tau_ask"][i] = 8.0 * math.sin(6.0 * k * dt + i)
            run(setup, memory, dt, dt)
        gaps.append(abs(energy(setup, memory) - start - memory["work_drive"]))
        assert memory["work_friction"] == pytest.approx(0.0, abs=1e-9)
    assert abs(memory["work_drive"]) > 1.0
    assert gaps[1] < 1e-4
    assert gaps[1] < 0.3 * gaps[0]


# ---- friction ------------------------------------------------------------------------------------------------------------------


@source("landau1976", "motion under constant and linear resistance; integrated by hand in the docstring")
@pytest.mark.parametrize(("viscous", "time_s", "distance_m"), [(0.5, 0.7292862272, 0.4242826369), (0.0, 0.8, 0.48)])
def test_stopping_distance_under_friction(viscous, time_s, distance_m):
    """A slider comes to rest where the closed form says, and stays there exactly.

    m dv/dt = -F - B v from v0 = 1.2, m = 2, F = 3: t = m/B ln(1 + B v0/F), d = m/B (v0 - F/B ln(1 + B v0/F)); for B = 0
    t = m v0/F, d = m v0^2/2F.
    """
    dt = 1e-4
    model = slider_model(2.0)
    model["coulomb"][0], model["viscous"][0] = 3.0, viscous
    setup, memory = true_arm(model)
    placed(setup, memory, [0.0], [1.2])
    steps = 0
    while memory["qd"][0] != 0.0:
        run(setup, memory, dt, dt)
        steps += 1
        assert memory["qd"][0] >= 0.0
    assert steps * dt == pytest.approx(time_s, abs=EVENT * dt)
    # First order in the viscous part: B dt / 2 m of the distance.
    assert memory["q"][0] == pytest.approx(distance_m, abs=1e-5 + dt * dt * 3.0)
    stopped = float(memory["q"][0])
    run(setup, memory, 0.1, dt)
    assert memory["q"][0] == stopped


def test_a_stuck_arm_does_not_creep_in_a_million_substeps():
    """Six coupled joints under gravity and drive torque below breakaway: not one bit of any position changes."""
    model = oblique_model(6)
    model["coulomb"][:6] = [15.0, 14.0, 9.0, 9.0, 6.0, 5.0]  # gravity asks for up to 13.5 N m
    model["viscous"][:6] = 0.2
    setup, memory = true_arm(model, stiction_ratio=1.0)
    memory["brake"] = 2
    memory["q"][:6] = [0.1, -0.2, 0.3, 0.2, -0.1, 0.2]
    memory["tau_ask"][:6] = [0.5, 0.4, -0.3, 0.2, 0.1, -0.1]
    before = memory["q"].tobytes()
    assert substeps(setup, memory, 1e-4, 1_000_000) == OK
    assert memory["q"].tobytes() == before
    assert not memory["qd"].any()
    assert memory["unsolved"] == 0


def test_breakaway_is_at_stiction_ratio_times_coulomb_friction():
    """A level slider with F = 3 N and ratio 1.5 stays at 4.5 N and moves at 4.501 N; moving, it is slowed by 3 N only."""
    model = slider_model(2.0)
    model["coulomb"][0] = 3.0
    setup, memory = true_arm(model, stiction_ratio=1.5)
    placed(setup, memory, [0.0], [0.0])
    memory["tau_ask"][0] = 4.5
    run(setup, memory, 0.1, 1e-4)
    assert memory["q"][0] == 0.0
    memory["tau_ask"][0] = 4.501
    run(setup, memory, 1.0, 1e-4)
    # One substep at breakaway friction, the rest at Coulomb friction: a = 1.501 / 2.
    assert memory["qd"][0] == pytest.approx(1.501 / 2.0, rel=1e-3)


def test_a_moving_neighbour_can_break_a_stuck_joint_loose_and_only_then():
    """Coupling through M: the reaction of an accelerating outer rod moves the inner joint above its stiction, else not at all."""
    for coulomb, moves in ((50.0, False), (0.05, True)):
        model = chain_model(2, gravity=0.0)
        model["coulomb"][0] = coulomb
        setup, memory = true_arm(model)
        placed(setup, memory, [0.0, 0.3], [0.0, 0.0])
        memory["tau_ask"][1] = 5.0
        run(setup, memory, 0.02, 1e-4)
        assert memory["qd"][1] > 0.1
        assert (memory["q"][0] != 0.0) == moves


@pytest.mark.parametrize("seed", range(6))
def test_friction_never_adds_energy(seed):
    """Without drives and gravity the kinetic energy of random motions never rises by more than the integrator's own error."""
    rng = np.random.default_rng(seed)
    n = int(rng.integers(2, 8))
    model = oblique_model(n, gravity=0.0)
    model["coulomb"][:n] = rng.uniform(0.0, 3.0, n) * (rng.random(n) > 0.3)
    model["viscous"][:n] = rng.uniform(0.0, 0.5, n)
    setup, memory = true_arm(model, stiction_ratio=float(rng.uniform(1.0, 2.0)))
    placed(setup, memory, list(rng.uniform(-1, 1, n)), list(rng.normal(0.0, 2.0, n)))
    before = energy(setup, memory)
    scale = before
    for _ in range(3000):
        run(setup, memory, 1e-4, 1e-4)
        now = energy(setup, memory)
        # Curvature of M along one substep: relative (qd dt)^2 with qd below 20 rad/s.
        assert now <= before + 4e-6 * before + 1e-15 * scale
        before = now
    assert memory["work_friction"] < 0.0
    assert memory["unsolved"] == 0


@pytest.mark.parametrize("seed", range(8))
def test_impulses_obey_coulombs_law_in_every_substep(seed):
    """Random coupled arms and torques: |p| <= bound, p opposes motion at the full bound, and the momentum balance closes."""
    rng = np.random.default_rng(100 + seed)
    dt = 2e-4
    for _ in range(40):
        n = int(rng.integers(1, 8))
        model = oblique_model(n)
        model["coulomb"][:n] = rng.uniform(0.5, 10.0, n)
        setup, memory = true_arm(model, stiction_ratio=1.3, tau_max=500.0)
        qd = rng.normal(0.0, 0.05, n) * (rng.random(n) > 0.5)
        placed(setup, memory, list(rng.uniform(-1, 1, n)), list(qd))
        for _ in range(5):
            started_at_rest = np.array(memory["qd"][:n]) == 0.0
            memory["tau_ask"][:n] = rng.normal(0.0, 15.0, n)
            assert substep(setup, memory, dt) == OK
            v = np.array(memory["qd"][:n])
            impulse = np.array(memory["M"])[:n, :n] @ v - memory["b"][:n]
            bound = dt * model["coulomb"][:n] * np.where(started_at_rest, 1.3, 1.0)
            rounding = 1e-11 * (1.0 + np.abs(memory["b"][:n]).max())
            assert np.all(np.abs(impulse) <= bound + rounding)
            assert np.all(np.abs(impulse + bound * np.sign(v))[v != 0.0] <= rounding)
        assert memory["unsolved"] == 0


def test_a_closed_brake_holds_exactly_and_slips_beyond_its_torque():
    """A brake of 50 N m holds a level rod of 3.9 N m without one bit of motion, one of 1 N m slips downwards."""
    for torque, holds in ((50.0, True), (1.0, False)):
        setup, memory = true_arm(chain_model(1), brake_torque=torque)
        memory["q"][0] = math.pi / 2
        run(setup, memory, 0.2, 1e-4)
        assert (memory["q"][0] == math.pi / 2) == holds
        assert memory["q"][0] <= math.pi / 2


# ---- hard stops ----------------------------------------------------------------------------------------------------------------


@pytest.mark.parametrize("stiffness", [1e3, 1e5, 1e7])
@pytest.mark.parametrize("damping", [0.0, 50.0])
def test_a_hard_stop_never_gives_back_more_than_it_took(stiffness, damping):
    """A slider thrown at a stop comes back no faster than it came, at any step size against the stop's own period."""
    setup, memory = true_arm(slider_model(2.0), q_max=[0.1], q_min=[-10.0], stop_stiffness=stiffness, stop_damping=damping)
    placed(setup, memory, [0.0], [1.5])
    run(setup, memory, 0.3, 1e-4)
    assert memory["qd"][0] <= 0.0
    assert abs(memory["qd"][0]) <= 1.5
    assert memory["q"][0] <= 0.1
    if damping == 0.0 and stiffness == 1e3:
        # Soft against the step: nearly elastic. Implicit Euler takes about pi/2 w dt of the speed, w = sqrt(k/m).
        loss = math.pi / 2 * math.sqrt(stiffness / 2.0) * 1e-4
        assert abs(memory["qd"][0]) == pytest.approx(1.5 * (1.0 - loss), rel=2e-3)


@pytest.mark.parametrize("seed", range(6))
def test_an_arm_thrown_against_its_stops_never_gains_energy(seed):
    """Random arms without gravity bounce between both stops: total energy, with the stops' springs, never rises."""
    rng = np.random.default_rng(seed)
    n = int(rng.integers(2, 8))
    model = oblique_model(n, gravity=0.0)
    setup, memory = true_arm(model, q_min=[-0.3] * n, q_max=[0.3] * n, stop_stiffness=2e4, stop_damping=20.0)
    placed(setup, memory, [0.0] * n, list(rng.normal(0.0, 3.0, n)))
    scale = before = energy(setup, memory)
    pushed = 0
    for _ in range(5000):
        run(setup, memory, 1e-4, 1e-4)
        pushed += int(memory["touch"][:n].sum())
        now = energy(setup, memory)
        assert now <= before + 2e-5 * scale
        before = now
    assert pushed > 100
    assert now < 0.9 * scale
    assert memory["work_stop"] < 0.0


def test_an_arm_resting_on_its_stop_stays_there():
    """A rod pressed onto its stop by gravity comes to rest at the depth where the spring balances it, m g L/2 sin q = k depth."""
    setup, memory = true_arm(chain_model(1), q_min=[1.0], q_max=[3.0], stop_stiffness=2e3, stop_damping=40.0)
    placed(setup, memory, [1.4], [0.0])
    run(setup, memory, 3.0, 1e-4)
    depth = 1.0 - memory["q"][0]
    assert depth == pytest.approx(2.0 * GRAVITY * 0.2 * math.sin(memory["q"][0]) / 2e3, rel=1e-6)
    assert abs(memory["qd"][0]) < 1e-9


@pytest.mark.parametrize(("coulomb", "leaves"), [(3.0, True), (150.0, False)])
def test_a_compressed_stop_pushes_out_against_friction_or_is_held_by_it(coulomb, leaves):
    """A slider at rest 1 cm inside a stop of 10 kN/m feels 100 N: below breakaway it stays exactly, above it is pushed out."""
    model = slider_model(2.0)
    model["coulomb"][0] = coulomb
    setup, memory = true_arm(model, q_max=[0.0], q_min=[-1.0], stop_stiffness=1e4, stop_damping=10.0)
    placed(setup, memory, [0.01], [0.0])
    run(setup, memory, 0.1, 1e-4)
    assert (memory["q"][0] <= 0.0) == leaves
    assert (memory["q"][0] == 0.01) != leaves


def test_drives_saturate():
    """The drives give their limit and count it, whatever is asked."""
    setup, memory = true_arm(slider_model(1.0), tau_max=[3.0])
    memory["brake"] = 2
    memory["tau_ask"][0] = 1e9
    run(setup, memory, 1e-3, 1e-4)
    assert memory["tau"][0] == 3.0
    assert memory["saturated"] == 10
