"""Commands to a servo board that speaks palmloop's frames, over any byte port."""

from __future__ import annotations

import math

import numpy as np

from control.servoing.report import BoardHealth, Command
from control.wire.framed import Decoder, Limits, Rearm, Targets, Telemetry, encode
from control.wire.pulses import PulseMap
from hw_profiles.rig import Rig
from service.ports import BytePort, Clock


class FramedLink:
    """One board. The channels' limits are sent with every re-arm, so that the board holds them from before the first pulse."""

    def __init__(self, rig: Rig, port: BytePort, clock: Clock) -> None:
        self._board, self._port, self._clock = rig.board, port, clock
        self._map = PulseMap.of(rig)
        self._decoder = Decoder()
        self._sequence = 0
        self._heard_us = clock.now_us()
        self._last: Telemetry | None = None

    def send(self, command: Command) -> None:
        """Send a command; never blocks. Raises DeviceError when the line is gone."""
        data = b""
        if command.rearm:
            for channel, low, high in zip(self._map.channel, self._map.low_us, self._map.high_us, strict=True):
                data += encode(Limits(self._next(), int(channel), math.floor(low), math.ceil(high)))
            data += encode(Rearm(self._next()))
            self._last = None  # what the board said before is history
        pulses = np.zeros(self._board.n_channels, dtype=int)
        if command.pulses_us is not None:
            pulses[self._map.channel] = np.round(command.pulses_us).astype(int)
        n_used = int(self._map.channel.max()) + 1
        self._port.write(data + encode(Targets(self._next(), tuple(int(pulse) for pulse in pulses[:n_used]))))

    def health(self) -> BoardHealth | None:
        """What the board last said of itself; None until it has spoken."""
        for message in self._decoder.feed(self._port.read()):
            if isinstance(message, Telemetry):
                self._last, self._heard_us = message, self._clock.now_us()
        if self._last is None:
            return None
        return BoardHealth(
            silent_ms=(self._clock.now_us() - self._heard_us) * 1e-3,
            latched=self._last.is_latched,
            supply_v=math.nan if self._last.supply_mv is None else self._last.supply_mv * 1e-3,
            temperature_c=math.nan if self._last.temperature_dc is None else self._last.temperature_dc * 0.1,
        )

    def _next(self) -> int:
        self._sequence = (self._sequence + 1) % 256
        return self._sequence

    def close(self) -> None:
        """Take the pulses off and let the port go."""
        self.send(Command(None))
        self._port.close()
