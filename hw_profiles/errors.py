"""The errors of palmloop.

PalmloopError
├─ ProfileError(ValueError)      bad or missing profile key: file, key, value, what is allowed
├─ CalibrationError              residual above its limit
├─ CommandError(ValueError)      target outside limits, illegal change of state
├─ RecordingError                unreadable, truncated beyond repair, wrong schema version
└─ DeviceError                   a device that is missing, busy or broken
   ├─ DeviceTimeout(TimeoutError)
   ├─ DeviceEnded                a file of frames that has been read to its end
   └─ WireError                  framing, checksum

They know nothing of HTTP or exit codes; one table in each outer surface maps class to status.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass


class PalmloopError(Exception):
    """Base of every error that palmloop raises on purpose."""


@dataclass(frozen=True)
class Problem:
    """One thing that is wrong in a profile: where it stands, what it is and what would be allowed."""

    file: str
    key: str
    value: str
    allowed: str

    def __str__(self) -> str:
        where = f"{self.file}: {self.key}" if self.key else self.file
        shown = f" = {self.value}" if self.value else ""
        return f"{where}{shown}: {self.allowed}"


class ProfileError(PalmloopError, ValueError):
    """A profile that cannot be used; `problems` names every fault found, each with file, key, value and what is allowed."""

    def __init__(self, problems: Sequence[Problem]) -> None:
        self.problems = tuple(problems)
        super().__init__("\n".join(str(problem) for problem in self.problems))


class CalibrationError(PalmloopError):
    """A calibration whose residual is above its limit, or that does not belong to this rig."""


class CommandError(PalmloopError, ValueError):
    """A target outside its limits, or a change of state that the transition table does not allow."""


class RecordingError(PalmloopError):
    """A recording that cannot be read: not one of ours, damaged beyond repair, or of another schema version."""


class DeviceError(PalmloopError):
    """A device that is missing, busy or broken."""


class DeviceTimeout(DeviceError, TimeoutError):
    """A device that did not answer in its time."""


class DeviceEnded(DeviceError):
    """A source with an end, such as a video file, that has reached it."""


class WireError(DeviceError):
    """Bytes from a device that are not a valid frame (framing, length or checksum)."""
