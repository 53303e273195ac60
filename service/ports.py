"""What the loop needs from the world: the Protocols that real, simulated and replayed devices satisfy."""

from __future__ import annotations

from typing import Protocol

from control.servoing.report import BoardHealth, Command, Inputs, Report
from vision.frames import Frame


class Clock(Protocol):
    """The monotonic clock of a run; every `*_us` time of the run is read from it."""

    def now_us(self) -> int: ...


class Camera(Protocol):
    """A source of frames."""

    def read(self, timeout_s: float) -> Frame:
        """The next frame, not older than the newest that has arrived.

        Raises
        ------
        DeviceTimeout
            No frame arrived within `timeout_s`; the camera may still come back.
        DeviceError
            The camera is gone.
        """

    def close(self) -> None: ...


class BytePort(Protocol):
    """A serial line that never blocks the caller."""

    def write(self, data: bytes) -> None:
        """Hand bytes over for sending; a newer message may replace one not yet sent. Raises DeviceError when the line is gone."""

    def read(self) -> bytes:
        """Whatever has arrived since the last call; b"" when nothing has. Raises DeviceError when the line is gone."""

    def close(self) -> None: ...


class ServoLink(Protocol):
    """Carries commands to a servo board, in whatever bytes the board understands."""

    def send(self, command: Command) -> None:
        """Send a command; never blocks. Raises DeviceError when the line is gone."""

    def health(self) -> BoardHealth | None:
        """What the board last said of itself; None for a board that says nothing."""

    def close(self) -> None: ...


class Recorder(Protocol):
    """Keeps what the loop saw and did."""

    def append(self, frame: Frame | None, inputs: Inputs, command: Command, report: Report) -> None:
        """Take in one tick; never blocks."""

    def close(self) -> None: ...
