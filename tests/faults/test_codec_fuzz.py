"""Damaged and hostile messages: never a crash, never a read beyond the end, never a changed value accepted.

Everything is seeded, so a failure repeats. The whole file also runs once with bounds checks compiled in.
"""

import os
import subprocess
import sys
from pathlib import Path

import numpy as np
import pytest

from rtctl.blocks import MAX_MESSAGE_BYTES, STATE, TORQUE
from rtctl.kernels.layout import OK, new_block
from rtctl.wire import refusals
from rtctl.wire.codec import decode_state, decode_torque
from tests.messages import (
    Refused,
    array_header,
    block_values,
    bytes_in,
    example_state,
    example_torque,
    integer_forms,
    joined,
    number_forms,
    packed,
    reference_read,
    sealed,
    state_items,
    torque_items,
)

CODES = {refusal.code for refusal in refusals.REFUSALS}
SEED = 20250


def _seed_messages(kind, rng, count):
    """`count` valid messages of one kind with 1 to 16 joints, half of them in forms picked at random."""
    messages = []
    for k in range(count):
        n = int(rng.integers(1, 17))
        block = example_state(n, seed=k, with_tau=bool(k % 3)) if kind == 1 else example_torque(n, seed=k)
        items = state_items(block) if kind == 1 else torque_items(block)
        if kind == 1:
            items[-1] = {} if k % 4 else {"temperature_degc": [20.0 + k] * n, "bus_v": 48}
        if k % 2 and kind == 2:
            elements = []
            for item in items:
                if isinstance(item, list):
                    elements.append(array_header(len(item), True) + b"".join(number_forms(round(x))[-1] for x in item))
                else:
                    forms = integer_forms(item)
                    elements.append(forms[int(rng.integers(len(forms)))])
            messages.append(joined(elements, crc_form=int(rng.integers(3)), wide=True))
        else:
            messages.append(packed(items))
    return messages


def _decode(data, kind):
    """(status, block) with the message in an array of exactly its length."""
    block = new_block(STATE if kind == 1 else TORQUE)
    return (decode_state if kind == 1 else decode_torque)(bytes_in(data), len(data), block), block


def _same(left, right):
    """Equal counters and vectors, where not-a-number equals itself."""
    return left[0] == right[0] and all(np.array_equal(a, b, equal_nan=True) for a, b in zip(left[1], right[1], strict=True))


def _agree(data, kind):
    """Check one message against the reference reader; True if accepted."""
    status, block = _decode(data, kind)
    assert status == OK or status in CODES
    try:
        expected = reference_read(data, kind)
    except Refused:
        assert status != OK, data.hex()
        return False
    assert status == OK, (status, data.hex())
    assert _same(block_values(block, kind), expected), data.hex()
    return True


@pytest.mark.slow
@pytest.mark.parametrize("kind", [1, 2])
def test_no_message_with_changed_bytes_is_accepted_with_a_changed_value(kind):
    """Of 15,000 messages of each kind with 1 to 3 changed bytes, none is accepted with another value than the sent one."""
    rng = np.random.default_rng(SEED + kind)
    originals = _seed_messages(kind, rng, 60)
    values = [block_values(_decode(data, kind)[1], kind) for data in originals]
    accepted = 0
    for k in range(15_000):
        data = bytearray(originals[k % 60])
        for _ in range(int(rng.integers(1, 4))):
            data[int(rng.integers(len(data)))] ^= int(rng.integers(1, 256))
        status, block = _decode(data, kind)
        if status == OK:
            accepted += 1
            assert _same(block_values(block, kind), values[k % 60]), bytes(data).hex()
        else:
            assert status in CODES
    # Two changes of one byte may cancel out, and the CRC may come in another form of the same value; nothing else gets through.
    assert accepted <= 15


@pytest.mark.slow
@pytest.mark.parametrize("kind", [1, 2])
def test_hostile_messages_with_a_right_crc_agree_with_the_reference_reader(kind):
    """15,000 mutated messages of each kind, sealed with a right CRC, are accepted just when the reference reader does."""
    rng = np.random.default_rng(SEED + 10 + kind)
    bodies = []
    for data in _seed_messages(kind, rng, 60):
        cut = next(cut for cut in range(len(data) - 9, len(data)) if reference_accepts(sealed(data[:cut]), kind))
        bodies.append(data[:cut])
    interesting = bytes.fromhex("00017f8081909fa0bfc0c1c4cacbcccdcecfd0d1d2d3d9dadcdddedfe0ff")
    accepted = 0
    for k in range(15_000):
        body = bytearray(bodies[k % 60])
        for _ in range(int(rng.integers(1, 4))):
            at = int(rng.integers(len(body)))
            action = rng.integers(4)
            if action == 0:
                body[at] = interesting[int(rng.integers(len(interesting)))]
            elif action == 1:
                body[at] ^= 1 << int(rng.integers(8))
            elif action == 2:
                body[at:at] = bytes([interesting[int(rng.integers(len(interesting)))]])
            elif len(body) > 3:
                del body[at : at + int(rng.integers(1, 4))]
        accepted += _agree(sealed(bytes(body)), kind)
    assert accepted > 500  # most values of a float or a counter are legal: the comparison has something to compare


def reference_accepts(data, kind):
    """True if the reference reader accepts the message."""
    try:
        reference_read(data, kind)
    except Refused:
        return False
    return True


@pytest.mark.slow
@pytest.mark.parametrize("kind", [1, 2])
def test_cut_spliced_and_random_bytes_never_crash(kind):
    """15,000 cut, spliced, padded and random byte strings of each kind get the reference reader's verdict."""
    rng = np.random.default_rng(SEED + 20 + kind)
    originals = _seed_messages(kind, rng, 40)
    for k in range(15_000):
        data = originals[k % 40]
        other = originals[int(rng.integers(40))]
        action = k % 5
        if action == 0:
            data = data[: int(rng.integers(len(data)))]
        elif action == 1:
            data = data[: int(rng.integers(len(data)))] + other[int(rng.integers(len(other))) :]
        elif action == 2:
            data = data + rng.bytes(int(rng.integers(1, 1100 - len(data))))
        elif action == 3:
            data = rng.bytes(int(rng.integers(0, 1200)))
        else:
            data = data[: int(rng.integers(1, 40))] + rng.bytes(int(rng.integers(0, 300)))
        if _agree(data, kind):
            assert data in originals


def test_deep_and_wide_containers_are_refused_at_once():
    """Containers that promise more than the message holds, or nest, end in a refusal."""
    body = packed(state_items(example_state(1, with_tau=False)))
    start = body[:-6]  # without the empty map and the five bytes of the CRC
    for bomb in (
        b"\xde\xff\xff",
        b"\x81\xa1a\xdc\xff\xff",
        b"\x81\xda\xff\xff",
        b"\x81\xa1a" + b"\x91" * 800,
        b"\x81" * 800,
        b"\xdf" + b"\xff" * 4,
    ):
        for tail in (b"", bytes(100), b"\x91" * 100, b"\xdc\xff\xff" * 30):
            status, _ = _decode((start + bomb + tail)[:MAX_MESSAGE_BYTES], 1)
            assert status in (refusals.EXTRAS, refusals.TRUNCATED), bomb.hex()


@pytest.mark.slow
def test_fuzzing_holds_with_bounds_checks_compiled_in():
    """With bounds checks an index beyond an array would be an error; the same messages cause none."""
    root = Path(__file__).resolve().parents[2]
    files = [__file__, str(root / "tests/unit/test_codec.py"), str(root / "tests/unit/test_crc.py")]
    run = subprocess.run(
        [sys.executable, "-m", "pytest", "-q", "-p", "no:cacheprovider", "-k", "not bounds_checks", *files],
        env={**os.environ, "NUMBA_BOUNDSCHECK": "1"},
        cwd=root,
        capture_output=True,
        text=True,
        timeout=300,
    )
    assert run.returncode == 0, run.stdout[-4000:]
