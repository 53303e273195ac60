"""The goals of a run and how they ended, kept in the order they began."""

from __future__ import annotations

import json
from collections import Counter, OrderedDict
from dataclasses import dataclass
from typing import Any

from control.servoing.goals import Goal, GoTo, Outcome, Request
from control.servoing.report import Report
from service.snapshot import goal_json, outcome_json

N_KEPT = 100


@dataclass
class _Entry:
    goal: Goal
    began_at_us: int
    outcome: Outcome | None = None
    ended_at_us: int | None = None
    ending_number: int | None = None


class Ledger:
    """The latest goals; endings are numbered 1, 2, 3 … so that a listener can ask what it missed.

    n_endings, n_by_outcome : of the whole run. is_changed : since the last `text`.
    """

    def __init__(self) -> None:
        self._entries: OrderedDict[str, _Entry] = OrderedDict()
        self.n_endings = 0
        self.n_by_outcome: Counter[str] = Counter()
        self.is_changed = True

    def take_in(self, requests: tuple[Request, ...], report: Report, now_us: int) -> None:
        """Note what one tick began and ended."""
        for request in requests:
            if isinstance(request, GoTo) and not report.refusals:
                self._begin(request.goal, now_us)
        if report.goal is not None:  # a nudge makes its own
            self._begin(report.goal, now_us)
        for outcome in report.outcomes:
            self._end(outcome, now_us)
        while len(self._entries) > N_KEPT:
            self._entries.popitem(last=False)

    def _begin(self, goal: Goal, now_us: int) -> None:
        if goal.id not in self._entries:
            self._entries[goal.id] = _Entry(goal, now_us)
            self.is_changed = True

    def _end(self, outcome: Outcome, now_us: int) -> None:
        entry = self._entries.get(outcome.goal_id)
        if entry is None:
            return
        self.n_endings += 1
        self.n_by_outcome[outcome.ending.value] += 1
        entry.outcome, entry.ended_at_us, entry.ending_number = outcome, now_us, self.n_endings
        self.is_changed = True

    def text(self) -> bytes:
        """All entries as JSON, oldest first."""
        self.is_changed = False
        return json.dumps([_entry_json(entry) for entry in self._entries.values()], allow_nan=False).encode()


def _entry_json(entry: _Entry) -> dict[str, Any]:
    ended = None
    if entry.outcome is not None:
        ended = outcome_json(entry.outcome) | {"ended_at_us": entry.ended_at_us, "number": entry.ending_number}
    return goal_json(entry.goal) | {"began_at_us": entry.began_at_us, "ended": ended}
