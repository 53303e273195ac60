"""Frames and snapshots that one process writes and others read, through shared memory."""

from __future__ import annotations

import struct
from multiprocessing import shared_memory

import numpy as np

from vision.frames import Frame, Pixels

HEADER = struct.Struct("<QQq")  # version (odd while it is being written), length, captured_at_us


class SharedBlock:
    """The newest value of something, with one writer. A reader takes a copy and tries again if it was being written (a seqlock)."""

    def __init__(self, size: int, name: str | None = None) -> None:
        self._is_owner = name is None
        self._memory = shared_memory.SharedMemory(name=name, create=self._is_owner, size=HEADER.size + size)
        assert self._memory.buf is not None
        self._buffer: memoryview = self._memory.buf
        self._size = size
        if self._is_owner:
            HEADER.pack_into(self._buffer, 0, 0, 0, 0)

    @property
    def name(self) -> str:
        """What another process opens it by."""
        return self._memory.name

    def write(self, data: memoryview | bytes, stamp: int = 0) -> None:
        """Replace the value; data beyond the block's size is refused."""
        if len(data) > self._size:
            raise ValueError(f"{len(data)} bytes do not fit the shared block of {self._size}")
        version, _, _ = HEADER.unpack_from(self._buffer, 0)
        HEADER.pack_into(self._buffer, 0, version + 1, len(data), stamp)
        self._buffer[HEADER.size : HEADER.size + len(data)] = data
        HEADER.pack_into(self._buffer, 0, version + 2, len(data), stamp)

    def version(self) -> int:
        """Even, and grows with every write; 0 before the first. Tells cheaply whether a read would bring something new."""
        version: int = HEADER.unpack_from(self._buffer, 0)[0]
        return version - version % 2

    def stamp(self) -> int:
        """Of the newest write; costs next to nothing."""
        stamp: int = HEADER.unpack_from(self._buffer, 0)[2]
        return stamp

    def read(self) -> tuple[int, int, bytes] | None:
        """Version, stamp and a copy of the value; None before the first, or while a writer is too busy."""
        for _ in range(100):
            version, length, stamp = HEADER.unpack_from(self._buffer, 0)
            if version == 0:
                return None
            if version % 2 == 0 and length <= self._size:
                data = bytes(self._buffer[HEADER.size : HEADER.size + length])
                if HEADER.unpack_from(self._buffer, 0)[0] == version:
                    return version, stamp, data
        return None

    def close(self) -> None:
        """Let it go; the owner takes it away for all."""
        self._buffer.release()
        self._memory.close()
        if self._is_owner:
            self._memory.unlink()


def frame_bytes(frame: Frame) -> memoryview:
    """The pixels as one run of bytes."""
    return np.ascontiguousarray(frame.pixels).data.cast("B")


def frame_from(data: bytes, shape: tuple[int, ...], captured_at_us: int) -> Frame:
    """A frame from its bytes."""
    pixels: Pixels = np.frombuffer(data, dtype=np.uint8).reshape(shape)
    return Frame(captured_at_us, pixels)
