"""The process of the simulated bench."""

from __future__ import annotations

from multiprocessing.connection import Connection

import numpy as np

from control.servoing.controller import Controller
from hw_profiles.rig import Rig
from service.simulated.dropped import drawn_start
from service.simulated.paced import run_bench
from service.simulated.variation import Variation


def run_simulated(rig: Rig, variation: Variation, seed: int, block_name: str, line: Connection) -> None:
    """Entry of the bench process: drops the part into the loose cage, then lives until the other end of `line` closes."""
    controller = Controller.of(rig)
    start = drawn_start(controller, np.random.default_rng([seed, 2]))
    run_bench(rig, controller.library.park, start, variation, seed, block_name, line)
