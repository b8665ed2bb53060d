"""Gain tables: both forms, and the text of every refusal."""

from typing import Any

import numpy as np
import pytest

from rtctl.errors import ConfigError
from rtctl.laws import load_law
from rtctl.laws.gains import middle_inertia
from tests.hand_arm import hand_arm
from tests.law_stand import PlanarArm
from tests.plants import chain_model, slider_model
from tests.sources import source

ROUNDING = 1e-12


def prepare(law: str, gains: dict[str, Any]) -> np.void:
    """Parameters for the planar arm."""
    return load_law(law).prepare(hand_arm(PlanarArm().model()), gains)


def refusal(law: str, gains: dict[str, Any]) -> list[str]:
    """Lines of the refusal."""
    with pytest.raises(ConfigError) as refused:
        prepare(law, gains)
    return str(refused.value).splitlines()


@source("routh", "double and triple pole: Kp = w^2, Kd = 2 w; Kp = 3 L^2, Kd = 3 L, Ki = L^3")
def test_natural_frequency_gives_the_textbook_gains() -> None:
    """Critical damping and the triple pole come out of the second form."""
    pd = prepare("computed_torque", {"natural_frequency_rad_s": 20.0, "damping_ratio": 1.0})
    assert (pd["Kp"][0], pd["Kd"][0], pd["Ki"][0]) == pytest.approx((400.0, 40.0, 0.0), rel=ROUNDING)
    form = {"natural_frequency_rad_s": 20.0, "damping_ratio": 1.0, "integral_rate_1_s": 20.0, "integral_max_rad_s2": 5.0}
    pid = prepare("computed_torque", form)
    assert (pid["Kp"][1], pid["Kd"][1], pid["Ki"][1]) == pytest.approx((1200.0, 60.0, 8000.0), rel=ROUNDING)
    assert pid["integral_max"][1] == 5.0


def test_third_pole_stands_where_it_was_asked() -> None:
    """The roots of s^3 + Kd s^2 + Kp s + Ki are -r and the pair of w and z."""
    w, z, r = 12.0, 0.6, 3.0
    form = {"natural_frequency_rad_s": w, "damping_ratio": z, "integral_rate_1_s": r, "integral_max_rad_s2": 5.0}
    p = prepare("computed_torque", form)
    roots = sorted(np.roots([1.0, p["Kd"][0], p["Kp"][0], p["Ki"][0]]), key=lambda root: (root.real, root.imag))
    pair = w * np.sqrt(1.0 - z * z)
    assert np.array(roots) == pytest.approx([-z * w - 1j * pair, -z * w + 1j * pair, -r], rel=1e-9)


@source("kelly2005", "ch. 5: data of the arm; M from its closed form")
def test_torque_gains_use_the_inertia_at_mid_range() -> None:
    """For laws that give torque, w and z are multiplied by the diagonal of M at the middle of the range, here q = 0.25."""
    diagonal = np.diag(PlanarArm().M(np.array([0.25, 0.25])))
    p = prepare("pd", {"natural_frequency_rad_s": [10.0, 20.0], "damping_ratio": 0.8})
    assert p["Kp"][:2] == pytest.approx(diagonal * [100.0, 400.0], rel=ROUNDING)
    assert p["Kd"][:2] == pytest.approx(diagonal * 2.0 * 0.8 * np.array([10.0, 20.0]), rel=ROUNDING)


def test_inertia_of_a_joint_without_limits_is_taken_at_zero() -> None:
    """A continuous joint has no middle: 0 stands for it. A slider's own inertia is its mass."""
    model = chain_model(2)
    free = hand_arm(model, q_min=np.full(2, -np.inf), q_max=np.full(2, np.inf))
    zero = hand_arm(model, q_min=np.full(2, -1.0), q_max=np.full(2, 1.0))
    assert np.array_equal(middle_inertia(free), middle_inertia(zero))
    assert middle_inertia(hand_arm(slider_model(3.0))) == pytest.approx([3.0], rel=ROUNDING)


def test_every_problem_of_a_table_is_reported_at_once() -> None:
    """Unknown, missing, wrong length and negative keys come in one refusal, each with its place."""
    assert refusal("pid", {"kp_nm": 3.0, "kp_nm_rad": [30.0], "kd_nm_s_rad": [7.0, -3.0], "ki_nm_rad_s": "much"}) == [
        "gains.pid.kp_nm: must be one of kp_nm_rad, kd_nm_s_rad, ki_nm_rad_s, natural_frequency_rad_s, damping_ratio, "
        "integral_rate_1_s, integral_max_nm, got an unknown key. The nearest is kp_nm_rad.",
        "gains.pid.kp_nm_rad: must be one number or a list of 2 numbers, one per joint, got a list of 1.",
        "gains.pid.kd_nm_s_rad[1]: must be a finite number >= 0 N m s/rad, got -3.0.",
        "gains.pid.ki_nm_rad_s: must be a finite number >= 0 N m/(rad s), or a list of 2 of them, got 'much'.",
        "gains.pid.integral_max_nm: must be given, >= 0 N m, got nothing.",
    ]


def test_gains_in_the_unit_of_another_law_are_refused() -> None:
    """Torque gains in the table of computed torque are unknown there."""
    assert refusal("computed_torque", {"kp_nm_rad": 30.0, "kd_1_s": 20.0}) == [
        "gains.computed_torque.kp_nm_rad: must be one of kp_1_s2, kd_1_s, ki_1_s3, natural_frequency_rad_s, damping_ratio, "
        "integral_rate_1_s, integral_max_rad_s2, got an unknown key.",
        "gains.computed_torque.kp_1_s2: must be given, >= 0 1/s^2, got nothing.",
    ]


def test_two_forms_are_never_mixed() -> None:
    """A gain beside a natural frequency leaves open which one counts."""
    assert refusal("pd", {"kp_nm_rad": 30.0, "natural_frequency_rad_s": 10.0, "damping_ratio": 1.0}) == [
        "gains.pd: must be in one form: kp_nm_rad, kd_nm_s_rad, or natural_frequency_rad_s, damping_ratio, got keys of both. "
        "Remove one of the two."
    ]


def test_zero_frequency_and_damping_are_refused() -> None:
    """The second form needs a motion that ends."""
    assert refusal("pd", {"natural_frequency_rad_s": 0.0, "damping_ratio": 0.0}) == [
        "gains.pd.natural_frequency_rad_s: must be a finite number > 0 rad/s, or a list of 2 of them, got 0.0.",
        "gains.pd.damping_ratio: must be a finite number > 0 (ratio), or a list of 2 of them, got 0.0.",
    ]


@source("routh", "Ki < Kp Kd")
def test_integral_gain_at_routh_s_bound_is_refused() -> None:
    """Ki = Kp Kd is the edge where the error swings for ever; a hair below it is taken."""
    gains = {"kp_1_s2": 100.0, "kd_1_s": 20.0, "integral_max_rad_s2": 5.0}
    prepare("computed_torque", {**gains, "ki_1_s3": 1999.999})
    assert refusal("computed_torque", {**gains, "ki_1_s3": [2000.0, 10.0]}) == [
        "gains.computed_torque: Ki of joint 1 (a): must be < Kp Kd = 2000 1/s^3 (Routh's bound), got 2000. "
        "At the bound the error swings without end, beyond it the swing grows. The triple pole has a ninth of the bound, 222."
    ]


@source("routh", "m s^3 + (Kd + viscous) s^2 + Kp s + Ki")
def test_integral_gain_of_a_torque_law_is_held_to_the_joint_alone() -> None:
    """One rod of 2 kg, 0.4 m about its end, m = 0.106667 kg m^2, Kp 30, Kd 7, no friction: Ki < 30 * 7 / m = 1968.75."""
    arm = hand_arm(chain_model(1, length_m=0.4, mass_kg=2.0))
    gains = {"kp_nm_rad": 30.0, "kd_nm_s_rad": 7.0, "integral_max_nm": 4.0}
    load_law("pid").prepare(arm, {**gains, "ki_nm_rad_s": 1968.0})
    with pytest.raises(ConfigError) as refused:
        load_law("pid").prepare(arm, {**gains, "ki_nm_rad_s": 1969.0})
    assert str(refused.value) == (
        "gains.pid: Ki of joint 1 (a): must be < Kp (Kd + viscous) / inertia of the joint = 1968.75 N m/(rad s) (Routh's bound), "
        "got 1969. At the bound the error swings without end, beyond it the swing grows. "
        "The triple pole has a ninth of the bound, 219."
    )


def test_an_integral_is_asked_for_completely() -> None:
    """Computed torque with a bound but no integral gain is refused, not silently PD."""
    assert refusal("computed_torque", {"kp_1_s2": 100.0, "kd_1_s": 20.0, "integral_max_rad_s2": 5.0}) == [
        "gains.computed_torque.ki_1_s3: must be given, >= 0 1/s^3, got nothing."
    ]


def test_feedforward_takes_no_gains() -> None:
    """A key in the table of a law without gains is a mistake."""
    assert refusal("feedforward", {"kp_nm_rad": 3.0}) == [
        "gains.feedforward.kp_nm_rad: must be absent (this law has no gains), got an unknown key."
    ]


def test_float_needs_its_damping() -> None:
    """There is no default damping."""
    assert refusal("float", {}) == ["gains.float.kd_nm_s_rad: must be given, >= 0 N m s/rad, got nothing."]
