"""How the processes of `palmloop serve` are connected, and what they say to each other; plain values that can be sent."""

from __future__ import annotations

from dataclasses import dataclass
from multiprocessing.connection import Connection
from typing import NamedTuple

from control.servoing.goals import Request
from hw_profiles.calibration import ColourCalibration
from hw_profiles.rig import Rig
from service.simulated.variation import Variation

SNAPSHOT_BYTES = 1 << 16
LEDGER_BYTES = 1 << 18


@dataclass(frozen=True)
class Push:
    """Push the simulated part [N·s]."""

    x_ns: float
    y_ns: float


@dataclass(frozen=True)
class PutBack:
    """Put the simulated part back into the loose cage."""


Order = Push | PutBack


class Asked(NamedTuple):
    """A request or an order for the simulated bench, with a number to tell its answer by."""

    number: int
    wish: Request | Order


class Answer(NamedTuple):
    """What came of it: why it was refused, or empty."""

    number: int
    refusal: str


@dataclass(frozen=True)
class SimulatedDevices:
    """The simulated bench: what it varies, its seed, the shared block of its frames and both ends of its line."""

    variation: Variation
    seed: int
    camera_block: str
    line: Connection


@dataclass(frozen=True)
class Wiring:
    """How the control process is connected.

    simulated : None on a real rig, whose profile names its devices. colours : taught colours of the part.
    snapshot_block, ledger_block, picture_block, stop_line : names of shared memory. requests : Asked in, Answer out; before the first
    answer a str that says why the process could not start, empty when it has.
    """

    rig: Rig
    colours: ColourCalibration | None
    simulated: SimulatedDevices | None
    snapshot_block: str
    ledger_block: str
    picture_block: str
    stop_line: str
    requests: Connection
