"""Framing against its published examples.

COBS: S. Cheshire and M. Baker, "Consistent Overhead Byte Stuffing", IEEE/ACM Transactions on Networking 7 (1999).
CRC-16/XMODEM: check value of "123456789" in the catalogue of parametrised CRC algorithms.
"""

import pytest
from hypothesis import given
from hypothesis import strategies as st

from control.wire.framed import cobs_decode, cobs_encode, crc16

EXAMPLES = [
    ("", "01"),
    ("00", "0101"),
    ("11220033", "0311220233"),
    ("".join(f"{k:02x}" for k in range(1, 255)), "ff" + "".join(f"{k:02x}" for k in range(1, 255))),
    ("".join(f"{k:02x}" for k in range(1, 256)), "ff" + "".join(f"{k:02x}" for k in range(1, 255)) + "02ff"),
]


@pytest.mark.parametrize(("plain", "stuffed"), EXAMPLES)
def test_cobs_examples_both_ways(plain: str, stuffed: str) -> None:
    assert cobs_encode(bytes.fromhex(plain)).hex() == stuffed
    assert cobs_decode(bytes.fromhex(stuffed)) == bytes.fromhex(plain)


@given(st.binary(max_size=600))
def test_cobs_there_and_back_without_zeros(data: bytes) -> None:
    assert 0 not in cobs_encode(data)
    assert cobs_decode(cobs_encode(data)) == data


def test_crc_check_value() -> None:
    assert crc16(b"123456789") == 0x31C3
