"""Sums of sines around a centre pose, the same frequencies on every joint, faded in and out: excitation and endurance runs.

The sines are multiplied by a window that grows from 0 to 1 in `fade_s` like a minimum-jerk move and shrinks the same way, so that
position, velocity and acceleration start and end at rest at the centre whatever the phases.
"""

import math
from collections.abc import Sequence
from pathlib import Path
from typing import TYPE_CHECKING, Protocol

import numpy as np
import numpy.typing as npt

from rtctl.blocks import MAX_TONES, REFERENCE_PARAMETERS
from rtctl.config.joint_values import bound_text, joint_values, number_fault
from rtctl.errors import ConfigError, Finding
from rtctl.kernels.compile import hot
from rtctl.kernels.layout import OK, new_block
from rtctl.references.approach import set_approach
from rtctl.references.minimum_jerk import NOT_FINITE, begin_approach, rest_at_goal, rest_to_rest, sample_approach

if TYPE_CHECKING:
    from rtctl.arm import Arm

KIND = "multi_sine"

begin = begin_approach


class MultiSineSettings(Protocol):
    """What a run file says about this reference."""

    @property
    def center_rad(self) -> float | Sequence[float]: ...
    @property
    def approach_duration_s(self) -> float | None: ...
    @property
    def frequency_hz(self) -> Sequence[float]: ...
    @property
    def amplitude_rad(self) -> Sequence[Sequence[float]]: ...
    @property
    def phase_rad(self) -> Sequence[Sequence[float]]: ...
    @property
    def duration_s(self) -> float: ...
    @property
    def fade_s(self) -> float: ...


def prepare(arm: "Arm", config: MultiSineSettings, folder: Path) -> tuple[np.void, npt.NDArray[np.float64]]:
    """Parameters and (no) data. Raises ConfigError with all findings. Prismatic joints take m in the same keys."""
    parameters = new_block(REFERENCE_PARAMETERS)
    n = arm.n
    parameters["n"] = n
    findings = set_approach(parameters, config.approach_duration_s)
    parameters["q_goal"][:n], faults = joint_values("reference.center_rad", config.center_rad, n, "rad")
    findings += faults
    for key, field in (("duration_s", "body_duration_s"), ("fade_s", "fade_s")):
        value = getattr(config, key)
        if number_fault(value, above=0.0):
            findings.append(Finding(f"reference.{key}", "a finite number > 0 s", repr(value)))
        else:
            parameters[field] = value
    if 2.0 * parameters["fade_s"] > parameters["body_duration_s"] > 0.0:
        expected = f"at most half of duration_s ({parameters['body_duration_s'] / 2.0:g} s)"
        likely = "The sines grow and shrink within the duration."
        findings.append(Finding("reference.fade_s", expected, f"{parameters['fade_s']:g} s", likely))
    findings += _set_tones(parameters, config, n)
    if findings:
        raise ConfigError.from_findings(findings)
    return parameters, np.zeros(0)


def _set_tones(parameters: np.void, config: MultiSineSettings, n: int) -> list[Finding]:
    """Frequencies, and amplitude and phase of each tone for each joint."""
    count = len(config.frequency_hz)
    if not 1 <= count <= MAX_TONES:
        return [Finding("reference.frequency_hz", f"a list of 1 to {MAX_TONES} numbers", f"a list of {count}")]
    findings: list[Finding] = []
    parameters["tone_count"] = count
    parameters["tone_hz"][:count], faults = joint_values("reference.frequency_hz", config.frequency_hz, count, "Hz", above=0.0)
    findings += faults
    for key, field in (("amplitude_rad", "amplitude"), ("phase_rad", "phase")):
        rows = getattr(config, key)
        if len(rows) != n:
            expected = f"a list of {n} lists, one per joint, of {count} numbers each"
            findings.append(Finding(f"reference.{key}", expected, f"a list of {len(rows)}"))
            continue
        for i, row in enumerate(rows):
            if not isinstance(row, Sequence) or len(row) != count:
                got = f"a list of {len(row)}" if isinstance(row, Sequence) else repr(row)
                findings.append(Finding(f"reference.{key}[{i}]", f"a list of {count} numbers, one per frequency", got))
                continue
            for k, value in enumerate(row):
                if number_fault(value):
                    findings.append(Finding(f"reference.{key}[{i}][{k}]", bound_text("rad"), repr(value)))
                else:
                    parameters[field][i, k] = value
    return findings


@hot
def window(t_s, duration_s, fade_s):
    """The window at t_s in [0, duration_s] and its first two derivatives by time (1, 1/s, 1/s^2)."""
    if t_s < fade_s:
        w, wd, wdd = rest_to_rest(t_s / fade_s)
        return w, wd / fade_s, wdd / (fade_s * fade_s)
    if t_s > duration_s - fade_s:
        w, wd, wdd = rest_to_rest((duration_s - t_s) / fade_s)
        return w, -wd / fade_s, wdd / (fade_s * fade_s)
    return 1.0, 0.0, 0.0


@hot
def sample(parameters, memory, out):
    """Fill `out` at out["t_s"]: approach, sines, rest at the centre. Returns OK, or NOT_FINITE for a time that is not >= 0.

    With s the sum of sines and w the window: q = centre + w s, qd = w' s + w s', qdd = w'' s + 2 w' s' + w s''.
    """
    if not out["t_s"] >= 0.0:
        return NOT_FINITE
    if out["t_s"] < memory["approach_s"]:
        return sample_approach(parameters, memory, out)
    t_s = out["t_s"] - memory["approach_s"]
    if t_s >= parameters["body_duration_s"]:
        return rest_at_goal(parameters, out)
    w, wd, wdd = window(t_s, parameters["body_duration_s"], parameters["fade_s"])
    for i in range(parameters["n"]):
        s = 0.0
        sd = 0.0
        sdd = 0.0
        for k in range(parameters["tone_count"]):
            rate = 2.0 * math.pi * parameters["tone_hz"][k]
            angle = rate * t_s + parameters["phase"][i, k]
            amplitude = parameters["amplitude"][i, k]
            s += amplitude * math.sin(angle)
            sd += amplitude * rate * math.cos(angle)
            sdd -= amplitude * rate * rate * math.sin(angle)
        out["q_ref"][i] = parameters["q_goal"][i] + w * s
        out["qd_ref"][i] = wd * s + w * sd
        out["qdd_ref"][i] = wdd * s + 2.0 * wd * sd + w * sdd
    return OK
