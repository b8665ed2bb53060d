"""PD with gravity compensation: gravity at the measured pose, no error at rest."""

import numpy as np
import pytest

from tests.law_stand import LawStand, PlanarArm
from tests.plants import chain_model
from tests.sources import source
from tests.unit.test_pd import settle

ROUNDING = 1e-12
STANDSTILL = 1e-6  # rad, what remains of the motion after many time constants


@source("kelly2005", "ch. 5: data of the arm and gravity torque; target and gains of the PD experiments")
def test_terms_are_gravity_spring_and_damper() -> None:
    """Gravity is taken at the measured pose (pi/10, pi/30): 3.7430410133 and 0.1869308428 N m from the closed form."""
    arm = PlanarArm()
    q, qd = np.array([np.pi / 10, np.pi / 30]), np.array([0.4, -0.3])
    stand = LawStand("pd_gravity", arm.model()).set(q=q, qd=qd, q_ref=[0.5, 0.2])
    tau = stand.call()
    assert stand.term("gravity") == pytest.approx([3.7430410133, 0.1869308428], rel=1e-9)  # printed to ten digits
    expected = arm.g(q) + np.array([30.0, 30.0]) * ([0.5, 0.2] - q) - np.array([7.0, 3.0]) * qd
    assert tau == pytest.approx(expected, rel=ROUNDING)


@source("takegaki-arimoto1981", "any positive gains reach the reference without error")
def test_no_error_remains_under_gravity() -> None:
    """The same spring and damper that hang below the reference without gravity compensation reach it with it."""
    stand = LawStand("pd_gravity", chain_model(1), {"kp_nm_rad": 40.0, "kd_nm_s_rad": 4.0}).set(q_ref=[1.0])
    assert settle(stand, 1.5) == pytest.approx(1.0, abs=STANDSTILL)
