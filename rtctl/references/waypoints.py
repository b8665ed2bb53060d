"""Motion through the rows of a CSV file at their times, from rest to rest (quintic spline)."""

from pathlib import Path
from typing import TYPE_CHECKING, Protocol

import numpy as np
import numpy.typing as npt

from rtctl.blocks import REFERENCE_PARAMETERS
from rtctl.errors import ConfigError, Finding
from rtctl.kernels.compile import hot
from rtctl.kernels.inertia_matrix import inertia_matrix
from rtctl.kernels.layout import OK, SCRATCH, new_block
from rtctl.kernels.memory import array_at
from rtctl.references.approach import set_approach
from rtctl.references.minimum_jerk import NOT_FINITE, begin_approach, sample_approach
from rtctl.references.quintic_spline import spline_coefficients
from rtctl.references.waypoint_file import Waypoints, read_waypoints

if TYPE_CHECKING:
    from rtctl.arm import Arm

FloatArray = npt.NDArray[np.float64]

KIND = "waypoints"

TURN_RAD = 2.0 * np.pi  # a joint with limits that spans more than one turn in a file is almost always in degrees
COEFFICIENTS = 6  # of a quintic

begin = begin_approach


class WaypointsSettings(Protocol):
    """What a run file says about this reference."""

    @property
    def file(self) -> str | Path: ...
    @property
    def approach_duration_s(self) -> float | None: ...


def prepare(arm: "Arm", config: WaypointsSettings, folder: Path) -> tuple[np.void, FloatArray]:
    """Parameters and spline data: the m times, then (m - 1, n, 6) coefficients. Raises ConfigError with all findings.

    A relative file name counts from `folder`, the run file's.
    """
    path = Path(folder) / config.file
    waypoints = read_waypoints(path, arm.joint_names, arm.units)
    coefficients = spline_coefficients(waypoints.t, waypoints.q)
    parameters = new_block(REFERENCE_PARAMETERS)
    findings = set_approach(parameters, config.approach_duration_s)
    findings += degree_findings(path, arm, waypoints)
    if not findings:
        findings += _end_findings(path, arm, waypoints, coefficients)
    if findings:
        raise ConfigError.from_findings(findings)
    data = np.concatenate([waypoints.t, coefficients.ravel()])
    data.flags.writeable = False
    parameters["n"] = arm.n
    parameters["q_goal"][: arm.n] = waypoints.q[0]
    parameters["body_duration_s"] = waypoints.t[-1]
    parameters["data"] = data.ctypes.data
    parameters["data_count"] = data.size
    return parameters, data


def degree_findings(path: Path, arm: "Arm", waypoints: Waypoints) -> list[Finding]:
    """Columns of revolute joints that span more than a turn where the joint cannot turn that far, or not that fast."""
    findings = []
    for i in range(arm.n):
        column = waypoints.q[:, i]
        span = float(np.ptp(column))
        fastest = float(np.max(np.abs(np.diff(column) / np.diff(waypoints.t))))
        possible = span <= arm.q_max[i] - arm.q_min[i] and fastest <= arm.qd_max[i]
        if arm.units[i] == "rad" and span > TURN_RAD and not possible:
            expected = f"in rad, within the {arm.q_max[i] - arm.q_min[i]:.3g} rad and {arm.qd_max[i]:.3g} rad/s of the joint"
            likely = f"The column spans {span:.3g}: it looks like degrees."
            where = f"{path}: column of {arm.joint_names[i]}"
            findings.append(Finding(where, expected, f"up to {fastest:.3g} rad/s", likely, "Multiply by pi/180."))
    return findings


def _end_findings(path: Path, arm: "Arm", waypoints: Waypoints, coefficients: FloatArray) -> list[Finding]:
    """Rows that begin or end in motion: the start from rest, or the stop, would take more torque than the joint has.

    Compared is the peak acceleration of the first and last interval with tau_max over the joint's own inertia in that pose.
    """
    findings = []
    last = len(waypoints.t) - 1
    for row, neighbour, segment in ((0, 1, 0), (last, last - 1, last - 1)):
        M = np.zeros((arm.n, arm.n))
        inertia_matrix(arm.model, waypoints.q[row].copy(), new_block(SCRATCH), M)
        h = waypoints.t[segment + 1] - waypoints.t[segment]
        c = coefficients[segment]
        u = np.linspace(0.0, 1.0, 41)[:, None]
        acceleration = np.abs((2 * c[:, 2] + u * (6 * c[:, 3] + u * (12 * c[:, 4] + u * 20 * c[:, 5]))) / h**2).max(axis=0)
        speed = np.abs(waypoints.q[row] - waypoints.q[neighbour]) / h
        for i in range(arm.n):
            possible = arm.tau_max[i] / M[i, i]
            if not acceleration[i] <= possible:
                unit = arm.units[i]
                moving = (
                    f"{speed[i]:.3g} {unit}/s over the {1e3 * h:.3g} ms beside it, which takes {acceleration[i]:.3g} {unit}/s^2"
                )
                where = f"{path}: row {row + 1}, {arm.joint_names[i]}"
                expected = f"at rest within the {possible:.3g} {unit}/s^2 that tau_max can give"
                likely = "The file begins or ends in the middle of a motion."
                findings.append(
                    Finding(where, expected, moving, likely, "Add rows in which the joint starts from or comes to rest.")
                )
    return findings


@hot
def sample(parameters, memory, out):
    """Fill `out` at out["t_s"]: approach, spline, rest at the last row. Returns OK, or NOT_FINITE for a time that is not >= 0."""
    if not out["t_s"] >= 0.0:
        return NOT_FINITE
    if out["t_s"] < memory["approach_s"]:
        return sample_approach(parameters, memory, out)
    n = parameters["n"]
    data = array_at(parameters["data"], parameters["data_count"], np.float64)
    segments = (data.size - 1) // (1 + COEFFICIENTS * n)
    t_s = out["t_s"] - memory["approach_s"]
    at_end = t_s >= parameters["body_duration_s"]
    first = segments - 1
    u = 1.0
    h = 1.0
    if not at_end:
        first = 0  # bisection: data[first] <= t_s < data[last]
        last = segments
        while last - first > 1:
            middle = (first + last) // 2
            if data[middle] <= t_s:
                first = middle
            else:
                last = middle
        h = data[first + 1] - data[first]
        u = (t_s - data[first]) / h
    for i in range(n):
        k = segments + 1 + (first * n + i) * COEFFICIENTS
        c1, c2, c3, c4, c5 = data[k + 1], data[k + 2], data[k + 3], data[k + 4], data[k + 5]
        out["q_ref"][i] = data[k] + u * (c1 + u * (c2 + u * (c3 + u * (c4 + u * c5))))
        out["qd_ref"][i] = (c1 + u * (2.0 * c2 + u * (3.0 * c3 + u * (4.0 * c4 + u * 5.0 * c5)))) / h
        out["qdd_ref"][i] = (2.0 * c2 + u * (6.0 * c3 + u * (12.0 * c4 + u * 20.0 * c5))) / (h * h)
        if at_end:
            out["qd_ref"][i] = 0.0
            out["qdd_ref"][i] = 0.0
    return OK
