"""Torque without a law."""

import numpy as np
import pytest

from rtctl.blocks import MODE_BRAKING, MODE_HOLDING
from rtctl.kernels.layout import MAX_JOINTS, OK
from rtctl.supervisor.holding import holding_fits, holding_torque, rest_torque
from tests.stand import Stand


def at_pose(q: list[float], qd: list[float]) -> Stand:
    stand = Stand()
    stand.memory["link"]["q"][:2] = q
    stand.memory["link"]["qd"][:2] = qd
    return stand


def test_holding_torque_is_gravity_at_the_measured_pose() -> None:
    """Both links hanging straight down need no torque; the outer link level needs its weight times its arm."""
    gravity = np.zeros(MAX_JOINTS)
    stand = at_pose([-np.pi / 2, 0.0], [0.0, 0.0])
    assert holding_torque(stand.setup, stand.memory, gravity) == OK
    assert gravity[:2] == pytest.approx([0.0, 0.0], abs=1e-12)
    stand = at_pose([-np.pi / 2, np.pi / 2], [0.0, 0.0])
    holding_torque(stand.setup, stand.memory, gravity)
    assert gravity[:2] == pytest.approx([0.12 * 9.80665, 0.12 * 9.80665], rel=1e-12)


def test_braking_has_no_spring() -> None:
    """Far from the remembered pose, braking adds damping only, holding adds the bounded spring."""
    stand = at_pose([0.0, 0.0], [0.2, 0.0])
    stand.memory["supervisor"]["q_hold"][:2] = (1.0, -1.0)
    gravity, tau = np.zeros(MAX_JOINTS), np.zeros(MAX_JOINTS)
    rest_torque(stand.setup, stand.memory, MODE_BRAKING, gravity, tau)
    assert tau[:2].tolist() == [-1.0, 0.0]
    rest_torque(stand.setup, stand.memory, MODE_HOLDING, gravity, tau)
    assert tau[:2].tolist() == [5.0, -6.0]


@pytest.mark.parametrize(("gravity", "fits"), [(31.9, True), (32.0, True), (32.1, False), (-32.1, False), (np.nan, False)])
def test_holding_fits_leaves_the_asked_margin(gravity: float, fits: bool) -> None:
    """With a margin of 0.8 and a limit of 40 N m, 32 N m fits and more does not; NaN never fits."""
    wide = np.zeros(MAX_JOINTS)
    wide[1] = gravity
    assert holding_fits(Stand().setup, wide) == fits
