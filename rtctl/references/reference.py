"""A reference made ready for the cycle from what a run file says. Importing this compiles nothing."""

import importlib
from dataclasses import dataclass
from pathlib import Path
from typing import TYPE_CHECKING, Protocol

import numpy as np
import numpy.typing as npt

from rtctl.errors import ConfigError, Finding

if TYPE_CHECKING:
    from rtctl.arm import Arm
    from rtctl.kernels.compile import Callback

FloatArray = npt.NDArray[np.float64]

KINDS = ("hold", "point_to_point", "waypoints", "multi_sine")  # each is the module of the same name


class ReferenceSettings(Protocol):
    """The reference of a run file: its kind, and what that kind's own Protocol asks for."""

    @property
    def kind(self) -> str: ...


@dataclass(frozen=True)
class Reference:
    """A prepared reference. Keep it alive as long as its addresses are in use."""

    kind: str
    parameters: np.void  # REFERENCE_PARAMETERS
    begin: "Callback"  # int64 begin(parameters, memory, sample)
    sample: "Callback"  # int64 sample(parameters, memory, sample)
    data: FloatArray  # what parameters["data"] points to
    source: str  # what the user calls the body's first pose: `row 1 of ...`, `center_rad`
    approach_asked: bool  # False: the arm must already stand near the body's first pose


def prepare_reference(arm: "Arm", config: ReferenceSettings, folder: Path | str) -> Reference:
    """The reference a run file asks for. Raises ConfigError with all findings.

    config   any object with the attributes of its kind's Protocol, e.g. `rtctl.references.multi_sine.MultiSineSettings`
    folder   of the run file; relative file names count from it
    """
    if config.kind not in KINDS:
        finding = Finding("reference.kind", f"one of {', '.join(KINDS)}", repr(config.kind))
        raise ConfigError.from_findings([finding])
    module = importlib.import_module(f"rtctl.references.{config.kind}")
    parameters, data = module.prepare(arm, config, Path(folder))
    begin, sample = kind_callbacks(config.kind)
    source = {"waypoints": f"row 1 of {getattr(config, 'file', '')}", "multi_sine": "center_rad"}.get(config.kind, "")
    asked = source == "" or getattr(config, "approach_duration_s", None) is not None
    return Reference(config.kind, parameters, begin, sample, data, source, asked)


_callbacks: dict[str, tuple["Callback", "Callback"]] = {}


def kind_callbacks(kind: str) -> tuple["Callback", "Callback"]:
    """The compiled `begin` and `sample` of a kind, made once and kept for the life of the process."""
    if kind not in _callbacks:
        from rtctl.references.reference_callback import reference_callback

        module = importlib.import_module(f"rtctl.references.{kind}")
        begin = reference_callback(f"{kind}_begin", module.begin)
        _callbacks[kind] = (begin, reference_callback(f"{kind}_sample", module.sample))
    return _callbacks[kind]
