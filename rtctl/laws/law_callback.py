"""A control law behind an address: its C function, which reads all blocks by address."""

from collections.abc import Callable

import numpy as np

from rtctl.blocks import LAW_INPUT, LAW_MEMORY, LAW_PARAMETERS, MAX_TERMS
from rtctl.kernels.compile import Callback, callback
from rtctl.kernels.layout import MAX_JOINTS, MODEL, SCRATCH
from rtctl.kernels.memory import block_at
from rtctl.laws.pd import torque  # in the template this name is bound to the law at hand

TERMS = np.dtype([("terms", "f8", (MAX_TERMS, MAX_JOINTS))])


def law_template(model, x, parameters, memory, ws, terms):
    """C function of a law."""
    return torque(
        block_at(model, MODEL),
        block_at(x, LAW_INPUT),
        block_at(parameters, LAW_PARAMETERS),
        block_at(memory, LAW_MEMORY),
        block_at(ws, SCRATCH),
        block_at(terms, TERMS)["terms"][:],
    )


def law_callback(name: str, law: Callable[..., int]) -> Callback:
    """The C function of a compiled law; `name` must be its own, it tells cached functions apart."""
    return callback(law_template, name, 6, torque=law)
