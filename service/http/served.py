"""What the routes share: one hand, its news, its pictures, its maps."""

from __future__ import annotations

import itertools
from collections.abc import Iterator
from dataclasses import dataclass, field

from fastapi import Request

from service.http.desk import Desk
from service.http.feed import Feed
from service.http.guard import Guard
from service.http.pictures import Pictures
from service.map_process import MapProcess
from service.processes import Hand


@dataclass
class Served:
    """Everything behind the API; found in the app's state."""

    hand: Hand
    feed: Feed
    desk: Desk
    pictures: Pictures
    maps: MapProcess
    guard: Guard | None = None
    goal_numbers: Iterator[int] = field(default_factory=lambda: itertools.count(1))

    @classmethod
    def of(cls, hand: Hand) -> Served:
        """For one hand."""
        feed = Feed(hand)
        return cls(hand, feed, Desk(hand), Pictures(feed), MapProcess(hand.rig))

    async def close(self) -> None:
        """End what was started here; the hand is its owner's."""
        await self.feed.close()
        self.maps.close()
        self.desk.close()
        self.pictures.close()


def served(request: Request) -> Served:
    """What is behind the app that a request came to."""
    found: Served = request.app.state.served
    return found
