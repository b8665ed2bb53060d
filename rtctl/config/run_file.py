"""The run file: everything one run needs, in TOML: arm, limits, rate, law and gains, reference, link, record, simulated arm.

    name, source, arm_file, limits_file, rate_hz, pacing ("timer" or "state"), law
    [gains.<law>]     one table per law, so that the line `law = "..."` alone exchanges the law
    [reference]       kind = "hold", "point_to_point", "waypoints" or "multi_sine", and the keys of that kind
    [link]            state and torque: "ipc://NAME", a socket in the runtime folder
    [record]          folder, counted from the folder the program is started in
    [limits]          optional: keys of the limits file, tighter
    [sim]             optional: the simulated arm, with the arm file of the true one
    [sim.payload]     optional: replaces the payload of the true arm

File names count from the folder of the run file. Laws and their gains are checked by `rtctl.laws`, motions by `rtctl.references`.
"""

import hashlib
import math
import os
from collections.abc import Mapping
from dataclasses import dataclass
from pathlib import Path
from types import MappingProxyType
from typing import Annotated, Any, Literal

import numpy as np
from annotated_types import Ge, Gt, Le
from pydantic import Field

from rtctl.arm import Arm, arm_from_document
from rtctl.config.arm_file import Payload
from rtctl.config.block_check import (
    TURN_RAD,
    Block,
    Text,
    likely_cause,
    looks_like_degrees,
    read_block,
    value_text,
)
from rtctl.config.joint_values import joint_values, number_fault
from rtctl.config.limits_file import LimitsKeys, limits_block
from rtctl.config.names import name_findings
from rtctl.config.runtime import socket_endpoint
from rtctl.config.toml_file import Document, KeyPath, read_toml
from rtctl.config.units import suffix_of, unit_of
from rtctl.errors import ConfigError, Finding, RtctlError

PERIODS_MAX = 63  # of transport delay in the simulated arm

Positive = Annotated[float, Gt(0.0)]
Delay = Annotated[float, Ge(0.0), Le(1.0)]
PerJoint = Annotated[Any, Field(description="a number or a list of one per moving joint")]


class TopKeys(Block):
    """Top of a run file."""

    name: Text
    source: Text
    arm_file: Text
    limits_file: Text
    rate_hz: Annotated[float, Ge(10.0), Le(10_000.0)]
    pacing: Literal["timer", "state"]
    law: Text
    reference: Any = Field(description="a table [reference] with kind")
    link: Any = Field(description="a table [link] with state, torque")
    record: Any = Field(description="a table [record] with folder")
    gains: Any = Field(description="tables [gains.<law>]")
    limits: Any = None
    sim: Any = None


class Hold(Block):
    """Hold the measured pose."""

    kind: Literal["hold"]


class PointToPoint(Block):
    """A minimum-jerk move to a goal, timed or as fast as its limits allow."""

    kind: Literal["point_to_point"]
    goal_rad: PerJoint
    duration_s: Positive | None = None
    speed_max_rad_s: PerJoint = None
    acceleration_max_rad_s2: PerJoint = None


class Waypoints(Block):
    """The rows of a CSV file."""

    kind: Literal["waypoints"]
    file: Text
    approach_duration_s: Positive | None = None


class MultiSine(Block):
    """Sines around a centre pose."""

    kind: Literal["multi_sine"]
    center_rad: PerJoint
    approach_duration_s: Positive | None = None
    frequency_hz: list[float]
    amplitude_rad: list[list[float]]
    phase_rad: list[list[float]]
    duration_s: Positive
    fade_s: Positive


ReferenceKeys = Hold | PointToPoint | Waypoints | MultiSine
_REFERENCES: dict[str, type[Block]] = {
    "hold": Hold,
    "point_to_point": PointToPoint,
    "waypoints": Waypoints,
    "multi_sine": MultiSine,
}


class LinkKeys(Block):
    """Sockets of the driver."""

    state: Text
    torque: Text


class RecordKeys(Block):
    """Where records go."""

    folder: Text


class SimKeys(Block):
    """The simulated arm and its driver."""

    arm_file: Text
    start_rad: PerJoint
    substep_count: Annotated[int, Ge(1), Le(1000)]
    state_delay_s: Delay
    torque_delay_s: Delay
    torque_lag_s: PerJoint
    encoder_bits: PerJoint
    stiction_ratio: Annotated[float, Ge(1.0)]
    hard_stop_margin_rad: PerJoint
    hard_stop_stiffness_nm_rad: PerJoint
    hard_stop_damping_nm_s_rad: PerJoint
    brake_torque_nm: PerJoint
    brake_open_s: Delay
    brake_close_s: Delay
    valid_for_max_s: Annotated[float, Gt(0.0), Le(1.0)]
    silent_max_s: Annotated[float, Gt(0.0), Le(10.0)]
    speed_limit_ratio: Annotated[float, Ge(1.0)]
    still_speed_rad_s: PerJoint
    still_dwell_s: Annotated[float, Ge(0.0), Le(10.0)]
    torque_measured: bool
    gravity_added: bool
    seed: Annotated[int, Ge(0)]
    payload: Any = None
    payload_dropped: bool = False


@dataclass(frozen=True)
class LinkConfig:
    """Endpoints as the run file has them, and in full."""

    state: str
    torque: str

    @property
    def state_endpoint(self) -> str:
        """Full endpoint of the state socket; the runtime folder is made when it is missing."""
        return socket_endpoint(self.state)

    @property
    def torque_endpoint(self) -> str:
        """Full endpoint of the torque socket."""
        return socket_endpoint(self.torque)


PerJointValues = tuple[float, ...]


@dataclass(frozen=True, eq=False)
class SimConfig:
    """The simulated arm: its true arm and what an arm file does not say. Per joint rad, N m; prismatic joints m, N."""

    arm: Arm  # the true one; same name, joints and units as the controller's
    q_start: PerJointValues
    substep_count: int  # integration steps per period
    state_delay_s: float  # transport, a whole number of periods
    torque_delay_s: float
    lag_s: PerJointValues  # time constant of the drives' torque
    encoder_quantum: PerJointValues  # one count: a turn (or a metre) over 2^bits, 0 = exact
    stiction_ratio: float  # breakaway over Coulomb friction
    stop_margin: PerJointValues  # hard stops outside the position limits
    stop_stiffness: PerJointValues
    stop_damping: PerJointValues
    brake_torque: PerJointValues
    brake_open_s: float
    brake_close_s: float
    valid_for_max_s: float  # the driver's own bound of a torque's validity
    silent_max_s: float  # a silent holder that has not driven yet loses the grant
    speed_ratio: float  # the driver's own speed limit over the arm's
    still_qd: PerJointValues  # measured speed below which a joint is still
    still_dwell_s: float
    tau_measured: bool
    gravity_added: bool
    seed: int  # decides the driver's session number in lock-step


@dataclass(frozen=True, eq=False)
class RunConfig:
    """One run, checked. Gains and reference are checked further by the law and the reference they are for."""

    path: Path
    name: str
    source: str
    arm: Arm
    limits: np.void  # LIMITS, read-only
    limits_path: Path
    rate_hz: float
    period_ns: int
    pacing: str  # "timer" or "state"
    law: str
    gains: Mapping[str, Mapping[str, Any]]  # by law
    reference: ReferenceKeys
    link: LinkConfig
    record_folder: Path  # counted from the folder the program is started in
    sim: SimConfig | None
    hash: str  # SHA-256 over all files of the run, hex
    hashes: Mapping[str, str]  # file, as named in messages -> SHA-256 of its bytes, hex
    text: str  # of the run file, for the record

    @property
    def folder(self) -> Path:
        """Folder of the run file: relative file names count from it."""
        return self.path.parent

    @property
    def period_s(self) -> float:
        """Period of the loop."""
        return self.period_ns * 1e-9


def beside(path: Path, name: str) -> Path:
    """A file that the file at `path` names: relative names count from its folder, `..` is resolved in the text."""
    return Path(os.path.normpath(path.parent / name))


class _Reader:
    """A run file being read: its document, the findings so far and the digests of its files."""

    def __init__(self, path: Path | str) -> None:
        self.path = Path(path)
        self.document = read_toml(path)
        self.findings: list[Finding] = []
        self.hashes = {self.document.name: self.document.digest}

    def add(self, path: KeyPath, expected: str, got: str, likely: str = "", next_step: str = "") -> None:
        """One thing wrong with the run file."""
        self.findings.append(Finding(self.document.where(*path), expected, got, likely, next_step))

    def block(self, model: Any, path: KeyPath) -> Any:
        """A table of the run file as a frozen object; None when it is absent (which the top has noticed) or wrong."""
        raw: Any = self.document.data
        for part in path:
            raw = raw.get(part) if isinstance(raw, dict) else None
        return None if raw is None else read_block(model, self.document, path, raw, self.findings)

    def other(self, path: KeyPath) -> Document | None:
        """A TOML file that a key names, relative to the run file."""
        raw: Any = self.document.data
        for part in path:
            raw = raw.get(part) if isinstance(raw, dict) else None
        if not isinstance(raw, str) or not raw:
            return None
        try:
            document = read_toml(beside(self.path, raw))
        except ConfigError as error:
            self.findings += error.findings
            return None
        self.hashes[document.name] = document.digest
        return document

    def arm(self, path: KeyPath, change: Any = None, simulation_only: bool = False) -> Arm | None:
        """The arm of a file that a key names; `change` maps its content to another."""
        document = self.other(path)
        if document is None:
            return None
        if change is not None:
            document = Document(document.name, change(document.data), document.lines, document.digest)
        try:
            return arm_from_document(document, simulation_only)
        except RtctlError as error:
            self.findings += error.findings
            return None

    # ---- parts -----------------------------------------------------------------------------------------------------------------

    def gains(self) -> Mapping[str, Mapping[str, Any]]:
        """Tables of numbers and lists of numbers; which keys a law knows is the law's own check."""
        raw = self.document.data.get("gains")
        if raw is None:
            return {}
        if not isinstance(raw, dict):
            self.add(("gains",), "tables [gains.<law>]", value_text(raw))
            return {}
        for law, table in raw.items():
            if not isinstance(table, dict):
                self.add(
                    ("gains", law),
                    f"in a table [gains.<law>], e.g. [gains.{self.document.data.get('law', 'pd')}]",
                    value_text(table),
                )
                continue
            for key, value in table.items():
                place: KeyPath = ("gains", law, key)
                if suffix_of(key) is None:
                    self.add(place, "a key that ends in its unit, e.g. kp_nm_rad", "a key without unit")
                elif isinstance(value, list):
                    for i, entry in enumerate(value):
                        if number_fault(entry):
                            self.add(
                                (*place, i), f"a finite number in {unit_of(key)}", value_text(entry), likely_cause(key, entry)
                            )
                elif number_fault(value):
                    self.add(place, f"a finite number in {unit_of(key)}, or a list", value_text(value), likely_cause(key, value))
        return MappingProxyType({law: MappingProxyType(dict(table)) for law, table in raw.items() if isinstance(table, dict)})

    def reference(self, arm: Arm | None, limits: np.void | None) -> ReferenceKeys | None:
        """The reference by its kind; goals inside the limits."""
        raw = self.document.data.get("reference")
        if raw is None:
            return None
        if not isinstance(raw, dict):
            self.add(("reference",), "a table [reference] with kind", value_text(raw))
            return None
        kind = raw.get("kind")
        if not isinstance(kind, str) or kind not in _REFERENCES:
            got = "nothing" if kind is None else value_text(kind)
            self.add(("reference", "kind"), f"one of {', '.join(_REFERENCES)}", got)
            return None
        reference = self.block(_REFERENCES[kind], ("reference",))
        if reference is None:
            return None
        if isinstance(reference, PointToPoint):
            self.point_to_point(reference, arm)
        if isinstance(reference, Waypoints):
            self.waypoint_file(reference)
        key = {"point_to_point": "goal_rad", "multi_sine": "center_rad"}.get(kind)
        if key and arm is not None and limits is not None:
            self.pose(("reference", key), getattr(reference, key), arm, limits["q_min"][: arm.n], limits["q_max"][: arm.n])
        return reference  # type: ignore[no-any-return]  # one of the kinds, by the table above

    def point_to_point(self, reference: PointToPoint, arm: Arm | None) -> None:
        """Timed, or with both limits."""
        limits = {key: getattr(reference, key) for key in ("speed_max_rad_s", "acceleration_max_rad_s2")}
        given = [key for key, value in limits.items() if value is not None]
        if (reference.duration_s is not None) == (len(given) == 2) or (reference.duration_s is not None and given):
            names = (["duration_s"] if reference.duration_s is not None else []) + given
            expected = "given either duration_s or both speed_max_rad_s and acceleration_max_rad_s2"
            self.add(("reference",), expected, " and ".join(names) or "none of them")
        for key in given:
            if arm is not None:
                _, faults = joint_values(self.document.where("reference", key), limits[key], arm.n, unit_of(key), above=0.0)
                self.findings += faults

    def waypoint_file(self, reference: Waypoints) -> None:
        """The CSV file exists; its content is the reference's own check."""
        file = beside(self.path, reference.file)
        try:
            self.hashes[str(file)] = hashlib.sha256(file.read_bytes()).hexdigest()
        except OSError as error:
            self.add(("reference", "file"), "a readable file", f"{file}: {(error.strerror or str(error)).lower()}")

    def pose(self, path: KeyPath, value: object, arm: Arm, low: Any, high: Any) -> PerJointValues | None:
        """A pose inside limits."""
        where = self.document.where(*path)
        values, faults = joint_values(where, value, arm.n, "rad")
        for i in range(arm.n):
            if np.isfinite(values[i]) and not low[i] <= values[i] <= high[i]:
                unit = arm.units[i]
                degrees = unit == "rad" and abs(values[i]) > TURN_RAD
                faults.append(
                    Finding(
                        f"{where}[{i}] ({arm.joint_names[i]})",
                        f"within {low[i]:g} to {high[i]:g} {unit}",
                        f"{values[i]:g}",
                        looks_like_degrees(float(values[i])) if degrees else "",
                    )
                )
        self.findings += faults
        return None if faults else tuple(float(entry) for entry in values)

    def link(self) -> LinkConfig | None:
        """Local sockets by name."""
        keys: LinkKeys | None = self.block(LinkKeys, ("link",))
        if keys is None:
            return None
        for key, endpoint in (("state", keys.state), ("torque", keys.torque)):
            scheme, _, place = endpoint.partition("://")
            if scheme == "tcp":
                self.add(
                    ("link", key),
                    "a local socket, ipc://NAME",
                    value_text(endpoint),
                    "This version speaks over local sockets only.",
                    "Run driver and controller on one computer.",
                )
            elif scheme != "ipc":
                self.add(("link", key), "a local socket, ipc://NAME", value_text(endpoint))
            else:
                self.findings += name_findings(self.document.where("link", key), place)
        if keys.state == keys.torque:
            self.add(("link", "torque"), "another socket than state", value_text(keys.torque))
        return LinkConfig(keys.state, keys.torque)

    def sim(self, arm: Arm | None, period_s: float | None, still_qd: Any) -> SimConfig | None:
        """The simulated arm, of the same name and joints as the controller's."""
        keys: SimKeys | None = self.block(SimKeys, ("sim",))
        payload: Payload | None = self.block(Payload, ("sim", "payload"))
        if keys is None:
            return None
        given = isinstance(self.document.data["sim"], dict) and "payload" in self.document.data["sim"]
        if keys.payload_dropped and given:
            self.add(("sim", "payload_dropped"), "false beside [sim.payload]", "true")

        def change(data: dict[str, Any]) -> dict[str, Any]:
            others = {key: value for key, value in data.items() if key != "payload"}
            if payload is None:
                return others if keys.payload_dropped else data
            frames = [str(frame.get("name")) for frame in data.get("frame", []) if isinstance(frame, dict)]
            if payload.frame not in frames:
                expected = f"a frame of {keys.arm_file} ({', '.join(frames) or 'it has none'})"
                self.add(("sim", "payload", "frame"), expected, value_text(payload.frame))
                return others
            return {**others, "payload": self.document.data["sim"]["payload"]}

        true = self.arm(("sim", "arm_file"), change, simulation_only=True)
        if true is None:
            return None
        if arm is not None and true.key != arm.key:
            own = f"{arm.name}: {', '.join(arm.joint_names)}"
            self.add(
                ("sim", "arm_file"),
                f"an arm of the same name, joints and units ({own})",
                f"{true.name}: {', '.join(true.joint_names)}",
            )
            return None
        return self._sim(keys, true, period_s, still_qd)

    def _sim(self, keys: SimKeys, true: Arm, period_s: float | None, still_qd: Any) -> SimConfig | None:
        count = len(self.findings)
        start = self.pose(("sim", "start_rad"), keys.start_rad, true, true.q_min, true.q_max)
        bits = self._values("encoder_bits", keys.encoder_bits, true)
        quantum = tuple(
            0.0 if bit == 0 else (TURN_RAD if unit == "rad" else 1.0) / 2.0**bit
            for bit, unit in zip(bits, true.units, strict=True)
        )
        still = self._values("still_speed_rad_s", keys.still_speed_rad_s, true, above=0.0)
        if period_s is not None:
            self._check_periods(keys, period_s, true, quantum, still, still_qd)
        config = SimConfig(
            arm=true,
            q_start=start or (0.0,) * true.n,
            substep_count=keys.substep_count,
            state_delay_s=keys.state_delay_s,
            torque_delay_s=keys.torque_delay_s,
            lag_s=self._values("torque_lag_s", keys.torque_lag_s, true),
            encoder_quantum=quantum,
            stiction_ratio=keys.stiction_ratio,
            stop_margin=self._values("hard_stop_margin_rad", keys.hard_stop_margin_rad, true),
            stop_stiffness=self._values("hard_stop_stiffness_nm_rad", keys.hard_stop_stiffness_nm_rad, true, above=0.0),
            stop_damping=self._values("hard_stop_damping_nm_s_rad", keys.hard_stop_damping_nm_s_rad, true),
            brake_torque=self._values("brake_torque_nm", keys.brake_torque_nm, true),
            brake_open_s=keys.brake_open_s,
            brake_close_s=keys.brake_close_s,
            valid_for_max_s=keys.valid_for_max_s,
            silent_max_s=keys.silent_max_s,
            speed_ratio=keys.speed_limit_ratio,
            still_qd=still,
            still_dwell_s=keys.still_dwell_s,
            tau_measured=keys.torque_measured,
            gravity_added=keys.gravity_added,
            seed=keys.seed,
        )
        return config if len(self.findings) == count else None

    def _values(self, key: str, value: object, arm: Arm, above: float = -math.inf) -> PerJointValues:
        least = -math.inf if above > -math.inf else 0.0
        values, faults = joint_values(self.document.where("sim", key), value, arm.n, unit_of(key), above=above, least=least)
        self.findings += faults
        return tuple(float(entry) for entry in values)

    def _check_periods(
        self, keys: SimKeys, period_s: float, arm: Arm, quantum: PerJointValues, still: PerJointValues, still_qd: Any
    ) -> None:
        """Delays are whole periods; one encoder count per period is no motion."""
        for key in ("state_delay_s", "torque_delay_s"):
            periods = getattr(keys, key) / period_s
            if abs(periods - round(periods)) > 1e-6 or round(periods) > PERIODS_MAX:
                expected = f"a whole number of periods of {period_s:g} s, at most {PERIODS_MAX}"
                self.add(("sim", key), expected, f"{getattr(keys, key):g}")
        for name, speeds in (("still_speed_rad_s", still), ("the still_speed_rad_s of the limits", still_qd)):
            coarse = [i for i in range(arm.n) if quantum[i] / period_s >= speeds[i]]
            if coarse:
                i = coarse[0]
                expected = f"enough that one count per period stays below {name} ({speeds[i]:g} {arm.units[i]}/s)"
                names = ", ".join(arm.joint_names[k] for k in coarse)
                likely = "One count would already look like motion."
                self.add(("sim", "encoder_bits"), expected, f"{quantum[i] / period_s:.3g} {arm.units[i]}/s ({names})", likely)


def load_run(path: Path | str) -> RunConfig:
    """The run of a run file, with arm, limits and simulated arm. Raises ConfigError with all that is wrong in all its files."""
    reader = _Reader(path)
    document = reader.document
    top: TopKeys | None = reader.block(TopKeys, ())
    if isinstance(document.data.get("name"), str):
        reader.findings += name_findings(document.where("name"), document.data["name"])
    period_s = 1.0 / top.rate_hz if top is not None else None
    arm = reader.arm(("arm_file",))
    limits = _limits(reader, arm, period_s)
    gains = reader.gains()
    reference = reader.reference(arm, limits)
    link = reader.link()
    record: RecordKeys | None = reader.block(RecordKeys, ("record",))
    sim = reader.sim(arm, period_s, limits["still_qd"] if limits is not None else np.full(64, np.nan))
    if reader.findings:
        raise ConfigError.from_findings(reader.findings)
    assert top is not None and arm is not None and limits is not None
    assert reference is not None and link is not None and record is not None
    hashes = dict(reader.hashes)
    return RunConfig(
        path=Path(path),
        name=top.name,
        source=top.source,
        arm=arm,
        limits=limits,
        limits_path=beside(reader.path, top.limits_file),
        rate_hz=top.rate_hz,
        period_ns=round(1e9 / top.rate_hz),
        pacing=top.pacing,
        law=top.law,
        gains=gains,
        reference=reference,
        link=link,
        record_folder=Path(record.folder),
        sim=sim,
        hash=hashlib.sha256("\n".join(hashes.values()).encode()).hexdigest(),
        hashes=MappingProxyType(hashes),
        text=Path(path).read_text(),
    )


def _limits(reader: _Reader, arm: Arm | None, period_s: float | None) -> np.void | None:
    """The LIMITS block, when arm and limits file can be read; times that fit the period."""
    document = reader.other(("limits_file",))
    if document is None:
        return None
    if arm is None:  # what can be said without the arm
        read_block(LimitsKeys, document, (), document.data, reader.findings)
        return None
    count = len(reader.findings)
    block = limits_block(arm, document, reader.document, reader.findings)
    if len(reader.findings) > count:
        return None
    if period_s is not None:
        for key, field, least in (("state_age_max_s", "state_age_max_ns", 1.0), ("valid_for_s", "valid_for_ns", 2.0)):
            if not block[field] * 1e-9 > least * period_s:
                where = document.where(key)
                expected = f"more than {least:g} period{'s' if least > 1 else ''} of {period_s:g} s"
                reader.findings.append(Finding(where, expected, f"{block[field] * 1e-9:g}"))
    frozen = np.array(block, block.dtype).reshape(1)
    frozen.flags.writeable = False
    result: np.void = frozen[0]
    return result
