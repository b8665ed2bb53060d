"""Times of two or more sides measured in turns, and what their ratio says on a machine that is never quiet.

Absolute times are not stable on a shared machine; the ratio of neighbours in time is. Each side also has its own spread, the ratio
of one of its blocks to its next: where that is larger than the effect, nothing can be told.
"""

import math
import time
from collections.abc import Callable, Mapping
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

Times = NDArray[np.float64]

RATIOS_MIN = 5
SPREAD_SHARE = 0.9  # of the ratios of a side to itself that lie within the spread
BLOCK_S = 0.001  # long against the clock and a call from Python, short against the time slices that other programs get


@dataclass(frozen=True)
class Side:
    """Something that can be run again and again.

    run     run(repeats) does the work `repeats` times
    calls   calls counted per repeat
    """

    run: Callable[[int], object]
    calls: int = 1


@dataclass(frozen=True)
class Comparison:
    """What was found: the median of `other / base` over the rounds, and the spread of each side against itself."""

    ratio: float
    spread: float  # 0.1: nine of ten blocks are within a factor of 1.1 of the next block of the same side
    count: int

    @property
    def tells(self) -> bool:
        """False when the spread exceeds the effect."""
        return abs(math.log(self.ratio)) > math.log1p(self.spread)

    def inverse(self) -> "Comparison":
        """The same seen from the other side."""
        return Comparison(1.0 / self.ratio, self.spread, self.count)


def compare(base: Times, other: Times) -> Comparison:
    """Two series of times of the same rounds. Raises ValueError for fewer than RATIOS_MIN rounds or times that are none."""
    if len(base) != len(other) or len(base) < RATIOS_MIN:
        raise ValueError(f"rounds: must be the same and >= {RATIOS_MIN}, got {len(base)} and {len(other)}")
    if not (np.all(base > 0.0) and np.all(other > 0.0) and np.all(np.isfinite(base)) and np.all(np.isfinite(other))):
        raise ValueError("times: must be finite and > 0")
    same = np.abs(np.log(np.concatenate([base[1:] / base[:-1], other[1:] / other[:-1]])))
    return Comparison(float(np.median(other / base)), float(np.expm1(np.quantile(same, SPREAD_SHARE))), len(base))


def fitting_repeats(side: Side, block_s: float) -> int:
    """How often a side must run to fill a block; runs it a few times, which also warms it up."""
    repeats = 1
    while True:
        began_ns = time.perf_counter_ns()
        side.run(repeats)
        took_s = (time.perf_counter_ns() - began_ns) * 1e-9
        if took_s >= 0.3 * block_s:
            return max(1, round(repeats * block_s / took_s))
        repeats = max(2 * repeats, min(100 * repeats, round(repeats * 0.5 * block_s / max(took_s, 1e-9))))


def interleave(sides: Mapping[str, Side], rounds: int, block_s: float = BLOCK_S) -> dict[str, Times]:
    """One block of each side, one after the other, `rounds` times; ns per call of each block."""
    repeats = {name: fitting_repeats(side, block_s) for name, side in sides.items()}
    times: dict[str, Times] = {name: np.empty(rounds) for name in sides}
    for k in range(rounds):
        for name, side in sides.items():
            began_ns = time.perf_counter_ns()
            side.run(repeats[name])
            times[name][k] = (time.perf_counter_ns() - began_ns) / (repeats[name] * side.calls)
    return times
