"""Which bearings an echo may have come from: what the ears leave open, weighed by the motion.

Each detection is a mixture. Listed bearings are narrow: the one it gives or its alternatives. A
broad share over the interval around them stands for what the ears got wrong: a wrong carrier
cycle, two objects at one range, a folded level ratio at the side. Given earlier pings from
other places, every bearing is weighed by the likelihood of the robot's motion, the broad share
on a grid, of which only the peaks are kept.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from ..types import Detection, DetectionFlag, Ears, FloatArray
from .config import MappingConfig
from .grid import IntArray
from .motion import Look, motion_log_likelihood

_NEGLIGIBLE_WEIGHT = 1e-3
_DOUBTFUL = DetectionFlag.BEARING_AMBIGUOUS | DetectionFlag.CUES_CONTRADICT
_STEP_RAD = 0.04
_GRID_RAD = np.arange(-48, 49) * _STEP_RAD
"""To 1.92 rad: echoes from beside the robot are heard, those from behind it hardly."""
_AROUND_RAD = 0.3
"""The broad share reaches at least this far to either side of the listed bearings."""
_SIDE_RAD = 0.3
"""From here on the level ratio may be folded: the broad share reaches to the side."""
_MIN_LOOKS = 2
_PEAK_SHARE = 0.08
_SAME_RAD = 0.08
_LEAST_SIGMA_M, _MOST_SIGMA_M = 0.006, 0.03


@dataclass(frozen=True)
class Bearings:
    """Possible bearings of all detections of a ping; one entry each.

    Attributes
    ----------
    detection
        Which detection it belongs to; grouped, in ascending order.
    spread_rad
        Standard deviation, or half the interval where ``uniform``.
    weight
        Probability; sums to the detection's existence probability or less.
    settled
        Whether the bearing is as good as certain, by ear or by motion.
    """

    detection: IntArray
    bearing_rad: FloatArray
    spread_rad: FloatArray
    weight: FloatArray
    uniform: NDArray[np.bool_]
    settled: NDArray[np.bool_]


def bearings_of(
    detections: Sequence[Detection],
    head_poses: FloatArray,
    looks: Sequence[Look],
    config: MappingConfig,
) -> Bearings:
    """Possible bearings of all echoes of a ping; parameters as in `hypotheses_of`."""
    rows = [(i, *row) for i, d in enumerate(detections) for row in _listed(d, config)]
    table: FloatArray = np.array(rows, float).reshape(-1, 4)
    owner = table[:, 0].astype(np.int64)
    weight = np.array([_weight(d, config) for d in detections])
    low, high = _broad_intervals(detections)
    broad = weight * [_broad_share(d, config) for d in detections]
    moved = len(looks) >= _MIN_LOOKS
    if moved:
        table, owner, broad = _weighed(
            table, owner, weight, broad, (low, high), detections, head_poses, looks
        )
    all_owners = np.concatenate([owner, np.arange(len(detections))])
    all_rows = np.concatenate([table[:, 1:], _broad_rows(broad, low, high)])
    order = np.argsort(all_owners, kind="stable")
    keep = order[all_rows[order, 2] > _NEGLIGIBLE_WEIGHT]
    owner, (bearing, spread, share) = all_owners[keep], all_rows[keep].T
    uniform = keep >= table.shape[0]
    certain = np.array([_is_certain(d) for d in detections], bool)
    settled = ~uniform & _holds_nearly_all(owner, bearing, share, weight, certain, moved)
    return Bearings(owner, bearing, spread, share, uniform, settled)


def _weight(detection: Detection, config: MappingConfig) -> float:
    suspected = bool(detection.flags & DetectionFlag.MULTIPATH_SUSPECTED)
    return detection.existence_probability * (config.multipath_weight if suspected else 1.0)


def _is_certain(detection: Detection) -> bool:
    return detection.ears is Ears.BOTH and not detection.flags & _DOUBTFUL


def _broad_share(detection: Detection, config: MappingConfig) -> float:
    """Share of the weight that does not trust the listed bearings."""
    if detection.ears is Ears.BOTH:
        return config.bearing_outlier_weight
    return config.one_sided_outlier_weight if detection.alternatives else 1.0


def _listed(detection: Detection, config: MappingConfig) -> list[tuple[float, float, float]]:
    """Bearing, spread and weight of each listed bearing.

    The detection's own sigma counts for its own bearing; where there are alternatives it
    spans them all and would be far too wide for each of them.
    """
    trusted = _weight(detection, config) * (1.0 - _broad_share(detection, config))
    sigma = detection.bearing_sigma_rad
    best = sorted(detection.alternatives, key=lambda pair: -pair[1])[: config.max_alternatives]
    narrow = min(sigma, config.alternative_sigma_rad)
    rest = max(0.0, 1.0 - sum(share for _, share in detection.alternatives))
    rows = [(bearing, narrow, trusted * share) for bearing, share in best]
    return [(detection.bearing_rad, sigma, trusted * rest), *rows]


def _broad_intervals(detections: Sequence[Detection]) -> tuple[FloatArray, FloatArray]:
    """Lowest and highest bearing of the broad share of each detection."""
    bearing = np.array([d.bearing_rad for d in detections])
    low = np.array([d.bearing_min_rad for d in detections])
    high = np.array([d.bearing_max_rad for d in detections])
    limit = float(_GRID_RAD[-1])
    # Where one ear leaves an interval and no more, that is what is known.
    open_ended = np.array([d.ears is Ears.BOTH or bool(d.alternatives) for d in detections], bool)
    wide_low = np.minimum(low, bearing - _AROUND_RAD)
    wide_high = np.maximum(high, bearing + _AROUND_RAD)
    wide_low = np.where(bearing < -_SIDE_RAD, np.minimum(wide_low, -limit), wide_low)
    wide_high = np.where(bearing > _SIDE_RAD, np.maximum(wide_high, limit), wide_high)
    low, high = np.where(open_ended, wide_low, low), np.where(open_ended, wide_high, high)
    return np.maximum(low, -np.pi), np.minimum(high, np.pi)


def _broad_rows(weight: FloatArray, low: FloatArray, high: FloatArray) -> FloatArray:
    """Bearing, spread and weight of what is left of the broad shares."""
    return np.stack([0.5 * (low + high), 0.5 * (high - low), weight], axis=1)


def _weighed(
    table: FloatArray,
    owner: IntArray,
    weight: FloatArray,
    broad: FloatArray,
    interval: tuple[FloatArray, FloatArray],
    detections: Sequence[Detection],
    head_poses: FloatArray,
    looks: Sequence[Look],
) -> tuple[FloatArray, IntArray, FloatArray]:
    """Listed bearings and peaks of the broad share after the motion; what is left of it."""
    n, size = len(detections), _GRID_RAD.size
    ranges = np.array([d.range_m for d in detections])
    sigmas = np.array([d.range_sigma_m for d in detections])
    sigmas = np.clip(np.sqrt(_LEAST_SIGMA_M**2 + 2.0 * sigmas**2), 0.0, _MOST_SIGMA_M)
    which = np.concatenate([owner, np.repeat(np.arange(n), size)])
    bearings = np.concatenate([table[:, 1], np.tile(_GRID_RAD, n)])
    x, y, yaw = head_poses[which].T
    fits = np.exp(motion_log_likelihood(looks, x, y, ranges[which], yaw + bearings, sigmas[which]))
    inside = (interval[0][:, None] <= _GRID_RAD) & (interval[1][:, None] >= _GRID_RAD)
    prior = broad[:, None] * inside / np.maximum(inside.sum(axis=1, keepdims=True), 1)
    listed = table[:, 3] * fits[: owner.size]
    grid = prior * fits[owner.size :].reshape(n, size)
    total = np.bincount(owner, listed, n) + grid.sum(axis=1)
    scale = weight / np.maximum(total, 1e-300)
    table = np.column_stack([table[:, :3], listed * scale[owner]])
    peaks, left = _peaks(grid * scale[:, None], weight)
    return (
        np.concatenate([table, peaks]),
        np.concatenate([owner, peaks[:, 0].astype(np.int64)]),
        left,
    )


def _peaks(grid: FloatArray, weight: FloatArray) -> tuple[FloatArray, FloatArray]:
    """Peaks as rows (detection, bearing, spread, weight); weight of all the rest."""
    padded = np.pad(grid, ((0, 0), (1, 1)))
    before, here, after = padded[:, :-2], padded[:, 1:-1], padded[:, 2:]
    mass = before + here + after
    is_peak = (here > before) & (here >= after) & (mass > _PEAK_SHARE * weight[:, None])
    i, k = np.nonzero(is_peak)
    offset = (after - before)[i, k] / mass[i, k]
    variance = (after + before)[i, k] / mass[i, k] - offset**2 + 1.0 / 12.0
    rows: FloatArray = np.column_stack(
        [
            i.astype(float),
            _GRID_RAD[k] + offset * _STEP_RAD,
            np.sqrt(variance) * _STEP_RAD,
            mass[i, k],
        ]
    )
    left = grid.sum(axis=1) - np.bincount(i, mass[i, k], len(grid))
    return rows, np.asarray(np.maximum(left, 0.0))


def _holds_nearly_all(
    owner: IntArray,
    bearing: FloatArray,
    share: FloatArray,
    weight: FloatArray,
    certain: NDArray[np.bool_],
    moved: bool,
) -> NDArray[np.bool_]:
    """Whether most of a detection's weight lies around a bearing."""
    near = (owner[:, None] == owner) & (np.abs(bearing[:, None] - bearing) < _SAME_RAD)
    held = near @ share / np.maximum(weight[owner], 1e-12)
    by_motion = held > _SETTLED_SHARE if moved else np.zeros(owner.size, bool)
    return np.asarray(by_motion | (certain[owner] & (held > 0.5)))


_SETTLED_SHARE = 0.85
"""A bearing around which the motion leaves this share of the weight needs no second place."""
