"""Where the reflector of each echo may be: places with weights, seen from a moving head."""

from __future__ import annotations

import math
from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from ..types import Detection, FloatArray
from .bearings import bearings_of
from .config import MappingConfig
from .grid import IntArray
from .motion import Look

_WEIGHT_SLACK = 1e-3
"""Weights of alternatives are rounded in messages."""


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
        and sum(weights) <= 1.0 + _WEIGHT_SLACK
    )


def hypotheses_of(
    detections: Sequence[Detection],
    head_poses: FloatArray,
    pose_variance: tuple[float, float, float],
    config: MappingConfig,
    looks: Sequence[Look] = (),
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
    looks
        Earlier pings of the same head; where there are enough, the way of the robot between
        them and this one weighs the bearings, see `motion`.
    """
    candidates = bearings_of(detections, head_poses, looks, config)
    owner, spread = candidates.detection, candidates.spread_rad
    poses = head_poses[owner]
    ranges = np.array([d.range_m for d in detections])[owner]
    sigmas = np.array([d.range_sigma_m for d in detections])[owner]
    variance_m2 = 0.5 * (pose_variance[0] + pose_variance[1])
    bearing_variance = pose_variance[2] + variance_m2 / ranges**2
    spread = np.where(
        candidates.uniform,
        spread + np.sqrt(bearing_variance),
        np.sqrt(spread**2 + bearing_variance),
    )
    return Hypotheses(
        detection=owner,
        head_x_m=poses[:, 0],
        head_y_m=poses[:, 1],
        head_yaw_rad=poses[:, 2],
        range_m=ranges,
        bearing_rad=candidates.bearing_rad,
        range_sigma_m=np.sqrt(sigmas**2 + variance_m2),
        spread_rad=spread,
        weight=candidates.weight,
        uniform=candidates.uniform,
        soft=~candidates.settled | (spread * ranges > config.soft_lateral_sigma_m),
    )
