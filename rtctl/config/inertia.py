"""Inertia of rigid bodies: tensors from six elements, what no body can have, and how they move to another point and other axes."""

import math
from collections.abc import Sequence

import numpy as np
import numpy.typing as npt

FloatArray = npt.NDArray[np.float64]

TRIANGLE_TOLERANCE = 1e-9  # of the trace: a flat body meets the inequality exactly, up to rounding


def rotation_xyz(angles_rad: Sequence[float]) -> FloatArray:
    """Rotation by angles about the fixed x, then y, then z axis: Rz Ry Rx, (3, 3), takes the turned frame's coordinates back.

    Quarter turns given with 15 digits come out exact, so that parallel axes stay parallel.
    """
    (cx, sx), (cy, sy), (cz, sz) = (_cos_sin(angle) for angle in angles_rad)
    return np.array(
        [
            [cz * cy, cz * sy * sx - sz * cx, cz * sy * cx + sz * sx],
            [sz * cy, sz * sy * sx + cz * cx, sz * sy * cx - cz * sx],
            [-sy, cy * sx, cy * cx],
        ]
    )


def _cos_sin(angle_rad: float) -> tuple[float, float]:
    turns = angle_rad / (0.5 * math.pi)
    if abs(turns - round(turns)) < 1e-9:
        return ((1.0, 0.0), (0.0, 1.0), (-1.0, 0.0), (0.0, -1.0))[round(turns) % 4]
    return math.cos(angle_rad), math.sin(angle_rad)


def rotation_z_to(axis: Sequence[float]) -> FloatArray:
    """The least rotation that turns z into the direction of `axis`, (3, 3): takes coordinates with z along the axis back.

    Half a turn about x when the axis is -z. Exact for the six main directions.
    """
    u = np.asarray(axis, np.float64) / math.hypot(*axis)
    if u[2] < -1.0 + 1e-12:
        return np.diag([1.0, -1.0, -1.0])
    # Rodrigues' formula for the rotation vector z x u
    vx, vy = -u[1], u[0]
    K = np.array([[0.0, 0.0, vy], [0.0, 0.0, -vx], [-vy, vx, 0.0]])
    turn: FloatArray = np.eye(3) + K + K @ K / (1.0 + u[2])
    return turn


def tensor(elements: Sequence[float]) -> FloatArray:
    """The symmetric (3, 3) tensor of elements xx, yy, zz, xy, xz, yz."""
    xx, yy, zz, xy, xz, yz = elements
    return np.array([[xx, xy, xz], [xy, yy, yz], [xz, yz, zz]], np.float64)


def shift(mass_kg: float, c: FloatArray) -> FloatArray:
    """What the inertia about a point exceeds the inertia about the centre of mass by, `c` from the point: parallel axes."""
    shifted: FloatArray = mass_kg * (float(c @ c) * np.eye(3) - np.outer(c, c))
    return shifted


def tensor_faults(I_centre: FloatArray) -> tuple[str, str]:
    """What is impossible about a tensor about the centre of mass, in words: (definiteness, triangle inequality), empty when right.

    The principal moments of a body are positive, and none exceeds the sum of the other two: they are sums of squares of distances.
    """
    principal = np.linalg.eigvalsh(I_centre)
    moments = ", ".join(f"{moment:.4g}" for moment in principal)
    if not principal[0] > 0.0:
        return f"principal moments {moments} kg m^2", ""
    if not principal[2] <= (principal[0] + principal[1]) + TRIANGLE_TOLERANCE * principal.sum():
        return "", f"principal moments {moments} kg m^2"
    return "", ""
