"""A process of its own for maps: their kernels take seconds, and neither the web nor the hand must wait for them."""

from __future__ import annotations

import json
import multiprocessing
import os
import threading
from dataclasses import dataclass
from multiprocessing.connection import Connection
from multiprocessing.process import BaseProcess
from typing import Any, Literal

from hw_profiles import load
from hw_profiles.errors import CommandError, DeviceError, DeviceTimeout, PalmloopError
from hw_profiles.geometry import Pose2
from hw_profiles.rig import Rig
from service.children import die_with_parent, start_lean

ANSWER_S = 60.0
NICER = 10


@dataclass(frozen=True)
class MapQuery:
    """Which map: of which layer, with the part where, at which blend (name, weight) of primitives, drawn or as numbers.

    part : a shipped part; None for the rig's own.
    """

    layer: Literal["energy", "cage", "reach"]
    pose: Pose2
    blend: tuple[tuple[str, float], ...]
    is_drawn: bool
    part: str | None = None


class MapProcess:
    """Starts the process when the first map is asked for."""

    def __init__(self, rig: Rig) -> None:
        self._rig = rig
        self._lock = threading.Lock()
        self._process: BaseProcess | None = None
        self._line: Connection | None = None

    def answer(self, query: MapQuery) -> bytes:
        """JSON or PNG of a map; seconds, the first time.

        Raises
        ------
        CommandError
            A primitive that is not there, or a part that the hand cannot hold.
        DeviceTimeout
            It took too long; the process is ended and starts anew with the next query.
        """
        with self._lock:
            line = self._open()
            try:
                line.send(query)
                if not line.poll(ANSWER_S):
                    self._end()
                    raise DeviceTimeout(f"the map was not done within {ANSWER_S:g} s")
                data, refusal = line.recv()
            except (EOFError, OSError) as error:
                if isinstance(error, DeviceTimeout):
                    raise
                self._end()
                raise DeviceError("the map process has ended; ask again") from error
        if refusal:
            raise CommandError(refusal)
        found: bytes = data
        return found

    def _open(self) -> Connection:
        if self._line is None:
            context = multiprocessing.get_context("spawn")
            here, there = context.Pipe()
            self._process = context.Process(target=run_maps, args=(self._rig, there), name="palmloop maps")
            start_lean(self._process)
            there.close()
            self._line = here
        return self._line

    def _end(self) -> None:
        if self._line is not None:
            self._line.close()
        if self._process is not None:
            self._process.terminate()
            self._process.join()
        self._line = self._process = None

    def close(self) -> None:
        """End the process, whatever it is at."""
        self._end()


def run_maps(rig: Rig, line: Connection) -> None:
    """Entry of the map process: answers queries until the other end of `line` closes."""
    from service.maps import Mapper  # the plots that come with it take a second to import

    die_with_parent()
    os.nice(NICER)
    mappers: dict[str | None, Mapper] = {}
    while True:
        try:
            query: MapQuery = line.recv()
        except (EOFError, OSError):
            return
        try:
            if query.part not in mappers:
                mappers[query.part] = Mapper(rig if query.part is None else rig.model_copy(update={"part": load.load_part(query.part)}))
            line.send((_worked_out(mappers[query.part], query), ""))
        except PalmloopError as error:
            line.send((b"", str(error)))


def _worked_out(mapper: Any, query: MapQuery) -> bytes:
    from service import map_figures

    blend = dict(query.blend) or {"grip" if query.layer == "energy" else "park": 1.0}
    if query.layer == "reach":
        found = mapper.reach()
    else:
        command = mapper.command(blend, query.pose)
        found = mapper.energy(command, query.pose) if query.layer == "energy" else mapper.cage(command, query.pose)
    return map_figures.png(found) if query.is_drawn else json.dumps(found.numbers(), allow_nan=False).encode()
