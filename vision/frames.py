"""A camera frame: pixels and the time they were exposed."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

Pixels = NDArray[np.uint8]


@dataclass(frozen=True, slots=True, eq=False)
class Frame:
    """One image.

    Attributes
    ----------
    captured_at_us : middle of the exposure on the monotonic clock of the run.
    pixels : uint8 (height, width) or (height, width, 3) in BGR order; the receiver does not write to it.
    """

    captured_at_us: int
    pixels: Pixels
