"""Shipped files and drivers are found in a checkout and in an installed wheel, and their absence is said."""

import subprocess
import sys
from pathlib import Path

import pytest

from rtctl import places
from rtctl.errors import ConfigError, SetupError


def test_demo_run_is_found_in_a_checkout() -> None:
    """The demo's run file is the one beside the package."""
    assert places.shipped_file(places.DEMO_RUN) == places.CHECKOUT / "configs" / places.DEMO_RUN


def test_missing_shipped_file_is_said() -> None:
    """A name that is not shipped gives the whole sentence."""
    with pytest.raises(ConfigError) as caught:
        places.shipped_file("runs/none.toml")
    assert str(caught.value) == "configs/runs/none.toml: must be a file shipped with rtctl, got none. Install rtctl again."


def test_checkout_drivers_start_without_installation() -> None:
    """The command of a driver in a checkout carries the checkout on the child's module path."""
    command, environment = places.driver_command("sim_arm")
    assert command == [sys.executable, "-m", "drivers.sim_arm"]
    assert environment["PYTHONPATH"].split(":")[0] == str(places.CHECKOUT)


def test_installed_drivers_have_their_own_package(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    """Away from a checkout, drivers and demo files are looked up as packages."""
    (tmp_path / "rtctl_drivers").mkdir()
    (tmp_path / "rtctl_configs/runs").mkdir(parents=True)
    (tmp_path / "rtctl_configs/runs/demo.toml").write_text("")
    monkeypatch.setattr(places, "CHECKOUT", tmp_path)
    monkeypatch.syspath_prepend(str(tmp_path))
    assert places.driver_command("sim_arm")[0] == [sys.executable, "-m", "rtctl_drivers.sim_arm"]
    assert places.shipped_file(places.DEMO_RUN) == tmp_path / "rtctl_configs/runs/demo.toml"


def test_missing_drivers_are_an_environment_error(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    """Without the drivers the sentence says so and the exit code is 3."""
    monkeypatch.setattr(places, "CHECKOUT", tmp_path)
    monkeypatch.setattr(places, "_package_folder", lambda package, beside: None)
    with pytest.raises(SetupError) as caught:
        places.driver_command("sim_arm")
    expected = "driver sim_arm: must be installed with rtctl, got no package rtctl_drivers. Install rtctl again."
    assert str(caught.value) == expected
    assert caught.value.exit_code == 3


@pytest.mark.slow
def test_places_import_nothing_heavy() -> None:
    """Finding files needs no compiler and no socket library."""
    script = "import sys, rtctl.places; print(*[m for m in ('numba', 'zmq', 'pydantic', 'rich') if m in sys.modules])"
    done = subprocess.run([sys.executable, "-c", script], cwd=places.CHECKOUT, capture_output=True, text=True, check=True)
    assert done.stdout.strip() == ""
