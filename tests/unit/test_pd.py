"""PD: the torque by hand, and what it leaves under gravity."""

import numpy as np
import pytest

from rtctl.blocks import LAW_INPUT
from rtctl.kernels.forward_dynamics import forward_dynamics
from rtctl.kernels.layout import SCRATCH, new_block
from rtctl.laws.pd import TERMS
from tests.law_stand import LawStand, PlanarArm
from tests.plants import GRAVITY, chain_model
from tests.sources import source

ROUNDING = 1e-12
STANDSTILL = 1e-6  # N m, what remains of the motion after many time constants


def settle(stand: LawStand, seconds: float) -> float:
    """Let one joint with the law run on the exact model, semi-implicit Euler; returns its final position, rad."""
    ws, qdd = new_block(SCRATCH), np.zeros(1)
    q, qd, step = np.zeros(1), np.zeros(1), 1e-3
    for _ in range(round(seconds / step)):
        tau = stand.set(q=q, qd=qd).call()
        assert forward_dynamics(stand.model, q, qd, tau, ws, qdd) == 1
        qd += step * qdd
        q += step * qd
    assert abs(qd[0]) < STANDSTILL
    return float(q[0])


def test_torque_is_spring_plus_damper() -> None:
    """By hand: 30 * 0.1 + 7 * 0.5 = 6.5 and 20 * (-0.2) + 3 * 1 = -1."""
    stand = LawStand("pd", PlanarArm().model()).set(q=[0.2, 0.5], q_ref=[0.3, 0.3], qd=[0.0, 1.0], qd_ref=[0.5, 2.0])
    assert stand.call() == pytest.approx([6.5, -1.0], rel=ROUNDING)
    assert TERMS == ("p", "d")
    assert stand.term("p") == pytest.approx([3.0, -4.0], rel=ROUNDING)


@source("takegaki-arimoto1981", "without gravity compensation Kp e = g(q) remains")
def test_gravity_is_held_by_an_error_alone() -> None:
    """At rest the spring torque equals gravity, Kp e = m g L/2 sin q, so the joint hangs below its reference."""
    gains = {"kp_nm_rad": 40.0, "kd_nm_s_rad": 4.0}
    stand = LawStand("pd", chain_model(1, length_m=0.4, mass_kg=2.0), gains).set(q_ref=[1.0])
    q = settle(stand, 1.5)
    assert 40.0 * (1.0 - q) == pytest.approx(2.0 * GRAVITY * 0.2 * np.sin(q), abs=STANDSTILL)
    assert q < 0.95


def test_law_reads_only_what_its_equation_names() -> None:
    """Reference acceleration, time and the torques of the last cycle change nothing."""
    stand = LawStand("pd", PlanarArm().model()).set(q_ref=[0.3, 0.3])
    before = stand.call()
    stand.set(qdd_ref=9.0, tau_law_last=5.0, tau_out_last=-5.0)
    stand.x["t_s"] = 3.0
    assert set(LAW_INPUT.names or ()) == {
        "n", "dt_s", "t_s", "q", "qd", "q_ref", "qd_ref", "qdd_ref", "tau_law_last", "tau_out_last",
    }  # fmt: skip
    assert np.array_equal(before, stand.call())
