"""Is this arm description fit for torque control? Everything that can be judged from numbers alone, before the first torque.

The loader has refused what no arm can be. Here the description is looked at with a technician's eye: bodies that are lighter or
denser than matter, rotor inertia or friction that was forgotten, gravity of the wrong size, torques that cannot hold the arm, an
inertia matrix that cannot be trusted. A pass means nothing was found; only measurements on the arm show that the numbers are right.
"""

import math
from dataclasses import asdict, dataclass
from pathlib import Path
from typing import Any

import numpy as np
import numpy.typing as npt

from rtctl.arm import Arm, load_arm
from rtctl.dynamics import gravity_torque, inertia_matrix
from rtctl.errors import Finding, ModelError
from rtctl.kernels.layout import PRISMATIC

FloatArray = npt.NDArray[np.float64]

POSE_COUNT = 400  # random poses within the limits
CLIMB_ROUNDS = 3  # passes over all joints when the worst pose for a joint is sought from the best random one
CLIMB_STEPS = 13  # positions tried per joint and pass
SEED = 1

HOLD_WARN_RATIO = 0.7  # of the torque limit, for holding the arm still; common practice, no source
HOLD_REFUSE_RATIO = 1.0
CONDITION_MAX = 1e5  # of M scaled to a unit diagonal: beyond, its inverse loses 5 of 16 digits and a mass is probably wrong
EARTH_GRAVITY_M_S2 = (9.76, 9.84)  # on the ground from the equator to the poles
DENSITY_MAX_KG_M3 = 22_600.0  # osmium, the densest metal
DENSITY_MIN_KG_M3 = 5.0  # below stiff foam
SPEED_MAX_RAD_S = 20.0  # a faster arm joint is degrees per second
RISE_TIME_MAX_S = 0.2  # from no torque to the limit: slower cannot brake


@dataclass(frozen=True)
class Table:
    """Numbers behind the findings; headings carry the unit."""

    name: str
    columns: tuple[str, ...]
    rows: tuple[tuple[Any, ...], ...]


@dataclass(frozen=True)
class VetResult:
    """What was found. `verdict` is the worst severity: pass, warn or refuse."""

    path: str
    arm_name: str
    arm_hash: str
    findings: tuple[Finding, ...]
    tables: tuple[Table, ...]

    @property
    def verdict(self) -> str:
        """pass: nothing found; warn: look at it before the first torque; refuse: not with this description."""
        severities = {finding.severity for finding in self.findings}
        return "refuse" if "refuse" in severities else "warn" if "warn" in severities else "pass"

    def to_json(self) -> dict[str, Any]:
        """One plain object with everything."""
        return {
            "verdict": self.verdict,
            "path": self.path,
            "arm": self.arm_name,
            "arm_hash": self.arm_hash,
            "findings": [asdict(finding) for finding in self.findings],
            "tables": [asdict(table) for table in self.tables],
        }


def vet_arm(path: Path | str, simulation_only: bool = False) -> VetResult:
    """Check an arm file. What is physically impossible is a finding; a file that cannot be read at all raises ConfigError."""
    try:
        arm = load_arm(path, simulation_only)
    except ModelError as error:
        return VetResult(str(path), "", "", error.findings, ())
    return vet_loaded(arm)


def vet_loaded(arm: Arm) -> VetResult:
    """The same for an arm already loaded."""
    vet = _Vet(arm)
    tables = (vet.bodies(), vet.drives(), vet.holding(), vet.inertia())
    vet.world()
    order = {"refuse": 0, "warn": 1}
    findings = sorted(vet.findings, key=lambda finding: order[finding.severity])
    return VetResult(arm.path, arm.name, arm.hash, tuple(findings), tables)


class _Vet:
    """One arm under examination."""

    def __init__(self, arm: Arm) -> None:
        self.arm = arm
        self.findings: list[Finding] = [
            Finding(arm.path, "fit for control", "data for simulation only", warning, severity="warn") for warning in arm.warnings
        ]
        self.low = np.where(np.isfinite(arm.q_min), arm.q_min, -math.pi)
        self.high = np.where(np.isfinite(arm.q_max), arm.q_max, math.pi)
        rng = np.random.default_rng(SEED)
        middle = 0.5 * (self.low + self.high)
        self.poses = np.vstack([middle, rng.uniform(self.low, self.high, (POSE_COUNT, arm.n))])

    def where(self, i: int, what: str) -> str:
        """A joint's number from 1, its name and the quantity."""
        return f"{self.arm.path}: joint {i + 1} ({self.arm.joint_names[i]}): {what}"

    def warn(self, where: str, expected: str, got: str, likely: str = "", next_step: str = "") -> None:
        """Something to look at."""
        self.findings.append(Finding(where, expected, got, likely, next_step, "warn"))

    def is_sliding(self, i: int) -> bool:
        """A prismatic joint."""
        return bool(self.arm.model["kind"][i] == PRISMATIC)

    # ---- parts -----------------------------------------------------------------------------------------------------------------

    def bodies(self) -> Table:
        """Mass, extent and density of each moving body, fixed links and payload lumped in."""
        rows = []
        for i in range(self.arm.n):
            mass = float(self.arm.model["mass"][i])
            c = self.arm.model["h"][i] / mass
            moments = centre_moments(self.arm.model, i)
            gyration = np.sqrt(np.maximum(moments, 0.0) / mass)
            density = least_density(mass, moments)
            if not density <= DENSITY_MAX_KG_M3:
                self.warn(
                    self.where(i, "body"),
                    f"no denser than any metal, {DENSITY_MAX_KG_M3:g} kg/m^3",
                    f"{density:.3g} kg/m^3 at least",
                    "The inertia is too small for the mass; its unit or its decimal point is probably wrong.",
                )
            elif not density >= DENSITY_MIN_KG_M3:
                self.warn(
                    self.where(i, "body"),
                    f"no lighter than foam, {DENSITY_MIN_KG_M3:g} kg/m^3",
                    f"{density:.3g} kg/m^3 on average",
                    "The inertia is too large for the mass; it may be about another point than inertia_point says.",
                )
            rows.append((self.arm.joint_names[i], mass, float(np.linalg.norm(c)), *(float(r) for r in gyration), density))
        columns = (
            "joint",
            "mass [kg]",
            "centre from origin [m]",
            *(f"gyration radius {k} [m]" for k in (1, 2, 3)),
            "density [kg/m^3]",
        )
        return Table("bodies", columns, tuple(rows))

    def drives(self) -> Table:
        """Rotor inertia against the load, friction, speed and torque rate."""
        arm, model = self.arm, self.arm.model
        M = inertia_matrix(arm, self.poses[0])
        rows = []
        for i in range(arm.n):
            sliding = self.is_sliding(i)
            rotor, own = float(model["rotor"][i]), float(M[i, i])
            if rotor == 0.0:
                self.warn(
                    self.where(i, "rotor inertia"),
                    "> 0 " + ("kg" if sliding else "kg m^2"),
                    "0",
                    "It was probably not known; behind a gear it is often more than the inertia of the links.",
                    "Take it from the drive's data sheet, times the square of the gear ratio.",
                )
            if model["viscous"][i] == 0.0 and model["coulomb"][i] == 0.0:
                self.warn(self.where(i, "friction"), "> 0 for a geared joint", "0", "It was probably not known.", "Measure it.")
            if not sliding and not arm.qd_max[i] <= SPEED_MAX_RAD_S:
                degrees = f"It looks like degrees; {arm.qd_max[i]:g} deg/s are {math.radians(arm.qd_max[i]):.3g} rad/s."
                self.warn(self.where(i, "speed limit"), f"at most {SPEED_MAX_RAD_S:g} rad/s", f"{arm.qd_max[i]:g}", degrees)
            rise_s = float(arm.tau_max[i] / arm.tau_rate_max[i])
            if not rise_s <= RISE_TIME_MAX_S:
                self.warn(
                    self.where(i, "torque rate limit"),
                    f"high enough to reach the torque limit within {RISE_TIME_MAX_S:g} s",
                    f"{rise_s:.3g} s",
                    "The arm could not be braked.",
                )
            rows.append(
                (arm.joint_names[i], rotor, own, rotor / own, float(model["coulomb"][i]), float(model["viscous"][i]), rise_s)
            )
        columns = (
            "joint",
            "rotor inertia [kg m^2|kg]",
            "own inertia, middle pose [kg m^2|kg]",
            "rotor share [1]",
            "Coulomb friction [N m|N]",
            "viscous friction [N m s/rad|N s/m]",
            "rise to torque limit [s]",
        )
        return Table("drives", columns, tuple(rows))

    def holding(self) -> Table:
        """The worst torque that gravity alone asks of each joint, against its limit."""
        arm = self.arm
        torques = np.array([gravity_torque(arm, q) for q in self.poses])
        rows = []
        for i in range(arm.n):
            worst, q = self.worst_pose(i, self.poses[int(np.argmax(np.abs(torques[:, i])))])
            unit = "N" if self.is_sliding(i) else "N m"
            ratio = worst / float(arm.tau_max[i])
            if not ratio <= HOLD_WARN_RATIO:
                refuse = not ratio <= HOLD_REFUSE_RATIO
                self.findings.append(
                    Finding(
                        self.where(i, "torque to hold the arm"),
                        f"at most {HOLD_REFUSE_RATIO if refuse else HOLD_WARN_RATIO:.0%} of the limit of {arm.tau_max[i]:g} {unit}",
                        f"{worst:.4g} {unit} ({ratio:.0%}) at {np.round(q, 2).tolist()}",
                        "The joint cannot hold the arm." if refuse else "Little is left for motion.",
                        "Check masses, centres of mass, payload and the torque limit, or narrow the position limits.",
                        "refuse" if refuse else "warn",
                    )
                )
            friction = float(arm.model["coulomb"][i])
            if arm.rest.still == "zero" and worst > friction:
                self.warn(
                    self.where(i, "rest policy"),
                    '"brake" or "gravity" for a joint that gravity moves',
                    f'"zero" with {worst:.4g} {unit} of gravity and {friction:.4g} {unit} of friction',
                    "The arm falls whenever nobody controls it.",
                )
            rows.append((arm.joint_names[i], worst, float(arm.tau_max[i]), ratio, *(float(x) for x in q)))
        columns = ("joint", "worst [N m|N]", "limit [N m|N]", "share [1]", *(f"at {name} [rad|m]" for name in arm.joint_names))
        return Table("holding torque", columns, tuple(rows))

    def worst_pose(self, i: int, q: FloatArray) -> tuple[float, FloatArray]:
        """Largest |g_i| near a pose, joint by joint over the whole range: (torque, pose)."""
        best = q.copy()
        value = abs(float(gravity_torque(self.arm, best)[i]))
        for _ in range(CLIMB_ROUNDS):
            for j in range(self.arm.n):
                for position in np.linspace(self.low[j], self.high[j], CLIMB_STEPS):
                    trial = best.copy()
                    trial[j] = position
                    torque = abs(float(gravity_torque(self.arm, trial)[i]))
                    if torque > value:
                        value, best = torque, trial
        return value, best

    def inertia(self) -> Table:
        """Is M(q) positive definite everywhere, and how far from singular?"""
        least, most_condition = math.inf, 0.0
        for q in self.poses:
            M = inertia_matrix(self.arm, q)
            scale = np.sqrt(np.abs(np.diag(M)))
            eigenvalues = np.linalg.eigvalsh(M / np.outer(scale, scale)) if np.all(scale > 0.0) else np.zeros(1)
            if not eigenvalues[0] > 0.0:
                self.findings.append(
                    Finding(
                        f"{self.arm.path}: inertia matrix",
                        "positive definite in every pose",
                        f"a least eigenvalue of {eigenvalues[0]:.3g} (scaled) at {np.round(q, 2).tolist()}",
                        "A body behind the joint has almost no inertia about its axis.",
                        "Check inertias and rotor inertias.",
                    )
                )
                return Table("inertia matrix", ("quantity", "value"), (("least eigenvalue, scaled [1]", float(eigenvalues[0])),))
            least = min(least, float(eigenvalues[0]))
            most_condition = max(most_condition, float(eigenvalues[-1] / eigenvalues[0]))
        if not most_condition <= CONDITION_MAX:
            self.warn(
                f"{self.arm.path}: inertia matrix",
                f"of a condition of at most {CONDITION_MAX:g} when scaled to a unit diagonal",
                f"{most_condition:.3g}",
                "Two joints hardly differ for the inertia: a body between them is too light, or rotor inertia is missing.",
            )
        rows = (
            ("poses looked at", len(self.poses)),
            ("least eigenvalue, scaled [1]", least),
            ("largest condition, scaled [1]", most_condition),
        )
        return Table("inertia matrix", ("quantity", "value"), rows)

    def world(self) -> None:
        """Gravity as on earth."""
        size = float(np.linalg.norm(self.arm.model["gravity"]))
        where = f"{self.arm.path}: gravity_m_s2"
        low, high = EARTH_GRAVITY_M_S2
        if size == 0.0:
            self.warn(
                where, f"{low} to {high} m/s^2 long", "0", "Without gravity in the model the arm falls when it is held by it."
            )
        elif not low <= size <= high:
            self.warn(where, f"{low} to {high} m/s^2 long", f"{size:.5g} m/s^2", "No place on earth has it.")


def centre_moments(model: np.void, i: int) -> FloatArray:
    """Principal moments (3,) of body i about its centre of mass, kg m^2, rising."""
    mass = float(model["mass"][i])
    c = model["h"][i] / mass
    I = np.zeros((3, 3))  # noqa: E741  # the symbol of the trade
    I[np.triu_indices(3)] = model["I"][i]
    I = I + np.triu(I, 1).T  # noqa: E741  # the same
    moments: FloatArray = np.linalg.eigvalsh(I - mass * (c @ c * np.eye(3) - np.outer(c, c)))
    return moments


def least_density(mass_kg: float, moments: FloatArray) -> float:
    """Density, kg/m^3, of the solid ellipsoid with these principal moments; no body with them is less dense everywhere.

    Semi-axes a with m a_k^2 / 5 = (sum of moments) / 2 - moment_k, the second moments of mass. Of all bodies with a bound on their
    density the ellipsoid has the least of them. Infinite for a flat body.
    """
    second = 0.5 * moments.sum() - moments  # kg m^2, of mass along the principal axes
    semi_axes = np.sqrt(np.maximum(5.0 * second / mass_kg, 0.0))
    volume = 4.0 / 3.0 * math.pi * float(np.prod(semi_axes))
    return mass_kg / volume if volume > 0.0 else math.inf
