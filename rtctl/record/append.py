"""The compiled side of the ring: one row in, no allocation, no waiting, no system call."""

import numpy as np

from rtctl.kernels.compile import hot
from rtctl.kernels.layout import OK
from rtctl.kernels.memory import address_of, array_at, atomic_fence, atomic_load, atomic_store
from rtctl.record.ring import CONTROL_WORD, SLOT_BEING_WRITTEN
from rtctl.record.rows import WORD_BYTES

_ROW_COUNT_BYTES = CONTROL_WORD["row_count"] * WORD_BYTES


@hot
def ring_append(ring, row):  # type: ignore[no-untyped-def]  # both are records: numba types them
    """Copy one full-width row into the next slot of the ring and publish it. The oldest row is overwritten when the ring is full.

    ring    RING    addresses and segment list, from `Ring.block`
    row     ROW     this cycle, full width

    Returns OK. One writer only. A reader sees the row once `row_count` counts it; while the slot is being written its sequence
    word says so, and the fence keeps the row's words from becoming visible before that mark.
    """
    count = atomic_load(ring["control"] + _ROW_COUNT_BYTES)
    slot_words = ring["slot_words"]
    address = ring["slots"] + (count % ring["capacity"]) * slot_words * WORD_BYTES
    slot = array_at(address, slot_words, np.int64)
    source = array_at(address_of(row), ring["full_words"], np.int64)
    atomic_store(address, SLOT_BEING_WRITTEN)
    atomic_fence()
    for k in range(ring["segment_count"]):
        first = ring["source"][k]
        target = 1 + ring["target"][k]
        for i in range(ring["words"][k]):
            slot[target + i] = source[first + i]
    atomic_store(address, count + 1)
    atomic_store(ring["control"] + _ROW_COUNT_BYTES, count + 1)
    return OK
