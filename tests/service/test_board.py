"""The emulated board: what firmware promises."""

import numpy as np

from control.wire.framed import Decoder, Limits, Rearm, Targets, Telemetry, encode
from hw_profiles import load
from service.simulated.board import BoardEmulator


def board() -> BoardEmulator:
    return BoardEmulator(load.load_board("bench-framed"))


def armed() -> BoardEmulator:
    made = board()
    made.receive(encode(Rearm(1)) + encode(Targets(2, (1500, 1600))), 0)
    return made


def test_no_pulse_before_a_rearm() -> None:
    made = board()
    made.receive(encode(Targets(1, (1500,) * 6)), 0)
    assert np.isnan(made.pulses_us(1000)).all()


def test_pulses_follow_targets_and_zero_is_no_pulse() -> None:
    made = armed()
    assert made.pulses_us(1000)[:2].tolist() == [1500.0, 1600.0]
    made.receive(encode(Targets(3, (0, 1700))), 2000)
    assert np.isnan(made.pulses_us(3000)[0])
    assert made.pulses_us(3000)[1] == 1700.0


def test_silence_trips_the_watchdog_and_only_a_rearm_ends_it() -> None:
    made = armed()
    assert not np.isnan(made.pulses_us(99_000)[0])
    assert np.isnan(made.pulses_us(101_000)).all()
    made.receive(encode(Targets(3, (1500, 1600))), 120_000)
    assert np.isnan(made.pulses_us(121_000)).all()
    made.receive(encode(Rearm(4)) + encode(Targets(5, (1500, 1600))), 130_000)
    assert made.pulses_us(131_000)[0] == 1500.0


def test_pulses_are_clamped_to_the_channels_limits() -> None:
    made = armed()
    made.receive(encode(Limits(3, 0, 1000, 2000)) + encode(Targets(4, (2400, 2400))), 1000)
    assert made.pulses_us(2000)[:2].tolist() == [2000.0, 2400.0]


def test_noise_moves_nothing_and_is_counted() -> None:
    made = armed()
    made.receive(bytes(np.random.default_rng(2).integers(1, 256, size=500, dtype=np.uint8)) + b"\x00", 1000)
    assert made.pulses_us(2000)[0] == 1500.0
    told = Decoder().feed(made.transmit(50_000))
    assert isinstance(told[0], Telemetry)
    assert told[0].n_errors >= 1
