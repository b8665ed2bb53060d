"""Unit suffixes of keys."""

import pytest

from rtctl.config.units import UNITS, stem_of, suffix_of, unit_of
from tests.structure.sources_of import TOP


@pytest.mark.parametrize(
    ("key", "unit"),
    [
        ("mass_kg", "kg"),
        ("speed_max_rad_s", "rad/s"),
        ("kd_nm_s_rad", "N m s/rad"),
        ("torque_rate_max_nm_s", "N m/s"),
        ("gravity_m_s2", "m/s^2"),
        ("period_ns", "ns"),
        ("kp_1_s2", "1/s^2"),
        ("joint_count", "(count)"),
    ],
)
def test_the_longest_suffix_counts(key: str, unit: str) -> None:
    """`_rad_s` is not `_s`: the longest known end of a key is its unit."""
    assert unit_of(key) == unit
    assert stem_of(key) + str(suffix_of(key)) == key


def test_keys_without_unit() -> None:
    """A key whose end is no unit has none; a bare unit is no key with a unit."""
    assert suffix_of("mass") is None and unit_of("mass") == "" and stem_of("mass") == "mass"
    assert suffix_of("mass_g") is None
    assert suffix_of("kg") is None


def test_the_developers_list_names_them() -> None:
    """The list for developers has every suffix."""
    text = (TOP / "DEVELOPERS.md").read_text()
    assert [suffix for suffix in UNITS if f"`{suffix}`" not in text] == []
