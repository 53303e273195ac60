"""The control loop: camera, tracker, tick, board, recorder, in this order, once a frame."""

from __future__ import annotations

import time
from dataclasses import dataclass, field

from control.servoing.controller import Controller
from control.servoing.goals import Request
from control.servoing.memory import Memory
from control.servoing.report import Inputs, Report
from control.servoing.tick import tick
from hw_profiles.errors import DeviceTimeout
from hw_profiles.observation import Observation
from service.ports import Camera, Clock, Recorder, ServoLink
from vision.frames import Frame
from vision.tracker import Tracker

FRAME_TIMEOUT_S = 0.1  # without a frame for so long the loop ticks all the same, and watches


@dataclass
class Loop:
    """One rig in motion.

    last_frame, last_observation, last_report : of the newest step, for the page and for tests.
    busy_ms : from a frame in memory to its command on the line, one entry a step.
    """

    controller: Controller
    camera: Camera
    tracker: Tracker
    link: ServoLink
    clock: Clock
    recorder: Recorder | None = None
    memory: Memory = field(default_factory=Memory)
    last_frame: Frame | None = None
    last_observation: Observation | None = None
    busy_ms: list[float] = field(default_factory=list)

    def step(self, requests: tuple[Request, ...] = ()) -> Report:
        """Wait for the next frame, look at it, decide, command."""
        frame = self._next_frame()
        started_s = time.perf_counter()
        observation = None if frame is None else self.tracker.observe(frame)
        inputs = Inputs(self.clock.now_us(), observation, requests, self.link.health())
        self.memory, command, report = tick(self.controller, self.memory, inputs)
        self.link.send(command)
        self.busy_ms.append((time.perf_counter() - started_s) * 1e3)
        if self.recorder is not None:
            self.recorder.append(frame, inputs, command, report)
        if frame is not None:
            self.last_frame, self.last_observation = frame, observation
        return report

    def _next_frame(self) -> Frame | None:
        try:
            return self.camera.read(FRAME_TIMEOUT_S)
        except DeviceTimeout:
            return None

    def close(self) -> None:
        """Release what the loop holds; the board relaxes the hand when its line falls silent."""
        for device in (self.link, self.camera, self.recorder):
            if device is not None:
                device.close()
