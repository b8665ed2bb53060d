"""The laws of this package by name, and their addresses. Importing this compiles nothing and loads no compiler."""

import difflib
import importlib
from collections.abc import Callable, Mapping
from dataclasses import dataclass
from functools import cached_property
from typing import TYPE_CHECKING, Any

import numpy as np

from rtctl.errors import ConfigError, Finding

if TYPE_CHECKING:
    from rtctl.arm import Arm
    from rtctl.kernels.compile import Callback

_MODULES = {  # name in files -> module; `float` would hide the built-in type
    "float": "float_law",
    "feedforward": "feedforward",
    "pd": "pd",
    "pid": "pid",
    "pd_gravity": "pd_gravity",
    "feedforward_pd": "feedforward_pd",
    "computed_torque": "computed_torque",
}


@dataclass(frozen=True)
class Law:
    """A control law of this package. Loaded laws live as long as the process, and so do their addresses."""

    name: str
    terms: tuple[str, ...]  # in the order of their sum
    prepare: Callable[["Arm", Mapping[str, Any]], np.void]  # arm and [gains.<name>] -> LAW_PARAMETERS, or ConfigError
    torque: Callable[..., int]  # compiled: (model, LAW_INPUT, LAW_PARAMETERS, LAW_MEMORY, SCRATCH, terms (8, 16)) -> status

    @cached_property
    def callback(self) -> "Callback":
        """The law as a C function of six addresses, the last that of the first of (8, 16) float64 terms; compiled on demand."""
        from rtctl.laws.law_callback import law_callback

        return law_callback(self.name, self.torque)

    @property
    def address(self) -> int:
        """Address of the C function."""
        return self.callback.address


_laws: dict[str, Law] = {}


def law_names() -> tuple[str, ...]:
    """Names of all laws, in the order of documents and tables."""
    return tuple(_MODULES)


def load_law(name: str) -> Law:
    """The law of that name. Raises ConfigError, with the nearest name, when there is none."""
    if name not in _MODULES:
        near = difflib.get_close_matches(name, _MODULES, 1)
        likely = f"The nearest is {near[0]}." if near else ""
        raise ConfigError.from_findings([Finding("law", f"one of {', '.join(_MODULES)}", repr(name), likely)])
    if name not in _laws:
        module = importlib.import_module(f"rtctl.laws.{_MODULES[name]}")
        _laws[name] = Law(module.NAME, module.TERMS, module.prepare, module.torque)
    return _laws[name]


def can_raise(callback: "Callback") -> bool:
    """True when compiled code can end in an exception, which would leave a torque half written.

    Every way to raise in compiled code first builds an exception from a pickled constant; if the optimiser has left no such
    constant in the code and in what it calls, no path reaches one.
    """
    return "picklebuf" in callback.llvm_ir
