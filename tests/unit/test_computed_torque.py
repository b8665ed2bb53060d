"""Computed torque: closed form, the error equation it makes, the sampled stability limit, and unusable states."""

import numpy as np
import pytest

from rtctl.kernels.forward_dynamics import forward_dynamics
from rtctl.kernels.layout import NOT_POSITIVE, SCRATCH, new_block
from tests.law_stand import LawStand, PlanarArm
from tests.plants import chain_model, oblique_model
from tests.sources import source

ROUNDING = 1e-10  # forward dynamics and inertia matrix on six oblique joints
MOTION = {"q": [0.4, -0.8], "qd": [0.9, -1.7], "q_ref": [0.5, -1.0], "qd_ref": [1.0, -2.0], "qdd_ref": [3.0, 4.0]}


@source("kelly2005", "ch. 5: data of the arm, gains of the computed-torque experiments")
@source("siciliano2009", "sec. 7.3.2: planar two-link arm in closed form")
def test_terms_are_the_closed_form() -> None:
    """Every term agrees with the closed form of the two-joint arm, and so does their sum."""
    arm = PlanarArm()
    stand = LawStand("computed_torque", arm.model()).set(**MOTION)
    stand.memory["values"][:2] = (1.0, -2.0)
    tau = stand.call()
    q, qd = np.array(MOTION["q"]), np.array(MOTION["qd"])
    e, ed = MOTION["q_ref"] - q, MOTION["qd_ref"] - qd
    expected = {
        "gravity": arm.g(q),
        "velocity": arm.velocity(q, qd),
        "inertia_reference": arm.M(q) @ MOTION["qdd_ref"],
        "p": arm.M(q) @ ([1500.0, 14000.0] * e),
        "d": arm.M(q) @ ([77.46, 236.64] * ed),
        "i": arm.M(q) @ [1.0, -2.0],
        "friction": arm.friction(np.array(MOTION["qd_ref"])),
    }
    assert tuple(expected) == stand.law.terms
    for name, value in expected.items():
        assert stand.term(name) == pytest.approx(value, rel=1e-11, abs=1e-13), name
    assert tau == pytest.approx(sum(expected.values()), rel=1e-11)


@source("siciliano2009", "sec. 8.5.2: inverse dynamics control decouples and linearises")
def test_error_obeys_the_chosen_linear_equation_on_every_arm() -> None:
    """On the exact model the acceleration is qdd_ref + Kd e' + Kp e + z, found by articulated bodies, not by M."""
    model = oblique_model(6)
    gains = {"natural_frequency_rad_s": 8.0, "damping_ratio": 0.9, "integral_rate_1_s": 2.0, "integral_max_rad_s2": 50.0}
    rng = np.random.default_rng(11)
    for _ in range(5):
        stand = LawStand("computed_torque", model, gains)
        motion = {name: rng.normal(size=6) for name in ("q", "qd", "q_ref", "qd_ref", "qdd_ref")}
        z = rng.normal(size=6)
        stand.set(**motion).memory["values"][:6] = z
        tau = stand.call() - stand.term("friction")
        qdd = np.zeros(6)
        assert forward_dynamics(model, motion["q"], motion["qd"], tau, new_block(SCRATCH), qdd) == 1
        Kp, Kd = stand.parameters["Kp"][:6], stand.parameters["Kd"][:6]
        wanted = motion["qdd_ref"] + Kd * (motion["qd_ref"] - motion["qd"]) + Kp * (motion["q_ref"] - motion["q"]) + z
        assert qdd == pytest.approx(wanted, rel=ROUNDING, abs=ROUNDING)


def largest_error(gains: dict[str, float], cycles: int) -> float:
    """Largest error in the last tenth of a run from 1 rad: one joint, exact model, torque held over each cycle, T = 1 ms."""
    model = chain_model(1, gravity=0.0)
    stand = LawStand("computed_torque", model, gains)
    ws, q, qd, qdd, T = new_block(SCRATCH), np.ones(1), np.zeros(1), np.zeros(1), 1e-3
    errors = []
    for _ in range(cycles):
        tau = stand.set(q=q, qd=qd).call()
        forward_dynamics(model, q, qd, tau, ws, qdd)
        q += T * qd + 0.5 * T * T * qdd
        qd += T * qdd
        errors.append(abs(q[0]))
    return max(errors[-cycles // 10 :])


def test_sampled_loop_is_stable_exactly_up_to_the_derived_limit() -> None:
    """Triple pole at L, sampled at T, no latency: by hand det(A + 1) = 4 (2 - Kd T), so the limit is Kd T = 2, L T = 2/3.

    A is the exact map of (e, e', z) over one held cycle with the integral advanced after its use. PD: w T = 1 likewise.
    """
    pid = {"damping_ratio": 1.0, "integral_max_rad_s2": 1e12}
    for ratio, stable in ((0.66, True), (0.675, False)):
        rate = ratio / 1e-3
        error = largest_error({**pid, "natural_frequency_rad_s": rate, "integral_rate_1_s": rate}, 1500)
        assert (error < 1e-3) == stable, ratio
    for ratio, stable in ((0.99, True), (1.01, False)):
        error = largest_error({"damping_ratio": 1.0, "natural_frequency_rad_s": ratio / 1e-3}, 1500)
        assert (error < 1e-3) == stable, ratio


def test_without_integral_gain_it_is_pd() -> None:
    """The integral term stays zero however long an error stays."""
    stand = LawStand("computed_torque", PlanarArm().model(), {"kp_1_s2": 100.0, "kd_1_s": 20.0}).set(**MOTION)
    for _ in range(100):
        stand.call()
    assert not stand.term("i").any()


def test_friction_follows_the_reference_not_the_measurement() -> None:
    """A joint that creeps while the reference rests gets no friction torque."""
    stand = LawStand("computed_torque", PlanarArm().model()).set(qd=[0.02, -0.02])
    stand.call()
    assert not stand.term("friction").any()


def test_an_unusable_inertia_matrix_is_a_status() -> None:
    """A position that is not a number, or a mass that is negative, ends in a status that is not success."""
    for spoil in ("q", "mass"):
        stand = LawStand("computed_torque", PlanarArm().model()).set(**MOTION)
        if spoil == "q":
            stand.set(q=[0.0, np.nan])
        else:
            stand.model["I"][1] = -1.0
        status = stand.law.torque(stand.model, stand.x, stand.parameters, stand.memory, stand.ws, stand.terms)
        assert status == NOT_POSITIVE
        assert not stand.memory["values"].any()
