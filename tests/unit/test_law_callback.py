"""Laws behind addresses: the same numbers, and nothing in their machine code that raises, allocates or writes the model."""

import numba
import numpy as np
import pytest

from rtctl.kernels.compile import Callback, hot
from rtctl.kernels.layout import OK, new_block
from rtctl.kernels.memory import address_of, call_address
from rtctl.laws import can_raise, law_names, load_law
from rtctl.laws.law_callback import TERMS, law_callback
from tests.law_stand import LawStand, PlanarArm

MOTION = {"q": [0.4, -0.8], "qd": [0.9, -1.7], "q_ref": [0.5, -1.0], "qd_ref": [1.0, -2.0], "qdd_ref": [3.0, 4.0]}


@hot
def call_law(address, model, x, parameters, memory, ws, terms):
    """Call a law at its address, as the cycle does."""
    blocks = (address_of(model), address_of(x), address_of(parameters), address_of(memory), address_of(ws), address_of(terms))
    return call_address(address, blocks)


@hot
def raising_torque(model, x, parameters, memory, ws, terms):
    """A law as a beginner writes it."""
    for i in range(model["n"]):
        if not x["q"][i] < 10.0:
            raise ValueError("too far")
        terms[0, i] = 0.0
    return OK


@hot
def allocating_torque(model, x, parameters, memory, ws, terms):
    """A law that makes an array each cycle."""
    error = x["q_ref"][:] - x["q"][:]
    for i in range(model["n"]):
        terms[0, i] = error[i]
    return OK


def allocates(compiled: Callback) -> bool:
    """True when numba's allocator is called; giving back what was lent (`NRT_Free`, never reached) is not an allocation."""
    return "NRT_MemInfo_alloc" in compiled.llvm_ir or "NRT_Allocate" in compiled.llvm_ir


@pytest.mark.parametrize("name", law_names())
def test_address_gives_the_same_torque_and_leaves_the_model_alone(name: str) -> None:
    """Called by address, every law fills exactly its own terms with the same bits, and neither model nor parameters change."""
    stand = LawStand(name, PlanarArm().model()).set(**MOTION)
    block = new_block(TERMS)
    block["terms"] = np.nan
    before = stand.model.tobytes(), stand.parameters.tobytes(), stand.x.tobytes()
    status = call_law(stand.law.address, stand.model, stand.x, stand.parameters, stand.memory, stand.ws, block)
    assert status == OK
    assert before == (stand.model.tobytes(), stand.parameters.tobytes(), stand.x.tobytes())
    stand.memory["values"] = 0.0
    stand.call()
    assert np.array_equal(block["terms"], stand.terms, equal_nan=True)
    used = len(stand.law.terms)
    assert np.all(np.isfinite(block["terms"][:used, :2]))
    assert np.all(np.isnan(block["terms"][used:])) and np.all(np.isnan(block["terms"][:, 2:]))


@pytest.mark.parametrize("name", law_names())
def test_no_law_can_raise_or_allocate(name: str) -> None:
    """The machine code of every law holds no exception and no call of the allocator."""
    law = load_law(name)
    assert can_raise(law.callback) == bool(numba.config.BOUNDSCHECK)  # a build with index checks can raise, on purpose
    assert not allocates(law.callback)


def test_a_law_that_can_raise_or_allocate_is_recognised() -> None:
    """The two checks find what they look for, also when the law comes from the compile cache."""
    for _ in range(2):
        assert can_raise(law_callback("raising", raising_torque))
        assert allocates(law_callback("allocating", allocating_torque))
