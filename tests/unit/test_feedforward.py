"""Feedforward: the model's torque along the reference, term by term."""

import numpy as np
import pytest

from tests.law_stand import LawStand, PlanarArm
from tests.sources import source

ROUNDING = 1e-11  # of differences of whole torques


@source("kelly2005", "ch. 5: tau = (6.4191916072, -0.1221337729) N m without friction, from the published closed form")
@source("siciliano2009", "sec. 7.3.2: planar two-link arm in closed form")
def test_terms_are_the_closed_form_on_the_reference() -> None:
    """Gravity, velocity, inertia and friction agree with the closed form at q_ref, qd_ref, qdd_ref, each alone and as a sum."""
    arm = PlanarArm()
    q, qd, qdd = np.array([0.5, -1.0]), np.array([1.0, -2.0]), np.array([3.0, 4.0])
    stand = LawStand("feedforward", arm.model()).set(q_ref=q, qd_ref=qd, qdd_ref=qdd)
    tau = stand.call()
    assert stand.term("gravity") == pytest.approx(arm.g(q), rel=ROUNDING)
    assert stand.term("velocity") == pytest.approx(arm.velocity(q, qd), abs=ROUNDING)
    assert stand.term("inertia") == pytest.approx(arm.M(q) @ qdd, rel=ROUNDING)
    assert stand.term("friction") == pytest.approx(arm.friction(qd), rel=ROUNDING)
    assert tau - arm.friction(qd) == pytest.approx([6.4191916072, -0.1221337729], abs=1e-9)  # printed to ten digits


def test_measurement_is_not_read() -> None:
    """Whatever the arm does, the torque stays the same."""
    stand = LawStand("feedforward", PlanarArm().model()).set(q_ref=[0.5, -1.0], qd_ref=[1.0, -2.0])
    before = stand.call()
    assert np.array_equal(before, stand.set(q=1.7, qd=-2.0).call())
