"""The evidence of one ping in terms of cells: where the head was, what it heard, what that says."""

from __future__ import annotations

import math
from collections.abc import Sequence

import numpy as np

from ..types import Detection, FloatArray, PingFlag, PingResult, Pose2
from . import sensor_model
from .config import MappingConfig
from .grid import IntArray, RollingGrid
from .hypotheses import Hypotheses
from .poses import PoseBuffer
from .sensor_model import Paths, Samples
from .update import FreeEvidence, HitEvidence

_DEAF = (
    PingFlag.LEFT_CLIPPED | PingFlag.RIGHT_CLIPPED | PingFlag.LEFT_DEAD | PingFlag.RIGHT_DEAD
    | PingFlag.OFFSET_DRIFT | PingFlag.INTERFERENCE
)  # fmt: skip
"""The silence of a ping with one of these flags says nothing under any policy."""
_SILENT_MARGIN_M = 0.15


def head_poses(
    poses: PoseBuffer, mount: Pose2, result: PingResult, detections: Sequence[Detection]
) -> tuple[Pose2, FloatArray]:
    """The head at emission, and for each echo (n, 3) the x, y, yaw it counts from.

    The measured range is half the way out and back, so it counts, to first order in the
    motion, from the middle between the head's places at emission and at reception. The
    bearing is that of the wave as it comes in: it counts from the heading at reception.

    Raises
    ------
    OdometryGapError
        When the odometry does not cover the flight.
    """
    flight_s = np.array([0.0] + [2.0 * d.range_m for d in detections])
    flight_s /= result.speed_of_sound_m_s
    base = poses.poses_at(result.emission_time_s + flight_s)
    c, s = np.cos(base[:, 2]), np.sin(base[:, 2])
    x = base[:, 0] + c * mount.x_m - s * mount.y_m
    y = base[:, 1] + s * mount.x_m + c * mount.y_m
    yaw = base[:, 2] + mount.yaw_rad
    heads = np.stack([0.5 * (x[0] + x[1:]), 0.5 * (y[0] + y[1:]), yaw[1:]], axis=1)
    return Pose2(float(x[0]), float(y[0]), float(yaw[0])), heads


def arcs_of(
    possible: Hypotheses, grid: RollingGrid, config: MappingConfig
) -> tuple[Samples, IntArray]:
    """Points where the reflectors may be, and their cells."""
    arcs = sensor_model.arc_samples(possible, config.resolution_m, config.surface_width_m)
    return arcs, grid.locate(arcs.x_m, arcs.y_m)


def free_paths(
    possible: Hypotheses, grid: RollingGrid, range_min_m: float, config: MappingConfig
) -> tuple[Paths, IntArray]:
    """Points which the sound passed, and their cells."""
    paths = sensor_model.path_samples(
        possible, config.resolution_m, range_min_m, config.free_half_width_m
    )
    return paths, grid.locate(paths.samples.x_m, paths.samples.y_m)


def prior_of(
    possible: Hypotheses,
    arcs: Samples,
    log_odds: FloatArray,
    support: FloatArray,
    config: MappingConfig,
) -> FloatArray:
    """Prior weight of each point as the cause of its echo."""
    novelty = np.where(possible.soft, config.doubtful_novelty, config.certain_novelty)
    return np.asarray(np.exp(np.minimum(log_odds, 0.0)) * (support + novelty[arcs.owner]))


def hit_evidence(
    possible: Hypotheses, arcs: Samples, cells: IntArray, mass: FloatArray, clear: FloatArray
) -> HitEvidence:
    """Masses by cell, less where the view is blocked, split into firm and soft."""
    seen = mass * clear[arcs.owner]
    soft = possible.soft[arcs.owner]
    return HitEvidence(cells, np.where(soft, 0.0, seen), np.where(soft, seen, 0.0))


def free_evidence(paths: Paths, cells: IntArray, clear: FloatArray) -> FreeEvidence:
    """Weights by cell, less where the view is blocked."""
    return FreeEvidence(cells, paths.samples.weight * clear[paths.samples.owner])


def with_silence(
    free: FreeEvidence,
    grid: RollingGrid,
    emission: Pose2,
    result: PingResult,
    detections: Sequence[Detection],
    config: MappingConfig,
) -> FreeEvidence:
    """Adds what silence says under the policy to clear: the beam is free before all echoes.

    It says nothing when the ping was disturbed, nearer than the nearest measurable range, and
    beyond ``clear_range_m``.
    """
    if result.flags & _DEAF:
        return free
    nearest_m = min((d.range_m for d in detections), default=math.inf) - _SILENT_MARGIN_M
    x, y = sensor_model.silent_samples(
        emission,
        result.beam_half_width_rad,
        result.range_min_m,
        min(config.clear_range_m, result.range_max_m, nearest_m),
        config.resolution_m,
    )
    cells = grid.locate(x, y)
    return FreeEvidence(
        np.concatenate([free.cells, cells]), np.concatenate([free.weight, np.ones(cells.size)])
    )
