"""Where the shipped demo files and drivers are: in a checkout beside the package, in an installed wheel as packages of their own.

Nothing here imports a driver: a driver is a process of its own, started by the command this module returns.
"""

import importlib.util
import os
import sys
from pathlib import Path

from rtctl.errors import ConfigError, SetupError

CHECKOUT = Path(__file__).resolve().parents[1]
DEMO_RUN = "runs/demo.toml"


def _package_folder(package: str, checkout_name: str) -> Path | None:
    """Folder of an installed package, or of its sources beside the package in a checkout."""
    beside = CHECKOUT / checkout_name
    if (CHECKOUT / "pyproject.toml").exists() and beside.is_dir():
        return beside
    spec = importlib.util.find_spec(package)
    if spec is None or not spec.submodule_search_locations:
        return None
    return Path(list(spec.submodule_search_locations)[0])


def shipped_file(name: str) -> Path:
    """Path of a shipped demo file such as `runs/demo.toml`. Raises `ConfigError` when it is not there."""
    folder = _package_folder("rtctl_configs", "configs")
    if folder is None or not (folder / name).exists():
        raise ConfigError(f"configs/{name}: must be a file shipped with rtctl, got none. Install rtctl again.")
    return folder / name


def driver_command(name: str) -> tuple[list[str], dict[str, str]]:
    """Command and environment that start a shipped driver as a process.

    name    module in drivers/, e.g. `sim_arm`

    Raises `SetupError` when the drivers were not installed.
    """
    environment = dict(os.environ)
    if (CHECKOUT / "pyproject.toml").exists() and (CHECKOUT / "drivers").is_dir():
        # A checkout needs no installation: its own folder on the path makes both packages importable.
        environment["PYTHONPATH"] = os.pathsep.join(filter(None, (str(CHECKOUT), environment.get("PYTHONPATH", ""))))
        return [sys.executable, "-m", f"drivers.{name}"], environment
    if _package_folder("rtctl_drivers", "drivers") is None:
        raise SetupError(f"driver {name}: must be installed with rtctl, got no package rtctl_drivers. Install rtctl again.")
    return [sys.executable, "-m", f"rtctl_drivers.{name}"], environment
