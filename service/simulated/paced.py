"""The simulated bench on the wall clock: its own process, a real pseudo-terminal for the board, frames in shared memory."""

from __future__ import annotations

import contextlib
import os
import time
import tty
from multiprocessing.connection import Connection

import numpy as np

from hw_profiles.errors import DeviceError, DeviceTimeout
from hw_profiles.geometry import Array, Pose2
from hw_profiles.rig import Rig
from service.children import ask_for_priority, die_with_parent
from service.shared import SharedBlock, frame_bytes, frame_from
from service.simulated.bench import LockstepBench
from service.simulated.variation import Variation
from service.simulated.world import STEP_US
from vision.frames import Frame

PRIORITY = 10  # below the control process: the world must keep time, the hand must keep it better
LATE_US = 200_000  # further behind than this the world does not try to catch up


def frame_shape(rig: Rig) -> tuple[int, ...]:
    """Shape of a frame's pixels."""
    size = (rig.camera.height_px, rig.camera.width_px)
    return size if rig.camera.pixel_format == "mono8" else (*size, 3)


def run_bench(rig: Rig, joints: Array, part_pose: Pose2, variation: Variation, seed: int, block_name: str, line: Connection) -> None:
    """The bench process: says where its serial line is, then lives on the wall clock until the other end of `line` closes."""
    die_with_parent()
    master, slave = os.openpty()
    tty.setraw(slave)
    os.set_blocking(master, False)
    block = SharedBlock(int(np.prod(frame_shape(rig))), block_name)
    bench = LockstepBench(rig, joints, part_pose, variation, seed)
    try:
        line.send(os.ttyname(slave))
        ask_for_priority(PRIORITY)
        _live(bench, master, block, line)
    except (EOFError, BrokenPipeError, ConnectionResetError):
        pass  # the parent is gone
    finally:
        block.close()
        os.close(master)
        os.close(slave)


def _live(bench: LockstepBench, master: int, block: SharedBlock, line: Connection) -> None:
    offset_us = time.monotonic_ns() // 1000 - bench.clock.now_us()
    period_us = round(1e6 / bench.rig.camera.fps / STEP_US) * STEP_US
    while True:
        for _ in range(period_us // STEP_US):
            late_us = time.monotonic_ns() // 1000 - offset_us - bench.clock.now_us()
            if late_us > LATE_US:
                offset_us += late_us
            elif late_us < 0:
                time.sleep(-late_us * 1e-6)
            _exchange(bench, master)
            bench.advance(STEP_US)
        if line.poll():
            _obey(bench, line.recv())
        frame = bench.picture()
        if frame is not None:
            block.write(frame_bytes(frame), frame.captured_at_us + offset_us)
            line.send(None)  # a new frame


def _exchange(bench: LockstepBench, master: int) -> None:
    with contextlib.suppress(BlockingIOError, OSError):
        bench.port.write(os.read(master, 4096))
    telemetry = bench.port.read()
    if telemetry:
        with contextlib.suppress(BlockingIOError, OSError):
            os.write(master, telemetry)


def _obey(bench: LockstepBench, order: tuple[str, object]) -> None:
    """Orders from the operator of the simulation: push the part, or put everything back."""
    match order:
        case ("push", (float(x_ns), float(y_ns))):
            bench.world.push(x_ns, y_ns)
        case ("place", (joints, Pose2() as pose)):
            bench.place(np.array(joints), pose)


class PacedCamera:
    """The bench process's frames as a camera."""

    def __init__(self, rig: Rig, block_name: str, line: Connection) -> None:
        self._shape = frame_shape(rig)
        self._block = SharedBlock(int(np.prod(self._shape)), block_name)
        self._line = line

    def read(self, timeout_s: float) -> Frame:
        try:
            if not self._line.poll(timeout_s):
                raise DeviceTimeout(f"no frame from the simulated camera within {timeout_s:g} s")
            while self._line.poll():
                self._line.recv()
        except (EOFError, OSError) as error:
            if isinstance(error, DeviceTimeout):
                raise
            raise DeviceError("the simulated bench has ended") from error
        found = self._block.read()
        if found is None:
            raise DeviceTimeout("the simulated camera is writing faster than it can be read")
        _, captured_at_us, data = found
        return frame_from(data, self._shape, captured_at_us)

    def close(self) -> None:
        self._line.close()
        self._block.close()
