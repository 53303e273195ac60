"""Starts and ends the processes of `palmloop serve`, and talks to the one that moves the hand."""

from __future__ import annotations

import contextlib
import json
import multiprocessing
import threading
import time
from dataclasses import dataclass
from multiprocessing.process import BaseProcess
from typing import Any

from control.servoing.goals import Request
from hw_profiles.calibration import ColourCalibration
from hw_profiles.errors import CommandError, DeviceError, DeviceTimeout
from hw_profiles.rig import Rig
from service.bench_process import run_simulated
from service.children import start_lean
from service.control_process import picture_bytes, run_control
from service.shared import SharedBlock, frame_from
from service.simulated.paced import frame_shape
from service.simulated.variation import Variation
from service.stop_line import StopLine
from service.wiring import LEDGER_BYTES, SNAPSHOT_BYTES, Answer, Asked, Order, SimulatedDevices, Wiring
from vision.frames import Frame

START_S = 120.0  # the first start compiles the kernels
ANSWER_S = 2.0
STALE_US = 1_000_000  # a snapshot older than this is not shown as the present
ENDED = "the control process has ended; the hand is relaxed"


@dataclass(frozen=True)
class Simulation:
    """What the simulated bench does unlike its profile, and its seed."""

    variation: Variation
    seed: int


@dataclass(frozen=True, slots=True)
class Snapshot:
    """What the loop last said: `version` grows with every tick, `text` is JSON."""

    version: int
    text: bytes

    def parsed(self) -> dict[str, Any]:
        """The text as values."""
        shown: dict[str, Any] = json.loads(self.text)
        return shown


class Hand:
    """The control process seen from outside: requests in, snapshots and frames out, and a stop that waits for nothing."""

    def __init__(self, rig: Rig, simulation: Simulation | None, colours: ColourCalibration | None = None) -> None:
        """Start the processes. Raises DeviceError, with nothing left running, where a device or a process does not start."""
        self.rig, self.is_simulated = rig, simulation is not None
        context = multiprocessing.get_context("spawn")
        self._shape = frame_shape(rig)
        self._snapshot, self._ledger = SharedBlock(SNAPSHOT_BYTES), SharedBlock(LEDGER_BYTES)
        self._picture, self._camera = SharedBlock(picture_bytes(rig)), SharedBlock(picture_bytes(rig))
        self._stop_line = StopLine()
        self._lock = threading.Lock()
        self._number = 0
        self._last_words = ""
        self.processes: list[BaseProcess] = []
        self._requests, there = context.Pipe()
        bench, bench_end = context.Pipe()
        devices = None
        if simulation is not None:
            devices = SimulatedDevices(simulation.variation, simulation.seed, self._camera.name, bench)
            bench_args = (rig, simulation.variation, simulation.seed, self._camera.name, bench_end)
            self.processes.append(context.Process(target=run_simulated, args=bench_args, name="palmloop bench"))
        blocks = (self._snapshot.name, self._ledger.name, self._picture.name, self._stop_line.name)
        wiring = Wiring(rig, colours, devices, *blocks, there)
        self.processes.append(context.Process(target=run_control, args=(wiring,), name="palmloop control"))
        try:
            for process in self.processes:
                start_lean(process)
            for end in (there, bench, bench_end):
                end.close()
            self._wait_for_start()
        except BaseException:
            self.close()
            raise

    def _wait_for_start(self) -> None:
        deadline_s = time.monotonic() + START_S
        while not self._requests.poll(0.1):
            if not self.is_alive:
                break
            if time.monotonic() > deadline_s:
                raise DeviceTimeout(f"the control process did not start within {START_S:g} s")
        try:
            problem = self._requests.recv()
        except (EOFError, OSError):
            ended = ", ".join(process.name for process in self.processes if not process.is_alive())
            raise DeviceError(f"{ended or 'control process'}: ended while starting") from None
        if problem:
            raise DeviceError(problem)

    def ask(self, wish: Request | Order) -> None:
        """Hand a request to the next tick and wait for its answer.

        Raises
        ------
        CommandError
            The loop refused it; the message says why and what is allowed.
        DeviceError
            The control process has ended. DeviceTimeout: it does not answer.
        """
        with self._lock:
            self._number += 1
            try:
                self._requests.send(Asked(self._number, wish))
                refusal = self._answer(self._number)
            except (EOFError, OSError) as error:
                if isinstance(error, DeviceTimeout):
                    raise
                raise DeviceError(ENDED) from error
        if refusal:
            raise CommandError(refusal)

    def _answer(self, number: int) -> str:
        """The refusal of this request; answers to earlier ones that were given up are passed over."""
        deadline_s = time.monotonic() + ANSWER_S
        while self._requests.poll(max(deadline_s - time.monotonic(), 0.0)):
            answer: Answer = self._requests.recv()
            if answer.number == number:
                return answer.refusal
            if answer.number == 0:
                self._last_words = answer.refusal
        raise DeviceTimeout(f"the control process has not answered for {ANSWER_S:g} s; a stop still reaches it")

    def stop(self) -> int:
        """Latch a stop at the next tick; returns its number. Waits for nothing and can be asked any number of times."""
        return self._stop_line.ask()

    def is_stopped(self, number: int) -> bool:
        """Whether the loop has latched that stop."""
        return self._stop_line.is_taken(number)

    @property
    def is_alive(self) -> bool:
        """Whether every process lives."""
        return all(process.is_alive() for process in self.processes)

    def version(self) -> int:
        """Of the newest snapshot; costs next to nothing."""
        return self._snapshot.version()

    def snapshot(self) -> Snapshot:
        """The newest state; raises DeviceError where there is none, or none that is fresh."""
        found = self._snapshot.read()
        if found is None:
            raise DeviceError("no state yet; try again in a moment")
        version, at_us, text = found
        age_us = time.monotonic_ns() // 1000 - at_us
        if age_us > STALE_US:
            raise DeviceError(
                ENDED if not self.is_alive else f"the loop has said nothing for {age_us * 1e-6:.1f} s: is the machine overloaded?"
            )
        return Snapshot(version, text)

    def goals(self) -> list[dict[str, Any]]:
        """The latest goals, oldest first, and how they ended."""
        found = self._ledger.read()
        goals: list[dict[str, Any]] = [] if found is None else json.loads(found[2])
        return goals

    def n_endings(self) -> int:
        """How many goals have ended; costs next to nothing."""
        return self._ledger.stamp()

    def picture_version(self) -> int:
        """Of the newest picture; costs next to nothing."""
        return self._picture.version()

    def picture(self) -> tuple[int, Frame]:
        """The newest picture and its version; raises DeviceError before the first."""
        found = self._picture.read()
        if found is None:
            raise DeviceError("no camera frame yet; try again in a moment")
        version, captured_at_us, data = found
        return version, frame_from(data, self._shape, captured_at_us)

    def last_words(self) -> str:
        """Why the processes ended, as far as they could say."""
        with self._lock, contextlib.suppress(EOFError, OSError):
            while not self._last_words and self._requests.poll():
                answer = self._requests.recv()
                self._last_words = answer.refusal if answer.number == 0 else ""
        ended = [f"{process.name} (exit code {process.exitcode})" for process in self.processes if not process.is_alive()]
        return self._last_words or f"{', '.join(ended) or 'nothing'} has ended"

    def close(self) -> None:
        """End the control process first (it relaxes the hand), then the bench."""
        with self._lock:
            self._requests.close()
        for process in reversed(self.processes):
            if process.pid is None:
                continue
            process.join(timeout=3.0)
            if process.is_alive():
                process.terminate()
                process.join(timeout=2.0)
            if process.is_alive():
                process.kill()
                process.join()
        for block in (self._camera, self._picture, self._ledger, self._snapshot, self._stop_line):
            block.close()
