"""The machine's monotonic clock."""

from __future__ import annotations

import time


class MonotonicClock:
    """CLOCK_MONOTONIC in µs: the same in every process, and never set back."""

    def now_us(self) -> int:
        return time.monotonic_ns() // 1000
