"""The plain map for comparison: each echo raises an arc, each cell by itself.

What occupancy grids from sonar have been since the beginning (A. Elfes, "Using occupancy grids
for mobile robot perception and navigation", Computer 22, 1989, 46-57; the idea, from memory):
every cell that the echo's range and bearing allow becomes more likely occupied by the same
factor, every cell nearer within the same angles becomes less likely so, and nothing competes.
It takes the same detections, poses and window as `LocalMapper`, so that the two can be scored
side by side.
"""

from __future__ import annotations

from collections.abc import Iterable

import numpy as np

from ..errors import OdometryGapError
from ..types import Detection, Ears, FloatArray, OdometrySample, PingResult, Pose2
from .config import MappingConfig
from .evidence import head_poses
from .grid import IntArray, MapSnapshot, RollingGrid
from .hypotheses import is_valid
from .poses import PoseBuffer

_HIT_LOG_ODDS, _FREE_LOG_ODDS = 0.4, -0.1
_LIMIT_LOG_ODDS = 4.0
_MIN_RANGE_SIGMA_CELLS = 0.5
_SIGMAS = 2.0


def plain_arcs_map(
    config: MappingConfig,
    mounts: dict[str, Pose2],
    events: Iterable[OdometrySample | tuple[str, PingResult]],
) -> MapSnapshot:
    """A map of independent log-odds along the arcs of the detections.

    Parameters
    ----------
    config
        Window, cells, and which echoes are used; the sensor model's settings do not count.
    mounts
        Pose of each head's reference point in base_link, by head id.
    events
        As for `run_mapper`.

    Returns
    -------
    The window around the robot's last place, nothing faded. Pings without odometry, and all
    before the last jump of the odometry, are left out.

    Examples
    --------
    >>> echo = Detection(1.0, 0.0, 0.002, 0.1, -0.2, 0.2, (0.1, 0.1), (30.0, 30.0), 1.0)
    >>> ping = PingResult(0.0, 0, (echo,), 343.0, 0.3, 5.0, 0.5, (0.0, 0.0))
    >>> events = [OdometrySample(t, Pose2()) for t in (0.0, 0.1)] + [("front", ping)] * 3
    >>> found = plain_arcs_map(MappingConfig(), {"front": Pose2()}, events)
    >>> int(found.data[80, 100]), int(found.data[80, 90])  # 1 m ahead, 0.5 m ahead
    (77, 43)
    """
    grid = RollingGrid(config.width_cells, config.height_cells, config.resolution_m)
    samples: list[OdometrySample] = []
    pings: list[tuple[str, PingResult]] = []
    for event in events:
        if isinstance(event, OdometrySample):
            samples.append(event)
        else:
            pings.append(event)
    poses = PoseBuffer(
        config.max_pose_gap_s,
        config.max_speed_m_s,
        config.max_turn_rad_s,
        config.time_restart_s,
        max_samples=len(samples) + 1,
    )
    for sample in samples:
        poses.add(sample)
    time_s, revision = float("nan"), 0
    for head_id, result in sorted(pings, key=lambda ping: ping[1].emission_time_s):
        used = [d for d in result.detections if _is_used(d, config)]
        try:
            robot = poses.pose_at(result.emission_time_s)
            _, heads = head_poses(poses, mounts[head_id], result, used)
        except OdometryGapError:
            continue
        grid.centre_on(robot.x_m, robot.y_m)
        for detection, head in zip(used, heads, strict=True):
            _add(grid, detection, head, result.range_min_m)
        time_s, revision = result.emission_time_s, revision + 1
    x, y = grid.origin_m
    return MapSnapshot(grid.occupancy(0.0, 0.0, 0.0), config.resolution_m, x, y, time_s, revision)


def _is_used(detection: Detection, config: MappingConfig) -> bool:
    return (
        is_valid(detection)
        and detection.range_m <= config.max_range_m
        and detection.existence_probability >= config.min_existence_probability
    )


def _add(grid: RollingGrid, detection: Detection, head: FloatArray, range_min_m: float) -> None:
    """Raise the cells on the arc of one echo once each, lower those before it."""
    low, high = _interval(detection)
    sigma_m = max(detection.range_sigma_m, _MIN_RANGE_SIGMA_CELLS * grid.resolution_m)
    near_m, far_m = detection.range_m - sigma_m, detection.range_m + sigma_m
    hit = _sector(grid, head, (low, high), near_m, far_m)
    free = np.setdiff1d(_sector(grid, head, (low, high), range_min_m, near_m), hit)
    for cells, step in ((hit, _HIT_LOG_ODDS), (free, _FREE_LOG_ODDS)):
        new = grid.log_odds[cells] + step
        grid.log_odds[cells] = np.clip(new, -_LIMIT_LOG_ODDS, _LIMIT_LOG_ODDS)


def _interval(detection: Detection) -> tuple[float, float]:
    """Bearings that the echo allows: two sigmas, or all that one ear leaves open."""
    if detection.ears is not Ears.BOTH:
        return detection.bearing_min_rad, detection.bearing_max_rad
    span = min(_SIGMAS * detection.bearing_sigma_rad, np.pi)
    return detection.bearing_rad - span, detection.bearing_rad + span


def _sector(
    grid: RollingGrid, head: FloatArray, angles: tuple[float, float], from_m: float, to_m: float
) -> IntArray:
    """Cells of a sector of a ring, each once."""
    if to_m <= from_m:
        return np.zeros(0, np.int64)
    step = 0.5 * grid.resolution_m
    distance = np.linspace(from_m, to_m, int((to_m - from_m) / step) + 2)
    width = min(angles[1] - angles[0], 2.0 * np.pi)
    bearing = angles[0] + np.linspace(0.0, width, int(width * to_m / step) + 2)
    angle = head[2] + bearing
    x = head[0] + distance[:, None] * np.cos(angle)
    y = head[1] + distance[:, None] * np.sin(angle)
    cells = np.unique(grid.locate(x.ravel(), y.ravel()))
    return cells[cells >= 0]
