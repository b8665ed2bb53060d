"""References behind addresses: nothing in their machine code raises or allocates, and the cycle may copy their memory."""

from pathlib import Path

import numba
import numpy as np
import pytest

from rtctl.laws import can_raise
from rtctl.references import KINDS, begin_motion, sample_motion
from rtctl.references.reference import kind_callbacks
from tests.reference_stand import MULTI_SINE, START, reference


@pytest.mark.parametrize("kind", KINDS)
def test_no_reference_can_raise_or_allocate(kind: str) -> None:
    """The machine code of every begin and sample holds no exception and no call of the allocator."""
    for compiled in kind_callbacks(kind):
        assert can_raise(compiled) == bool(numba.config.BOUNDSCHECK)  # a build with index checks can raise, on purpose
        assert "NRT_MemInfo_alloc" not in compiled.llvm_ir and "NRT_Allocate" not in compiled.llvm_ir


def test_sampling_changes_neither_parameters_nor_memory(tmp_path: Path) -> None:
    """A motion depends on time and start alone: sampled backwards or twice it is the same."""
    prepared = reference(tmp_path, **MULTI_SINE)
    before = prepared.parameters.tobytes(), begin_motion(prepared, START).tobytes()
    times = np.linspace(0.0, 8.0, 50)
    _, forwards, _, _ = sample_motion(prepared, START, times)
    _, backwards, _, _ = sample_motion(prepared, START, times[::-1])
    assert np.array_equal(forwards, backwards[::-1])
    assert before == (prepared.parameters.tobytes(), begin_motion(prepared, START).tobytes())
