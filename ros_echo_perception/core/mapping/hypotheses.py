"""Where the reflector of each echo may be: places with weights, seen from a moving head."""

from __future__ import annotations

import math
from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from ..types import Detection, DetectionFlag, Ears, FloatArray
from .config import MappingConfig
from .grid import IntArray

_NEGLIGIBLE_WEIGHT = 1e-3
_DOUBTFUL = DetectionFlag.BEARING_AMBIGUOUS | DetectionFlag.CUES_CONTRADICT


@dataclass(frozen=True)
class Hypotheses:
    """Possible places of reflectors; all arrays have one entry per hypothesis.

    Attributes
    ----------
    detection
        Which detection it belongs to; grouped, in ascending order.
    head_x_m, head_y_m, head_yaw_rad
        Position from which the range counts, heading from which the bearing counts.
    spread_rad
        Standard deviation of the bearing, or half the interval where ``uniform``.
    weight
        Probability; sums to the detection's existence probability or less.
    soft
        Needs agreement from another place of the head.
    """

    detection: IntArray
    head_x_m: FloatArray
    head_y_m: FloatArray
    head_yaw_rad: FloatArray
    range_m: FloatArray
    bearing_rad: FloatArray
    range_sigma_m: FloatArray
    spread_rad: FloatArray
    weight: FloatArray
    uniform: NDArray[np.bool_]
    soft: NDArray[np.bool_]

    def __len__(self) -> int:
        return int(self.range_m.size)


def is_valid(detection: Detection) -> bool:
    """Whether a detection makes sense: finite numbers, probabilities in 0 .. 1."""
    d = detection
    numbers = (
        d.range_m,
        d.bearing_rad,
        d.range_sigma_m,
        d.bearing_sigma_rad,
        d.bearing_min_rad,
        d.bearing_max_rad,
        d.existence_probability,
        *(value for pair in d.alternatives for value in pair),
    )
    if not all(map(math.isfinite, numbers)):
        return False
    weights = [weight for _, weight in d.alternatives]
    return (
        d.range_m > 0.0
        and d.range_sigma_m >= 0.0
        and d.bearing_sigma_rad >= 0.0
        and d.bearing_min_rad <= d.bearing_max_rad
        and 0.0 <= d.existence_probability <= 1.0
        and min(weights, default=0.0) >= 0.0
        and sum(weights) <= 1.0 + 1e-6
    )


def hypotheses_of(
    detections: Sequence[Detection],
    head_poses: FloatArray,
    pose_variance: tuple[float, float, float],
    config: MappingConfig,
) -> Hypotheses:
    """Possible places of all echoes of one ping.

    Parameters
    ----------
    detections
        Valid ones only, see `is_valid`.
    head_poses
        Shape (n_detections, 3): x, y, yaw of the head for each.
    pose_variance
        Of x, y (m^2) and yaw (rad^2), widening range and bearing.
    """
    rows = [
        (i, *hypothesis)
        for i, detection in enumerate(detections)
        for hypothesis in _bearings(detection, config)
    ]
    table = np.array(rows, float).reshape(-1, 5)
    owner = table[:, 0].astype(np.int64)
    poses = head_poses[owner]
    ranges = np.array([d.range_m for d in detections])[owner]
    sigmas = np.array([d.range_sigma_m for d in detections])[owner]
    uniform = table[:, 4] == 1.0
    variance_m2 = 0.5 * (pose_variance[0] + pose_variance[1])
    bearing_variance = pose_variance[2] + variance_m2 / ranges**2
    spread = np.where(
        uniform,
        table[:, 2] + np.sqrt(bearing_variance),
        np.sqrt(table[:, 2] ** 2 + bearing_variance),
    )
    doubtful = np.array([bool(d.flags & _DOUBTFUL) for d in detections], bool)[owner]
    one_sided = np.array([d.ears is not Ears.BOTH for d in detections], bool)[owner]
    return Hypotheses(
        detection=owner,
        head_x_m=poses[:, 0],
        head_y_m=poses[:, 1],
        head_yaw_rad=poses[:, 2],
        range_m=ranges,
        bearing_rad=table[:, 1],
        range_sigma_m=np.sqrt(sigmas**2 + variance_m2),
        spread_rad=spread,
        weight=table[:, 3],
        uniform=uniform,
        soft=one_sided | doubtful | (spread * ranges > config.soft_lateral_sigma_m),
    )


def _bearings(
    detection: Detection, config: MappingConfig
) -> list[tuple[float, float, float, float]]:
    """Bearing, spread, weight and whether uniform (1.0), for each possible bearing.

    The detection's own sigma counts for its own bearing; where there are alternatives it
    spans them all and would be far too wide for each of them.
    """
    weight = detection.existence_probability
    if detection.flags & DetectionFlag.MULTIPATH_SUSPECTED:
        weight *= config.multipath_weight
    main = weight * max(0.0, 1.0 - sum(share for _, share in detection.alternatives))
    sigma, low, high = (
        detection.bearing_sigma_rad, detection.bearing_min_rad, detection.bearing_max_rad
    )  # fmt: skip
    if detection.ears is Ears.BOTH:
        doubt = config.bearing_outlier_weight
        wide = max(sigma, config.bearing_outlier_sigma_rad)
        bearings = [
            (detection.bearing_rad, sigma, main * (1.0 - doubt), 0.0),
            (detection.bearing_rad, wide, main * doubt, 0.0),
        ]
    else:
        bearings = [(0.5 * (low + high), 0.5 * (high - low), main, 1.0)]
    narrow = min(sigma, config.alternative_sigma_rad)
    bearings += [(b, narrow, weight * share, 0.0) for b, share in detection.alternatives]
    return [row for row in bearings if row[2] > _NEGLIGIBLE_WEIGHT] or bearings[:1]
