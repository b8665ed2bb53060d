"""The compile cache: private, keyed by every compiled source, never stale."""

import os
import shutil
import subprocess
import sys
from pathlib import Path

import pytest

import rtctl
from rtctl.kernels import compile as compile_module

PACKAGE = Path(rtctl.__file__).parent
# A caller in one file (the law) of a kernel in another: editing the kernel must reach the caller's cached machine code.
PROBE = """
import numpy as np
from rtctl.blocks import LAW_INPUT, LAW_MEMORY, LAW_PARAMETERS
from rtctl.kernels.layout import MODEL, SCRATCH, new_block
from rtctl.kernels.memory import address_of, call_address
from rtctl.kernels.compile import hot
from rtctl.laws import load_law

@hot
def call(address, model, x, p, m, ws, terms):
    blocks = (address_of(model), address_of(x), address_of(p), address_of(m), address_of(ws), terms.ctypes.data)
    return call_address(address, blocks)

model, x, p, m, ws = (new_block(layout) for layout in (MODEL, LAW_INPUT, LAW_PARAMETERS, LAW_MEMORY, SCRATCH))
model["n"], model["parent"][0], model["mass"][0], model["h"][0] = 1, -1, 1.0, (0.5, 0.0, 0.0)
model["R_parent"][0], model["gravity"] = np.eye(3), (0.0, -10.0, 0.0)
terms = np.zeros((8, 16))
law = load_law("pd_gravity")
assert call(law.callback.address, model, x, p, m, ws, terms) == 1
print(terms[0, 0], law.callback._compiled.cache_hits)
"""


@pytest.fixture
def copy(tmp_path: Path) -> Path:
    """A private copy of the package, with a cache of its own."""
    shutil.copytree(PACKAGE, tmp_path / "rtctl", ignore=shutil.ignore_patterns("__pycache__"))
    return tmp_path


def probe(copy: Path) -> tuple[float, int]:
    """Gravity term of the law in a new process, and whether its machine code came from the cache."""
    environment = {**os.environ, "PYTHONPATH": str(copy), "XDG_CACHE_HOME": str(copy / "cache")}
    done = subprocess.run([sys.executable, "-c", PROBE], env=environment, capture_output=True, text=True, check=False, cwd=copy)
    assert done.returncode == 0, done.stderr
    torque, hits = done.stdout.split()
    return float(torque), int(hits)


@pytest.mark.slow
def test_an_edited_kernel_reaches_the_law_that_calls_it(copy: Path) -> None:
    """First compiled, then from the cache, and after one edit of the kernel compiled anew with the new result."""
    assert probe(copy) == (5.0, 0)
    assert probe(copy) == (5.0, 1)
    kernel = copy / "rtctl/kernels/inverse_dynamics.py"
    text = kernel.read_text()
    start = text.index("def gravity_torque")
    edited = text[:start] + text[start:].replace('-model["gravity"][1]', '-3.0 * model["gravity"][1]', 1)
    assert edited != text
    kernel.write_text(edited)
    assert probe(copy) == (15.0, 0)


def test_every_place_with_compiled_code_is_in_the_key() -> None:
    """The places listed exist, and each of their files counts into the key."""
    assert all((PACKAGE / place).exists() for place in compile_module.COMPILED_PLACES)
    names = {str(path.relative_to(PACKAGE)) for path in compile_module.compiled_sources()}
    assert {"cycle.py", "kernels/inverse_dynamics.py", "laws/computed_torque.py", "loop/live.py"} <= names


def test_the_cache_folder_is_private() -> None:
    """Only this user may write where machine code is loaded from."""
    mode = compile_module.cache_folder().stat().st_mode
    assert mode & 0o077 == 0


def test_a_cache_that_others_can_write_is_refused(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    """The message names the folder and the command that repairs it."""
    base = tmp_path / "rtctl"
    base.mkdir(mode=0o777)
    base.chmod(0o777)
    monkeypatch.setenv("XDG_CACHE_HOME", str(tmp_path))
    with pytest.raises(compile_module.SetupError) as caught:
        compile_module.cache_folder.__wrapped__()
    assert str(caught.value) == (
        f"{base}: the folder of compiled code must belong to this user and be writable by nobody else. "
        f"Run: chown {os.getuid()} {base} && chmod 700 {base}"
    )


def test_old_caches_are_removed_but_for_the_newest(tmp_path: Path) -> None:
    """Folders with a key's name go, oldest first; anything else stays."""
    (tmp_path / "notes").mkdir()
    for k in range(compile_module.KEPT_CACHES + 3):
        folder = tmp_path / f"{k:016x}"
        folder.mkdir()
        os.utime(folder, (k, k))
    compile_module._remove_old(tmp_path)
    kept = sorted(path.name for path in tmp_path.iterdir())
    assert kept == [*(f"{k:016x}" for k in range(3, compile_module.KEPT_CACHES + 3)), "notes"]


def test_functions_outside_the_package_are_not_cached() -> None:
    """A test's own compiled function leaves nothing on disk: nobody hashes what it calls."""

    @compile_module.hot
    def outside(x):
        return x + 1

    assert outside(1) == 2
    assert not outside.stats.cache_hits and not outside._cache.__class__.__name__ == "_Cache"
