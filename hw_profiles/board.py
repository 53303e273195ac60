"""The servo board: what turns bytes into pulses."""

from __future__ import annotations

from typing import Literal

from pydantic import Field

from hw_profiles.base import Name, Positive, Profile


class Board(Profile):
    """A servo board on a serial line."""

    name: Name
    title: str = ""
    codec: Literal["framed"] = Field(description="framed: palmloop's own frames, docs/wire.md")
    n_channels: int = Field(ge=1, le=32)
    rate_hz: Positive = Field(50.0, description="servo frames per second")
    pulse_step_us: Positive = Field(1.0, description="resolution of the pulse width")
    watchdog_ms: int = Field(ge=20, le=2000, description="silence after which the board stops its pulses and latches")
    baud: int = Field(115200, ge=9600, le=4_000_000)
