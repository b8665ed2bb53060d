"""Inertia tensors and rotations of arm files."""

import math

import numpy as np
from scipy.spatial.transform import Rotation

from rtctl.config.inertia import rotation_xyz, rotation_z_to, shift, tensor, tensor_faults
from tests.sources import source

ROUNDING = 1e-15 * 8  # a handful of products of numbers up to 1


@source("scipy", "Rotation.from_euler('xyz'): small letters are fixed axes")
def test_angles_about_fixed_axes() -> None:
    """Angles turn about the fixed x, then y, then z axis."""
    rng = np.random.default_rng(3)
    for angles in rng.uniform(-2.0 * math.pi, 2.0 * math.pi, (50, 3)):
        assert np.allclose(rotation_xyz(angles), Rotation.from_euler("xyz", angles).as_matrix(), rtol=0, atol=ROUNDING)


def test_quarter_turns_are_exact() -> None:
    """Quarter turns written with 15 digits give rotation matrices of 0 and 1."""
    for angles in ((1.5707963267949, 0, 0), (0, -1.5707963267949, 3.14159265358979), (-6.28318530717959, 4.71238898038469, 0)):
        assert set(np.abs(rotation_xyz(angles)).ravel()) <= {0.0, 1.0}


def test_z_goes_to_the_axis() -> None:
    """The rotation takes z to the axis by the least angle, exactly for the main directions, also for -z."""
    rng = np.random.default_rng(4)
    for axis in [*np.eye(3), *-np.eye(3), *rng.normal(size=(20, 3)), np.array([1e-9, 0.0, -1.0])]:
        R = rotation_z_to(axis)
        u = axis / np.linalg.norm(axis)
        assert np.allclose(R @ R.T, np.eye(3), rtol=0, atol=1e-7) and np.linalg.det(R) > 0.0
        assert np.allclose(R[:, 2], u, rtol=0, atol=1e-8)
        if u[2] > -0.999:
            assert math.isclose((np.trace(R) - 1.0) / 2.0, u[2], abs_tol=ROUNDING)
    for axis in [*np.eye(3), *-np.eye(3)]:
        assert set(np.abs(rotation_z_to(axis)).ravel()) <= {0.0, 1.0}


@source("textbook mechanics", "uniform rod: m l^2 / 12 about its middle, m l^2 / 3 about its end")
def test_parallel_axes() -> None:
    """A rod's inertia about its end exceeds that about its middle by the shift."""
    m, length = 2.0, 0.6
    middle = np.diag([0.0, 1.0, 1.0]) * m * length**2 / 12
    end = np.diag([0.0, 1.0, 1.0]) * m * length**2 / 3
    assert np.allclose(middle + shift(m, np.array([length / 2, 0.0, 0.0])), end, rtol=1e-15)


def test_order_of_elements() -> None:
    """The order is xx, yy, zz, xy, xz, yz."""
    assert np.array_equal(tensor([1, 2, 3, 4, 5, 6]), [[1, 4, 5], [4, 2, 6], [5, 6, 3]])


def test_what_no_body_can_have() -> None:
    """Principal moments are positive and none exceeds the sum of the others; a flat body just meets that; axes do not matter."""
    assert tensor_faults(np.diag([1.0, 2.0, 2.5])) == ("", "")
    assert tensor_faults(np.diag([1.0, 2.0, 3.0])) == ("", "")
    assert tensor_faults(np.diag([1.0, 2.0, 3.01])) == ("", "principal moments 1, 2, 3.01 kg m^2")
    assert tensor_faults(np.diag([0.0, 2.0, 2.0])) == ("principal moments 0, 2, 2 kg m^2", "")
    assert tensor_faults(np.diag([1.0, -2.0, 2.0])) == ("principal moments -2, 1, 2 kg m^2", "")
    R = Rotation.from_euler("xyz", [0.3, 1.0, -2.0]).as_matrix()
    assert tensor_faults(R @ np.diag([1.0, 2.0, 3.01]) @ R.T)[1] != ""
    assert tensor_faults(R @ np.diag([1.0, 2.0, 3.0]) @ R.T) == ("", "")
