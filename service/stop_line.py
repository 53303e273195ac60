"""The way of a stop from the web to the loop: two counts in shared memory, behind nothing and locked by nothing."""

from __future__ import annotations

import struct
from multiprocessing import shared_memory

COUNT = struct.Struct("<Q")
ASKED, TAKEN = 0, COUNT.size


class StopLine:
    """Stops asked for, and stops the loop has taken. One process writes each count; every step of the loop looks at both.

    A pipe or a lock would not do: a peer that is stopped while it holds the lock, or that does not read, would hold the stop up.
    """

    def __init__(self, name: str | None = None) -> None:
        self._is_owner = name is None
        self._memory = shared_memory.SharedMemory(name=name, create=self._is_owner, size=2 * COUNT.size)
        assert self._memory.buf is not None
        self._buffer: memoryview = self._memory.buf
        if self._is_owner:
            self._buffer[:] = bytes(len(self._buffer))

    @property
    def name(self) -> str:
        """What another process opens it by."""
        return self._memory.name

    def ask(self) -> int:
        """Ask for a stop; returns its number. Waits for nothing."""
        number = self._count(ASKED) + 1
        COUNT.pack_into(self._buffer, ASKED, number)
        return number

    def pending(self) -> int:
        """The number of the newest stop that the loop has not taken; 0 when there is none."""
        asked = self._count(ASKED)
        return asked if asked != self._count(TAKEN) else 0

    def take(self, number: int) -> None:
        """The loop says that it has latched the stop of this number and all before."""
        COUNT.pack_into(self._buffer, TAKEN, number)

    def is_taken(self, number: int) -> bool:
        """Whether the loop has latched that stop."""
        return self._count(TAKEN) >= number

    def _count(self, offset: int) -> int:
        count: int = COUNT.unpack_from(self._buffer, offset)[0]
        return count

    def close(self) -> None:
        """Let it go; the owner takes it away for all."""
        self._buffer.release()
        self._memory.close()
        if self._is_owner:
            self._memory.unlink()
