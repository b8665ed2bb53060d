"""The compiled CRC-32 against zlib and the published check value."""

import zlib

import numpy as np
from hypothesis import given, settings
from hypothesis import strategies as st

from rtctl.wire.crc import crc32
from tests.messages import bytes_in
from tests.sources import source


@source("crc-check", "check value and residue of CRC-32/ISO-HDLC")
def test_crc_has_the_published_check_value():
    """The nine bytes '123456789' give 0xCBF43926, and a message with its own CRC gives the residue."""
    data = b"123456789"
    assert crc32(bytes_in(data), len(data)) == 0xCBF43926
    whole = data + (0xCBF43926).to_bytes(4, "little")
    assert crc32(bytes_in(whole), len(whole)) == 0xDEBB20E3 ^ 0xFFFFFFFF


@source("zlib", "zlib.crc32")
@settings(deadline=None, derandomize=True, max_examples=300)
@given(st.binary(max_size=1100))
def test_crc_equals_zlib(data):
    """Any bytes of any length, whole and cut, have the CRC that zlib computes."""
    buffer = bytes_in(data + b"\xa5")
    assert crc32(buffer, len(data)) == zlib.crc32(data)
    half = len(data) // 2
    assert crc32(buffer, half) == zlib.crc32(data[:half])


@source("zlib", "zlib.crc32")
def test_crc_equals_zlib_at_every_length():
    """Every length from 0 to 1024 agrees, so that whole blocks of eight and every remainder are covered."""
    data = np.random.default_rng(20).integers(0, 256, 1024).astype(np.uint8)
    for length in range(1025):
        assert crc32(data, length) == zlib.crc32(data[:length].tobytes())
