"""A servo board as firmware makes it: it parses the real bytes, holds the pulses, and lets go when its line falls silent.

Not modelled: jitter of the pulses, brown-outs.
"""

from __future__ import annotations

import numpy as np

from control.wire.framed import NO_PULSE, BadFrame, Decoder, Limits, Rearm, Targets, Telemetry, encode
from hw_profiles.board import Board
from hw_profiles.geometry import Array

TELEMETRY_EVERY_US = 20_000
SUPPLY_MV, TEMPERATURE_DC = 5000, 280


class BoardEmulator:
    """The board's side of the line. It starts latched: no pulses before a re-arm."""

    def __init__(self, board: Board) -> None:
        self.board = board
        self._decoder = Decoder()
        self._pulses = np.full(board.n_channels, np.nan)
        self._limits = np.tile([0.0, 65535.0], (board.n_channels, 1))
        self.is_latched = True
        self._sequence = 0
        self._n_errors = 0
        self._heard_us: int | None = None
        self._told_us: int | None = None

    def receive(self, data: bytes, now_us: int) -> None:
        """Take bytes from the line."""
        self._watch(now_us)
        for message in self._decoder.feed(data):
            match message:
                case Targets(sequence, pulses_us):
                    self._heard_us, self._sequence = now_us, sequence
                    if not self.is_latched:
                        self._take(pulses_us)
                case Rearm(sequence):
                    self._heard_us, self._sequence, self.is_latched = now_us, sequence, False
                case Limits(_, channel, low_us, high_us) if channel < self.board.n_channels and low_us <= high_us:
                    self._limits[channel] = low_us, high_us
                case BadFrame():
                    self._n_errors = min(self._n_errors + 1, 0xFFFF)

    def _take(self, pulses_us: tuple[int, ...]) -> None:
        self._pulses[:] = np.nan
        wanted = np.array(pulses_us[: self.board.n_channels], dtype=float)
        clamped = np.clip(wanted, self._limits[: len(wanted), 0], self._limits[: len(wanted), 1])
        self._pulses[: len(wanted)] = np.where(wanted == NO_PULSE, np.nan, clamped)

    def _watch(self, now_us: int) -> None:
        """The watchdog: silence stops the pulses and latches."""
        if self._heard_us is not None and now_us - self._heard_us > self.board.watchdog_ms * 1000:
            self.is_latched = True
            self._pulses[:] = np.nan

    def pulses_us(self, now_us: int) -> Array:
        """Pulse width (n_channels,) [µs] on each pin; nan for none."""
        self._watch(now_us)
        return self._pulses.copy()

    def transmit(self, now_us: int) -> bytes:
        """Telemetry that is due."""
        self._watch(now_us)
        if self._told_us is not None and now_us - self._told_us < TELEMETRY_EVERY_US:
            return b""
        self._told_us = now_us
        return encode(Telemetry(self._sequence, self.is_latched, SUPPLY_MV, TEMPERATURE_DC, self._n_errors))
