"""Does the next ping show it again? What existence owes to earlier pings.

A real thing answers ping after ping; another robot's pings and clicks come at a new delay each
time. How often a new echo turns out to be real is learned on the way, so that in a quiet place
new things are believed at once and beside a foreign pinger they are not.
"""

from __future__ import annotations

import dataclasses
from collections.abc import Sequence

from ..types import Detection

_LONGEST_GAP_S = 1.0
_FASTEST_M_S = 1.5
_LEAST_GATE_M = 0.03
_JUDGED_DB = 18.0
"""Weaker echoes come and go by noise: they teach nothing about what is real."""
_PRIOR_SEEN_AGAIN, _PRIOR_NOT_SEEN = 2.0, 1.0
_MEMORY = 0.95


class PingToPing:
    """Weighs each new echo by how often new echoes have been seen again."""

    def __init__(self) -> None:
        self.reset()

    def reset(self) -> None:
        """Forget all earlier pings."""
        self._seen_again, self._not_seen = 0.0, 0.0
        self._time_s: float | None = None
        self._before: tuple[Detection, ...] = ()
        self._new: list[Detection] = []

    def weigh(self, detections: Sequence[Detection], time_s: float) -> tuple[Detection, ...]:
        """The same detections; the existence of those without a forerunner is lowered.

        Parameters
        ----------
        time_s : emission of the ping, on the same clock as before.

        Notes
        -----
        The share of new echoes that the following ping shows again has a beta prior of 2 to 1
        and forgets slowly. Without an earlier ping within a second nothing is changed.
        """
        gap_s = time_s - self._time_s if self._time_s is not None else -1.0
        usable = 0.0 <= gap_s <= _LONGEST_GAP_S
        gate_m = _LEAST_GATE_M + _FASTEST_M_S * gap_s
        if usable:
            self._learn(detections, gate_m)
        share = (self._seen_again + _PRIOR_SEEN_AGAIN) / (
            self._seen_again + self._not_seen + _PRIOR_SEEN_AGAIN + _PRIOR_NOT_SEEN
        )
        result, self._new = [], []
        for d in detections:
            if usable and not _near(d, self._before, gate_m):
                self._new.append(d)
                d = dataclasses.replace(d, existence_probability=share * d.existence_probability)
            result.append(d)
        self._time_s, self._before = time_s, tuple(detections)
        return tuple(result)

    def _learn(self, detections: Sequence[Detection], gate_m: float) -> None:
        for new in self._new:
            if new.snr_db < _JUDGED_DB:
                continue
            seen = _near(new, detections, gate_m)
            self._seen_again = _MEMORY * self._seen_again + seen
            self._not_seen = _MEMORY * self._not_seen + (not seen)


def _near(detection: Detection, others: Sequence[Detection], gate_m: float) -> bool:
    return any(
        abs(d.range_m - detection.range_m) < gate_m + 2.0 * detection.range_sigma_m for d in others
    )
