"""The simulated room as it is: made again from the same file and seed as in the driver."""

from __future__ import annotations

import math
from collections.abc import Sequence

import numpy as np
from numpy.typing import NDArray

from ..core.errors import OdometryGapError
from ..core.head import load_head
from ..core.mapping import PoseBuffer
from ..core.types import OdometrySample, Pose2
from ..nodes.source import find_head_file
from ..sources.robot_path import load_path
from ..sources.simulator import SimulatorSource
from ..sources.simulator_config import SimulatorConfig
from ..sources.world import World, load_world
from .comparison import TrueEcho, alignment, moved
from .monitor import Monitor, SeenPing
from .session import Plan

_CIRCLE_POINTS = 33


class TrueDrive:
    """What the driver's simulator played; ping numbers are those of the messages."""

    def __init__(self, plan: Plan, config: SimulatorConfig) -> None:
        world_path = plan.world_path()
        self._simulator = SimulatorSource(
            load_head(find_head_file(plan.head)), load_world(world_path), load_path(world_path),
            config,
        )  # fmt: skip
        self.mount = config.mount

    def echoes(self, sequence: int) -> list[TrueEcho]:
        """All true echoes of a ping, also those that nobody could be expected to find."""
        return [
            TrueEcho(r.range_m, r.bearing_rad, max(r.snr_db), not r.not_scored_because)
            for r in self._simulator.truth(sequence).reflectors
        ]

    def world_in_odometry(self, pings: Sequence[SeenPing], poses: PoseBuffer) -> Pose2:
        """Pose of the true world in the drifting odometry frame, agreeing at the last ping.

        Raises
        ------
        OdometryGapError
            When no ping has odometry around it.
        """
        for ping in sorted(pings, key=lambda p: -p.sequence):
            try:
                odometry = poses.pose_at(ping.emission_time_s)
            except OdometryGapError:
                continue
            time_s = self._simulator.emission_time_s(ping.sequence)
            return alignment(odometry, self._simulator.true_pose(time_s))
        raise OdometryGapError("no ping has odometry around its emission.")

    def outline(self, frame: Pose2) -> list[NDArray[np.float64]]:
        """All surfaces as polylines, the world standing at ``frame``."""
        return [moved(line, frame) for line in outline_of(self._simulator.world)]


def outline_of(world: World) -> list[NDArray[np.float64]]:
    """All surfaces of a world as polylines, each of shape (n, 2)."""
    lines = [np.array([surface.start_m, surface.end_m], float) for surface in world.surfaces]
    angle = np.linspace(0.0, 2.0 * math.pi, _CIRCLE_POINTS)
    circle = np.column_stack((np.cos(angle), np.sin(angle)))
    lines += [np.array(r.centre_m) + r.radius_m * circle for r in world.rounds]
    return lines


def pose_buffer(monitor: Monitor) -> PoseBuffer:
    """The odometry that was received, ready to be asked for poses."""
    poses = PoseBuffer(max_samples=len(monitor.path) + 1)
    for time_s, pose in monitor.path:
        poses.add(OdometrySample(time_s, pose))
    return poses


def placed(pings: Sequence[SeenPing], poses: PoseBuffer, mount: Pose2) -> NDArray[np.float64]:
    """Places of the two-eared detections in the odometry frame, shape (n, 2)."""
    points = []
    for ping in pings:
        try:
            head = poses.pose_at(ping.emission_time_s).compose(mount)
        except OdometryGapError:
            continue
        for d in ping.detections:
            if d.both_ears and math.isfinite(d.bearing_rad):
                angle = head.yaw_rad + d.bearing_rad
                points.append(
                    (head.x_m + d.range_m * math.cos(angle), head.y_m + d.range_m * math.sin(angle))
                )
    return np.array(points, float).reshape(-1, 2)
