"""The one way code becomes machine code: `hot` for compiled functions, `callback` for C function pointers, and their cache on disk.

The cache never goes stale: its folder is keyed by a hash of every compiled source file of the package, by the versions of
Python, numba, llvmlite and numpy, and by the processor. Editing one kernel therefore recompiles every caller of it.
The folder is private (0700) and its owner is checked, because what lies in it is executed.
"""

import functools
import hashlib
import os
import platform
import re
import shutil
import stat
import sys
import types as python_types
from collections.abc import Callable
from pathlib import Path
from typing import Any, TypeVar, overload

import numba
import numpy as np
from numba.core import types
from numba.core.caching import CompileResultCacheImpl, FunctionCache, NullCache, _CacheLocator
from numba.core.ccallback import CFunc

from rtctl.errors import SetupError

F = TypeVar("F", bound=Callable[..., Any])

PACKAGE = Path(__file__).resolve().parents[1]
KEPT_CACHES = 12
# Places below the package that may hold compiled code; tests/structure checks that no other file uses `hot`.
COMPILED_PLACES = (
    "blocks.py",
    "cycle.py",
    "kernels",
    "laws",
    "loop",
    "plant",
    "record",
    "references",
    "supervisor",
    "wire",
)


def compiled_sources() -> list[Path]:
    """Every source file whose text can end up in machine code, sorted."""
    files: list[Path] = []
    for place in COMPILED_PLACES:
        path = PACKAGE / place
        files.extend(sorted(path.rglob("*.py")) if path.is_dir() else [path])
    return [file for file in files if file.exists()]


@functools.cache
def cache_key() -> str:
    """Hash of every compiled source file, of the versions of the compiler and of the processor (16 hex digits)."""
    digest = hashlib.sha256()
    for file in compiled_sources():
        digest.update(str(file.relative_to(PACKAGE)).encode() + b"\0" + file.read_bytes() + b"\0")
    versions = (
        sys.version,
        numba.__version__,
        _version("llvmlite"),
        np.__version__,
        platform.machine(),
        _processor(),
        os.environ.get("NUMBA_BOUNDSCHECK", ""),
    )
    digest.update(repr(versions).encode())
    return digest.hexdigest()[:16]


@functools.cache
def cache_folder() -> Path:
    """The private folder of compiled code, made if missing. Raises `SetupError` if somebody else could write to it."""
    base = Path(os.environ.get("XDG_CACHE_HOME") or Path.home() / ".cache") / "rtctl"
    folder = base / cache_key()
    if not folder.exists():
        _remove_old(base)
    for path in (base, folder):
        path.mkdir(mode=0o700, parents=True, exist_ok=True)
        info = path.stat()
        if info.st_uid != os.getuid() or stat.S_IMODE(info.st_mode) & 0o022:
            raise SetupError(
                f"{path}: the folder of compiled code must belong to this user and be writable by nobody else. "
                f"Run: chown {os.getuid()} {path} && chmod 700 {path}"
            )
    return folder


def _remove_old(base: Path) -> None:
    """Keep the newest caches only: each change of a source file makes a new one. A process that loses its folder compiles again."""
    folders = [path for path in base.glob("*") if path.is_dir() and re.fullmatch("[0-9a-f]{16}", path.name)]
    for path in sorted(folders, key=lambda path: path.stat().st_mtime)[:-KEPT_CACHES]:
        shutil.rmtree(path, ignore_errors=True)


def _version(module: str) -> str:
    return str(getattr(sys.modules.get(module), "__version__", ""))


def _processor() -> str:
    import llvmlite.binding as llvm

    return f"{llvm.get_host_cpu_name()} {llvm.get_host_cpu_features().flatten()}"


class _Locator(_CacheLocator):
    """Puts the cache of every function into the one keyed folder, one folder per module: two modules may share a file name."""

    def __init__(self, py_func: Any) -> None:
        self._module = py_func.__module__
        self._place = f"{py_func.__module__}.{py_func.__qualname__}:{py_func.__code__.co_firstlineno}"

    def get_cache_path(self) -> str:
        return str(cache_folder() / self._module)

    def get_source_stamp(self) -> str:
        return cache_key()

    def get_disambiguator(self) -> str:
        return hashlib.sha256(self._place.encode()).hexdigest()[:10]

    @classmethod
    def from_function(cls, py_func: Any, py_file: str) -> "_Locator":
        return cls(py_func)


class _CacheImpl(CompileResultCacheImpl):  # type: ignore[misc]  # numba's stubs leave its base untyped
    _locator_classes: list[Any] = [_Locator]


class _Cache(FunctionCache):
    _impl_class = _CacheImpl


def _cache_of(function: Any) -> _Cache | NullCache:
    """The cache on disk for a function of this package. Others are not cached: nobody hashes what they call."""
    inside = Path(function.__code__.co_filename).resolve().is_relative_to(PACKAGE)
    return _Cache(function) if inside else NullCache()


@overload
def hot(function: F) -> F:
    """As `@hot`."""


@overload
def hot(*, inline: bool) -> Callable[[F], F]:
    """As `@hot(inline=True)`."""


def hot(function: F | None = None, *, inline: bool = False) -> Any:
    """Compile on first call and keep the result on disk. No interpreter lock, no fastmath, IEEE division.

    inline    put the body into every compiled caller: for parts of kernels, where a call takes a tenth of their time

    Inside: no allocation, no exceptions, no strings; outputs are arguments; the return value is a status, `OK` on success.
    """
    if function is None:
        return functools.partial(_compiled, inline=inline)
    return _compiled(function, inline)


def _compiled(function: F, inline: bool) -> F:
    compiler = numba.njit(nogil=True, error_model="numpy", fastmath=False, inline="always" if inline else "never")
    dispatcher: Any = compiler(function)
    if dispatcher is not function:  # it is the function itself when compiling is switched off
        dispatcher._cache = _cache_of(function)
    return dispatcher  # type: ignore[no-any-return]  # a dispatcher is called like the function it stands for


class Callback:
    """A compiled C function. `address` is its pointer; keep the object alive as long as the pointer is used."""

    def __init__(self, compiled: Any) -> None:
        self._compiled = compiled
        self.address = int(compiled.address)

    @property
    def llvm_ir(self) -> str:
        """The optimised form as text, for checks of what it may call or raise.

        The form kept for linking is also there when the function came from the cache; numba's own inspection is empty then.
        """
        return str(self._compiled._library._get_module_for_linking())


def callback(template: Callable[..., Any], name: str, argument_count: int, **bound: Any) -> Callback:
    """Compile `template` to a C function `int64 name(void *, ...)` with `argument_count` addresses, with global names bound.

    template        a module-level Python function that reads its memory blocks from addresses
    bound           what the global names in `template` stand for, e.g. torque=the law's compiled function
    """
    function = python_types.FunctionType(template.__code__, {**template.__globals__, **bound}, name)
    function.__module__ = template.__module__
    function.__qualname__ = f"{template.__qualname__}_{name}"
    signature = ((types.int64,) * argument_count, types.int64)
    compiled: Any = CFunc(function, signature, locals={}, options={"error_model": "numpy", "fastmath": False})
    compiled._cache = _cache_of(function)
    compiled.compile()
    return Callback(compiled)
