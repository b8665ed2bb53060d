"""Gains from a run file's table `[gains.<law>]` to LAW_PARAMETERS. Every problem of a table is reported at once.

A value is one number for all joints or a list of one per joint. There are no defaults. Two forms, never mixed:

1. The gains themselves. Laws that give torque (pd, pid, pd_gravity, feedforward_pd): kp_nm_rad, kd_nm_s_rad, and for pid
   ki_nm_rad_s, integral_max_nm. Computed torque: kp_1_s2, kd_1_s, and if it shall integrate ki_1_s3, integral_max_rad_s2.
2. The error's motion: natural_frequency_rad_s w and damping_ratio z give Kp = w^2, Kd = 2 z w. With integral_rate_1_s r a third
   pole stands at -r, (s^2 + 2 z w s + w^2)(s + r): Kp = w^2 + 2 z w r, Kd = 2 z w + r, Ki = w^2 r. r = w and z = 1 is the
   triple pole. The bound of the integral term is given as in form 1.
   Laws that give torque multiply these by the joint's own inertia in one pose: the diagonal of M at the middle of every joint's
   range, 0 for joints without limits. In other poses, and with the other joints moving, the error moves differently.

The float law takes kd_nm_s_rad alone; feedforward takes nothing. Prismatic joints take the same keys in N, m: N/m, N s/m, m/s^2.

Ki is refused at or beyond Routh's bound (Ki < Kp Kd for e''' + Kd e'' + Kp e' + Ki e = 0; for torque the one joint alone in the
pose above, m e''' + (Kd + viscous) e'' + Kp e' + Ki e = 0). Sources: Routh 1877; Craig, Introduction to Robotics; Siciliano et al.,
Robotics, 2009.
"""

import difflib
from collections.abc import Mapping
from typing import TYPE_CHECKING, Any

import numpy as np
import numpy.typing as npt

from rtctl.blocks import LAW_PARAMETERS
from rtctl.config.joint_values import joint_values
from rtctl.errors import ConfigError, Finding
from rtctl.kernels.inertia_matrix import inertia_matrix
from rtctl.kernels.layout import MAX_JOINTS, OK, SCRATCH, new_block

if TYPE_CHECKING:
    from rtctl.arm import Arm

FloatArray = npt.NDArray[np.float64]

MOTION_KEYS = ("natural_frequency_rad_s", "damping_ratio")
RATE_KEY = "integral_rate_1_s"
_UNITS = {
    "kp_nm_rad": "N m/rad",
    "kd_nm_s_rad": "N m s/rad",
    "ki_nm_rad_s": "N m/(rad s)",
    "integral_max_nm": "N m",
    "kp_1_s2": "1/s^2",
    "kd_1_s": "1/s",
    "ki_1_s3": "1/s^3",
    "integral_max_rad_s2": "rad/s^2",
    "natural_frequency_rad_s": "rad/s",
    "damping_ratio": "(ratio)",
    "integral_rate_1_s": "1/s",
}


class GainTable:
    """One `[gains.<law>]` table being read: values by key, and the findings so far."""

    def __init__(self, arm: "Arm", law: str, gains: Mapping[str, Any], known: tuple[str, ...]) -> None:
        self.arm = arm
        self.where = f"gains.{law}"
        self.gains = gains
        self.known = known
        self.findings: list[Finding] = []
        for key in gains:
            if key not in known:
                near = difflib.get_close_matches(key, known, 1)
                likely = f"The nearest is {near[0]}." if near else ""
                expected = f"one of {', '.join(known)}" if known else "absent (this law has no gains)"
                self.findings.append(Finding(f"{self.where}.{key}", expected, "an unknown key", likely))

    def values(self, key: str, *, above_zero: bool = False) -> FloatArray:
        """The (n,) values of a key, >= 0 or > 0; NaN where they are missing or faulty, with findings."""
        unit = _UNITS[key]
        if key not in self.gains:
            bound = ">" if above_zero else ">="
            self.findings.append(Finding(f"{self.where}.{key}", f"given, {bound} 0 {unit}", "nothing"))
            return np.full(self.arm.n, np.nan)
        bounds = {"above": 0.0} if above_zero else {"least": 0.0}
        values, findings = joint_values(f"{self.where}.{key}", self.gains[key], self.arm.n, unit, **bounds)
        self.findings += findings
        return values

    def has(self, *keys: str) -> bool:
        """True if any of the keys is given."""
        return any(key in self.gains for key in keys)

    def parameters(self, **fields: FloatArray) -> np.void:
        """LAW_PARAMETERS with these fields set for all joints. Raises ConfigError if there is any finding."""
        if self.findings:
            raise ConfigError.from_findings(self.findings)
        block = new_block(LAW_PARAMETERS)
        for field, values in fields.items():
            block[field][: self.arm.n] = values
        return block


def no_gains(arm: "Arm", law: str, gains: Mapping[str, Any]) -> np.void:
    """LAW_PARAMETERS of a law without gains: refuses every key."""
    return GainTable(arm, law, gains, ()).parameters()


def damping_gains(arm: "Arm", law: str, gains: Mapping[str, Any]) -> np.void:
    """LAW_PARAMETERS of a law with joint damping alone: kd_nm_s_rad >= 0."""
    table = GainTable(arm, law, gains, ("kd_nm_s_rad",))
    Kd = table.values("kd_nm_s_rad")
    return table.parameters(Kd=Kd)


def torque_gains(arm: "Arm", law: str, gains: Mapping[str, Any], integral: bool = False) -> np.void:
    """LAW_PARAMETERS of a law whose feedback is a torque: Kp N m/rad, Kd N m s/rad, Ki N m/(rad s), integral_max N m."""
    own = ("kp_nm_rad", "kd_nm_s_rad", *(("ki_nm_rad_s",) if integral else ()))
    bound = "integral_max_nm"
    table = GainTable(arm, law, gains, (*own, *MOTION_KEYS, *((RATE_KEY, bound) if integral else ())))
    inertia = middle_inertia(arm)
    Kp, Kd, Ki = _feedback(table, own, integral, inertia)
    limit = table.values(bound) if integral else np.zeros(arm.n)
    viscous = arm.model["viscous"][: arm.n]
    _check_routh(table, own, Ki, Kp * (Kd + viscous) / inertia, "Kp (Kd + viscous) / inertia of the joint")
    return table.parameters(Kp=Kp, Kd=Kd, Ki=Ki, integral_max=limit)


def acceleration_gains(arm: "Arm", law: str, gains: Mapping[str, Any]) -> np.void:
    """LAW_PARAMETERS of a law whose feedback is an acceleration: Kp 1/s^2, Kd 1/s, Ki 1/s^3, integral_max rad/s^2.

    It integrates when any key of the integral is given; then all of them must be.
    """
    own = ("kp_1_s2", "kd_1_s", "ki_1_s3")
    bound = "integral_max_rad_s2"
    table = GainTable(arm, law, gains, (*own, *MOTION_KEYS, RATE_KEY, bound))
    integral = table.has("ki_1_s3", RATE_KEY, bound)
    Kp, Kd, Ki = _feedback(table, own if integral else own[:2], integral, np.ones(arm.n))
    limit = table.values(bound) if integral else np.zeros(arm.n)
    _check_routh(table, own, Ki, Kp * Kd, "Kp Kd")
    return table.parameters(Kp=Kp, Kd=Kd, Ki=Ki, integral_max=limit)


def _feedback(
    table: GainTable, own: tuple[str, ...], integral: bool, inertia: FloatArray
) -> tuple[FloatArray, FloatArray, FloatArray]:
    """Kp, Kd, Ki (n,) from whichever form the table uses; gains from the error's motion are multiplied by `inertia`."""
    motion = (*MOTION_KEYS, *((RATE_KEY,) if integral else ()))
    if table.has(*own) and table.has(*motion):
        expected = f"in one form: {', '.join(own)}, or {', '.join(motion)}"
        table.findings.append(Finding(table.where, expected, "keys of both", next="Remove one of the two."))
        return np.full((3, table.arm.n), np.nan)  # type: ignore[return-value]  # unpacks into three rows
    if table.has(*motion):
        w = table.values(MOTION_KEYS[0], above_zero=True)
        z = table.values(MOTION_KEYS[1], above_zero=True)
        r = table.values(RATE_KEY, above_zero=True) if integral else np.zeros(table.arm.n)
        return inertia * (w * w + 2.0 * z * w * r), inertia * (2.0 * z * w + r), inertia * w * w * r
    values = [table.values(key) for key in own]
    return values[0], values[1], values[2] if integral else np.zeros(table.arm.n)


def _check_routh(table: GainTable, own: tuple[str, ...], Ki: FloatArray, bound: FloatArray, formula: str) -> None:
    for i in range(table.arm.n):
        if Ki[i] > 0.0 and Ki[i] >= bound[i]:  # NaN has its own finding
            key = own[2]
            table.findings.append(
                Finding(
                    f"{table.where}: Ki of joint {i + 1} ({table.arm.joint_names[i]})",
                    f"< {formula} = {bound[i]:.6g} {_UNITS[key]} (Routh's bound)",
                    f"{Ki[i]:.6g}",
                    "At the bound the error swings without end, beyond it the swing grows.",
                    f"The triple pole has a ninth of the bound, {bound[i] / 9.0:.3g}.",
                )
            )


def middle_inertia(arm: "Arm") -> FloatArray:
    """Each joint's own inertia (n,), kg m^2 or kg: the diagonal of M at the middle of all ranges, 0 where there are no limits."""
    q = np.zeros(MAX_JOINTS)
    for i in range(arm.n):
        middle = 0.5 * (float(arm.q_min[i]) + float(arm.q_max[i]))
        q[i] = middle if np.isfinite(middle) else 0.0
    M = np.zeros((MAX_JOINTS, MAX_JOINTS))
    status = inertia_matrix(arm.model, q, new_block(SCRATCH), M)
    if status != OK:
        raise AssertionError(f"the inertia matrix of a loaded arm failed with status {status}")
    return np.array(np.diag(M)[: arm.n])
