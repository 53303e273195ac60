"""The process that moves the hand: devices, tracker and loop, and nothing of the web."""

from __future__ import annotations

import contextlib
import gc
import json
import os
import signal
import time
from collections import deque
from typing import Any

import numpy as np

from control.servoing.controller import Controller
from control.servoing.goals import Request, Stop
from control.servoing.memory import Memory
from control.servoing.report import Report
from control.servoing.states import PULSES_ON, State
from hw_profiles.errors import DeviceError, PalmloopError
from hw_profiles.rig import Rig
from service.children import ask_for_priority, die_with_parent
from service.devices.clock import MonotonicClock
from service.devices.servo_port import SerialPort
from service.devices.webcam import Webcam
from service.ledger import Ledger
from service.loop import Loop
from service.ports import Camera
from service.rehearsal import rehearse
from service.servo_link import FramedLink
from service.shared import SharedBlock, frame_bytes
from service.simulated.dropped import drawn_start
from service.simulated.paced import PacedCamera, frame_shape
from service.snapshot import drawing_json, report_json
from service.stop_line import StopLine
from service.wiring import LEDGER_BYTES, SNAPSHOT_BYTES, Answer, Asked, Order, PutBack, SimulatedDevices, Wiring
from vision.tracker import Tracker

PRIORITY = 20  # of SCHED_FIFO, where the process may have it
PICTURE_EVERY_S = 0.06  # frames for the page
N_BUSY = 500  # steps that the loop's own times are told over
BUSY_EVERY = 25


def run_control(wiring: Wiring) -> None:
    """Entry of the control process: runs until the other end of `requests` closes, a device breaks, or SIGTERM."""
    die_with_parent()
    signal.signal(signal.SIGTERM, lambda *_: (_ for _ in ()).throw(SystemExit(0)))
    try:
        loop = _assemble(wiring)
    except PalmloopError as error:
        wiring.requests.send(str(error))
        return
    wiring.requests.send("")
    gc.collect()
    gc.freeze()
    server = ControlServer(wiring, loop, ask_for_priority(PRIORITY))
    try:
        server.serve()
    except DeviceError as error:
        with contextlib.suppress(OSError):
            wiring.requests.send(Answer(0, str(error)))  # last words
    except (EOFError, OSError):
        pass  # the parent is gone; closing relaxes the hand
    finally:
        with contextlib.suppress(DeviceError, OSError):
            loop.close()
        server.close()


def _assemble(wiring: Wiring) -> Loop:
    rig, clock, devices = wiring.rig, MonotonicClock(), wiring.simulated
    controller = Controller.of(rig)
    if devices is None:
        camera: Camera = Webcam(rig.camera, rig.camera_device, clock)
        serial_device = rig.serial_device
    else:
        camera = PacedCamera(rig, devices.camera_block, devices.line)
        serial_device = devices.line.recv()
    rehearse(controller)
    port = SerialPort(serial_device, rig.board.baud)
    return Loop(controller, camera, Tracker(rig.camera, rig.part, wiring.colours), FramedLink(rig, port, clock), clock)


def picture_bytes(rig: Rig) -> int:
    """Bytes of one camera frame."""
    return int(np.prod(frame_shape(rig)))


class ControlServer:
    """Steps the loop, answers requests, shows snapshots."""

    def __init__(self, wiring: Wiring, loop: Loop, scheduling: str) -> None:
        self._wiring, self._loop, self._scheduling = wiring, loop, scheduling
        self._snapshot = SharedBlock(SNAPSHOT_BYTES, wiring.snapshot_block)
        self._ledger_block = SharedBlock(LEDGER_BYTES, wiring.ledger_block)
        self._picture = SharedBlock(picture_bytes(wiring.rig), wiring.picture_block)
        self._stop_line = StopLine(wiring.stop_line)
        self._ledger = Ledger()
        self._n_ticks = self._n_refusals = 0
        self._busy_ms: deque[float] = deque(maxlen=N_BUSY)
        self._busy_told: dict[str, float] = {}
        self._pictured_s = 0.0

    def serve(self) -> None:
        """Run until the parent goes away (EOFError) or a device does (DeviceError)."""
        while True:
            self._step(self._stop_line.pending(), self._next_asked())

    def _next_asked(self) -> Asked | None:
        if not self._wiring.requests.poll():
            return None
        found: Asked = self._wiring.requests.recv()
        return found

    def _step(self, stop_number: int, asked: Asked | None) -> None:
        requests: tuple[Request, ...] = (Stop(),) if stop_number else ()
        refusal, wish = "", None if asked is None else asked.wish
        if isinstance(wish, Order):
            refusal = self._obey(wish)
        elif wish is not None:
            requests = (*requests, wish)
        report = self._loop.step(requests)
        if stop_number and report.state in (State.STOPPED, State.FAULTED):
            self._stop_line.take(stop_number)
        self._n_ticks += 1
        self._n_refusals += len(report.refusals)
        self._ledger.take_in(requests, report, self._loop.clock.now_us())
        self._show(report)
        if asked is not None:
            self._wiring.requests.send(Answer(asked.number, refusal or "; ".join(report.refusals)))

    def _obey(self, order: Order) -> str:
        """Pass an order on to the simulated bench; says why not."""
        devices = self._wiring.simulated
        if not isinstance(devices, SimulatedDevices):
            return "only the simulated bench can do that"
        if not isinstance(order, PutBack):
            devices.line.send(("push", (order.x_ns, order.y_ns)))
            return ""
        state = self._loop.memory.state
        if state in PULSES_ON:
            return f"the part is not put back while the hand is {state}; allowed: once it is disarmed, stopped or faulted"
        controller = self._loop.controller
        start = drawn_start(controller, np.random.default_rng([devices.seed, 5, self._n_ticks]))
        devices.line.send(("place", (controller.library.park, start)))
        self._loop.memory = Memory(
            now_us=self._loop.clock.now_us(), state=state, why=self._loop.memory.why, faults=self._loop.memory.faults
        )
        return ""

    def _show(self, report: Report) -> None:
        """Publish what is new: snapshot every tick, goals when they changed, pictures at their own rate."""
        if self._ledger.is_changed:  # before the snapshot, which says how many endings there are
            self._ledger_block.write(self._ledger.text(), self._ledger.n_endings)
        now_us = self._loop.clock.now_us()
        self._snapshot.write(json.dumps(self._shown(report, now_us), allow_nan=False).encode(), now_us)
        frame = self._loop.last_frame
        if frame is not None and time.monotonic() - self._pictured_s > PICTURE_EVERY_S:
            self._pictured_s = time.monotonic()
            self._picture.write(frame_bytes(frame), frame.captured_at_us)

    def _shown(self, report: Report, now_us: int) -> dict[str, Any]:
        loop = self._loop
        shown = report_json(report, loop.link.health(), now_us) | drawing_json(loop.controller, loop.memory, report)
        shown["frame_at_us"] = None if loop.last_frame is None else loop.last_frame.captured_at_us
        shown["loop"] = self._timing()
        shown["n_refusals"] = self._n_refusals
        shown["n_by_outcome"] = dict(self._ledger.n_by_outcome)
        return shown

    def _timing(self) -> dict[str, Any]:
        self._busy_ms.extend(self._loop.busy_ms)
        self._loop.busy_ms.clear()
        if self._n_ticks % BUSY_EVERY == 1:
            p50, p99, worst = np.percentile(np.array(self._busy_ms), (50, 99, 100))
            self._busy_told = {"busy_ms_p50": round(p50, 2), "busy_ms_p99": round(p99, 2), "busy_ms_max": round(worst, 2)}
        return {"n_ticks": self._n_ticks, **self._busy_told, "scheduling": self._scheduling, "pid": os.getpid()}

    def close(self) -> None:
        """Let the shared memory go."""
        for block in (self._snapshot, self._ledger_block, self._picture, self._stop_line):
            block.close()
