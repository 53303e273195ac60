"""Requests on their way to the loop: one at a time, few in waiting; the rest are told to come back."""

from __future__ import annotations

import asyncio
import logging
from concurrent.futures import ThreadPoolExecutor

from control.servoing.goals import Request
from hw_profiles.errors import PalmloopError
from service.http.problems import Refused
from service.processes import Hand
from service.wiring import Order

N_WAITING = 8
LATCH_S = 0.3
LOG = logging.getLogger("palmloop")


class Desk:
    """Takes requests in. A stop does not pass through here: it has a line of its own."""

    def __init__(self, hand: Hand) -> None:
        self._hand = hand
        self._worker = ThreadPoolExecutor(1, thread_name_prefix="requests")
        self._n_waiting = 0

    async def ask(self, wish: Request | Order) -> None:
        """Hand a request to the loop and wait for its answer. Raises what `Hand.ask` does, and Refused when too many wait."""
        if self._n_waiting >= N_WAITING:
            raise Refused(503, f"{N_WAITING} requests wait for the loop already; try again in a moment", {"Retry-After": "1"})
        self._n_waiting += 1
        try:
            await asyncio.get_running_loop().run_in_executor(self._worker, self._hand.ask, wish)
        except PalmloopError as error:
            LOG.info("refused", extra={"wish": type(wish).__name__, "reason": str(error)})
            raise
        finally:
            self._n_waiting -= 1
        LOG.info("taken", extra={"wish": type(wish).__name__})

    async def stop(self) -> bool:
        """Ask for a stop at once; says whether the loop has latched it within a moment. It will, at its next step, in any case."""
        number = self._hand.stop()
        LOG.info("stop asked for")
        for _ in range(round(LATCH_S / 0.01)):
            if self._hand.is_stopped(number):
                return True
            await asyncio.sleep(0.01)
        return self._hand.is_stopped(number)

    def close(self) -> None:
        """End the worker."""
        self._worker.shutdown(wait=True, cancel_futures=True)
