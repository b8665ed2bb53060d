"""The arm: what the loop and the plain functions need to know of one, built once from a checked description and never changed.

`load_arm` reads a file, `arm_from_parts` takes the same content as Python dictionaries. Joints are numbered in the order of the
description, parents before children; fixed joints are lumped into the body that carries them.
"""

import hashlib
import json
from collections.abc import Mapping
from dataclasses import dataclass
from pathlib import Path
from typing import TYPE_CHECKING, Any

import numpy as np
import numpy.typing as npt

from rtctl.kernels.layout import MODEL, PRISMATIC, REVOLUTE

if TYPE_CHECKING:
    from rtctl.config.arm_file import ArmFile, Joint
    from rtctl.config.toml_file import Document

FloatArray = npt.NDArray[np.float64]

ARM_KEY_BYTES = 6  # so that the key stays below 2^53


@dataclass(frozen=True)
class RestPolicy:
    """What the driver does when nobody holds the grant."""

    damping: FloatArray  # (n,) N m s/rad or N s/m, while the arm moves
    moving_s: float  # the damping ends after this time even if the arm still moves
    still: str  # then: "brake", "gravity" or "zero"


@dataclass(frozen=True, eq=False)
class Arm:
    """An arm. Arrays are read-only; per joint SI: rad or m, N m or N."""

    name: str
    n: int
    joint_names: tuple[str, ...]
    units: tuple[str, ...]  # "rad" or "m" of each joint
    model: np.void  # MODEL, read-only
    q_min: FloatArray  # (n,), -inf for continuous joints
    q_max: FloatArray
    qd_max: FloatArray
    tau_max: FloatArray
    tau_rate_max: FloatArray
    frames: tuple[str, ...]  # the place in the tuple is the index in the model
    rest: RestPolicy
    key: int  # two arms whose joints or units differ have different keys
    hash: str  # SHA-256 of the description's content, hex
    path: str
    warnings: tuple[str, ...]

    def frame_index(self, name: str) -> int:
        """Index of a frame in the model. Raises ModelError, with the nearest name, when there is none."""
        if name not in self.frames:
            import difflib

            from rtctl.errors import Finding, ModelError

            near = difflib.get_close_matches(name, self.frames, 1)
            likely = f"The nearest is {near[0]}." if near else f"Known: {', '.join(self.frames) or 'none'}."
            raise ModelError.from_findings([Finding(self.name, "given the name of one of its frames", f'"{name}"', likely)])
        return self.frames.index(name)


def load_arm(path: Path | str, simulation_only: bool = False) -> Arm:
    """The arm of an arm file (TOML, see `rtctl.config.arm_file`).

    simulation_only   lets inertias that break the triangle inequality through, with a warning: some published data does

    Raises ConfigError or ModelError with everything that is wrong.
    """
    from rtctl.config.toml_file import read_toml

    return arm_from_document(read_toml(path), simulation_only)


def arm_from_parts(parts: Mapping[str, Any], simulation_only: bool = False, name: str = "arm") -> Arm:
    """The arm of a dictionary with the same content as an arm file; numpy numbers and tuples are taken as well.

    name   what messages call the dictionary

    Raises ConfigError or ModelError with everything that is wrong.
    """
    from rtctl.config.toml_file import Document

    plain = _plain(parts)
    return arm_from_document(Document(name, plain), simulation_only)


def _plain(value: Any) -> Any:
    """The same with dictionaries, lists and Python's own numbers only, as a TOML file gives them."""
    if isinstance(value, Mapping):
        return {str(key): _plain(entry) for key, entry in value.items()}
    if isinstance(value, np.ndarray | np.generic):
        return value.tolist()
    if isinstance(value, list | tuple):
        return [_plain(entry) for entry in value]
    return value


def arm_key(name: str, joint_names: tuple[str, ...], units: tuple[str, ...]) -> int:
    """The number in every message that keeps two arms apart (drivers/WIRE.md): the first 6 bytes of SHA-256 over lines of text.

    The lines are the arm's name, then `<joint> <unit>` of each moving joint.
    """
    lines = [name, *(f"{joint} {unit}" for joint, unit in zip(joint_names, units, strict=True))]
    return int.from_bytes(hashlib.sha256("\n".join(lines).encode()).digest()[:ARM_KEY_BYTES], "big")


def arm_from_document(document: "Document", simulation_only: bool = False) -> Arm:
    """The arm of a document already read. Raises ConfigError or ModelError with everything that is wrong."""
    from rtctl.config.arm_file import check_arm

    description = check_arm(document, simulation_only)
    moving = [joint for joint in description.joints if joint.moves]
    names = tuple(joint.keys.name for joint in moving)
    units = tuple("m" if joint.keys.kind == "prismatic" else "rad" for joint in moving)
    content = json.dumps(document.data, sort_keys=True, ensure_ascii=False, default=str)
    rest = RestPolicy(_kept(description.rest_damping), description.rest_moving_s, description.rest_still)
    return Arm(
        name=description.name,
        n=len(moving),
        joint_names=names,
        units=units,
        model=_model(description),
        q_min=_kept(joint.q_min for joint in moving),
        q_max=_kept(joint.q_max for joint in moving),
        qd_max=_kept(joint.qd_max for joint in moving),
        tau_max=_kept(joint.tau_max for joint in moving),
        tau_rate_max=_kept(joint.tau_rate_max for joint in moving),
        frames=tuple(frame.name for frame in description.frames),
        rest=rest,
        key=arm_key(description.name, names, units),
        hash=hashlib.sha256(content.encode()).hexdigest(),
        path=document.name,
        warnings=description.warnings,
    )


def _kept(values: Any) -> FloatArray:
    array = np.array(list(values), np.float64)
    array.flags.writeable = False
    return array


@dataclass(frozen=True)
class _Place:
    """Where a joint frame of the file is: on which body, and its pose in body coordinates (base coordinates for body -1)."""

    body: int
    R: FloatArray
    p: FloatArray


def _model(description: "ArmFile") -> np.void:
    """The MODEL block: body frames with z along the joint axes, fixed links and payload lumped."""
    from rtctl.config.arm_file import BASE
    from rtctl.config.inertia import rotation_xyz

    blocks = np.zeros(1, MODEL)
    model: np.void = blocks[0]
    model["gravity"] = description.gravity
    places = {BASE: _Place(-1, np.eye(3), np.zeros(3))}
    for joint in description.joints:
        places[joint.keys.name] = _add_joint(model, joint, places[joint.keys.parent])
    frames = {}
    model["frame_count"] = len(description.frames)
    for k, frame in enumerate(description.frames):
        joint_place = places[frame.joint]
        place = _Place(
            joint_place.body,
            joint_place.R @ rotation_xyz(frame.rotation_rad),
            joint_place.p + joint_place.R @ np.asarray(frame.origin_m, np.float64),
        )
        frames[frame.name] = place
        model["frame_body"][k], model["R_body_frame"][k], model["p_body_frame"][k] = place.body, place.R, place.p
    if description.payload is not None:
        _add_body(model, description.payload, frames[description.payload.frame])
    blocks.flags.writeable = False
    frozen: np.void = blocks[0]
    return frozen


def _add_joint(model: np.void, joint: "Joint", parent: _Place) -> _Place:
    """Place a joint frame, and give a moving joint its body."""
    from rtctl.config.inertia import rotation_xyz, rotation_z_to

    keys = joint.keys
    R = parent.R @ rotation_xyz(keys.rotation_rad)
    p = parent.p + parent.R @ np.asarray(keys.origin_m, np.float64)
    if not joint.moves:
        place = _Place(parent.body, R, p)
    else:
        R_joint_body = rotation_z_to(joint.axis)
        i = int(model["n"])
        model["n"] = i + 1
        model["parent"][i] = parent.body
        model["kind"][i] = PRISMATIC if keys.kind == "prismatic" else REVOLUTE
        model["R_parent"][i] = R @ R_joint_body
        model["p_parent"][i] = p
        model["rotor"][i] = joint.reflected
        model["viscous"][i] = joint.viscous
        model["coulomb"][i] = joint.coulomb
        model["friction_speed"][i] = joint.smoothing
        place = _Place(i, R_joint_body.T, np.zeros(3))
    if joint.body is not None:
        _add_body(model, joint.body, place)
    return place


def _add_body(model: np.void, block: Any, place: _Place) -> None:
    """Lump a Body or Payload into the body it is fixed to; what is fixed to the base changes nothing."""
    from rtctl.config.arm_file import centre_inertia
    from rtctl.config.inertia import shift

    if place.body < 0:
        return
    c = place.p + place.R @ np.asarray(block.center_of_mass_m, np.float64)
    inertia = place.R @ centre_inertia(block) @ place.R.T + shift(block.mass_kg, c)
    model["mass"][place.body] += block.mass_kg
    model["h"][place.body] += block.mass_kg * c
    model["I"][place.body] += inertia[np.triu_indices(3)]
