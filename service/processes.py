"""Starts and ends the processes of `palmloop serve`, and talks to the one that moves the hand."""

from __future__ import annotations

import contextlib
import json
import multiprocessing
import threading
from multiprocessing.process import BaseProcess
from typing import Any

import numpy as np

from control.servoing.controller import Controller
from control.servoing.goals import Request
from hw_profiles.errors import CommandError, DeviceError
from hw_profiles.rig import Rig
from service.control_process import SNAPSHOT_BYTES, Wiring, run_control
from service.rig import drawn_start
from service.shared import SharedBlock, frame_from
from service.simulated.paced import frame_shape, run_bench
from service.simulated.variation import Variation
from vision.frames import Frame

START_S = 60.0
ANSWER_S = 2.0


class Hand:
    """The control process seen from outside: requests in, snapshots and frames out, and a stop that waits for nothing."""

    def __init__(self, rig: Rig, variation: Variation, seed: int) -> None:
        self.rig = rig
        self.controller = Controller.of(rig)
        context = multiprocessing.get_context("spawn")
        self._shape = frame_shape(rig)
        n_bytes = int(np.prod(self._shape))
        self._camera_block, self._picture = SharedBlock(n_bytes), SharedBlock(n_bytes)
        self._snapshot = SharedBlock(SNAPSHOT_BYTES)
        self._stop = context.Event()
        self._lock = threading.Lock()
        here, there = context.Pipe()
        frames, bench_end = context.Pipe()
        start = drawn_start(self.controller, np.random.default_rng([seed, 2]))
        bench_args = (rig, self.controller.library.park, start, variation, seed, self._camera_block.name, bench_end)
        self.processes: list[BaseProcess] = [context.Process(target=run_bench, args=bench_args, name="palmloop bench")]
        self.processes[0].start()
        bench_end.close()
        if not frames.poll(START_S):
            raise DeviceError(f"the simulated bench did not start within {START_S:g} s")
        wiring = Wiring(rig, frames.recv(), self._camera_block.name, frames, self._snapshot.name, self._picture.name, there, self._stop)
        self.processes.append(context.Process(target=run_control, args=(wiring,), name="palmloop control"))
        self.processes[1].start()
        there.close()
        frames.close()
        self._requests = here
        if not here.poll(START_S):
            raise DeviceError(f"the control process did not start within {START_S:g} s")
        problem = here.recv()
        if problem:
            self.close()
            raise DeviceError(problem)

    def ask(self, request: Request) -> None:
        """Hand a request to the next tick.

        Raises
        ------
        CommandError
            The loop refused it; the message says why and what is allowed.
        DeviceError
            The control process does not answer.
        """
        with self._lock:
            try:
                self._requests.send(request)
                if not self._requests.poll(ANSWER_S):
                    raise DeviceError(f"the control process has not answered for {ANSWER_S:g} s")
                refusal = self._requests.recv()
            except (EOFError, OSError) as error:
                raise DeviceError("the control process has ended; the hand is relaxed") from error
        if refusal:
            raise CommandError(refusal)

    def stop(self) -> None:
        """Latch a stop at the next tick. Sets a flag: it queues behind nothing and can be asked any number of times."""
        self._stop.set()

    @property
    def is_alive(self) -> bool:
        """Whether every process lives."""
        return all(process.is_alive() for process in self.processes)

    def snapshot(self) -> dict[str, Any]:
        """The newest state; raises DeviceError before the first and when the control process has ended."""
        found = self._snapshot.read()
        if found is None or not self.is_alive:
            raise DeviceError("the control process has ended; the hand is relaxed" if found else "no state yet; try again in a moment")
        shown: dict[str, Any] = json.loads(found[2])
        return shown

    def frame(self) -> Frame:
        """The newest picture; raises DeviceError before the first."""
        found = self._picture.read()
        if found is None:
            raise DeviceError("no camera frame yet; try again in a moment")
        return frame_from(found[2], self._shape, found[1])

    def close(self) -> None:
        """End the control process first (it relaxes the hand), then the bench."""
        with self._lock, contextlib.suppress(OSError):
            self._requests.send(None)
        for process in reversed(self.processes):
            process.join(timeout=3.0)
            if process.is_alive():
                process.terminate()
                process.join(timeout=2.0)
        for block in (self._camera_block, self._picture, self._snapshot):
            block.close()
