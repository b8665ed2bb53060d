"""One number for all joints or a list of one per joint, from a file, checked: the shape of gains, goals and amplitudes."""

import math
from collections.abc import Sequence

import numpy as np
import numpy.typing as npt

from rtctl.errors import Finding

FloatArray = npt.NDArray[np.float64]


def number_fault(value: object, above: float = -math.inf, least: float = -math.inf) -> bool:
    """True unless `value` is a finite number > above and >= least; a boolean is not a number."""
    if isinstance(value, bool) or not isinstance(value, (int, float, np.integer, np.floating)):
        return True
    return not (math.isfinite(value) and value > above and value >= least)


def bound_text(unit: str, above: float = -math.inf, least: float = -math.inf) -> str:
    """What a number must be, in words: `a finite number > 0 rad`."""
    if above > -math.inf:
        return f"a finite number > {above:g} {unit}"
    if least > -math.inf:
        return f"a finite number >= {least:g} {unit}"
    return f"a finite number in {unit}"


def joint_values(
    where: str, value: object, n: int, unit: str, *, above: float = -math.inf, least: float = -math.inf
) -> tuple[FloatArray, list[Finding]]:
    """The (n,) values of a key that takes one number or a list of n, and what is wrong with it.

    where   the key as the user wrote it, e.g. `gains.pd.kp_nm_rad`
    above, least   exclusive and inclusive lower bound

    Faulty entries are NaN in the result, so that nothing computed from them can pass unnoticed.
    """
    values = np.full(n, np.nan)
    expected = bound_text(unit, above, least)
    if isinstance(value, (Sequence, np.ndarray)) and not isinstance(value, str):
        if len(value) != n:
            return values, [Finding(where, f"one number or a list of {n} numbers, one per joint", f"a list of {len(value)}")]
        findings = []
        for i, entry in enumerate(value):
            if number_fault(entry, above, least):
                findings.append(Finding(f"{where}[{i}]", expected, repr(entry)))
            else:
                values[i] = float(entry)
        return values, findings
    if number_fault(value, above, least):
        return values, [Finding(where, f"{expected}, or a list of {n} of them", repr(value))]
    values[:] = float(value)  # type: ignore[arg-type]  # number_fault has checked that it is a number
    return values, []
