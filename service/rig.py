"""Puts one rig together, real or simulated: devices, tracker, controller, loop."""

from __future__ import annotations

import numpy as np

from control.servoing.controller import Controller
from control.servoing.memory import Memory
from hw_profiles.rig import Rig
from service.loop import Loop
from service.servo_link import FramedLink
from service.simulated.bench import LockstepBench
from service.simulated.dropped import drawn_start
from service.simulated.variation import Variation
from service.trials.run import Stage
from vision.tracker import Tracker


def simulated_stage(rig: Rig, variation: Variation, seed: int) -> Stage:
    """A rig on the simulated bench in simulated time: one seed, one run."""
    controller = Controller.of(rig)
    rng = np.random.default_rng([seed, 2])
    bench = LockstepBench(rig, controller.library.park, drawn_start(controller, rng), variation, seed)
    loop = Loop(controller, bench.camera, Tracker(rig.camera, rig.part), FramedLink(rig, bench.port, bench.clock), bench.clock)

    def restart() -> None:
        bench.place(controller.library.park, drawn_start(controller, rng))
        loop.memory = Memory(now_us=bench.clock.now_us())

    return Stage(loop, bench.truth, lambda: bench.world.has_escaped, restart)
