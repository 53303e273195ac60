"""The simulated bench in simulated time: world, board and camera in lockstep with whoever reads the frames."""

from __future__ import annotations

from collections import deque

import numpy as np

from hw_profiles.errors import DeviceTimeout
from hw_profiles.geometry import Array, Pose2
from hw_profiles.rig import Rig
from service.simulated.board import BoardEmulator
from service.simulated.camera import Renderer
from service.simulated.variation import Variation
from service.simulated.world import STEP_US, World
from vision.frames import Frame

PULSE_PERIOD_US = 20_000  # a servo sees a new pulse width once in its 50 Hz frame


class SimulatedClock:
    """Reads the world's time."""

    def __init__(self, world: World) -> None:
        self._world = world

    def now_us(self) -> int:
        return self._world.now_us


class MemoryPort:
    """A serial line to the emulated board that delivers at once; nothing is lost on it."""

    def __init__(self, board: BoardEmulator, clock: SimulatedClock) -> None:
        self._board, self._clock = board, clock

    def write(self, data: bytes) -> None:
        self._board.receive(data, self._clock.now_us())

    def read(self) -> bytes:
        return self._board.transmit(self._clock.now_us())

    def close(self) -> None:
        """Nothing to release."""


class LockstepCamera:
    """Reading a frame lets the world go on until that frame has arrived: one frame period, shown as it was one latency ago."""

    def __init__(self, bench: LockstepBench) -> None:
        self._bench = bench

    def read(self, timeout_s: float) -> Frame:
        return self._bench.next_frame(timeout_s)

    def close(self) -> None:
        """Nothing to release."""


class LockstepBench:
    """A rig's simulated bench. One seed gives the same run bit for bit."""

    def __init__(self, rig: Rig, joints: Array, part_pose: Pose2, variation: Variation, seed: int) -> None:
        self.rig, self.variation = rig, variation
        self.world = World(rig, joints, part_pose, variation, np.random.default_rng([seed, 3]))
        self.board = BoardEmulator(rig.board)
        self.clock = SimulatedClock(self.world)
        self.port = MemoryPort(self.board, self.clock)
        self.camera = LockstepCamera(self)
        self._channels = [wire.channel for wire in rig.wires]
        self._renderer = Renderer(rig.camera, self.world.hand, rig.part, seed)
        self._chance = np.random.default_rng([seed, 4])
        self._period_us = round(1e6 / rig.camera.fps / STEP_US) * STEP_US
        latency_ms = rig.camera.latency_ms if variation.latency_ms is None else variation.latency_ms
        self._latency_us = round(latency_ms * 1000 / STEP_US) * STEP_US
        self._past: deque[tuple[int, Pose2, Array]] = deque(maxlen=self._latency_us // STEP_US + 2)
        self._remember()

    def next_frame(self, timeout_s: float) -> Frame:
        """Advance by frame periods until a frame arrives; raises DeviceTimeout when none does in time."""
        waited_us = 0
        while waited_us < timeout_s * 1e6:
            self.advance(self._period_us)
            waited_us += self._period_us
            frame = self.picture()
            if frame is not None:
                return frame
        raise DeviceTimeout(f"no frame within {timeout_s:g} s")

    def picture(self) -> Frame | None:
        """The frame that arrives now, of the world one latency ago; None when it is one of those that are lost."""
        if self._chance.random() < self.variation.dropout:
            return None
        captured_at_us, pose, joints = self._past[0]
        pixels = self._renderer.render(pose, joints, noise=self.variation.noise, occlusion=self.variation.occlusion)
        return Frame(captured_at_us, pixels)

    def advance(self, duration_us: int) -> None:
        """Let world and board go on; servos see new pulse widths at 50 Hz."""
        for _ in range(duration_us // STEP_US):
            if self.world.now_us % PULSE_PERIOD_US == 0:
                self.world.set_pulses(self.board.pulses_us(self.world.now_us)[self._channels])
            self.world.advance(STEP_US)
            self._remember()

    def _remember(self) -> None:
        self._past.append((self.world.now_us, self.world.part_pose, self.world.joints))
        while len(self._past) > 1 and self._past[1][0] <= self.world.now_us - self._latency_us:
            self._past.popleft()

    def truth(self) -> Pose2:
        """Where the part really is now."""
        return self.world.part_pose

    def place(self, joints: Array, part_pose: Pose2) -> None:
        """Put the fingers and the part where they are wanted, at rest; the board lets go until it is armed anew."""
        self.world.place(joints, part_pose)
        self.board = BoardEmulator(self.rig.board)
        self.port._board = self.board
        self._past.clear()
        self._remember()
