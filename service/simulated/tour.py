"""A simulated camera without physics: the part glides over the plate on a set course while the fingers rest clear of it.

For trying the tracker and its commands without a bench. Not modelled: contact, latency (a frame is there when its exposure ends).
"""

from __future__ import annotations

import math

import numpy as np

from control.model.kinematics import HandModel
from hw_profiles.errors import DeviceEnded, DeviceError
from hw_profiles.geometry import Pose2
from hw_profiles.rig import Rig
from service.simulated.camera import Renderer
from vision.frames import Frame

RADIUS_MM, TURNS_PER_S, YAW_PER_S = 12.0, 0.15, 0.6


class Tour:
    """A camera over a part that moves by itself; the same seed gives the same frames."""

    def __init__(self, rig: Rig, n_frames: int, seed: int) -> None:
        self._rig, self._n_frames, self._n_read, self._is_open = rig, n_frames, 0, True
        hand = HandModel(rig.hand)
        self._joints = np.array(hand.low)
        self._renderer = Renderer(rig.camera, hand, rig.part, seed)

    def pose(self, at_s: float) -> Pose2:
        """Where the part is."""
        turn = 2.0 * math.pi * TURNS_PER_S * at_s
        return Pose2(RADIUS_MM * math.cos(turn), RADIUS_MM * math.sin(2.0 * turn), 0.3 + YAW_PER_S * at_s)

    def read(self, timeout_s: float) -> Frame:
        """The next frame, at once. Raises DeviceEnded after the last."""
        if not self._is_open:
            raise DeviceError("the simulated camera is closed")
        if self._n_read == self._n_frames:
            raise DeviceEnded(f"the simulated camera has ended after {self._n_read} frames")
        captured_at_us = round(self._n_read * 1e6 / self._rig.camera.fps)
        self._n_read += 1
        return Frame(captured_at_us, self._renderer.render(self.pose(captured_at_us * 1e-6), self._joints))

    def close(self) -> None:
        """Read no more."""
        self._is_open = False
