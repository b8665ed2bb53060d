"""Floating-point operations of one call of a kernel, counted while it runs uncompiled on numbers that count.

`python -m tests.bench.operations` prints {kernel: {joints: {"arithmetic": .., "sines_cosines": ..}}}; it must run with
NUMBA_DISABLE_JIT=1.
Additions, multiplications and divisions are counted as the source has them, multiplications by zero too: the compiler may not
leave them out. What moves data is not counted.
"""

import json
import math
import os
import subprocess
import sys
from pathlib import Path
from types import SimpleNamespace
from typing import Any

import numpy as np

TOP = Path(__file__).resolve().parents[2]
JOINTS = (6, 7)
count = {"arithmetic": 0, "sines_cosines": 0}


def _binary(operation: Any) -> Any:
    def counted(self: "Counted", other: Any) -> "Counted":
        count["arithmetic"] += 1
        return Counted(operation(self.value, float(other)))

    return counted


class Counted:
    """A number that counts what is done with it."""

    __slots__ = ("value",)

    def __init__(self, value: float) -> None:
        self.value = value

    __add__ = __radd__ = _binary(lambda a, b: a + b)
    __sub__ = _binary(lambda a, b: a - b)
    __rsub__ = _binary(lambda a, b: b - a)
    __mul__ = __rmul__ = _binary(lambda a, b: a * b)
    __truediv__ = _binary(lambda a, b: a / b)
    __rtruediv__ = _binary(lambda a, b: b / a)

    def __neg__(self) -> "Counted":
        return Counted(-self.value)

    def __float__(self) -> float:
        return self.value

    def __gt__(self, other: Any) -> bool:
        return self.value > float(other)


def counting_math() -> SimpleNamespace:
    """Sine and cosine that count."""

    def counted(function: Any) -> Any:
        def call(x: Any) -> Counted:
            count["sines_cosines"] += 1
            return Counted(function(float(x)))

        return call

    return SimpleNamespace(sin=counted(math.sin), cos=counted(math.cos))


def counting_block(layout: np.dtype) -> np.void:
    """A zeroed record of `layout` whose numbers count."""
    fields = []
    for name in layout.names or ():
        field = layout[name]
        base = np.dtype(object) if field.base == np.float64 else field.base
        fields.append((name, base, field.shape))
    block = np.zeros(1, fields)
    for name in layout.names or ():
        if layout[name].base == np.float64:
            flat = block[name].reshape(-1)
            flat[:] = [Counted(0.0) for _ in range(flat.size)]
    return block[0]  # type: ignore[no-any-return]  # a record


def counting_array(values: np.ndarray) -> np.ndarray:
    """The same values as numbers that count."""
    out = np.empty(values.shape, object)
    out.reshape(-1)[:] = [Counted(float(x)) for x in values.reshape(-1)]
    return out


def count_all() -> dict[str, dict[int, dict[str, int]]]:
    """Operations of the three kernels on the shipped arms; uncompiled."""
    from rtctl.kernels import kinematics
    from rtctl.kernels.forward_dynamics import forward_dynamics
    from rtctl.kernels.inertia_matrix import inertia_matrix
    from rtctl.kernels.inverse_dynamics import inverse_dynamics
    from rtctl.kernels.layout import MODEL, SCRATCH
    from tests.bench.subjects import subject

    kinematics.math = counting_math()  # type: ignore[assignment]  # stands in for the module's math
    result: dict[str, dict[int, dict[str, int]]] = {}
    for n in JOINTS:
        arm = subject(n)
        model = counting_block(MODEL)
        for name in MODEL.names or ():
            given = arm.model[name]
            model[name] = counting_array(np.asarray(given)) if MODEL[name].base == np.float64 else given
        q, qd, qdd, tau = (counting_array(x[0]) for x in (arm.q, arm.qd, arm.qdd, arm.tau))
        ws, out, M = counting_block(SCRATCH), counting_array(np.zeros(n)), counting_array(np.zeros((n, n)))
        calls = {
            "inverse_dynamics": lambda m=model, a=(q, qd, qdd), w=ws, o=out: inverse_dynamics(m, *a, w, o),
            "inertia_matrix": lambda m=model, a=q, w=ws, o=M: inertia_matrix(m, a, w, o),
            "forward_dynamics": lambda m=model, a=(q, qd, tau), w=ws, o=out: forward_dynamics(m, *a, w, o),
        }
        for kernel, call in calls.items():
            count.update(arithmetic=0, sines_cosines=0)
            call()
            result.setdefault(kernel, {})[n] = dict(count)
    return result


def counted_operations() -> dict[str, dict[int, dict[str, int]]]:
    """`count_all` in a process of its own, in which nothing is compiled."""
    done = subprocess.run(
        [sys.executable, "-m", "tests.bench.operations"],
        env={**os.environ, "NUMBA_DISABLE_JIT": "1"},
        cwd=TOP,
        capture_output=True,
        text=True,
        check=True,
    )
    return {kernel: {int(n): counts for n, counts in by_n.items()} for kernel, by_n in json.loads(done.stdout).items()}


if __name__ == "__main__":
    print(json.dumps(count_all()))
