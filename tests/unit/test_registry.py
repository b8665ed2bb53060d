"""Laws by name."""

from pathlib import Path

import pytest

import rtctl.laws
from rtctl.blocks import MAX_TERMS
from rtctl.errors import ConfigError
from rtctl.laws import law_names, load_law


def test_every_law_file_is_listed_under_its_own_name() -> None:
    """The files of the folder that hold a law and the names offered are the same, and each law carries its name and terms."""
    folder = Path(rtctl.laws.__file__).parent
    files = {path.stem for path in folder.glob("*.py") if "\nNAME = " in path.read_text()}
    assert files == {name if name != "float" else "float_law" for name in law_names()}
    for name in law_names():
        law = load_law(name)
        assert law.name == name
        assert 1 <= len(law.terms) <= MAX_TERMS
        assert len(set(law.terms)) == len(law.terms)


def test_a_law_is_loaded_once() -> None:
    """Two loads give the same object, so that its address stays valid."""
    assert load_law("pd") is load_law("pd")


def test_an_unknown_law_is_refused_with_the_nearest_name() -> None:
    """The message lists the laws and the likely one."""
    with pytest.raises(ConfigError) as refused:
        load_law("computed_torqe")
    assert str(refused.value) == (
        "law: must be one of float, feedforward, pd, pid, pd_gravity, feedforward_pd, computed_torque, got 'computed_torqe'. "
        "The nearest is computed_torque."
    )
