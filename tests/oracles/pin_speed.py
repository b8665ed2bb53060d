"""The rigid-body library `pin` as a side of a benchmark: through its Python binding, and built for this processor from its headers.

The native build takes one to four minutes and is kept in a folder of the temporary directory until the source, the library or the
compiler changes.
"""

import ctypes
import hashlib
import os
import shutil
import stat
import subprocess
import tempfile
from collections.abc import Callable
from importlib.metadata import PackageNotFoundError, version
from pathlib import Path

import numpy as np
import pinocchio as pin
from numpy.typing import NDArray

from tests.oracles.pin_arm import PinArm, symmetric

Array = NDArray[np.float64]

SOURCE = Path(__file__).with_name("pin_native.cpp")
KERNELS = ("inverse_dynamics", "inertia_matrix", "forward_dynamics")
FLAGS = (
    *("-std=c++17", "-O3", "-march=native", "-DNDEBUG", "-shared", "-fPIC"),
    # Its symbols stay its own: the same process also holds the wheel's build of the library.
    *("-fvisibility=hidden", "-fno-gnu-unique", "-Wl,-Bsymbolic"),
    # As the library's own build files have them.
    *("-DBOOST_MPL_LIMIT_LIST_SIZE=30", "-DBOOST_MPL_LIMIT_VECTOR_SIZE=30"),
    *("-DBOOST_MPL_CFG_NO_PREPROCESSED_HEADERS", "-DBOOST_FUSION_INVOKE_MAX_ARITY=12"),
)


class BindingSide:
    """Calls through the Python binding on a chain of joints, and calls of the same shape that have nothing to compute.

    The trivial call is the same function on a model without joints: same types of arguments and result, so the same conversions.
    """

    def __init__(self, model: np.void, q: Array, qd: Array, qdd: Array, tau: Array) -> None:
        self._arm = PinArm(model)
        assert self._arm.order == list(range(int(model["n"])))  # a chain: no reordering inside the loops
        self._states = [tuple(np.array(x[k]) for x in (q, qd, qdd, tau)) for k in range(len(q))]
        self._empty = pin.Model()
        self._empty_data = self._empty.createData()

    def loop(self, kernel: str, trivial: bool) -> Callable[[int], None]:
        """A function that goes `repeats` times through all states."""
        model, data = (self._empty, self._empty_data) if trivial else (self._arm.model, self._arm.data)
        size = 0 if trivial else None
        states = [tuple(x[:size] for x in state) for state in self._states]

        def inverse_dynamics(repeats: int) -> None:
            for _ in range(repeats):
                for q, qd, qdd, _tau in states:
                    pin.rnea(model, data, q, qd, qdd)

        def inertia_matrix(repeats: int) -> None:
            for _ in range(repeats):
                for q, _qd, _qdd, _tau in states:
                    pin.crba(model, data, q)

        def forward_dynamics(repeats: int) -> None:
            for _ in range(repeats):
                for q, qd, _qdd, tau in states:
                    pin.aba(model, data, q, qd, tau)

        loops = {"inverse_dynamics": inverse_dynamics, "inertia_matrix": inertia_matrix, "forward_dynamics": forward_dynamics}
        return loops[kernel]


# ---- native ----------------------------------------------------------------------------------------------------------------------


def headers() -> list[Path]:
    """Folders with the headers of the library, of its maths library and of boost. Raises LookupError, saying what is missing."""
    prefix = next((path for path in Path(pin.__file__).parents if path.name == "cmeel.prefix"), None)
    places = [prefix / "include", prefix / "include/eigen3"] if prefix else []
    places += [Path("/usr/include/eigen3"), Path("/usr/local/include/eigen3")]
    found = [place for place in places if place.is_dir()]
    for wanted in ("pinocchio/algorithm/rnea.hpp", "boost/variant.hpp", "Eigen/Core"):
        if not any((place / wanted).exists() for place in found):
            raise LookupError(f"no header {wanted}; pip install cmeel-eigen brings those of Eigen")
    return found


def native_library(build: bool) -> Path:
    """The built library. Raises LookupError when it cannot be built here, or is not there and `build` is False."""
    compiler = shutil.which("g++")
    if compiler is None:
        raise LookupError("no g++")
    includes = [word for place in headers() for word in ("-isystem", str(place))]
    compiler_version = subprocess.run([compiler, "--version"], capture_output=True, text=True, check=True).stdout
    parts = (SOURCE.read_text(), repr(FLAGS), compiler_version, pin.__version__, _version("cmeel-eigen"), _processor())
    key = hashlib.sha256("\0".join(parts).encode()).hexdigest()[:16]
    folder = Path(tempfile.gettempdir()) / f"rtctl-bench-{os.getuid()}"
    folder.mkdir(mode=0o700, exist_ok=True)
    info = folder.lstat()
    if info.st_uid != os.getuid() or not stat.S_ISDIR(info.st_mode) or stat.S_IMODE(info.st_mode) & 0o077:
        raise LookupError(f"{folder} is not a private folder of this user")
    target = folder / f"pin-{key}.so"
    if target.exists():
        return target
    if not build:
        raise LookupError("not built yet; without --quick it is built once")
    unfinished = target.with_suffix(f".{os.getpid()}")
    done = subprocess.run(
        [compiler, *FLAGS, *includes, "-o", str(unfinished), str(SOURCE)], capture_output=True, text=True, check=False
    )
    if done.returncode != 0:
        raise LookupError(
            "does not compile here: " + "; ".join(line for line in done.stderr.splitlines() if "error" in line)[:300]
        )
    unfinished.rename(target)
    return target


def _version(package: str) -> str:
    try:
        return version(package)
    except PackageNotFoundError:
        return ""


def _processor() -> str:
    lines = Path("/proc/cpuinfo").read_text(encoding="ascii", errors="replace").splitlines()
    return "".join(line for line in lines if line.startswith(("model name", "flags")))[:5000]


class NativeSide:
    """The library's own loops on a chain of joints, through one call for a whole block."""

    def __init__(self, library: Path, model: np.void, q: Array, qd: Array, qdd: Array, tau: Array) -> None:
        self._library = ctypes.CDLL(str(library))
        self._library.arm_make.restype = ctypes.c_void_p
        for kernel in KERNELS:
            getattr(self._library, f"loop_{kernel}").restype = ctypes.c_double
        n = int(model["n"])
        assert [int(k) for k in model["parent"][:n]] == list(range(-1, n - 1))
        mass = np.array(model["mass"][:n])
        centre = model["h"][:n] / mass[:, None]
        I_centre = [
            symmetric(model["I"][i]) - mass[i] * (centre[i] @ centre[i] * np.eye(3) - np.outer(centre[i], centre[i]))
            for i in range(n)
        ]
        numbers = [model["R_parent"][:n], model["p_parent"][:n], mass, centre, np.array(I_centre), model["rotor"][:n]]
        kind = np.ascontiguousarray(model["kind"][:n])
        arrays = [np.ascontiguousarray(x, np.float64) for x in (*numbers, model["gravity"])]
        self._arm = {}
        for kernel, third in (("inverse_dynamics", qdd), ("inertia_matrix", qdd), ("forward_dynamics", tau)):
            arm = ctypes.c_void_p(self._library.arm_make(ctypes.c_int64(n), _pointer(kind), *(_pointer(x) for x in arrays)))
            states = [np.ascontiguousarray(x) for x in (q, qd, third)]
            self._library.arm_states(arm, ctypes.c_int64(len(q)), *(_pointer(x) for x in states))
            self._arm[kernel] = arm

    def loop(self, kernel: str) -> Callable[[int], float]:
        """A function that goes `repeats` times through all states; it returns the sum of the first elements of the results."""
        function, arm = getattr(self._library, f"loop_{kernel}"), self._arm[kernel]
        return lambda repeats: float(function(arm, ctypes.c_int64(repeats)))

    def close(self) -> None:
        """Give its memory back."""
        for arm in self._arm.values():
            self._library.arm_free(arm)


def _pointer(array: NDArray[np.generic]) -> ctypes.c_void_p:
    return ctypes.c_void_p(array.ctypes.data)
