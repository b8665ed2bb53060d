"""PID: the integral term, its bound, and what it removes."""

import numpy as np
import pytest

from tests.law_stand import LawStand, PlanarArm
from tests.plants import GRAVITY, chain_model
from tests.unit.test_pd import settle

ROUNDING = 1e-12


def test_integral_term_is_the_sum_of_past_errors() -> None:
    """The term of a call holds the errors of the calls before it: after k calls with error e it is k Ki e dt."""
    stand = LawStand("pid", PlanarArm().model()).set(q_ref=[0.1, -0.2])
    for k in range(4):
        stand.call()
        assert stand.term("i") == pytest.approx([k * 40.0 * 0.1 * 1e-3, k * 10.0 * -0.2 * 1e-3], rel=ROUNDING)
    assert stand.call() == pytest.approx(stand.term("p") + stand.term("d") + stand.term("i"), rel=ROUNDING)


def test_gravity_is_found_by_the_integral() -> None:
    """At rest no error is left and the integral term is the gravity torque m g L/2 sin q."""
    gains = {"kp_nm_rad": 40.0, "kd_nm_s_rad": 4.0, "ki_nm_rad_s": 150.0, "integral_max_nm": 10.0}
    stand = LawStand("pid", chain_model(1, length_m=0.4, mass_kg=2.0), gains).set(q_ref=[1.0])
    q = settle(stand, 4.0)
    assert q == pytest.approx(1.0, abs=1e-5)  # slowest pole about 4 1/s: e^-16 remains
    assert stand.term("i") == pytest.approx([2.0 * GRAVITY * 0.2 * np.sin(1.0)], abs=1e-3)


def test_integral_term_stops_at_its_bound() -> None:
    """However long an error stays, the term never passes integral_max_nm, in either direction."""
    stand = LawStand("pid", PlanarArm().model()).set(q_ref=[1.0, -1.0])
    for _ in range(500):
        stand.call()
    assert np.array_equal(stand.term("i"), [4.0, -4.0])
