"""Dynamics kernels inside compiled code, against the C++ rigid-body library and against the arithmetic they need."""

import math
from collections.abc import Callable
from typing import Any

import numpy as np

from rtctl.kernels.compile import hot
from rtctl.kernels.forward_dynamics import forward_dynamics
from rtctl.kernels.inertia_matrix import inertia_matrix
from rtctl.kernels.inverse_dynamics import inverse_dynamics
from rtctl.kernels.layout import MAX_JOINTS, SCRATCH, new_block
from tests.bench.operations import counted_operations
from tests.bench.ratios import Side, Times, interleave
from tests.bench.subjects import STATES, Subject, subject
from tests.bench.table import Finding, cost, faster, time_text

AIMS = {"inverse_dynamics": "> 1.5, aim 4", "inertia_matrix": "> 1.5, aim 3", "forward_dynamics": "> 1.5, aim 3"}
WORDS = {"inverse_dynamics": "inverse dynamics", "inertia_matrix": "inertia matrix", "forward_dynamics": "forward dynamics"}
CHAINS = 12  # of independent multiplications and additions: more than two units of four cycles can hold
CHAIN_STEPS = 1000
AGREEMENT = 1e-9  # of the sums over all states of both sides: they must have computed the same


@hot
def loop_inverse_dynamics(repeats, model, q, qd, third, ws, out):  # type: ignore[no-untyped-def]
    """`repeats` times through all states; returns the sum of the first torques."""
    total = 0.0
    for _ in range(repeats):
        for k in range(q.shape[0]):
            inverse_dynamics(model, q[k], qd[k], third[k], ws, out)
            total += out[0]
    return total


@hot
def loop_inertia_matrix(repeats, model, q, qd, third, ws, out):  # type: ignore[no-untyped-def]
    """The same for the inertia matrix; the sum of its first elements."""
    total = 0.0
    M = ws["M"][:]
    for _ in range(repeats):
        for k in range(q.shape[0]):
            inertia_matrix(model, q[k], ws, M)
            total += M[0, 0]
    return total


@hot
def loop_forward_dynamics(repeats, model, q, qd, third, ws, out):  # type: ignore[no-untyped-def]
    """The same for forward dynamics; the sum of the first accelerations."""
    total = 0.0
    for _ in range(repeats):
        for k in range(q.shape[0]):
            forward_dynamics(model, q[k], qd[k], third[k], ws, out)
            total += out[0]
    return total


@hot
def loop_sines_cosines(repeats, n, q):  # type: ignore[no-untyped-def]
    """Sine and cosine of every joint, `repeats` times through all states."""
    total = 0.0
    for _ in range(repeats):
        for k in range(q.shape[0]):
            for i in range(n):
                total += math.cos(q[k, i]) + math.sin(q[k, i])
    return total


@hot
def loop_arithmetic(repeats, a, b):  # type: ignore[no-untyped-def]
    """Independent chains x = a x + b: as many multiplications and additions per time as the processor can do one by one."""
    # They start apart: equal ones the compiler would merge.
    x0, x1, x2, x3, x4, x5, x6, x7, x8, x9, xa, xb = 1.0, 2.0, 3.0, 4.0, 5.0, 6.0, 7.0, 8.0, 9.0, 10.0, 11.0, 12.0
    for _ in range(repeats * CHAIN_STEPS):
        x0, x1, x2, x3 = a * x0 + b, a * x1 + b, a * x2 + b, a * x3 + b
        x4, x5, x6, x7 = a * x4 + b, a * x5 + b, a * x6 + b, a * x7 + b
        x8, x9, xa, xb = a * x8 + b, a * x9 + b, a * xa + b, a * xb + b
    return x0 + x1 + x2 + x3 + x4 + x5 + x6 + x7 + x8 + x9 + xa + xb


OURS: dict[str, Any] = {
    "inverse_dynamics": loop_inverse_dynamics,
    "inertia_matrix": loop_inertia_matrix,
    "forward_dynamics": loop_forward_dynamics,
}


def our_loop(kernel: str, arm: Subject) -> Callable[[int], float]:
    """A function that goes `repeats` times through all states of an arm."""
    loop, ws, out = OURS[kernel], new_block(SCRATCH), np.zeros(MAX_JOINTS)
    third = arm.tau if kernel == "forward_dynamics" else arm.qdd
    return lambda repeats: float(loop(repeats, arm.model, arm.q, arm.qd, third, ws, out))


def measure(quick: bool) -> list[tuple[str, list[Finding]]]:
    """Against the library, then against the arithmetic."""
    library: list[Finding] = []
    arithmetic: list[Finding] = []
    counts = counted_operations()
    for n in (6, 7):
        arm = subject(n)
        sides, reasons = library_sides(arm, build=not quick)
        for kernel in OURS:
            compared, alone = measure_kernel(arm, kernel, sides[kernel], 21 if quick else 101)
            library += compared
            arithmetic.append(limit_of(arm, kernel, alone, counts[kernel][n]))
        if n == 7:
            library += [Finding("", f"no comparison: {reason}", "") for reason in reasons]
    return [
        (
            "dynamics kernels, one call inside compiled code, against the C++ rigid-body library `pin`; ratio = library / ours",
            library,
        ),
        (
            "the same against their arithmetic: counted operations one by one, then sines and cosines; ratio = ours / limit",
            arithmetic,
        ),
    ]


def library_sides(arm: Subject, build: bool) -> tuple[dict[str, dict[str, Side]], list[str]]:
    """Sides "binding", "trivial" and "native" of each kernel, as far as they can be had here, and why the others cannot."""
    sides: dict[str, dict[str, Side]] = {kernel: {} for kernel in OURS}
    try:
        from tests.oracles.pin_speed import BindingSide, NativeSide, native_library
    except ImportError as error:
        return sides, [f"{error.name} is not installed"]
    states = (arm.model, arm.q, arm.qd, arm.qdd, arm.tau)
    binding = BindingSide(*states)
    for kernel in OURS:
        sides[kernel] = {
            "binding": Side(binding.loop(kernel, trivial=False), STATES),
            "trivial": Side(binding.loop(kernel, trivial=True), STATES),
        }
    try:
        native = NativeSide(native_library(build), *states)
    except LookupError as error:
        return sides, [f"native build: {error}"]
    for kernel in OURS:
        loop = native.loop(kernel)
        ours, theirs = our_loop(kernel, arm)(1), loop(1)
        assert abs(ours - theirs) < AGREEMENT * max(1.0, abs(theirs)), f"{kernel}: {ours} is not {theirs}"
        sides[kernel]["native"] = Side(loop, STATES)
    return sides, []


def measure_kernel(arm: Subject, kernel: str, others: dict[str, Side], rounds: int) -> tuple[list[Finding], dict[str, Times]]:
    """Ratios of one kernel to the library, and its times beside those of bare arithmetic, all in the same rounds."""
    sides = {
        "ours": Side(our_loop(kernel, arm), STATES),
        **others,
        "sines": Side(lambda repeats: loop_sines_cosines(repeats, arm.n, arm.q), STATES),
        "chains": Side(lambda repeats: loop_arithmetic(repeats, 0.999, 0.001), 2 * CHAINS * CHAIN_STEPS),
    }
    times = interleave(sides, rounds)
    what, key = f"{WORDS[kernel]}, {arm.n} joints", f"{kernel}_{arm.n}"
    found = []
    if "native" in times:
        found.append(faster(f"{key}_native_ratio", f"{what}, native", times["ours"], times["native"], AIMS[kernel]))
    if "binding" in times:
        empty = float(np.median(times["trivial"]))
        net = times["binding"] - empty
        note = f"a call costs {time_text(float(np.median(times['binding'])))}, one with nothing to do {time_text(empty)}"
        found.append(faster(f"{key}_binding_ratio", f"{what}, Python binding less calls", times["ours"], net, AIMS[kernel], note))
    return found, times


def limit_of(arm: Subject, kernel: str, times: dict[str, Times], count: dict[str, int]) -> Finding:
    """How close a kernel is to its arithmetic."""
    limit = count["arithmetic"] * times["chains"] + times["sines"]
    sines, chains = float(np.median(times["sines"])), float(np.median(times["chains"]))
    note = (
        f"{count['arithmetic']} operations at {1.0 / chains:.1f} per ns, {count['sines_cosines']} sines, cosines: {sines:.0f} ns"
    )
    key = f"{kernel}_{arm.n}_limit_ratio"
    return cost(key, f"{WORDS[kernel]}, {arm.n} joints", times["ours"], limit, note=note)
