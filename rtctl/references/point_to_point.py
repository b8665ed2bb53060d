"""Minimum-jerk move from the measured pose to a goal, all joints together, timed or as fast as given limits allow."""

from collections.abc import Sequence
from pathlib import Path
from typing import TYPE_CHECKING, Protocol

import numpy as np
import numpy.typing as npt

from rtctl.blocks import REFERENCE_PARAMETERS
from rtctl.config.joint_values import joint_values, number_fault
from rtctl.errors import ConfigError, Finding
from rtctl.kernels.compile import hot
from rtctl.kernels.layout import new_block
from rtctl.references.minimum_jerk import NOT_FINITE, begin_approach, rest_at_goal, sample_approach

if TYPE_CHECKING:
    from rtctl.arm import Arm

KIND = "point_to_point"

begin = begin_approach


class PointToPointSettings(Protocol):
    """What a run file says about this reference; of duration and the two limits one or the other, the rest None."""

    @property
    def goal_rad(self) -> float | Sequence[float]: ...
    @property
    def duration_s(self) -> float | None: ...
    @property
    def speed_max_rad_s(self) -> float | Sequence[float] | None: ...
    @property
    def acceleration_max_rad_s2(self) -> float | Sequence[float] | None: ...


def prepare(arm: "Arm", config: PointToPointSettings, folder: Path) -> tuple[np.void, npt.NDArray[np.float64]]:
    """Parameters and (no) data. Raises ConfigError with all findings. Prismatic joints take m, m/s, m/s^2 in the same keys."""
    parameters = new_block(REFERENCE_PARAMETERS)
    n = arm.n
    parameters["n"] = n
    findings: list[Finding] = []
    limits = (config.speed_max_rad_s, config.acceleration_max_rad_s2)
    duration_s = config.duration_s
    timed = duration_s is not None
    if timed == (None not in limits) or (timed and limits != (None, None)):
        expected = "given either duration_s or both speed_max_rad_s and acceleration_max_rad_s2"
        given = ["duration_s"] if timed else []
        given += [
            key for key, limit in zip(("speed_max_rad_s", "acceleration_max_rad_s2"), limits, strict=True) if limit is not None
        ]
        findings.append(Finding("reference", expected, " and ".join(given) or "none of them"))
    elif duration_s is not None:
        if number_fault(duration_s, above=0.0):
            findings.append(Finding("reference.duration_s", "a finite number > 0 s", repr(duration_s)))
        else:
            parameters["duration_s"] = duration_s
    else:
        for field, key, unit, value in (
            ("qd_max", "speed_max_rad_s", "rad/s", limits[0]),
            ("qdd_max", "acceleration_max_rad_s2", "rad/s^2", limits[1]),
        ):
            parameters[field][:n], faults = joint_values(f"reference.{key}", value, n, unit, above=0.0)
            findings += faults
    parameters["q_goal"][:n], faults = joint_values("reference.goal_rad", config.goal_rad, n, "rad")
    findings += faults
    if findings:
        raise ConfigError.from_findings(findings)
    return parameters, np.zeros(0)


@hot
def sample(parameters, memory, out):
    """Fill `out` at out["t_s"]: on the way, or at rest at the goal. Returns OK, or NOT_FINITE for a time that is not >= 0."""
    if not out["t_s"] >= 0.0:
        return NOT_FINITE
    if out["t_s"] < memory["approach_s"]:
        return sample_approach(parameters, memory, out)
    return rest_at_goal(parameters, out)
