"""A reference's motion outside the loop, through the same addresses the cycle calls: for checks, figures and predictions."""

import math
from typing import TYPE_CHECKING

import numpy as np
import numpy.typing as npt

from rtctl.blocks import REFERENCE_MEMORY, REFERENCE_SAMPLE
from rtctl.kernels.compile import hot
from rtctl.kernels.layout import OK, new_block
from rtctl.kernels.memory import address_of, call_address

if TYPE_CHECKING:
    from rtctl.references.reference import Reference

FloatArray = npt.NDArray[np.float64]

STEP_S = 1e-3
SAMPLES_MAX = 2_000_000  # a longer motion is sampled more coarsely


@hot
def begin_at(address, parameters, memory, sample):
    """Call the `begin` of a reference at its address, as the cycle does."""
    return call_address(address, (address_of(parameters), address_of(memory), address_of(sample)))


@hot
def sample_times(address, parameters, memory, sample, t, motion):
    """Sample a reference at the times t (m,), s, into motion (3, m, n): position, velocity, acceleration. Returns its status."""
    for k in range(t.size):
        sample["t_s"] = t[k]
        status = call_address(address, (address_of(parameters), address_of(memory), address_of(sample)))
        if status != OK:
            return status
        for i in range(motion.shape[2]):
            motion[0, k, i] = sample["q_ref"][i]
            motion[1, k, i] = sample["qd_ref"][i]
            motion[2, k, i] = sample["qdd_ref"][i]
    return OK


def sample_motion(
    reference: "Reference", q_start: npt.ArrayLike, times: npt.ArrayLike | None = None
) -> tuple[FloatArray, FloatArray, FloatArray, FloatArray]:
    """The motion from a start pose: times (m,) in s, and position, velocity, acceleration (m, n) in SI.

    times   s; None: every STEP_S from 0 to the end (hold: 1 s)
    """
    memory = begin_motion(reference, q_start)
    end_s = float(memory["end_s"]) if math.isfinite(memory["end_s"]) else 1.0
    t = np.array(time_grid(end_s) if times is None else times, np.float64)
    motion = np.zeros((3, t.size, int(reference.parameters["n"])))
    status = sample_times(reference.sample.address, reference.parameters, memory, new_block(REFERENCE_SAMPLE), t, motion)
    if status != OK:
        raise ValueError(f"the reference {reference.kind} failed with status {status}")
    return t, motion[0], motion[1], motion[2]


def begin_motion(reference: "Reference", q_start: npt.ArrayLike) -> np.void:
    """The REFERENCE_MEMORY of the motion from a start pose. Raises ValueError when the pose is not finite."""
    memory = new_block(REFERENCE_MEMORY)
    sample = new_block(REFERENCE_SAMPLE)
    sample["q_ref"][: int(reference.parameters["n"])] = q_start
    if begin_at(reference.begin.address, reference.parameters, memory, sample) != OK:
        raise ValueError(f"the start pose must be finite, got {q_start!r}")
    return memory


def time_grid(end_s: float) -> FloatArray:
    """Times from 0 to end_s, s, every STEP_S or as fine as SAMPLES_MAX allows."""
    count = min(max(math.ceil(end_s / STEP_S), 1), SAMPLES_MAX)
    return np.linspace(0.0, end_s, count + 1)
