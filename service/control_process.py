"""The process that moves the hand: devices, tracker and loop, and nothing of the web."""

from __future__ import annotations

import contextlib
import gc
import json
import signal
import time
from collections import OrderedDict
from dataclasses import dataclass
from multiprocessing.connection import Connection
from multiprocessing.synchronize import Event
from typing import Any

import numpy as np

from control.servoing.controller import Controller
from control.servoing.goals import Goal, GoTo, Outcome, Request, Stop
from control.servoing.report import Report
from hw_profiles.errors import DeviceError, PalmloopError
from hw_profiles.rig import Rig
from service.children import ask_for_priority, die_with_parent
from service.devices.clock import MonotonicClock
from service.devices.servo_port import SerialPort
from service.loop import Loop
from service.ports import Camera
from service.rehearsal import rehearse
from service.servo_link import FramedLink
from service.shared import SharedBlock, frame_bytes
from service.simulated.paced import PacedCamera, frame_shape
from service.snapshot import N_GOALS_KEPT, goal_json, report_json
from vision.tracker import Tracker

PRIORITY = 20  # of SCHED_FIFO, where the process may have it
PICTURE_EVERY_S = 0.08  # frames for the page
SNAPSHOT_BYTES = 1 << 18


@dataclass(frozen=True)
class Wiring:
    """How the control process is connected: names of shared blocks, pipe ends, the stop flag.

    requests : carries Request objects in and (refusal or "") out. frames : from the simulated bench.
    """

    rig: Rig
    serial_device: str
    camera_block: str
    frames: Connection
    snapshot_block: str
    picture_block: str
    requests: Connection
    stop: Event


def run_control(wiring: Wiring) -> None:
    """Entry of the control process: runs until the other end of `requests` closes or SIGTERM."""
    die_with_parent()
    signal.signal(signal.SIGTERM, lambda *_: (_ for _ in ()).throw(SystemExit(0)))
    snapshot, picture = SharedBlock(SNAPSHOT_BYTES, wiring.snapshot_block), SharedBlock(_n_bytes(wiring.rig), wiring.picture_block)
    try:
        loop = _assemble(wiring)
    except PalmloopError as error:
        wiring.requests.send(str(error))
        return
    wiring.requests.send("")
    gc.collect()
    gc.freeze()
    scheduling = ask_for_priority(PRIORITY)
    try:
        _Server(wiring, loop, snapshot, picture, scheduling).serve()
    except (EOFError, BrokenPipeError):
        pass  # the parent is gone; closing relaxes the hand
    finally:
        with contextlib.suppress(DeviceError):
            loop.close()
        snapshot.close()
        picture.close()


def _assemble(wiring: Wiring) -> Loop:
    rig, clock = wiring.rig, MonotonicClock()
    controller = Controller.of(rig)
    rehearse(controller)
    camera: Camera = PacedCamera(rig, wiring.camera_block, wiring.frames)
    port = SerialPort(wiring.serial_device, rig.board.baud)
    return Loop(controller, camera, Tracker(rig.camera, rig.part), FramedLink(rig, port, clock), clock)


def _n_bytes(rig: Rig) -> int:
    return int(np.prod(frame_shape(rig)))


class _Server:
    """Steps the loop, answers requests, shows snapshots."""

    def __init__(self, wiring: Wiring, loop: Loop, snapshot: SharedBlock, picture: SharedBlock, scheduling: str) -> None:
        self._wiring, self._loop = wiring, loop
        self._snapshot, self._picture = snapshot, picture
        self._scheduling = scheduling
        self._goals: OrderedDict[str, tuple[Goal, Outcome | None]] = OrderedDict()
        self._pictured_s = 0.0

    def serve(self) -> None:
        while True:
            requests: tuple[Request, ...] = ()
            is_stopping = self._wiring.stop.is_set()
            if is_stopping:
                self._wiring.stop.clear()
                requests = (Stop("stop was asked for over the network or the keyboard"),)
            asked = self._wiring.requests.poll()
            if asked:
                request = self._wiring.requests.recv()
                if request is None:
                    return
                requests = (*requests, request)
            report = self._loop.step(requests)
            self._keep_goals(requests, report)
            if asked:
                self._wiring.requests.send("; ".join(report.refusals))
            self._show(report)

    def _keep_goals(self, requests: tuple[Request, ...], report: Report) -> None:
        for request in requests:
            if isinstance(request, GoTo) and not report.refusals:
                self._goals[request.goal.id] = (request.goal, None)
        if report.goal is not None and report.goal.id not in self._goals:
            self._goals[report.goal.id] = (report.goal, None)  # a nudge makes its own
        for outcome in report.outcomes:
            if outcome.goal_id in self._goals:
                self._goals[outcome.goal_id] = (self._goals[outcome.goal_id][0], outcome)
        while len(self._goals) > N_GOALS_KEPT:
            self._goals.popitem(last=False)

    def _show(self, report: Report) -> None:
        loop = self._loop
        busy = np.array(loop.busy_ms[-500:])
        shown: dict[str, Any] = report_json(report, loop.link.health(), loop.clock.now_us())
        shown["loop"] = {
            "n_ticks": len(loop.busy_ms),
            "busy_ms_p50": round(float(np.median(busy)), 2),
            "busy_ms_p99": round(float(np.percentile(busy, 99)), 2),
            "scheduling": self._scheduling,
        }
        shown["goals"] = [goal_json(goal, outcome) for goal, outcome in self._goals.values()]
        self._snapshot.write(json.dumps(shown, allow_nan=False).encode())
        if loop.last_frame is not None and time.monotonic() - self._pictured_s > PICTURE_EVERY_S:
            self._pictured_s = time.monotonic()
            self._picture.write(frame_bytes(loop.last_frame), loop.last_frame.captured_at_us)
