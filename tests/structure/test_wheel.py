"""The wheel holds every module, the drivers as rtctl_drivers, the demo files as rtctl_configs, and the type marker."""

import shutil
import subprocess
import sys
import zipfile
from pathlib import Path

import pytest

from tests.sources import source
from tests.structure.sources_of import TOP

WHEEL_MAX_BYTES = 1_500_000  # own wheel, without dependencies: a small install is a feature


@pytest.fixture(scope="module")
def wheel_names(tmp_path_factory: pytest.TempPathFactory) -> dict[str, int]:
    """File names and sizes in a wheel built from a copy of the sources with the environment's own setuptools."""
    folder = tmp_path_factory.mktemp("wheel")
    clone = folder / "sources"
    ignore = shutil.ignore_patterns(".*", "build", "dist", "*.egg-info", "__pycache__", "tests")
    shutil.copytree(TOP, clone, ignore=ignore)
    subprocess.run(
        [sys.executable, "-m", "pip", "wheel", "-q", "--no-deps", "-w", str(folder), str(clone)],
        check=True,
        capture_output=True,
        text=True,
    )
    (wheel,) = folder.glob("*.whl")
    assert wheel.stat().st_size < WHEEL_MAX_BYTES
    with zipfile.ZipFile(wheel) as archive:
        return {info.filename: info.file_size for info in archive.infolist()}


def sources(place: str, suffixes: tuple[str, ...]) -> list[Path]:
    return [path for path in (TOP / place).rglob("*") if path.suffix in suffixes and "__pycache__" not in path.parts]


@pytest.mark.slow
@source("pep427", "file contents: packages at the root of the archive")
def test_wheel_holds_every_file_of_the_package(wheel_names: dict[str, int]) -> None:
    """Every module of rtctl, every driver file and every demo file arrives under its import name."""
    wanted = {str(path.relative_to(TOP)) for path in sources("rtctl", (".py", ".typed", ".js", ".css"))}
    for place, name in (("drivers", "rtctl_drivers"), ("configs", "rtctl_configs")):
        for path in sources(place, (".py", ".toml", ".csv", ".md", ".c", ".h")):
            wanted.add(str(Path(name) / path.relative_to(TOP / place)))
    assert sorted(wanted - set(wheel_names)) == []


@pytest.mark.slow
def test_wheel_holds_nothing_else(wheel_names: dict[str, int]) -> None:
    """No tests, no caches, no stray top-level package."""
    tops = {name.split("/")[0] for name in wheel_names}
    assert {top for top in tops if not top.endswith(".dist-info")} == {"rtctl", "rtctl_drivers", "rtctl_configs"}
    assert not [name for name in wheel_names if "__pycache__" in name or name.endswith(".pyc")]
