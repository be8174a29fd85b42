"""What the nodes found against what the simulated room really holds."""

from __future__ import annotations

import math
from collections.abc import Iterable, Sequence
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray
from scipy.optimize import linear_sum_assignment
from scipy.spatial import cKDTree

from ..core.types import Pose2, wrap_angle
from .monitor import SeenDetection, SeenMap

RANGE_GATE_M, RANGE_GATE_SHARE = 0.05, 0.02
BEARING_GATE_RAD = math.radians(15.0)
MUST_FIND_FROM_DB = 15.0
NEAR_SURFACE_M = 0.10
_SURFACE_STEP_M = 0.02


@dataclass(frozen=True)
class TrueEcho:
    """A true reflector of one ping; ``snr_db`` is that of the better ear.

    ``findable`` is false where nobody could be expected to find it, masked ones for instance.
    """

    range_m: float
    bearing_rad: float
    snr_db: float
    findable: bool = True

    @property
    def must_be_found(self) -> bool:
        """Whether missing it is a fault."""
        return self.findable and self.snr_db >= MUST_FIND_FROM_DB


@dataclass(frozen=True)
class DetectionScore:
    """Detections against true echoes.

    ``must_find`` counts findable true echoes of 15 dB and more, ``found`` those of them that were
    found; ``n_at_range`` counts detections at the range of any true echo, ``n_matched`` those that
    have its bearing too; errors are of matched pairs.
    """

    n_detections: int
    n_at_range: int
    n_matched: int
    must_find: int
    found: int
    range_errors_m: NDArray[np.float64]
    bearing_errors_rad: NDArray[np.float64]


def score_detections(
    pings: Iterable[tuple[Sequence[SeenDetection], Sequence[TrueEcho]]],
) -> DetectionScore:
    """Match one to one in each ping: range within 5 cm + 2 %, bearing within 15 degrees."""
    n_detections = n_at_range = n_matched = must_find = found = 0
    range_errors: list[float] = []
    bearing_errors: list[float] = []
    for detections, truth in pings:
        pairs = match(detections, truth)
        n_detections += len(detections)
        n_at_range += sum(any(_along(d, t) <= 1.0 for t in truth) for d in detections)
        n_matched += len(pairs)
        must_find += sum(t.must_be_found for t in truth)
        found += sum(truth[j].must_be_found for _, j in pairs)
        range_errors += [detections[i].range_m - truth[j].range_m for i, j in pairs]
        bearing_errors += [
            wrap_angle(detections[i].bearing_rad - truth[j].bearing_rad) for i, j in pairs
        ]
    return DetectionScore(
        n_detections, n_at_range, n_matched, must_find, found,
        np.array(range_errors, float), np.array(bearing_errors, float),
    )  # fmt: skip


def _along(d: SeenDetection, t: TrueEcho) -> float:
    """Difference in range, in gates."""
    return abs(d.range_m - t.range_m) / (RANGE_GATE_M + RANGE_GATE_SHARE * t.range_m)


def match(detections: Sequence[SeenDetection], truth: Sequence[TrueEcho]) -> list[tuple[int, int]]:
    """Pairs (detection, true echo) within the gates, most pairs first, then the nearest."""
    if not detections or not truth:
        return []
    outside = 1e3
    cost = np.full((len(detections), len(truth)), outside)
    for i, d in enumerate(detections):
        for j, t in enumerate(truth):
            along = _along(d, t)
            across = abs(wrap_angle(d.bearing_rad - t.bearing_rad)) / BEARING_GATE_RAD
            if along <= 1.0 and across <= 1.0:
                cost[i, j] = along + across
    rows, columns = linear_sum_assignment(cost)
    return [(int(i), int(j)) for i, j in zip(rows, columns, strict=True) if cost[i, j] < outside]


def alignment(odometry: Pose2, truth: Pose2) -> Pose2:
    """Pose of the true world in the odometry frame, from the robot's pose in both at one time.

    Examples
    --------
    >>> world = alignment(Pose2(1.0, 0.0, 0.0), Pose2(3.0, 2.0, 0.0))
    >>> (world.x_m, world.y_m)
    (-2.0, -2.0)
    """
    return odometry.compose(truth.inverse())


def moved(points: NDArray[np.float64], frame: Pose2) -> NDArray[np.float64]:
    """Points given in a frame, shape (n, 2), in the parent of that frame."""
    c, s = math.cos(frame.yaw_rad), math.sin(frame.yaw_rad)
    return points @ np.array([[c, s], [-s, c]]) + (frame.x_m, frame.y_m)


def map_precision(seen: SeenMap, outline: Sequence[NDArray[np.float64]]) -> float:
    """Share of the occupied cells within 10 cm of a true surface, NaN without occupied cells."""
    occupied = seen.occupied_points()
    if not len(occupied) or not outline:
        return math.nan
    distance, _ = cKDTree(np.vstack([_dense(line) for line in outline])).query(occupied)
    return float(np.mean(distance <= NEAR_SURFACE_M))


def _dense(line: NDArray[np.float64]) -> NDArray[np.float64]:
    """Points every 2 cm or closer along a polyline."""
    parts = []
    for a, b in zip(line[:-1], line[1:], strict=True):
        n = max(2, math.ceil(float(np.hypot(*(b - a))) / _SURFACE_STEP_M) + 1)
        parts.append(a + np.linspace(0.0, 1.0, n)[:, None] * (b - a))
    return np.vstack(parts)
