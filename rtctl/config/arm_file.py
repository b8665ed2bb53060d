"""The arm file: an arm's description in TOML, checked and frozen. `rtctl.arm` builds the model from it.

    name, source, gravity_m_s2     gravity vector in base coordinates
    [[joint]]                      name, kind, parent ("base" or a joint's name), origin_m and rotation_rad of the joint frame in
                                   the parent's joint frame, axis ("x" to "-z") or axis_ratio (direction ratios) in the joint frame
      [joint.body]                 what moves with the joint, in the joint frame: mass_kg, center_of_mass_m, inertia_kgm2 (tensor
                                   elements xx, yy, zz, xy, xz, yz), inertia_point, inertia_rotation_rad
      [joint.drive]                reflected_inertia_kgm2, or rotor_inertia_kgm2 with gear_ratio
      [joint.friction]             viscous_nm_s_rad, coulomb_nm, smoothing_rad_s
      [joint.limits]               position_min_rad, position_max_rad, speed_max_rad_s, torque_max_nm, torque_rate_max_nm_s
    [[frame]]                      name, joint, origin_m, rotation_rad
    [payload]                      frame, mass_kg, center_of_mass_m, inertia_kgm2 about its centre of mass, in that frame
    [rest]                         damping_nm_s_rad, moving_s, still: what the driver does when nobody holds the grant

`rotation_rad` are angles about the parent's fixed x, y and z axes, in this order. Every block may carry `source`, where its numbers
come from. Prismatic joints have the same keys with their own units (`force_max_n`, `speed_max_m_s`, ...); fixed joints have a body
at most. Joints may stand in any order. Nothing that moves or limits the arm has a default.
"""

import difflib
import math
from dataclasses import dataclass
from typing import Annotated, Any, Literal

import numpy as np
import numpy.typing as npt
from annotated_types import Ge, Gt, Le
from pydantic import Field

from rtctl.config.block_check import (
    TURN_RAD,
    Block,
    Tensor,
    Text,
    Vector3,
    looks_like_degrees,
    read_block,
    value_text,
)
from rtctl.config.inertia import rotation_xyz, shift, tensor, tensor_faults
from rtctl.config.joint_values import joint_values
from rtctl.config.names import name_findings
from rtctl.config.toml_file import Document, KeyPath
from rtctl.errors import ConfigError, Finding, ModelError
from rtctl.kernels.layout import MAX_FRAMES, MAX_JOINTS

BASE = "base"
KINDS = ("revolute", "continuous", "prismatic", "fixed")
AXES = {
    "x": (1.0, 0.0, 0.0),
    "y": (0.0, 1.0, 0.0),
    "z": (0.0, 0.0, 1.0),
    "-x": (-1.0, 0.0, 0.0),
    "-y": (0.0, -1.0, 0.0),
    "-z": (0.0, 0.0, -1.0),
}
LENGTH_MAX_M = 20.0  # a longer link is millimetres taken for metres
POSITION_MAX_RAD = 6.0 * TURN_RAD  # a wider limit is degrees taken for radians; a joint without end is continuous

Positive = Annotated[float, Gt(0.0)]
NotNegative = Annotated[float, Ge(0.0)]


class TopKeys(Block):
    """Top of an arm file; the tables below it are read one by one."""

    name: Text
    source: Text
    gravity_m_s2: Vector3
    joint: Any = Field(description="one table [[joint]] or more")
    frame: Any = None
    payload: Any = None
    rest: Any = Field(description="a table [rest] with damping_nm_s_rad, moving_s, still")


class JointKeys(Block):
    """A joint's own keys; the tables below it are read by kind."""

    name: Text
    kind: Literal["revolute", "continuous", "prismatic", "fixed"]
    parent: Text
    origin_m: Vector3
    rotation_rad: Vector3
    axis: Literal["x", "y", "z", "-x", "-y", "-z"] | None = None
    axis_ratio: Vector3 | None = None
    source: Text | None = None
    body: Any = None
    drive: Any = None
    friction: Any = None
    limits: Any = None


class Body(Block):
    """Mass and inertia of what is fixed to the joint frame."""

    mass_kg: Positive
    center_of_mass_m: Vector3
    inertia_kgm2: Tensor
    inertia_point: Literal["center_of_mass", "joint_frame"]
    inertia_rotation_rad: Vector3 | None = None  # of the axes of the inertia in the joint frame; none = the same axes
    source: Text | None = None


class RevoluteDrive(Block):
    """Rotor inertia at the joint, or at the rotor with the gear's ratio."""

    reflected_inertia_kgm2: NotNegative | None = None
    rotor_inertia_kgm2: NotNegative | None = None
    gear_ratio: Positive | None = None
    source: Text | None = None


class PrismaticDrive(Block):
    """Drive mass at the joint, or rotor inertia with the rotor's turn per metre."""

    reflected_mass_kg: NotNegative | None = None
    rotor_inertia_kgm2: NotNegative | None = None
    gear_rad_m: Positive | None = None
    source: Text | None = None


class RevoluteFriction(Block):
    """Friction of the model: viscous qd + coulomb tanh(qd / smoothing)."""

    viscous_nm_s_rad: NotNegative
    coulomb_nm: NotNegative
    smoothing_rad_s: Positive
    source: Text | None = None


class PrismaticFriction(Block):
    """The same for a sliding joint."""

    viscous_n_s_m: NotNegative
    coulomb_n: NotNegative
    smoothing_m_s: Positive
    source: Text | None = None


class RevoluteLimits(Block):
    """Limits of the hardware."""

    position_min_rad: float
    position_max_rad: float
    speed_max_rad_s: Positive
    torque_max_nm: Positive
    torque_rate_max_nm_s: Positive
    source: Text | None = None


class ContinuousLimits(Block):
    """The same for a joint that turns without end."""

    speed_max_rad_s: Positive
    torque_max_nm: Positive
    torque_rate_max_nm_s: Positive
    source: Text | None = None


class PrismaticLimits(Block):
    """The same for a sliding joint."""

    position_min_m: float
    position_max_m: float
    speed_max_m_s: Positive
    force_max_n: Positive
    force_rate_max_n_s: Positive
    source: Text | None = None


class Frame(Block):
    """A named frame, in the joint frame it is fixed to."""

    name: Text
    joint: Text  # or "base"
    origin_m: Vector3
    rotation_rad: Vector3
    source: Text | None = None


class Payload(Block):
    """What the arm carries, in a named frame; the inertia is about the centre of mass."""

    frame: Text
    mass_kg: Positive
    center_of_mass_m: Vector3
    inertia_kgm2: Tensor
    source: Text | None = None


class Rest(Block):
    """What the driver does when nobody holds the grant: damping while the arm moves, then brake, gravity torque or no torque."""

    damping_nm_s_rad: Any = Field(description="a number >= 0 N m s/rad, or a list of one per moving joint")
    moving_s: Annotated[float, Gt(0.0), Le(10.0)]
    still: Literal["brake", "gravity", "zero"]
    source: Text | None = None


@dataclass(frozen=True)
class Joint:
    """One joint with its tables, all checked."""

    keys: JointKeys
    axis: tuple[float, float, float]  # direction ratios, z for a fixed joint
    body: Body | None
    reflected: float  # kg m^2 or kg at the joint
    viscous: float  # N m s/rad or N s/m
    coulomb: float  # N m or N
    smoothing: float  # rad/s or m/s
    q_min: float  # rad or m; -inf for continuous joints
    q_max: float
    qd_max: float
    tau_max: float
    tau_rate_max: float

    @property
    def moves(self) -> bool:
        """False for a fixed joint."""
        return self.keys.kind != "fixed"


@dataclass(frozen=True)
class ArmFile:
    """A checked arm description."""

    name: str
    source: str
    gravity: tuple[float, ...]  # m/s^2, base coordinates
    joints: tuple[Joint, ...]  # parents before children, otherwise in the order of the file
    frames: tuple[Frame, ...]
    payload: Payload | None
    rest_damping: tuple[float, ...]  # per moving joint
    rest_moving_s: float
    rest_still: str
    warnings: tuple[str, ...]


class _Reader:
    """Collects what is wrong: the file's form in `findings`, what no arm can be in `impossible`."""

    def __init__(self, document: Document, simulation_only: bool) -> None:
        self.document = document
        self.simulation_only = simulation_only
        self.findings: list[Finding] = []
        self.impossible: list[Finding] = []
        self.warnings: list[str] = []

    def block(self, model: Any, path: KeyPath, raw: object, required: str = "") -> Any:
        """A table as a frozen object, or None; `required` says what it must be when it must be there."""
        if raw is None:
            if required:
                self.findings.append(Finding(self.document.where(*path), f"given, {required}", "nothing"))
            return None
        return read_block(model, self.document, path, raw, self.findings)

    def add(self, path: KeyPath, expected: str, got: str, likely: str = "", next_step: str = "") -> None:
        """One thing wrong with the file."""
        self.findings.append(Finding(self.document.where(*path), expected, got, likely, next_step))

    def tables(self, key: str, raw: object) -> list[Any]:
        """The elements of an array of tables."""
        if not isinstance(raw, list):
            self.add((key,), f"tables [[{key}]]", value_text(raw))
            return []
        return raw

    # ---- parts -----------------------------------------------------------------------------------------------------------------

    def joint(self, j: int, raw: object) -> Joint | None:
        """Joint j with its tables."""
        path: KeyPath = ("joint", j)
        keys: JointKeys | None = self.block(JointKeys, path, raw)
        tables = raw if isinstance(raw, dict) else {}
        kind = tables.get("kind")
        body = self.block(Body, (*path, "body"), tables.get("body"))
        if body is not None:
            self.inertia((*path, "body"), body)
        if keys is not None:
            self.pose(path, keys)
        if kind not in KINDS:
            return None
        if kind == "fixed":
            return self.fixed_joint(path, keys, tables, body)
        values = self.moving_values(path, kind, tables)
        axis = self.axis(path, keys) if keys is not None else None
        if keys is None or values is None or axis is None:
            return None
        return Joint(keys, axis, body, *values)

    def fixed_joint(self, path: KeyPath, keys: JointKeys | None, tables: dict[str, Any], body: Body | None) -> Joint | None:
        """A fixed joint: a pose and perhaps a body."""
        for key in ("axis", "axis_ratio", "drive", "friction", "limits"):
            if tables.get(key) is not None:
                self.add((*path, key), "absent for a fixed joint", value_text(tables[key]))
        return Joint(keys, AXES["z"], body, *(0.0,) * 9) if keys is not None else None

    def moving_values(self, path: KeyPath, kind: str, tables: dict[str, Any]) -> tuple[float, ...] | None:
        """Drive, friction and limits of a moving joint in the order of Joint's fields."""
        slides = kind == "prismatic"
        a_number = "reflected_mass_kg" if slides else "reflected_inertia_kgm2"
        drive = self.block(
            PrismaticDrive if slides else RevoluteDrive,
            (*path, "drive"),
            tables.get("drive"),
            f"a table with {a_number} (0.0 if it is not known)",
        )
        friction = self.block(
            PrismaticFriction if slides else RevoluteFriction,
            (*path, "friction"),
            tables.get("friction"),
            "a table with the viscous and Coulomb friction (0.0 if it is not known)",
        )
        model = {"revolute": RevoluteLimits, "continuous": ContinuousLimits, "prismatic": PrismaticLimits}[kind]
        raw = self.endless((*path, "limits"), tables.get("limits")) if kind == "continuous" else tables.get("limits")
        limits = self.block(model, (*path, "limits"), raw, "a table with the limits of the hardware")
        reflected = self.reflected((*path, "drive"), drive, slides) if drive is not None else None
        bounds = self.bounds((*path, "limits"), limits, kind) if limits is not None else None
        if reflected is None or friction is None or bounds is None:
            return None
        if slides:
            return (reflected, friction.viscous_n_s_m, friction.coulomb_n, friction.smoothing_m_s, *bounds)
        return (reflected, friction.viscous_nm_s_rad, friction.coulomb_nm, friction.smoothing_rad_s, *bounds)

    def endless(self, path: KeyPath, raw: object) -> object:
        """The limits of a continuous joint without position limits, which are refused."""
        if not isinstance(raw, dict):
            return raw
        for key in raw:
            if key.startswith("position_"):
                self.add((*path, key), "absent for a continuous joint", value_text(raw[key]), "With an end it is revolute.")
        return {key: value for key, value in raw.items() if not key.startswith("position_")}

    def reflected(self, path: KeyPath, drive: Any, slides: bool) -> float | None:
        """Rotor inertia at the joint: given, or rotor inertia times the square of the ratio."""
        direct, ratio = ("reflected_mass_kg", "gear_rad_m") if slides else ("reflected_inertia_kgm2", "gear_ratio")
        values = (getattr(drive, direct), drive.rotor_inertia_kgm2, getattr(drive, ratio))
        if values[0] is not None and values[1:] == (None, None):
            return float(values[0])
        if values[0] is None and None not in values[1:]:
            return float(values[1] * values[2] ** 2)
        given = [key for key, value in zip((direct, "rotor_inertia_kgm2", ratio), values, strict=True) if value is not None]
        self.add(path, f"given as {direct} alone, or as rotor_inertia_kgm2 and {ratio}", " and ".join(given) or "none of them")
        return None

    def bounds(self, path: KeyPath, limits: Any, kind: str) -> tuple[float, ...] | None:
        """q_min, q_max, qd_max, tau_max, tau_rate_max."""
        if kind == "continuous":
            return (-math.inf, math.inf, limits.speed_max_rad_s, limits.torque_max_nm, limits.torque_rate_max_nm_s)
        unit = "m" if kind == "prismatic" else "rad"
        low, high = getattr(limits, f"position_min_{unit}"), getattr(limits, f"position_max_{unit}")
        right = True
        if not low < high:
            right = False
            where = self.document.where(*path, f"position_min_{unit}")
            expected = f"less than position_max_{unit} ({high:g} {unit})"
            likely = "The two are exchanged." if high < low else ""
            self.impossible.append(Finding(where, expected, f"{low:g}", likely))
        for side, value in (("min", low), ("max", high)):
            if unit == "rad" and abs(value) > POSITION_MAX_RAD:
                right = False
                likely = looks_like_degrees(value)
                expected = f"within +/-{POSITION_MAX_RAD:.3g} rad"
                self.add((*path, f"position_{side}_rad"), expected, f"{value:g}", likely, "A joint without end is continuous.")
        if not right:
            return None
        if kind == "prismatic":
            return (low, high, limits.speed_max_m_s, limits.force_max_n, limits.force_rate_max_n_s)
        return (low, high, limits.speed_max_rad_s, limits.torque_max_nm, limits.torque_rate_max_nm_s)

    def axis(self, path: KeyPath, keys: JointKeys) -> tuple[float, float, float] | None:
        """Direction of the axis, from the one key or the other."""
        if (keys.axis is None) == (keys.axis_ratio is None):
            got = "neither" if keys.axis is None else "both"
            self.add(path, "given an axis as axis or as axis_ratio", got)
            return None
        if keys.axis is not None:
            return AXES[keys.axis]
        ratio = keys.axis_ratio or [0.0, 0.0, 0.0]
        if not math.hypot(*ratio) > 1e-6:
            self.add((*path, "axis_ratio"), "a direction, not all zero", value_text(ratio))
            return None
        return (ratio[0], ratio[1], ratio[2])

    def pose(self, path: KeyPath, block: Any) -> None:
        """Origins in metres and angles in radians, by their size."""
        for i, value in enumerate(block.rotation_rad):
            if abs(value) > TURN_RAD:
                self.add((*path, "rotation_rad", i), "within +/-6.28 rad", f"{value:g}", looks_like_degrees(value))
        self.length((*path, "origin_m"), block.origin_m)

    def length(self, path: KeyPath, values: list[float]) -> None:
        """Lengths of an arm's size."""
        for i, value in enumerate(values):
            if abs(value) > LENGTH_MAX_M:
                likely = f"It looks like millimetres; {value:g} mm are {value / 1000.0:g} m."
                self.add((*path, i), f"within +/-{LENGTH_MAX_M:g} m", f"{value:g}", likely)

    def inertia(self, path: KeyPath, block: Any) -> None:
        """What no rigid body can have."""
        self.length((*path, "center_of_mass_m"), block.center_of_mass_m)
        where = self.document.where(*path, "inertia_kgm2")
        indefinite, triangle = tensor_faults(centre_inertia(block))
        if indefinite:
            at_joint = getattr(block, "inertia_point", "center_of_mass") == "joint_frame"
            likely = (
                "Less the mass times the distance of its centre squared nothing is left: "
                'the inertia is probably about the centre of mass; then inertia_point is "center_of_mass".'
                if at_joint and tensor_faults(tensor(block.inertia_kgm2)) == ("", "")
                else "Products of inertia may be in the wrong place; the order is xx, yy, zz, xy, xz, yz."
            )
            self.impossible.append(Finding(where, "positive definite about the centre of mass", indefinite, likely))
        elif triangle:
            expected = "such that no principal moment exceeds the sum of the other two"
            if self.simulation_only:
                self.warnings.append(str(Finding(where, expected, triangle, "No body has it. Accepted for simulation only.")))
            else:
                likely = "No body has such an inertia; a moment is wrong, or it is about another point than inertia_point says."
                self.impossible.append(Finding(where, expected, triangle, likely))

    def payload(self, raw: object, frames: list[Frame], bodies: dict[str, str | None]) -> Payload | None:
        """The payload on a frame that moves; `bodies` tells the moving joint of each joint, None for the base."""
        payload: Payload | None = self.block(Payload, ("payload",), raw)
        if payload is None:
            return None
        self.inertia(("payload",), payload)
        names = {frame.name: frame.joint for frame in frames}
        if payload.frame not in names:
            self.unknown(("payload", "frame"), "frame", payload.frame, list(names))
        elif bodies.get(names[payload.frame], BASE) is None:
            self.add(("payload", "frame"), "a frame that moves", f'"{payload.frame}", which is fixed to the base')
        return payload

    def unknown(self, path: KeyPath, what: str, name: str, known: list[str]) -> None:
        """A name that refers to nothing."""
        near = difflib.get_close_matches(name, known, 1)
        likely = f"The nearest is {near[0]}." if near else f"Known: {', '.join(known) or 'none'}."
        self.add(path, f"the name of a {what}", f'"{name}"', likely)


def centre_inertia(block: Any) -> npt.NDArray[np.float64]:
    """The (3, 3) inertia of a Body or Payload about its centre of mass, in the axes of its frame."""
    R = rotation_xyz(getattr(block, "inertia_rotation_rad", None) or (0.0, 0.0, 0.0))
    inertia = R @ tensor(block.inertia_kgm2) @ R.T
    if getattr(block, "inertia_point", "center_of_mass") == "joint_frame":
        inertia = inertia - shift(block.mass_kg, np.asarray(block.center_of_mass_m, np.float64))
    return inertia


def check_arm(document: Document, simulation_only: bool = False) -> ArmFile:
    """The checked arm of a document.

    simulation_only   lets an inertia that breaks the triangle inequality through with a warning: published data sometimes does

    Raises ConfigError, or ModelError when all that is wrong is physically impossible; with all findings.
    """
    reader = _Reader(document, simulation_only)
    top: TopKeys | None = read_block(TopKeys, document, (), document.data, reader.findings)
    raw = document.data
    if top is not None:
        reader.findings += name_findings(document.where("name"), top.name)
    tables = reader.tables("joint", raw["joint"]) if "joint" in raw else []
    joints = [reader.joint(j, table) for j, table in enumerate(tables)]
    order, bodies = _tree(reader, tables)
    moving = sum(isinstance(table, dict) and table.get("kind") != "fixed" for table in tables)
    if "joint" in raw and not 1 <= moving <= MAX_JOINTS:
        reader.add(("joint",), f"1 to {MAX_JOINTS} moving joints", f"{moving}")
    _check_masses(reader, tables, bodies)
    frames = _frames(reader, raw.get("frame"), [str(table.get("name")) for table in tables if isinstance(table, dict)])
    payload = reader.payload(raw.get("payload"), frames, bodies)
    rest: Rest | None = reader.block(Rest, ("rest",), raw.get("rest"))
    damping: tuple[float, ...] = ()
    if rest is not None:
        values, faults = joint_values(
            document.where("rest", "damping_nm_s_rad"), rest.damping_nm_s_rad, moving, "N m s/rad", least=0.0
        )
        reader.findings += faults
        damping = tuple(float(value) for value in values)
    if reader.findings:
        raise ConfigError.from_findings(reader.findings + reader.impossible)
    if reader.impossible:
        raise ModelError.from_findings(reader.impossible)
    assert top is not None and rest is not None
    ordered = tuple(joint for joint in (joints[j] for j in order) if joint is not None)
    return ArmFile(
        top.name,
        top.source,
        tuple(top.gravity_m_s2),
        ordered,
        tuple(frames),
        payload,
        damping,
        rest.moving_s,
        rest.still,
        tuple(reader.warnings),
    )


def _tree(reader: _Reader, tables: list[Any]) -> tuple[list[int], dict[str, str | None]]:
    """Order with parents first, and the moving joint each joint belongs to (None = base). Names and parents are checked."""
    index: dict[str, int] = {}
    for j, table in enumerate(tables):
        name = table.get("name") if isinstance(table, dict) else None
        if not isinstance(name, str):
            continue
        reader.findings += name_findings(reader.document.where("joint", j, "name"), name)
        if name == BASE:
            reader.add(("joint", j, "name"), f'a name other than "{BASE}"', f'"{name}"', "It is the name of what stands still.")
        elif name in index:
            reader.add(("joint", j, "name"), "a name used once", f'"{name}" again', f"joint[{index[name]}] has it too.")
        else:
            index[name] = j
    parents: dict[int, int | None] = {}
    for name, j in index.items():
        parent = tables[j].get("parent")
        if parent == BASE:
            parents[j] = None
        elif parent in index:
            parents[j] = index[parent]
        elif isinstance(parent, str):
            reader.unknown(("joint", j, "parent"), "joint or base", parent, [BASE, *(other for other in index if other != name)])
    order: list[int] = []
    bodies: dict[str, str | None] = {BASE: None}
    for j in index.values():
        _place(reader, tables, parents, j, order)
    for j in order:
        table, up = tables[j], parents[j]
        name = table["name"]
        fixed = table.get("kind") == "fixed"
        bodies[name] = name if not fixed else (None if up is None else bodies[tables[up]["name"]])
    return order, bodies


def _place(reader: _Reader, tables: list[Any], parents: dict[int, int | None], j: int, order: list[int]) -> None:
    """Append j after its ancestors; a circle is reported once and left out."""
    chain: list[int] = []
    place: int | None = j
    while place is not None and place not in order:
        if place in chain:
            if place == min(chain[chain.index(place) :]):
                names = [tables[k]["name"] for k in reversed(chain[chain.index(place) :])]
                reader.add(("joint", place, "parent"), "on a way to the base", "a circle of " + " -> ".join([*names, names[0]]))
            return
        if place not in parents:
            return  # an unknown parent has its own finding
        chain.append(place)
        place = parents[place]
    order += reversed(chain)


def _check_masses(reader: _Reader, tables: list[Any], bodies: dict[str, str | None]) -> None:
    """Everything that moves has a mass."""
    loaded = {bodies.get(str(table.get("name"))) for table in tables if isinstance(table, dict) and table.get("body") is not None}
    for j, table in enumerate(tables):
        if isinstance(table, dict) and table.get("kind") != "fixed":
            name = table.get("name")
            if isinstance(name, str) and bodies.get(name) == name and name not in loaded:
                where = reader.document.where("joint", j)
                likely = f"Neither [joint.body] of {name} nor a body fixed to it is given."
                reader.impossible.append(Finding(where, "a joint that moves some mass", "none", likely))


def _frames(reader: _Reader, raw: object, joints: list[str]) -> list[Frame]:
    """Named frames with names used once, on joints that exist."""
    if raw is None:
        return []
    frames: list[Frame] = []
    names: set[str] = set()
    for k, table in enumerate(reader.tables("frame", raw)):
        path: KeyPath = ("frame", k)
        frame: Frame | None = reader.block(Frame, path, table)
        if frame is None:
            continue
        reader.findings += name_findings(reader.document.where(*path, "name"), frame.name)
        reader.pose(path, frame)
        if frame.joint != BASE and frame.joint not in joints:
            reader.unknown((*path, "joint"), "joint or base", frame.joint, [BASE, *joints])
        if frame.name in names:
            reader.add((*path, "name"), "a name used once", f'"{frame.name}" again')
        names.add(frame.name)
        frames.append(frame)
    if len(frames) > MAX_FRAMES:
        reader.add(("frame",), f"at most {MAX_FRAMES} frames", f"{len(frames)}")
    return frames
