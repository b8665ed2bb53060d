"""A measured six-joint arm: the project's kernels against the explicit equations published for it, over random poses."""

import numpy as np
import pytest

from rtctl import dynamics
from rtctl.arm import Arm, arm_from_parts
from rtctl.errors import ModelError
from rtctl.vet import vet_loaded
from tests import arm6_closed_form as paper
from tests.arm_parts import arm_parts, joint
from tests.known_arms import arm6_1986
from tests.sources import source

ROUNDING = 1e-13  # of sums of some hundred products of numbers up to 40
PRINTED = 5e-8  # eight or nine digits of numbers up to 40
TWO_DIGITS = 1.02  # the largest deviations are given to two or three digits
ELLIPSIS = 5e-10  # half of the last printed digit
POSES = np.random.default_rng(1986).uniform(-np.pi, np.pi, (400, 6))
Q = (0.3, -0.6, 0.9, 0.5, -0.7, 1.1)
QD = (0.5, -0.4, 0.8, 1.0, -1.2, 0.6)
QDD = (1.0, 0.5, -1.5, 2.0, 0.7, -0.9)
DERIVED = paper.derived_constants(9.81)
# Largest deviation between link data and rounded constants over 20000 poses, computed, kg m^2 and N m; joints from 1.
# (1, 1) is that large for I1 and I3.
CONSTANT_ERROR = {(1, 1): 0.346, (1, 2): 3.8e-4, (2, 2): 1.41e-3, (2, 3): 8.8e-4, (3, 3): 7.5e-4}
GRAVITY_ERROR = {2: 0.0492, 3: 0.0143}


# ---- the paper as written down here ---------------------------------------------------------------------------------------------


@source("arm6_1986", "tables A2 and A3: constants, their tolerances, and how they follow from the link data")
def test_published_constants_follow_from_the_link_data() -> None:
    """26 of the 28 published constants lie within 1 % and inside their printed tolerance; I1 and I3 are known not to."""
    for name, tolerance in paper.TOLERANCES.items():
        assert abs(DERIVED[name] - paper.PUBLISHED[name]) < tolerance, name
        assert DERIVED[name] == pytest.approx(paper.PUBLISHED[name], rel=0.01), name
    assert set(paper.PUBLISHED) - set(paper.TOLERANCES) == {"I1", "I3"}
    assert DERIVED["I1"] == pytest.approx(1.55326, abs=5e-6) and DERIVED["I3"] == pytest.approx(1.60186, abs=5e-6)


@source("arm6_1986", "explicit model with the published constants; vectors computed from it")
def test_vectors_with_the_published_constants() -> None:
    """Inertia matrix and gravity vector of one pose with the constants as printed."""
    M = paper.inertia_matrix(paper.PUBLISHED, Q)
    assert np.diag(M) == pytest.approx([3.69968206, 7.36466951, 1.16193543, 0.201723833, 0.179642, 0.19304], rel=0, abs=PRINTED)
    beside = {
        (1, 2): -0.498823803,
        (1, 3): -0.12907973,
        (2, 3): 0.619802471,
        (1, 4): 7.3774888e-4,
        (1, 5): 2.2294028e-4,
        (1, 6): 3.59102097e-5,
        (2, 4): 7.33783566e-4,
        (2, 5): 1.59519259e-3,
        (2, 6): -1.23541765e-5,
        (3, 4): 4.33785441e-4,
        (3, 5): 1.43978784e-3,
        (3, 6): -1.23541765e-5,
        (4, 6): 3.05936875e-5,
        (4, 5): 0.0,
        (5, 6): 0.0,
    }
    for (i, j), value in beside.items():
        assert M[i - 1, j - 1] == pytest.approx(value, rel=0, abs=ELLIPSIS), (i, j)
    gravity = paper.gravity_vector(paper.PUBLISHED, Q)
    assert gravity == pytest.approx([0, -33.525875, -2.24745478, -0.00257389069, 0.0117618789, 0], rel=0, abs=PRINTED)


# ---- kernels against the explicit equations --------------------------------------------------------------------------------------


@source("arm6_1986", "explicit kinetic-energy matrix; constants derived from the link data")
def test_inertia_matrix_is_the_explicit_one() -> None:
    """All 36 elements in 400 random poses."""
    arm = arm6_1986()
    for q in POSES:
        assert dynamics.inertia_matrix(arm, q) == pytest.approx(paper.inertia_matrix(DERIVED, q), rel=0, abs=ROUNDING)


@source("arm6_1986", "explicit gravity vector; constants derived from the link data")
def test_gravity_torque_is_the_explicit_one() -> None:
    """All six torques in 400 random poses."""
    arm = arm6_1986()
    for q in POSES:
        assert dynamics.gravity_torque(arm, q) == pytest.approx(paper.gravity_vector(DERIVED, q), rel=0, abs=10 * ROUNDING)


@source("arm6_1986", "explicit Coriolis and centrifugal coefficients; constants derived from the link data")
def test_velocity_torques_are_the_explicit_ones() -> None:
    """Every printed coefficient, read from the kernel by turning one joint, or two, at 1 rad/s: c_jj, and b_jk of the product."""
    arm = arm6_1986()
    unit = np.eye(6)
    for q in POSES[:60]:
        gravity = dynamics.gravity_torque(arm, q)
        alone = [dynamics.bias_torque(arm, q, unit[j]) - gravity for j in range(6)]
        for (i, j, k), value in paper.velocity_coefficients(DERIVED, q).items():
            torque = alone[j - 1]
            if j != k:
                torque = dynamics.bias_torque(arm, q, unit[j - 1] + unit[k - 1]) - gravity - alone[j - 1] - alone[k - 1]
            assert torque[i - 1] == pytest.approx(value, rel=0, abs=100 * ROUNDING), (i, j, k)  # differences of numbers near 40


@source("arm6_1986", "explicit model, matrices and vectors at one pose")
def test_torques_of_a_motion_are_the_explicit_ones() -> None:
    """tau = A qdd + h + g with the explicit A and g, and h printed to eight digits at this pose."""
    h = [-0.075365137, -0.28604706, -0.12749012, -2.5497636e-5, -3.3420661e-4, -5.6331415e-5]
    tau = paper.inertia_matrix(DERIVED, Q) @ QDD + h + paper.gravity_vector(DERIVED, Q)
    assert dynamics.inverse_dynamics(arm6_1986(), Q, QD, QDD) == pytest.approx(tau, rel=0, abs=PRINTED)


@source("arm6_1986", "published constants; largest deviation of the link data from them over 20000 poses, computed")
def test_kernels_stay_within_the_error_of_the_published_constants() -> None:
    """The printed constants are rounded: the kernels on the link data deviate no more than these three digits allow."""
    arm = arm6_1986()
    dM, dg = np.zeros((6, 6)), np.zeros(6)
    for q in POSES:
        dM = np.maximum(dM, np.abs(dynamics.inertia_matrix(arm, q) - paper.inertia_matrix(paper.PUBLISHED, q)))
        dg = np.maximum(dg, np.abs(dynamics.gravity_torque(arm, q) - paper.gravity_vector(paper.PUBLISHED, q)))
    M_errors = {(1, 1): dM[0, 0], (1, 2): dM[0, 1], (2, 2): dM[1, 1], (2, 3): dM[1, 2], (3, 3): dM[2, 2]}
    for place, error in M_errors.items():
        assert error <= TWO_DIGITS * CONSTANT_ERROR[place], place
    assert dg[1] <= TWO_DIGITS * GRAVITY_ERROR[2] and dg[2] <= TWO_DIGITS * GRAVITY_ERROR[3]


@source("arm6_1986", "abbreviated model of 1 % significance; its largest deviation over 5000 poses, computed")
def test_kernels_agree_with_the_abbreviated_model() -> None:
    """The few terms that matter, as printed, give the kernels' numbers within both errors: abbreviation and rounded constants."""
    arm = arm6_1986()
    abbreviation = {(1, 1): 0.035, (1, 2): 0.0053, (1, 3): 0.0014, (2, 2): 0.029, (2, 3): 0.0038, (3, 3): 0.0026}
    constants = CONSTANT_ERROR | {(1, 3): CONSTANT_ERROR[1, 2]}  # the same terms and fewer
    for q in POSES:
        a, g = paper.abbreviated_model(q)
        M, gravity = dynamics.inertia_matrix(arm, q), dynamics.gravity_torque(arm, q)
        for (i, j), value in a.items():
            allowed = TWO_DIGITS * (abbreviation[i, j] + constants[i, j])
            assert abs(M[i - 1, j - 1] - value) <= allowed, (i, j)
        assert abs(gravity[1] - g[2]) <= TWO_DIGITS * (0.28 + GRAVITY_ERROR[2])
        assert abs(gravity[2] - g[3]) <= TWO_DIGITS * (0.068 + GRAVITY_ERROR[3])


@source("arm6_1986", "published constants: eigenvalues of the inertia matrix 0.1796 to 7.75 kg m^2 over 3000 poses, computed")
def test_eigenvalues_of_the_inertia_matrix() -> None:
    """The smallest is that of joint 5 alone; the largest may exceed the range by what I1 and I3 differ."""
    arm = arm6_1986()
    values = np.array([np.linalg.eigvalsh(dynamics.inertia_matrix(arm, q)) for q in POSES])
    assert values.min() == pytest.approx(0.1796, abs=5e-5)
    assert 7.0 < values.max() < 7.75 + CONSTANT_ERROR[1, 1]


# ---- as an arm description ------------------------------------------------------------------------------------------------------


def described(**link3: object) -> dict[str, object]:
    """The arm as an arm file would give it. Limits, friction, mass of link 1 and its moments about x and y are invented.

    Link 1 only turns about its vertical axis, so nothing but its published moment about z can have an effect.
    """
    half = np.pi / 2
    origins = ([0, 0, 0], [0, 0.2435, 0], [0.4318, 0, -0.0934], [-0.0203, -0.4331, 0], [0, 0, 0], [0, 0, 0])
    turns = ([0, 0, 0], [-half, 0, 0], [0, 0, 0], [half, 0, 0], [-half, 0, 0], [half, 0, 0])
    bodies = [
        {"mass_kg": 13.0, "center_of_mass_m": [0, 0, 0], "inertia_kgm2": [0.35, 0.35, 0.35, 0, 0, 0]},
        {"mass_kg": 17.40, "center_of_mass_m": [0.068, 0.006, -0.016], "inertia_kgm2": [0.130, 0.524, 0.539, 0, 0, 0]},
        {"mass_kg": 4.80, "center_of_mass_m": [0, -0.070, 0.014], "inertia_kgm2": [0.066, 0.0125, 0.086, 0, 0, 0]} | link3,
        {"mass_kg": 0.82, "center_of_mass_m": [0, 0, -0.019], "inertia_kgm2": [1.8e-3, 1.8e-3, 1.3e-3, 0, 0, 0]},
        {"mass_kg": 0.34, "center_of_mass_m": [0, 0, 0], "inertia_kgm2": [0.30e-3, 0.30e-3, 0.40e-3, 0, 0, 0]},
        {"mass_kg": 0.09, "center_of_mass_m": [0, 0, 0.032], "inertia_kgm2": [0.15e-3, 0.15e-3, 0.04e-3, 0, 0, 0]},
    ]
    tables = []
    for i, body in enumerate(bodies):
        place = {"origin_m": origins[i], "rotation_rad": turns[i], "axis": "z"}
        drive = {"reflected_inertia_kgm2": paper.IM[i]}
        whole = body | {"inertia_point": "center_of_mass"}
        tables.append(joint(f"joint_{i + 1}", f"joint_{i}" if i else "base", **place, drive=drive, body=whole))
    return arm_parts(*tables, gravity_m_s2=[0.0, 0.0, -9.81])


LINK3 = (
    "arm: joint[2].body.inertia_kgm2: must be such that no principal moment exceeds the sum of the other two, "
    "got principal moments 0.0125, 0.066, 0.086 kg m^2."
)


@source("arm6_1986", "link 3: 0.066 + 0.0125 < 0.086 kg m^2, so no body can have this inertia (triangle inequality)")
def test_a_published_link_that_no_body_can_be_is_refused() -> None:
    """Link 3 is refused as a description of hardware, and it alone: the other links pass the same check."""
    with pytest.raises(ModelError) as error:
        arm_from_parts(described())
    assert str(error.value) == (
        LINK3 + " No body has such an inertia; a moment is wrong, or it is about another point than inertia_point says."
    )
    assert [finding.where for finding in error.value.findings] == ["arm: joint[2].body.inertia_kgm2"]


@source("arm6_1986", "links 3 to 6 as one body: 0.192 + 0.0154 < 0.212 kg m^2")
def test_the_published_lumped_link_is_refused_too() -> None:
    """The alternative link 3 that carries the wrist breaks the same inequality."""
    lumped = {"mass_kg": 6.04, "center_of_mass_m": [0, -0.143, 0.014], "inertia_kgm2": [0.192, 0.0154, 0.212, 0, 0, 0]}
    with pytest.raises(ModelError, match="got principal moments 0.0154, 0.192, 0.212 kg m"):
        arm_from_parts(described(**lumped))


@source("arm6_1986", "all link data; link 3 breaks the triangle inequality by 0.0075 kg m^2")
def test_the_published_arm_is_welcome_for_simulation() -> None:
    """With `simulation_only` the arm loads, one warning names link 3, vetting warns, and the numbers are the paper's."""
    arm: Arm = arm_from_parts(described(), simulation_only=True)
    assert arm.warnings == (LINK3 + " No body has it. Accepted for simulation only.",)
    assert vet_loaded(arm).verdict == "warn"
    for q in POSES[:20]:
        assert dynamics.inertia_matrix(arm, q) == pytest.approx(paper.inertia_matrix(DERIVED, q), rel=0, abs=ROUNDING)
        assert dynamics.gravity_torque(arm, q) == pytest.approx(paper.gravity_vector(DERIVED, q), rel=0, abs=10 * ROUNDING)


def test_the_same_arm_with_a_link_that_can_be_needs_no_permission() -> None:
    """The least that makes link 3 possible, 0.0075 kg m^2 more about x, lets the description through without a warning."""
    assert arm_from_parts(described(inertia_kgm2=[0.066 + 0.0075, 0.0125, 0.086, 0, 0, 0])).warnings == ()
