"""One call of each control law through its address, on the shipped arms with six and seven joints."""

from typing import Any

import numpy as np

from rtctl.assembly import assemble
from rtctl.blocks import LAW_INPUT, LAW_MEMORY, MAX_TERMS
from rtctl.kernels.compile import hot
from rtctl.kernels.layout import MAX_JOINTS, OK, SCRATCH, new_block
from rtctl.kernels.memory import address_of, call_address
from rtctl.laws import law_names
from tests.bench.kernels import our_loop
from tests.bench.ratios import Side, interleave
from tests.bench.subjects import STATES, Subject, subject
from tests.bench.table import Finding, cost


@hot
def loop_law(repeats, model, x, pointers, memory, ws, terms, q, qd):  # type: ignore[no-untyped-def]
    """`repeats` times through all states; returns how often the law succeeded."""
    good = 0
    for _ in range(repeats):
        for k in range(q.shape[0]):
            for i in range(q.shape[1]):
                x["q"][i] = q[k, i]
                x["qd"][i] = qd[k, i]
            status = call_address(
                pointers["law"],
                (
                    address_of(model),
                    address_of(x),
                    address_of(pointers["law_parameters"]),
                    address_of(memory),
                    address_of(ws),
                    terms.ctypes.data,
                ),
            )
            if status == OK:
                good += 1
    return good


def measure(quick: bool) -> list[tuple[str, list[Finding]]]:
    """Every law on both arms."""
    found = []
    for n in (6, 7):
        arm = subject(n)
        sides = {"inverse_dynamics": Side(our_loop("inverse_dynamics", arm), STATES)}
        names = [name for name in law_names() if name in arm.run.gains]
        assemblies = [assemble(arm.run, name, session=1) for name in names]  # kept: the blocks hold addresses of their parts
        for name, assembly in zip(names, assemblies, strict=True):
            player = law_player(assembly.pointers[name], arm)
            assert player(1) == STATES, name
            sides[name] = Side(player, STATES)
        times = interleave(sides, 15 if quick else 61)
        for name in names:
            found.append(cost(f"law_{name}_{n}_ratio", f"{name}, {n} joints", times[name], times["inverse_dynamics"]))
    return [("one call of each control law; ratio = law / inverse dynamics", found)]


def law_player(pointers: np.void, arm: Subject) -> Any:
    """A function that goes `repeats` times through all states."""
    x, memory, ws = new_block(LAW_INPUT), new_block(LAW_MEMORY), new_block(SCRATCH)
    terms = np.zeros((MAX_TERMS, MAX_JOINTS))
    x["n"], x["dt_s"] = arm.n, 1e-3
    x["qd_ref"][: arm.n], x["qdd_ref"][: arm.n] = arm.qd[0], arm.qdd[0]
    return lambda repeats: int(loop_law(repeats, arm.model, x, pointers, memory, ws, terms, arm.q, arm.qd))
