"""The limits file: what the supervisor allows, in TOML, to the LIMITS block. A run file may tighten it, nothing may loosen it.

A value per joint is one number for all moving joints or a list of one per joint; prismatic joints read the same keys in m and N.
Continuous joints have the position limits -inf and inf. Times are in seconds. There are no defaults.
"""

import math
from typing import TYPE_CHECKING, Annotated, Any, Literal, NamedTuple, Optional

import numpy as np
import numpy.typing as npt
from annotated_types import Ge, Gt, Le
from pydantic import Field, create_model

from rtctl.blocks import LIMITS, STOP_FAULT, STOP_NOW
from rtctl.config.block_check import Block, Text, looks_like_degrees, read_block, value_text
from rtctl.config.joint_values import joint_values, number_fault
from rtctl.config.toml_file import Document
from rtctl.config.units import unit_of
from rtctl.errors import Finding
from rtctl.kernels.layout import new_block

if TYPE_CHECKING:
    from rtctl.arm import Arm

FloatArray = npt.NDArray[np.float64]

LESS, MORE, SAME = "at most", "at least", "equal to"  # how a run file may differ from the limits file
STILL_RATIO_MAX = 0.1  # of the speed limit: a joint that is faster is not still, and a stop must not end at speed
TURN_RAD = 2.0 * math.pi

Second = Annotated[float, Gt(0.0), Le(1.0)]
Dwell = Annotated[float, Ge(0.0), Le(10.0)]
Count = Annotated[int, Ge(0), Le(1_000_000)]
PerJoint = Annotated[Any, Field(description="a number or a list of one per moving joint")]


class LimitsKeys(Block):
    """All keys of a limits file."""

    name: Text
    arm: Text
    source: Text
    position_min_rad: PerJoint
    position_max_rad: PerJoint
    speed_max_rad_s: PerJoint
    torque_max_nm: PerJoint
    torque_rate_max_nm_s: PerJoint
    braking_torque_rate_max_nm_s: PerJoint
    tracking_error_max_rad: PerJoint
    tracking_error_dwell_s: Dwell
    torque_demand_dwell_s: Dwell
    state_age_max_s: Second
    resend_max_count: Count
    late_s: Second
    late_max_count: Count
    late_window_count: Annotated[int, Ge(1), Le(1_000_000)]
    side_thread_silent_max_s: Annotated[float, Gt(0.0), Le(5.0)]
    loop_delay_max_s: Second
    glitch_factor: Annotated[float, Gt(1.0)]
    valid_for_s: Second
    still_speed_rad_s: PerJoint
    still_dwell_s: Dwell
    ready_dwell_s: Dwell
    holding_torque_max_ratio: Annotated[float, Gt(0.0), Le(1.0)]
    start_ramp_s: Dwell
    braking_damping_nm_s_rad: PerJoint
    braking_deadline_s: Annotated[float, Gt(0.0), Le(30.0)]
    holding_stiffness_nm_rad: PerJoint
    holding_spring_torque_max_nm: PerJoint
    estop: Literal["category 0", "category 1"]
    torque_clamp: Literal["per joint", "scaled"]
    gravity_added_allowed: bool


class _Key(NamedTuple):
    """A key, its field in LIMITS, and which way is tighter."""

    key: str
    field: str
    tighter: str


_PER_JOINT = (
    _Key("position_min_rad", "q_min", MORE),
    _Key("position_max_rad", "q_max", LESS),
    _Key("speed_max_rad_s", "qd_max", LESS),
    _Key("torque_max_nm", "tau_max", LESS),
    _Key("torque_rate_max_nm_s", "tau_rate_max", LESS),
    _Key("braking_torque_rate_max_nm_s", "brake_tau_rate_max", LESS),
    _Key("tracking_error_max_rad", "error_max", LESS),
    _Key("still_speed_rad_s", "still_qd", LESS),
    _Key("braking_damping_nm_s_rad", "brake_damping", SAME),
    _Key("holding_stiffness_nm_rad", "hold_stiffness", SAME),
    _Key("holding_spring_torque_max_nm", "hold_torque_max", LESS),
)
_TIMES = (
    _Key("tracking_error_dwell_s", "error_dwell_ns", LESS),
    _Key("torque_demand_dwell_s", "demand_dwell_ns", LESS),
    _Key("state_age_max_s", "state_age_max_ns", LESS),
    _Key("late_s", "late_ns", LESS),
    _Key("side_thread_silent_max_s", "side_silent_ns", LESS),
    _Key("loop_delay_max_s", "loop_delay_max_ns", LESS),
    _Key("valid_for_s", "valid_for_ns", LESS),
    _Key("still_dwell_s", "still_dwell_ns", MORE),
    _Key("ready_dwell_s", "ready_dwell_ns", MORE),
    _Key("start_ramp_s", "ramp_ns", MORE),
    _Key("braking_deadline_s", "brake_deadline_ns", LESS),
)
_NUMBERS = (
    _Key("resend_max_count", "resend_max", LESS),
    _Key("late_max_count", "late_max", LESS),
    _Key("late_window_count", "late_window", MORE),
    _Key("glitch_factor", "glitch_factor", LESS),
    _Key("holding_torque_max_ratio", "hold_margin", LESS),
)
_WORDS = ("estop", "torque_clamp")
_ZERO_ALLOWED = ("braking_damping_nm_s_rad", "holding_stiffness_nm_rad", "holding_spring_torque_max_nm")


def _tightening() -> type[Block]:
    """The same keys, all optional, without those that name the file."""
    fields: dict[str, Any] = {}
    for name, info in LimitsKeys.model_fields.items():
        if name in ("name", "arm", "source"):
            continue
        annotation: Any = info.annotation
        for meta in info.metadata:
            annotation = Annotated[annotation, meta]
        fields[name] = (Optional[annotation], Field(default=None, description=info.description))  # noqa: UP045  # not at run time
    model: type[Block] = create_model("RunLimits", __base__=Block, **fields)
    return model


RunLimits = _tightening()


class _Limits:
    """The values of a limits file, then of a run's table, being read."""

    def __init__(self, arm: "Arm", findings: list[Finding]) -> None:
        self.arm = arm
        self.findings = findings
        self.block = new_block(LIMITS)
        self.places: dict[str, str] = {}  # key -> where its value in force comes from

    def per_joint(self, document: Document, path: tuple[str, ...], key: str, value: object) -> FloatArray | None:
        """(n,) values of a key; None when they cannot be used."""
        where = document.where(*path, key)
        arm, unit = self.arm, unit_of(key)
        count = len(self.findings)
        if key.startswith("position_"):
            values, faults = self._positions(where, key, value)
        elif key in _ZERO_ALLOWED:
            values, faults = joint_values(where, value, arm.n, unit, least=0.0)
        else:
            values, faults = joint_values(where, value, arm.n, unit, above=0.0)
        self.findings += faults
        return values if len(self.findings) == count else None

    def _positions(self, where: str, key: str, value: object) -> tuple[FloatArray, list[Finding]]:
        """Position limits: infinite for continuous joints only."""
        arm = self.arm
        free = -math.inf if key == "position_min_rad" else math.inf
        if not isinstance(value, list):
            value = [value] * arm.n
        if len(value) != arm.n:
            return np.zeros(arm.n), [Finding(where, f"a list of {arm.n} numbers, one per joint", f"a list of {len(value)}")]
        findings = []
        for i, entry in enumerate(value):
            continuous = not math.isfinite(arm.q_max[i])
            if continuous and entry != free:
                findings.append(
                    Finding(f"{where}[{i}]", f"{free} for the continuous joint {arm.joint_names[i]}", value_text(entry))
                )
            elif not continuous and number_fault(entry):
                findings.append(Finding(f"{where}[{i}]", f"a finite number in {arm.units[i]}", value_text(entry)))
        return (np.zeros(arm.n) if findings else np.array(value, np.float64)), findings

    def against_arm(self) -> None:
        """Nothing is looser than the arm file says."""
        arm = self.arm
        for key, field, bound, tighter in (
            ("position_min_rad", "q_min", arm.q_min, MORE),
            ("position_max_rad", "q_max", arm.q_max, LESS),
            ("speed_max_rad_s", "qd_max", arm.qd_max, LESS),
            ("torque_max_nm", "tau_max", arm.tau_max, LESS),
            ("torque_rate_max_nm_s", "tau_rate_max", arm.tau_rate_max, LESS),
            ("braking_torque_rate_max_nm_s", "brake_tau_rate_max", arm.tau_rate_max, LESS),
        ):
            if key in self.places:
                self.compare(key, self.block[field][: arm.n], bound, tighter, f"as in {arm.path}")
        if {"holding_spring_torque_max_nm", "torque_max_nm"} <= self.places.keys():
            held, most = self.block["hold_torque_max"][: arm.n], self.block["tau_max"][: arm.n]
            self.compare("holding_spring_torque_max_nm", held, most, LESS, "as in torque_max_nm")
        if {"position_min_rad", "position_max_rad"} <= self.places.keys():
            for i in range(arm.n):
                low, high = self.block["q_min"][i], self.block["q_max"][i]
                if not low < high:
                    where = f"{self.places['position_min_rad']}[{i}]"
                    self.findings.append(Finding(where, f"less than position_max_rad ({high:g} {arm.units[i]})", f"{low:g}"))

    def against_each_other(self) -> None:
        """A stop must be able to stop: it may change the torque as fast as the law, and `still` is not a speed of motion."""
        n, block = self.arm.n, self.block
        if {"braking_torque_rate_max_nm_s", "torque_rate_max_nm_s"} <= self.places.keys():
            rate = block["tau_rate_max"][:n]
            self.compare(
                "braking_torque_rate_max_nm_s", block["brake_tau_rate_max"][:n], rate, MORE, "as in torque_rate_max_nm_s"
            )
        if {"still_speed_rad_s", "speed_max_rad_s"} <= self.places.keys():
            most = STILL_RATIO_MAX * block["qd_max"][:n]
            self.compare("still_speed_rad_s", block["still_qd"][:n], most, LESS, "(a tenth of speed_max_rad_s)")

    def compare(self, key: str, values: FloatArray, bounds: FloatArray, tighter: str, origin: str) -> None:
        """Values on the tight side of bounds, joint by joint."""
        for i, (value, bound) in enumerate(zip(values, bounds, strict=True)):
            if not _tight(value, bound, tighter):
                unit = (
                    unit_of(key) if self.arm.units[i] == "rad" else {"rad": "m", "rad/s": "m/s", "N m": "N"}.get(unit_of(key), "")
                )
                degrees = unit == "rad" and abs(value) > TURN_RAD
                self.findings.append(
                    Finding(
                        f"{self.places[key]}[{i}] ({self.arm.joint_names[i]})",
                        f"{tighter} {bound:g} {unit}".rstrip() + f" {origin}",
                        f"{value:g}",
                        looks_like_degrees(float(value)) if degrees else "",
                    )
                )


def _tight(value: float, bound: float, tighter: str) -> bool:
    return {LESS: value <= bound, MORE: value >= bound, SAME: value == bound}[tighter]


def limits_block(arm: "Arm", document: Document, run: Document | None, findings: list[Finding]) -> np.void:
    """The LIMITS block of a limits file, tightened by the table [limits] of a run file; problems go to `findings`."""
    limits = _Limits(arm, findings)
    keys = read_block(LimitsKeys, document, (), document.data, findings)
    raw = document.data
    block = limits.block
    block["n"], block["arm_key"] = arm.n, arm.key
    if raw.get("arm") != arm.name and isinstance(raw.get("arm"), str):
        findings.append(Finding(document.where("arm"), f'"{arm.name}", the arm of this run', value_text(raw["arm"])))
    for key, field, _ in _PER_JOINT:
        if key in raw:
            values = limits.per_joint(document, (), key, raw[key])
            if values is not None:
                block[field][: arm.n] = values
                limits.places[key] = document.where(key)
    if keys is not None:
        for key, field, _ in _TIMES:
            block[field] = round(getattr(keys, key) * 1e9)
        for key, field, _ in _NUMBERS:
            block[field] = getattr(keys, key)
        block["estop_stop"] = {"category 0": STOP_NOW, "category 1": STOP_FAULT}[keys.estop]
        block["scale_torque"] = keys.torque_clamp == "scaled"
        block["allow_gravity_added"] = keys.gravity_added_allowed
        if keys.late_max_count > keys.late_window_count:
            where = document.where("late_max_count")
            findings.append(Finding(where, f"at most late_window_count ({keys.late_window_count})", f"{keys.late_max_count}"))
    limits.against_arm()
    if run is not None and "limits" in run.data:
        _tighten(limits, document, raw, run)
    limits.against_each_other()
    return block


def _tighten(limits: _Limits, document: Document, raw: dict[str, Any], run: Document) -> None:
    """Take a run file's table [limits], each value on the tight side of the limits file's."""
    read_block(RunLimits, run, ("limits",), run.data["limits"], limits.findings)
    if not isinstance(run.data["limits"], dict):
        return
    block, n = limits.block, limits.arm.n
    origin = f"as in {document.name}"
    for key, field, tighter in _PER_JOINT:
        if key in run.data["limits"]:
            values = limits.per_joint(run, ("limits",), key, run.data["limits"][key])
            if values is not None and key in limits.places:
                limits.places[key] = run.where("limits", key)
                limits.compare(key, values, block[field][:n].copy(), tighter, origin)
                block[field][:n] = values
    bad = {finding.where for finding in limits.findings}
    given = {key: value for key, value in run.data["limits"].items() if run.where("limits", key) not in bad}
    for key, field, tighter in (*_TIMES, *_NUMBERS):
        value, bound = given.get(key), raw.get(key)
        if number_fault(value) or number_fault(bound):
            continue
        unit = unit_of(key)
        if not _tight(float(value or 0), float(bound or 0), tighter):
            text = f"{bound:g}" if unit.startswith("(") else f"{bound:g} {unit}"
            limits.findings.append(Finding(run.where("limits", key), f"{tighter} {text} {origin}", f"{value:g}"))
        number = float(value or 0)
        block[field] = round(number * 1e9) if unit == "s" else number
    for key in _WORDS:
        if key in given and given[key] != raw.get(key):
            expected = f"{value_text(raw.get(key))} {origin}"
            limits.findings.append(Finding(run.where("limits", key), expected, value_text(given[key])))
    if "gravity_added_allowed" in given:
        if given["gravity_added_allowed"] and not raw.get("gravity_added_allowed"):
            limits.findings.append(Finding(run.where("limits", "gravity_added_allowed"), f"false {origin}", "true"))
        block["allow_gravity_added"] = given["gravity_added_allowed"]
