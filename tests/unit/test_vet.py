"""Vetting: what a description is warned about or refused for, and the numbers behind it. Invented data."""

import json
import math
from pathlib import Path
from typing import Any

import numpy as np
import pytest

from rtctl.arm import arm_from_parts
from rtctl.errors import ConfigError
from rtctl.vet import Table, VetResult, centre_moments, least_density, vet_arm, vet_loaded
from tests.arm_parts import arm_parts, joint
from tests.sources import source
from tests.structure.sources_of import TOP

GRAVITY = 9.80665  # m/s^2
BODY = joint("any")["body"]
LIMITS = joint("any")["limits"]


def vet(*joints: dict[str, Any], **values: Any) -> VetResult:
    return vet_loaded(arm_from_parts(arm_parts(*joints, **values)))


def texts(result: VetResult) -> list[str]:
    return [f"{finding.severity}: {finding}" for finding in result.findings]


def table(result: VetResult, name: str) -> Table:
    return next(table for table in result.tables if table.name == name)


def test_nothing_found() -> None:
    """An ordinary arm passes, with tables of its numbers."""
    result = vet()
    assert (result.verdict, result.findings, result.arm_name) == ("pass", (), "tester")
    assert [table.name for table in result.tables] == ["bodies", "drives", "holding torque", "inertia matrix"]
    for part in result.tables:
        assert part.rows and all(len(row) == len(part.columns) for row in part.rows)


@pytest.mark.parametrize("path", sorted((TOP / "configs/arms").glob("*.toml")), ids=lambda path: path.stem)
def test_shipped_arms_pass(path: Path) -> None:
    """Every shipped arm passes, a poor model too: it may well be a possible arm. The toy of the driver templates has no drive."""
    assert vet_arm(path).verdict == ("warn" if path.stem == "toy" else "pass")


@source("textbook mechanics", "balance of moments of two level links")
def test_worst_holding_torque() -> None:
    """The worst pose of two links is level and stretched: the shoulder then holds both weights at their full distance."""
    result = vet()
    rows = table(result, "holding torque").rows
    shoulder, elbow = 2.0 * GRAVITY * 0.1 + 2.0 * GRAVITY * 0.4, 2.0 * GRAVITY * 0.1
    # both lie within the limits, at q = 0; the search tries 13 positions per joint, 0 among them, and finds it exactly
    assert [row[0] for row in rows] == ["shoulder", "elbow"]
    assert rows[0][1:4] == pytest.approx((shoulder, 60.0, shoulder / 60.0), rel=1e-12)
    assert rows[1][1] == pytest.approx(elbow, rel=1e-4)
    assert rows[0][4:] == pytest.approx((0.0, 0.0), abs=1e-12)


def test_weak_joint() -> None:
    """Over 70 % of the torque limit for holding alone is a warning, over 100 % a refusal; the pose and the share are named."""
    worst = 2.0 * GRAVITY * 0.5
    result = vet(joint("shoulder", limits=LIMITS | {"torque_max_nm": worst / 0.8}), joint("elbow", "shoulder"))
    assert result.verdict == "warn"
    assert texts(result) == [
        f"warn: arm: joint 1 (shoulder): torque to hold the arm: must be at most 70% of the limit of {worst / 0.8:g} N m, "
        f"got {worst:.4g} N m (80%) at [0.0, 0.0]. Little is left for motion. "
        "Check masses, centres of mass, payload and the torque limit, or narrow the position limits."
    ]
    result = vet(joint("shoulder", limits=LIMITS | {"torque_max_nm": worst / 1.25}), joint("elbow", "shoulder"))
    assert result.verdict == "refuse"
    assert texts(result) == [
        f"refuse: arm: joint 1 (shoulder): torque to hold the arm: must be at most 100% of the limit of {worst / 1.25:g} N m, "
        f"got {worst:.4g} N m (125%) at [0.0, 0.0]. The joint cannot hold the arm. "
        "Check masses, centres of mass, payload and the torque limit, or narrow the position limits."
    ]


def test_missing_rotor_and_friction() -> None:
    """Zero rotor inertia or friction was probably not known, and is said."""
    friction = {"viscous_nm_s_rad": 0.0, "coulomb_nm": 0.0, "smoothing_rad_s": 0.02}
    assert texts(vet(joint("a", drive={"reflected_inertia_kgm2": 0.0}, friction=friction))) == [
        "warn: arm: joint 1 (a): rotor inertia: must be > 0 kg m^2, got 0. It was probably not known; behind a gear it is often "
        "more than the inertia of the links. Take it from the drive's data sheet, times the square of the gear ratio.",
        "warn: arm: joint 1 (a): friction: must be > 0 for a geared joint, got 0. It was probably not known. Measure it.",
    ]


@pytest.mark.parametrize(
    ("gravity", "text"),
    [
        ([0.0, 0.0, -9.81], None),
        ([6.0, 0.0, -7.757], None),  # a tilted base
        ([0.0, 0.0, -0.00981], "0.00981 m/s^2. No place on earth has it."),
        ([0.0, 0.0, 0.0], "0. Without gravity in the model the arm falls when it is held by it."),
    ],
)
@source("common practice")
def test_size_of_gravity(gravity: list[float], text: str | None) -> None:
    """Gravity is as large as on earth whatever its direction; zero and other units are warned about."""
    expected = [] if text is None else [f"warn: arm: gravity_m_s2: must be 9.76 to 9.84 m/s^2 long, got {text}"]
    assert texts(vet(gravity_m_s2=gravity)) == expected


@source("wgs84", "normal gravity at 0, 30, 45, 50, 60 and 90 degrees of latitude")
@pytest.mark.parametrize("g", [9.7803253359, 9.7932472692, 9.8061977694, 9.8107021356, 9.8191769531, 9.8321849378])
def test_gravity_of_every_latitude_passes(g: float) -> None:
    """From the equator to the poles no place is warned about, nor a mountain of 5 km (3.086e-6 1/s^2 of height)."""
    for height_m in (0.0, 5000.0):
        assert texts(vet(gravity_m_s2=[0.0, 0.0, -(g - 3.086e-6 * height_m)])) == []


@source("textbook mechanics", "solid sphere: 2 m r^2 / 5; solid ellipsoid: m (b^2 + c^2) / 5")
def test_density() -> None:
    """The density of a solid sphere and of a solid ellipsoid is found from mass and inertia."""
    m, r = 3.0, 0.1
    assert least_density(m, np.full(3, 0.4 * m * r**2)) == pytest.approx(m / (4 / 3 * math.pi * r**3), rel=1e-12)
    a, b, c = 0.1, 0.2, 0.35
    moments = m / 5 * np.array([b**2 + c**2, a**2 + c**2, a**2 + b**2])
    assert least_density(m, moments) == pytest.approx(m / (4 / 3 * math.pi * a * b * c), rel=1e-12)
    assert least_density(m, np.array([1.0, 1.0, 2.0])) == math.inf


def test_bodies_that_are_no_matter() -> None:
    """Inertia a thousand times too small is denser than any metal, a thousand times too large lighter than foam.

    By hand for 2 kg and (1, 2, 2) 1e-5 kg m^2: second moments (1.5, 0.5, 0.5) 1e-5, squares of the semi-axes
    (3.75, 1.25, 1.25) 1e-5 m^2, volume 4/3 pi 7.655e-8 = 3.206e-7 m^3. A factor of 1e6 in the inertia is one of 1e9 in the volume.
    """
    dense = vet(joint("a", body=BODY | {"inertia_kgm2": [1e-5, 2e-5, 2e-5, 0.0, 0.0, 0.0]}))
    assert texts(dense) == [
        "warn: arm: joint 1 (a): body: must be no denser than any metal, 22600 kg/m^3, got 6.24e+06 kg/m^3 at least. "
        "The inertia is too small for the mass; its unit or its decimal point is probably wrong."
    ]
    light = vet(joint("a", body=BODY | {"inertia_kgm2": [10.0, 20.0, 20.0, 0.0, 0.0, 0.0]}))
    assert texts(light) == [
        "warn: arm: joint 1 (a): body: must be no lighter than foam, 5 kg/m^3, got 0.00624 kg/m^3 on average. "
        "The inertia is too large for the mass; it may be about another point than inertia_point says."
    ]


def test_limits_in_other_units() -> None:
    """A speed limit in degrees per second and a torque rate too slow for braking are warned about."""
    slow = LIMITS | {"speed_max_rad_s": 180.0, "torque_rate_max_nm_s": 60.0}
    assert texts(vet(joint("a", limits=slow))) == [
        "warn: arm: joint 1 (a): speed limit: must be at most 20 rad/s, got 180. It looks like degrees; 180 deg/s are 3.14 rad/s.",
        "warn: arm: joint 1 (a): torque rate limit: must be high enough to reach the torque limit within 0.2 s, got 1 s. "
        "The arm could not be braked.",
    ]


def test_rest_policy_without_torque() -> None:
    """No torque at rest is no policy for a joint that gravity moves; on a vertical axis it is."""
    rest = {"damping_nm_s_rad": 1.0, "moving_s": 0.5, "still": "zero"}
    assert texts(vet(joint("a"), rest=rest)) == [
        'warn: arm: joint 1 (a): rest policy: must be "brake" or "gravity" for a joint that gravity moves, '
        'got "zero" with 1.961 N m of gravity and 0.4 N m of friction. The arm falls whenever nobody controls it.'
    ]
    assert texts(vet(joint("a", axis="z"), rest=rest)) == []


def test_body_without_inertia_about_its_axis() -> None:
    """Without a rotor, a thin rod turning about itself leaves the inertia matrix nearly singular beside a heavy arm."""
    thin = BODY | {"inertia_kgm2": [1e-9, 0.02, 0.02, 0.0, 0.0, 0.0], "center_of_mass_m": [0.2, 0.0, 0.0]}
    parts = [
        joint("a", axis="y", drive={"reflected_inertia_kgm2": 0.0}, body=None),
        joint("b", "a", axis="y", drive={"reflected_inertia_kgm2": 0.0}, body=thin, origin_m=[1e-4, 0.0, 0.0]),
    ]
    parts[0]["body"] = BODY | {
        "mass_kg": 1e-6,
        "inertia_kgm2": [1e-12, 1e-12, 1e-12, 0.0, 0.0, 0.0],
        "center_of_mass_m": [0.0, 0.0, 0.0],
    }
    messages = [text for text in texts(vet(*parts)) if "inertia matrix" in text]
    assert len(messages) == 1
    assert messages[0].startswith(
        "warn: arm: inertia matrix: must be of a condition of at most 100000 when scaled to a unit diagonal, got "
    )


def test_moments_about_the_centre() -> None:
    """The moments of a lumped body are those about its own centre of mass, whatever the axes."""
    arm = arm_from_parts(arm_parts(joint("a", axis_ratio=[1.0, 2.0, 3.0]) | {"axis": None}))
    assert centre_moments(arm.model, 0) == pytest.approx([0.01, 0.02, 0.02], rel=1e-12)


def test_impossible_description_is_a_verdict(tmp_path: Path) -> None:
    """A description no arm can have is refused as a result; a file that cannot be read is bad input."""
    text = (TOP / "configs/arms/one_joint.toml").read_text()
    file = tmp_path / "arm.toml"
    file.write_text(text.replace("[0.0329, 0.0329, 0.00023,", "[0.0329, 0.0029, 0.00023,"))
    result = vet_arm(file)
    assert result.verdict == "refuse" and result.tables == ()
    assert texts(result) == [
        f"refuse: {file}:19: joint[0].body.inertia_kgm2: must be such that no principal moment exceeds the sum of the other two, "
        "got principal moments 0.00023, 0.0029, 0.0329 kg m^2. No body has such an inertia; a moment is wrong, or it is about "
        "another point than inertia_point says."
    ]
    simulated = vet_arm(file, simulation_only=True)
    assert simulated.verdict == "warn" and simulated.findings[0].got == "data for simulation only"
    with pytest.raises(ConfigError):
        vet_arm(tmp_path / "none.toml")


def test_json() -> None:
    """The result is one plain object that JSON can hold."""
    data = vet(gravity_m_s2=[0.0, 0.0, 0.0]).to_json()
    assert json.loads(json.dumps(data)) == json.loads(json.dumps(data)) and data["verdict"] == "warn"
    assert data["findings"][0]["where"] == "arm: gravity_m_s2"
    assert data["tables"][0]["columns"][1] == "mass [kg]"


def test_same_result_every_time() -> None:
    """The poses are drawn from a fixed seed."""
    assert vet() == vet()
