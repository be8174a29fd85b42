"""Pings that wait until the odometry around them is there."""

from __future__ import annotations

import heapq
import math
from dataclasses import dataclass, field

from ..types import PingResult


@dataclass(order=True, frozen=True)
class WaitingPing:
    """One ping in the queue, ordered by emission time, then head, then arrival."""

    emission_time_s: float
    head_id: str
    arrival: int
    end_time_s: float = field(compare=False)
    result: PingResult = field(compare=False)


class PendingPings:
    """A bounded queue in the order of emission, whatever the order of arrival."""

    def __init__(self, max_pings: int) -> None:
        self.max_pings = max_pings
        self._heap: list[WaitingPing] = []
        self._arrivals = 0
        self.newest_time_s = -math.inf

    def __len__(self) -> int:
        return len(self._heap)

    def push(self, head_id: str, result: PingResult, end_time_s: float) -> bool:
        """Add a ping whose last used echo returns at ``end_time_s``.

        Returns
        -------
        False when the oldest one had to be dropped for it.
        """
        self._arrivals += 1
        time_s = result.emission_time_s
        self.newest_time_s = max(self.newest_time_s, time_s)
        heapq.heappush(self._heap, WaitingPing(time_s, head_id, self._arrivals, end_time_s, result))
        if len(self._heap) <= self.max_pings:
            return True
        heapq.heappop(self._heap)
        return False

    def pop_ready(self, odometry_until_s: float) -> WaitingPing | None:
        """The earliest ping, if the odometry reaches past its end."""
        if self._heap and self._heap[0].end_time_s <= odometry_until_s:
            return heapq.heappop(self._heap)
        return None

    def pop_expired(self, now_s: float, max_wait_s: float) -> WaitingPing | None:
        """The earliest ping, if it has waited for too long."""
        if self._heap and self._heap[0].end_time_s + max_wait_s < now_s:
            return heapq.heappop(self._heap)
        return None

    def drop_later_than(self, time_s: float) -> int:
        """Forget pings of a time that has been abandoned; their number."""
        kept = [ping for ping in self._heap if ping.emission_time_s <= time_s]
        dropped = len(self._heap) - len(kept)
        heapq.heapify(kept)
        self._heap = kept
        self.newest_time_s = max((ping.emission_time_s for ping in kept), default=-math.inf)
        return dropped
