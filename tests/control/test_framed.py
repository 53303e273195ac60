"""The framed codec: every message both ways, in any chunks, and never a wrong value from damaged bytes."""

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st

from control.wire.framed import BadFrame, Decoder, Limits, Message, Rearm, Targets, Telemetry, encode

MESSAGES: list[Message] = [
    Targets(7, (1500, 0, 2500, 500)),
    Targets(255, tuple(range(1000, 1032))),
    Rearm(3),
    Limits(9, 15, 600, 2400),
    Telemetry(200, True, 4980, 315, 12),
    Telemetry(0, False, None, None, 0),
]


@pytest.mark.parametrize("message", MESSAGES)
def test_message_whole_byte_by_byte_and_with_more_after(message: Message) -> None:
    data = encode(message)
    assert Decoder().feed(data) == [message]
    decoder = Decoder()
    assert [found for byte in data for found in decoder.feed(bytes([byte]))] == [message]
    assert Decoder().feed(data + data[:5]) == [message]


@given(st.binary(max_size=300), st.sampled_from(MESSAGES))
def test_noise_before_never_costs_the_next_frame(noise: bytes, message: Message) -> None:
    found = Decoder().feed(noise + encode(message))
    assert found[-1] == message


@pytest.mark.parametrize("message", MESSAGES)
def test_one_flipped_bit_never_gives_another_message(message: Message) -> None:
    data = encode(message)
    for bit in range(8 * len(data)):
        damaged = bytearray(data)
        damaged[bit // 8] ^= 1 << (bit % 8)
        others = [found for found in Decoder().feed(bytes(damaged)) if not isinstance(found, BadFrame)]
        assert others in ([], [message])


def test_bursts_of_damage_are_refused() -> None:
    rng = np.random.default_rng(11)
    n_accepted_wrong = 0
    for _ in range(20_000):
        message = Targets(int(rng.integers(256)), tuple(int(p) for p in rng.integers(500, 2500, size=6)))
        damaged = bytearray(encode(message))
        for _ in range(int(rng.integers(1, 4))):
            damaged[int(rng.integers(len(damaged)))] = int(rng.integers(256))
        n_accepted_wrong += any(not isinstance(f, BadFrame) and f != message for f in Decoder().feed(bytes(damaged)))
    assert n_accepted_wrong <= 3  # 16 bits of checksum leave one in 65536 of those that keep their framing


def test_decoder_memory_stays_bounded() -> None:
    decoder = Decoder()
    decoder.feed(b"\x55" * 1_000_000)
    assert len(decoder._pending) < 100
    assert isinstance(decoder.feed(b"\x00")[0], BadFrame)
