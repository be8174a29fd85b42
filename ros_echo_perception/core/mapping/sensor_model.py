"""What an echo says of the cells: one of those at its distance reflects, those before are free.

Occupied. A detection is one reflector in exactly one of the cells that its range and bearing
allow. The density over range and bearing is integrated over the cells: each gets a mass, all
masses of a detection add up to its existence probability. A cell's likelihood ratio is
``1 + hit_gain * mass``: certain bearings raise few cells much, arcs raise many cells little.

Sharing. Given what the map knows, the cells do not compete on equal terms: if exactly one of
them is the cause, its posterior is proportional to mass times prior. The prior of a cell grows
with the number of echoes that it has explained and falls where sound has passed. So an echo
that a known place explains adds little to the rest of its arc, and of several possible
bearings the one wins on which pings from different places agree. This is one step of
expectation-maximisation per ping, after the forward models of [1]_.

Free. A received echo proves that sound travelled to the reflector and back along its bearing:
the cells on that path, and only those, are lowered, by the probability that the path really
crosses them. If an occupied cell stands in the way, either it is wrong or the echo has bounced
more than once; both the echo's weight and its free path shrink by that cell's probability.

Silence says nothing, unless the policy says otherwise.

References
----------
.. [1] S. Thrun, "Learning occupancy grid maps with forward sensor models", Autonomous Robots
   15, 2003, 111-127.
"""

from __future__ import annotations

import math
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray
from scipy.special import erf

from ..types import FloatArray, Pose2
from .grid import GridArray, IntArray
from .hypotheses import Hypotheses

_SPAN_SIGMAS = 2.5
_GOLDEN_SECTION = 0.618034
_MAX_SAMPLES = 3_500
_MIN_RANGE_SAMPLES, _MIN_BEARING_SAMPLES = 5, 11
_MIN_RANGE_SIGMA_CELLS = 0.25
_MARGIN_CELLS = 1.5
_BLOCK_MARGIN_M = 0.2


@dataclass(frozen=True)
class Samples:
    """Points with weights; ``owner`` is the hypothesis each belongs to, ascending."""

    owner: IntArray
    x_m: FloatArray
    y_m: FloatArray
    weight: FloatArray


@dataclass(frozen=True)
class Paths:
    """Points along the paths of the sound; ``middle`` marks those on the very line."""

    samples: Samples
    distance_m: FloatArray
    middle: NDArray[np.bool_]


def arc_samples(
    hypotheses: Hypotheses, resolution_m: float, surface_width_m: float = 0.0
) -> Samples:
    """Points over each hypothesis, weights adding up to its weight.

    They lie closer than the cells, and each row is shifted against the one before by the
    golden section, so that no row of points falls on one side of a border of cells as a whole.
    Where all come to more than `_MAX_SAMPLES` points, the widest hypotheses, which say the least
    of any one cell, get fewer, down to a fixed least number each: the work on a ping is bounded
    whatever its detections say.
    """
    h = hypotheses
    range_sigma = np.hypot(h.range_sigma_m, _MIN_RANGE_SIGMA_CELLS * resolution_m)
    range_span = _SPAN_SIGMAS * range_sigma
    spread = np.hypot(h.spread_rad, surface_width_m / h.range_m)
    bearing_span = np.minimum(np.where(h.uniform, h.spread_rad, _SPAN_SIGMAS * spread), math.pi)
    n_range = _count(2.0 * range_span, 0.4 * resolution_m, _MIN_RANGE_SAMPLES)
    n_bearing = _count(2.0 * bearing_span * h.range_m, 0.9 * resolution_m, _MIN_BEARING_SAMPLES)
    n_range, n_bearing = _within_budget(n_range, n_bearing)
    owner, k = _ragged(n_range * n_bearing)
    across, along = k % n_bearing[owner], k // n_bearing[owner]
    u = -1.0 + 2.0 * (along + (across * _GOLDEN_SECTION) % 1.0) / n_range[owner]
    v = -1.0 + 2.0 * across / (n_bearing[owner] - 1)
    exponent = u**2 + np.where(h.uniform[owner], 0.0, v**2)
    density = np.exp(-0.5 * _SPAN_SIGMAS**2 * exponent)
    total = np.bincount(owner, density, len(h))
    distance = np.maximum((h.range_m[owner]) + u * range_span[owner], 0.0)
    angle = (h.head_yaw_rad + h.bearing_rad)[owner] + v * bearing_span[owner]
    return Samples(
        owner,
        h.head_x_m[owner] + distance * np.cos(angle),
        h.head_y_m[owner] + distance * np.sin(angle),
        density * (h.weight / total)[owner],
    )


def path_samples(
    hypotheses: Hypotheses, resolution_m: float, range_min_m: float, half_width_m: float
) -> Paths:
    """Points that leave no cell out along the paths of the firm hypotheses.

    The paths run from the nearest measurable range to shortly before the reflector; weight =
    probability that the sound really passed there. Nearer than the nearest measurable range
    nothing is cleared: what the head cannot hear there is kept.
    """
    h = hypotheses
    # On a square lattice of this pitch no circle of one cell's width fits between the points.
    step = resolution_m / math.sqrt(2.0)
    end = h.range_m - np.maximum(3.0 * h.range_sigma_m, _MARGIN_CELLS * resolution_m)
    n_along = np.floor((end - range_min_m) / step).astype(np.int64) + 1
    n_along = np.where(h.soft | (n_along < 0), 0, n_along)
    n_side = math.ceil(half_width_m / step)
    owner, k = _ragged(n_along * (2 * n_side + 1))
    across, along = k % (2 * n_side + 1) - n_side, k // (2 * n_side + 1)
    distance = range_min_m + along * step
    offset = across * (half_width_m / max(n_side, 1))
    angle = (h.head_yaw_rad + h.bearing_rad)[owner]
    c, s = np.cos(angle), np.sin(angle)
    lateral_sigma = np.maximum(distance * h.spread_rad[owner], 1e-9)
    half_m = max(half_width_m, 0.5 * resolution_m)
    crossing = np.asarray(erf(half_m / lateral_sigma / math.sqrt(2.0)), float)
    samples = Samples(
        owner,
        h.head_x_m[owner] + distance * c - offset * s,
        h.head_y_m[owner] + distance * s + offset * c,
        crossing * h.weight[owner],
    )
    return Paths(samples, np.asarray(distance, float), across == 0)


def clear_view(
    hypotheses: Hypotheses, paths: Paths, log_odds: FloatArray | GridArray
) -> FloatArray:
    """For each hypothesis the probability that nothing known stands in its way.

    One minus how much the most occupied cell on the line to it exceeds "unknown":
    ``1 - max(0, 2 p - 1)``; near the reflector itself nothing counts as in the way.
    """
    clear = np.ones(len(hypotheses))
    owner = paths.samples.owner
    counts = paths.middle & (paths.distance_m < hypotheses.range_m[owner] - _BLOCK_MARGIN_M)
    # 2 p - 1 = tanh(log-odds / 2).
    blocked = np.maximum(np.tanh(0.5 * log_odds[counts]), 0.0)
    np.minimum.at(clear, owner[counts], 1.0 - blocked)
    return clear


def share(samples: Samples, hypotheses: Hypotheses, prior: FloatArray | GridArray) -> FloatArray:
    """Weights of the samples after competition within each detection: mass times prior,
    scaled back to the detection's whole mass.
    """
    group = hypotheses.detection[samples.owner]
    size = int(hypotheses.detection[-1]) + 1 if len(hypotheses) else 0
    before = np.bincount(group, samples.weight, size)
    raised = samples.weight * prior
    after = np.bincount(group, raised, size)
    scale = np.divide(before, after, out=np.zeros(size), where=after > 0.0)
    return np.asarray(raised * scale[group])


def silent_samples(
    head: Pose2, half_width_rad: float, from_m: float, to_m: float, resolution_m: float
) -> tuple[FloatArray, FloatArray]:
    """Points half a cell apart that fill a sector of the beam; two arrays x, y."""
    if to_m <= from_m:
        return np.zeros(0), np.zeros(0)
    step = 0.5 * resolution_m
    distance = np.arange(from_m, to_m, step)
    n_bearing = int(np.ceil(2.0 * half_width_rad * to_m / step)) + 1
    angle = head.yaw_rad + np.linspace(-half_width_rad, half_width_rad, n_bearing)
    x = head.x_m + distance[:, None] * np.cos(angle)
    y = head.y_m + distance[:, None] * np.sin(angle)
    return x.ravel(), y.ravel()


def _count(length_m: FloatArray, pitch_m: float, at_least: int) -> IntArray:
    """Points on a stretch so that they lie no further apart than the pitch."""
    n = np.ceil(np.minimum(length_m / pitch_m, 1e6)).astype(np.int64) + 1
    return np.asarray(np.maximum(n, at_least))


def _within_budget(n_range: IntArray, n_bearing: IntArray) -> tuple[IntArray, IntArray]:
    """Numbers of points, fewer for those with the most where all come to too many."""
    wanted = (n_range * n_bearing).astype(float)
    if wanted.sum() <= _MAX_SAMPLES:
        return n_range, n_bearing
    # The highest limit for each that keeps the sum: with k of them below it, the rest share
    # what those leave.
    ordered = np.sort(wanted)
    left = _MAX_SAMPLES - np.concatenate([[0.0], np.cumsum(ordered)[:-1]])
    limit = float(np.max(left / np.arange(wanted.size, 0, -1)))
    factor = np.sqrt(np.minimum(limit / wanted, 1.0))
    return (
        np.maximum((n_range * factor).astype(np.int64), _MIN_RANGE_SAMPLES),
        np.maximum((n_bearing * factor).astype(np.int64), _MIN_BEARING_SAMPLES),
    )


def _ragged(counts: IntArray) -> tuple[IntArray, IntArray]:
    """Owner and running number within the owner for groups of the given sizes.

    Examples
    --------
    >>> [a.tolist() for a in _ragged(np.array([2, 0, 3]))]
    [[0, 0, 2, 2, 2], [0, 1, 0, 1, 2]]
    """
    owner = np.repeat(np.arange(counts.size), counts)
    start = np.cumsum(counts) - counts
    return owner, np.arange(owner.size) - start[owner]
