"""A reference behind addresses: the C functions of its kind, which read their blocks by address."""

from collections.abc import Callable

from rtctl.blocks import REFERENCE_MEMORY, REFERENCE_PARAMETERS, REFERENCE_SAMPLE
from rtctl.kernels.compile import Callback, callback
from rtctl.kernels.memory import block_at
from rtctl.references.minimum_jerk import begin_approach as function  # in the template this name is bound to the kind's own


def reference_template(parameters, memory, sample):
    """C function of a reference: blocks by address."""
    return function(
        block_at(parameters, REFERENCE_PARAMETERS), block_at(memory, REFERENCE_MEMORY), block_at(sample, REFERENCE_SAMPLE)
    )


def reference_callback(name: str, compiled: Callable[..., int]) -> Callback:
    """The C function of a compiled `begin` or `sample`; `name` must be its own, it tells cached functions apart."""
    return callback(reference_template, name, 3, function=compiled)
