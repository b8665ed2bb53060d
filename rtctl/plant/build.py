"""Fills the blocks of a simulated arm from its true arm and its settings. Cold: every problem is reported at once."""

import math
import random
from collections.abc import Callable
from dataclasses import dataclass

import numpy as np

from rtctl.arm import Arm
from rtctl.errors import ConfigError, Finding
from rtctl.kernels.layout import MODEL, new_block
from rtctl.plant.blocks import LINE, PLANT_MEMORY, PLANT_SETUP, REST_BRAKE, REST_GRAVITY, REST_ZERO

REST_CODES = {"brake": REST_BRAKE, "gravity": REST_GRAVITY, "zero": REST_ZERO}
SESSION_END = 2**53  # session numbers stay below, so that every language can hold them in a float64
SUBSTEP_MAX_S = 1e-3

PerJoint = float | tuple[float, ...]  # one value for all joints, or one each


@dataclass(frozen=True)
class PlantSettings:
    """What a simulated arm has besides its arm file. Per joint: rad, N m for rotary joints, m, N for prismatic ones."""

    period_s: float  # of the state messages
    substeps: int  # integration steps per period
    state_delay_s: float  # transport; a whole number of periods
    torque_delay_s: float
    valid_for_max_s: float  # the driver's own bound of a torque's validity
    silent_max_s: float  # a holder that has not driven yet and is silent for longer loses the grant
    still_qd: PerJoint  # measured speed below which a joint is still; more than one encoder count per period
    still_dwell_s: float
    speed_ratio: float  # the driver's own speed limit over the arm file's, >= 1
    stop_margin: PerJoint  # how far the hard stops lie outside the arm file's position limits
    stop_stiffness: PerJoint
    stop_damping: PerJoint
    stiction_ratio: float  # breakaway over Coulomb friction
    lag_s: PerJoint  # of the drives' torque
    encoder_quantum: PerJoint  # one count, 0 = exact
    brake_torque: PerJoint  # that a closed brake holds
    brake_open_s: float
    brake_close_s: float
    q_start: tuple[float, ...]
    gravity_added: bool = False  # the drives add gravity torque by themselves
    tau_measured: bool = True  # the state carries the drives' torque


def build_plant(arm: Arm, settings: PlantSettings, seed: int, where: str = "sim") -> tuple[np.void, np.void]:
    """PLANT_SETUP and zeroed PLANT_MEMORY of the true arm `arm`. Limits, rest policy and arm key are those of its file.

    seed    decides the driver's session number; the same seed gives the same bytes
    where   place of the settings, for messages

    Raises ConfigError with every problem.
    """
    findings = list(_findings(arm, settings, where))
    if findings:
        raise ConfigError.from_findings(findings)
    setup = new_block(PLANT_SETUP)
    n = arm.n
    for name in MODEL.names or ():
        setup["model"][name] = arm.model[name]
    setup["arm_key"] = arm.key
    setup["session"] = random.Random(seed).randrange(1, SESSION_END)
    setup["period_ns"] = round(settings.period_s * 1e9)
    setup["substeps"] = settings.substeps
    setup["state_delay"] = round(settings.state_delay_s / settings.period_s)
    setup["torque_delay"] = round(settings.torque_delay_s / settings.period_s)
    for name in ("valid_for_max", "silent_max", "still_dwell", "brake_open", "brake_close"):
        setup[f"{name}_ns"] = round(getattr(settings, f"{name}_s") * 1e9)
    for name in ("still_qd", "stop_stiffness", "stop_damping", "lag_s", "encoder_quantum", "brake_torque"):
        setup[name][:n] = getattr(settings, name)
    setup["tau_max"][:n] = arm.tau_max
    setup["qd_max"][:n] = arm.qd_max * settings.speed_ratio
    setup["rest_damping"][:n] = arm.rest.damping
    setup["rest_moving_ns"] = round(arm.rest.moving_s * 1e9)
    setup["rest_still"] = REST_CODES[arm.rest.still]
    setup["gravity_added"] = settings.gravity_added
    setup["tau_measured"] = settings.tau_measured
    setup["q_min"][:n] = arm.q_min - settings.stop_margin
    setup["q_max"][:n] = arm.q_max + np.asarray(settings.stop_margin)
    setup["stiction_ratio"] = settings.stiction_ratio
    setup["q_start"][:n] = settings.q_start
    return setup, new_block(PLANT_MEMORY)


_POSITIVE: tuple[str, Callable[[float], bool]] = ("> 0", lambda x: x > 0.0)
_NOT_NEGATIVE: tuple[str, Callable[[float], bool]] = (">= 0", lambda x: x >= 0.0)
_ONE_OR_MORE: tuple[str, Callable[[float], bool]] = (">= 1", lambda x: x >= 1.0)
_RANGES = {
    "period_s": _POSITIVE,
    "substeps": _ONE_OR_MORE,
    "state_delay_s": _NOT_NEGATIVE,
    "torque_delay_s": _NOT_NEGATIVE,
    "valid_for_max_s": _POSITIVE,
    "silent_max_s": _POSITIVE,
    "still_qd": _POSITIVE,
    "still_dwell_s": _NOT_NEGATIVE,
    "speed_ratio": _ONE_OR_MORE,
    "stop_margin": _NOT_NEGATIVE,
    "stop_stiffness": _POSITIVE,
    "stop_damping": _NOT_NEGATIVE,
    "stiction_ratio": _ONE_OR_MORE,
    "lag_s": _NOT_NEGATIVE,
    "encoder_quantum": _NOT_NEGATIVE,
    "brake_torque": _NOT_NEGATIVE,
    "brake_open_s": _NOT_NEGATIVE,
    "brake_close_s": _NOT_NEGATIVE,
}


def _findings(arm: Arm, settings: PlantSettings, where: str) -> list[Finding]:
    findings = []
    for name, (expected, holds) in _RANGES.items():
        value = getattr(settings, name)
        values = value if isinstance(value, tuple) else (value,)
        if isinstance(value, tuple) and len(value) != arm.n:
            findings.append(Finding(f"{where}.{name}", f"one value or {arm.n}, one per joint", f"{len(value)} values"))
        findings += [
            Finding(f"{where}.{name}", f"a finite number {expected}", repr(x))
            for x in values
            if not (math.isfinite(x) and holds(x))
        ]
    if not findings:
        findings = [*_timing_findings(settings, where), *_start_findings(arm, settings, where)]
    return findings


def _timing_findings(settings: PlantSettings, where: str) -> list[Finding]:
    findings = []
    period_ns = round(settings.period_s * 1e9)
    if period_ns % settings.substeps:
        got = f"{settings.substeps} substeps of {period_ns} ns"
        findings.append(Finding(f"{where}.substeps", "a divisor of the period in ns", got))
    elif not settings.period_s / settings.substeps <= SUBSTEP_MAX_S:
        got = f"{1e3 * settings.period_s / settings.substeps:g} ms"
        findings.append(Finding(f"{where}.substeps", "enough for integration steps of at most 1 ms", got, next="Raise it."))
    for name in ("state_delay_s", "torque_delay_s"):
        delay_s = getattr(settings, name)
        steps = delay_s / settings.period_s
        if abs(steps - round(steps)) > 1e-6 or not steps <= LINE - 1:
            expected = f"a whole number of periods of {settings.period_s:g} s, at most {LINE - 1}"
            findings.append(Finding(f"{where}.{name}", expected, f"{delay_s:g} s"))
    return findings


def _start_findings(arm: Arm, settings: PlantSettings, where: str) -> list[Finding]:
    if len(settings.q_start) != arm.n:
        return [Finding(f"{where}.q_start", f"{arm.n} values, one per joint", f"{len(settings.q_start)} values")]
    return [
        Finding(f"{where}.q_start[{i}]", f"within {low:g} to {high:g} {unit}, the limits of {name}", f"{q:g} {unit}")
        for i, (q, low, high, unit, name) in enumerate(
            zip(settings.q_start, arm.q_min, arm.q_max, arm.units, arm.joint_names, strict=True)
        )
        if not low <= q <= high
    ]
