"""Blocks by address, calls by address, atomic words."""

import threading

import numpy as np

from rtctl.kernels.compile import callback, hot
from rtctl.kernels.layout import new_block
from rtctl.kernels.memory import (
    address_of,
    array_at,
    atomic_add,
    atomic_exchange,
    atomic_load,
    atomic_store,
    block_at,
    call_address,
)

PAIR = np.dtype([("word", "i8"), ("values", "f8", 4)], align=True)


@hot
def fill(block):
    """Write through a block found again by its address."""
    there = block_at(address_of(block), PAIR)
    there["values"][2] = 2.5
    flat = array_at(address_of(block) + 8, 4, np.float64)
    flat[3] = 3.5
    return atomic_exchange(address_of(block), 7)


@hot
def count_up(block, times):
    """Add one, `times` times, atomically."""
    for _ in range(times):
        atomic_add(address_of(block), 1)
    return atomic_load(address_of(block))


@hot
def wait_for(block, limit):
    """Spin until the word is not zero; a plain load would be hoisted out of the loop and never see it."""
    for k in range(limit):
        if atomic_load(address_of(block)) != 0:
            return k
    return -1


@hot
def put(block, value):
    """Store one word."""
    atomic_store(address_of(block), value)
    return 1


def factor(x):
    """What `double_first` applies; each callback binds another."""
    return x


def double_first(a: int, b: int) -> int:
    """Template of a C function: reads one block, writes another."""
    x = block_at(a, PAIR)
    y = block_at(b, PAIR)
    y["values"][0] = factor(x["values"][0])
    return 11


@hot
def twice(x):
    """2 x"""
    return 2.0 * x


@hot
def thrice(x):
    """3 x"""
    return 3.0 * x


@hot
def call_two(address, a, b):
    """Call a C function with two block addresses."""
    return call_address(address, (address_of(a), address_of(b)))


def test_a_block_is_reached_by_its_address() -> None:
    """Writes through block_at and array_at land in the numpy block itself; exchange returns the old word."""
    block = new_block(PAIR)
    block["word"] = 5
    assert fill(block) == 5
    assert int(block["word"]) == 7
    assert block["values"].tolist() == [0.0, 0.0, 2.5, 3.5]


def test_atomic_adds_of_two_threads_lose_nothing() -> None:
    """Two threads without the interpreter lock add 200,000 each."""
    block = new_block(PAIR)
    count_up(block, 0)
    threads = [threading.Thread(target=count_up, args=(block, 200_000)) for _ in range(2)]
    for thread in threads:
        thread.start()
    for thread in threads:
        thread.join()
    assert int(block["word"]) == 400_000


def test_a_spinning_thread_sees_a_store_of_another() -> None:
    """The flag is seen while the loop runs, not after it."""
    block = new_block(PAIR)
    put(block, 1)
    assert wait_for(block, 10) == 0
    put(block, 0)
    found: list[int] = []
    thread = threading.Thread(target=lambda: found.append(int(wait_for(block, 2_000_000_000))))
    thread.start()
    put(block, 1)
    thread.join()
    assert found[0] >= 0


def test_one_template_makes_different_c_functions_by_what_is_bound() -> None:
    """Two functions of one template do what was bound to each, and one compiled caller calls both."""
    a, b = new_block(PAIR), new_block(PAIR)
    a["values"][0] = 10.0
    for name, factor, expected in (("twice", twice, 20.0), ("thrice", thrice, 30.0)):
        entry = callback(double_first, name, 2, factor=factor)
        assert call_two(entry.address, a, b) == 11
        assert float(b["values"][0]) == expected
    assert len(call_two.signatures) == 1
