"""Compiled loops over delays alone: when places are heard, and in which samples."""

from __future__ import annotations

import math

import numpy as np

from ..types import FloatArray, IndexArray
from .compiled import HeadArrays, compiled


@compiled
def delays(head: HeadArrays, range_m: FloatArray, bearing_rad: FloatArray) -> FloatArray:
    """Delays of both ears, shape (2, n), of n places."""
    result = np.empty((2, range_m.size))
    travel_s = np.empty(3)
    for i in range(range_m.size):
        x, y = range_m[i] * math.cos(bearing_rad[i]), range_m[i] * math.sin(bearing_rad[i])
        for which in range(3):
            px, py, pz = head.places[which]
            distance = math.sqrt((x - px) ** 2 + (y - py) ** 2 + pz**2)
            travel_s[which] = distance / head.speed_m_s
        result[0, i] = head.latency_s + travel_s[0] + travel_s[1]
        result[1, i] = head.latency_s + travel_s[0] + travel_s[2]
    return result


@compiled
def reached(
    head: HeadArrays,
    range_m: FloatArray,
    bearing_rad: FloatArray,
    time_s: FloatArray,
    edges_s: tuple[float, float, float, float],
) -> IndexArray:
    """First samples at or after the nearest delay plus edges 0 and 2, the last plus 1 and 3."""
    delay_s = delays(head, range_m, bearing_rad)
    low, high = delay_s.min(), delay_s.max()
    result = np.empty(4, np.intp)
    for k in range(4):
        result[k] = np.searchsorted(time_s, (low if k % 2 == 0 else high) + edges_s[k])
    return result
