"""What is wrong with a motion, before anything moves: too far from the arm, outside the position limits, too fast."""

import math
from typing import TYPE_CHECKING, Any

import numpy as np
import numpy.typing as npt

from rtctl.blocks import REFERENCE_SAMPLE
from rtctl.errors import Finding
from rtctl.kernels.compile import hot
from rtctl.kernels.layout import OK, new_block
from rtctl.kernels.memory import address_of, call_address
from rtctl.references.approach import in_degrees, start_distance_max
from rtctl.references.motion import begin_motion, time_grid

if TYPE_CHECKING:
    from rtctl.arm import Arm
    from rtctl.references.reference import Reference

FloatArray = npt.NDArray[np.float64]

LIMIT_TOLERANCE = 1e-9  # rad, m: a goal on the limit itself may miss it by rounding


@hot
def check_grid(address, parameters, memory, sample, step_s, count, bounds, first, value, worst):
    """Find where a reference leaves its limits on the grid k step_s, k < count.

    bounds       (3, n)  least and largest position, largest speed
    first        (2, n)  in: -1; out: the first offending k of position and of speed
    value, worst (2, n)  position or speed there, and where it is farthest outside

    Returns the reference's status. NaN offends.
    """
    for k in range(count):
        sample["t_s"] = k * step_s
        status = call_address(address, (address_of(parameters), address_of(memory), address_of(sample)))
        if status != OK:
            return status
        for i in range(bounds.shape[1]):
            q = sample["q_ref"][i]
            speed = abs(sample["qd_ref"][i])
            if not (bounds[0, i] - LIMIT_TOLERANCE <= q <= bounds[1, i] + LIMIT_TOLERANCE):
                if first[0, i] < 0:
                    first[0, i], value[0, i], worst[0, i] = k, q, q
                middle = 0.5 * (bounds[0, i] + bounds[1, i])
                if abs(q - middle) > abs(worst[0, i] - middle):
                    worst[0, i] = q
            if not speed <= bounds[2, i] + LIMIT_TOLERANCE:
                if first[1, i] < 0:
                    first[1, i], value[1, i], worst[1, i] = k, speed, speed
                worst[1, i] = max(worst[1, i], speed)
    return OK


def check_reference(reference: "Reference", arm: "Arm", limits: Any, q_start: npt.ArrayLike) -> list[Finding]:
    """What is wrong with the motion from a start pose: too far from its first pose, outside position limits, too fast.

    limits   anything with (>= n,) arrays limits["q_min"], limits["q_max"], limits["qd_max"]: a LIMITS block

    Position and speed are sampled each millisecond (long motions coarser); the first offence of each joint is reported.
    """
    q = np.asarray(q_start, np.float64)
    if q.shape != (arm.n,) or not np.all(np.isfinite(q)):
        return [Finding("start pose", f"{arm.n} finite numbers", str(q.tolist()))]
    findings = [] if reference.approach_asked else _start_findings(reference, arm, q)
    if not findings:
        findings = _limit_findings(reference, arm, limits, q)
    return findings


def _start_findings(reference: "Reference", arm: "Arm", q: FloatArray) -> list[Finding]:
    findings = []
    for i in range(arm.n):
        unit = arm.units[i]
        distance = abs(float(reference.parameters["q_goal"][i]) - float(q[i]))
        bound = start_distance_max(unit)
        if not distance <= bound:
            likely = "It looks like degrees." if unit == "rad" and distance > 2.0 * math.pi else ""
            findings.append(
                Finding(
                    f"reference: {reference.source}, joint {i + 1} ({arm.joint_names[i]})",
                    f"within {in_degrees(bound, unit)} of the arm",
                    f"{in_degrees(distance, unit)} from it",
                    likely,
                    "Ask for an approach move with reference.approach_duration_s, or bring the arm there.",
                )
            )
    return findings


def _limit_findings(reference: "Reference", arm: "Arm", limits: Any, q: FloatArray) -> list[Finding]:
    memory = begin_motion(reference, q)
    end_s = float(memory["end_s"]) if math.isfinite(memory["end_s"]) else 0.0
    count = time_grid(end_s).size
    first = np.full((2, arm.n), -1, np.int64)
    value = np.zeros((2, arm.n))
    worst = np.zeros((2, arm.n))
    bounds = np.zeros((3, arm.n))
    for k, name in enumerate(("q_min", "q_max", "qd_max")):
        bounds[k] = limits[name][: arm.n]
    step_s = end_s / (count - 1)
    sample = new_block(REFERENCE_SAMPLE)
    status = check_grid(
        reference.sample.address, reference.parameters, memory, sample, step_s, count, bounds, first, value, worst
    )
    if status != OK:
        return [Finding("reference", "finite at all times", f"status {status} from its {reference.kind} function")]
    findings = []
    for i in range(arm.n):
        unit = arm.units[i]
        joint = f"joint {i + 1} ({arm.joint_names[i]})"
        texts = (
            (f"within {bounds[0, i]:.4g} and {bounds[1, i]:.4g} {unit}", unit, "position"),
            (f"at most {bounds[2, i]:.4g} {unit}/s", f"{unit}/s", "speed"),
        )
        for k, (expected, value_unit, what) in enumerate(texts):
            if first[k, i] >= 0:
                got = f"{value[k, i]:.4g} {value_unit} at {first[k, i] * step_s:.3f} s (worst {worst[k, i]:.4g})"
                findings.append(Finding(f"reference: {what} of {joint}", expected, got))
    return findings
