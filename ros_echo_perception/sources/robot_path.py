"""Where the simulated robot is: smooth motion along waypoints, and what its odometry makes of it.

The robot drives like a differential drive: it turns towards the next waypoint, slows down while
it turns, and its speeds change with limited acceleration.
"""

from __future__ import annotations

import math
from dataclasses import dataclass
from pathlib import Path
from typing import Any

import numpy as np

from ..core.errors import FileFormatError, refuse
from ..core.fields import Fields, read_yaml
from ..core.types import FloatArray, OdometrySample, Pose2, wrap_angle

STEP_S = 0.005
_ORIGIN = Pose2()
MAX_DURATION_S = 3600.0
_ACCELERATION_M_S2, _TURN_ACCELERATION_RAD_S2 = 0.6, 3.0
_REACHED_M, _TURNED_RAD = 0.08, 0.02


@dataclass(frozen=True)
class Waypoint:
    """One task of the robot: drive to (x_m, y_m), else turn to yaw_rad, then wait wait_s."""

    x_m: float | None = None
    y_m: float | None = None
    yaw_rad: float | None = None
    wait_s: float = 0.0


class RobotPath:
    """True pose and speed of base_link over time, in the frame of the world.

    Parameters
    ----------
    poses : shape (n, 3), x, y and unwrapped yaw every `STEP_S` from time 0.
    speeds : shape (n, 2), forward speed (m/s) and turn rate (rad/s) at the same times.
    """

    def __init__(self, poses: FloatArray, speeds: FloatArray) -> None:
        self.poses, self.speeds = poses, speeds
        self.duration_s = (len(poses) - 1) * STEP_S
        self.start = Pose2(*(float(v) for v in poses[0]))

    @classmethod
    def standing(cls, pose: Pose2 = _ORIGIN, duration_s: float = 1.0) -> RobotPath:
        """A robot that does not move."""
        n = round(duration_s / STEP_S) + 1
        poses = np.tile([pose.x_m, pose.y_m, pose.yaw_rad], (n, 1))
        return cls(poses, np.zeros((n, 2)))

    @classmethod
    def along(
        cls,
        start: Pose2,
        waypoints: tuple[Waypoint, ...],
        speed_m_s: float = 0.4,
        turn_rad_s: float = 0.9,
    ) -> RobotPath:
        """Drive along waypoints with at most the given speeds.

        Raises
        ------
        FileFormatError
            When the robot has not reached the last waypoint after `MAX_DURATION_S`.
        """
        robot = _Robot(start, speed_m_s, turn_rad_s)
        for number, waypoint in enumerate(waypoints):
            if not robot.perform(waypoint):
                raise FileFormatError(
                    refuse(f"waypoint {number}", waypoint, "one that can be reached")
                )
        return cls(np.array(robot.poses), np.array(robot.speeds))

    def pose(self, time_s: float) -> Pose2:
        """True pose; before the start and after the end the robot stands."""
        index, part = self._at(time_s)
        x, y, yaw = (1.0 - part) * self.poses[index] + part * self.poses[index + 1]
        return Pose2(float(x), float(y), wrap_angle(float(yaw)))

    def velocity(self, time_s: float) -> tuple[float, float]:
        """True forward speed (m/s) and turn rate (rad/s)."""
        if not 0.0 < time_s < self.duration_s:
            return 0.0, 0.0
        index, part = self._at(time_s)
        forward, turn = (1.0 - part) * self.speeds[index] + part * self.speeds[index + 1]
        return float(forward), float(turn)

    def _at(self, time_s: float) -> tuple[int, float]:
        steps = min(max(time_s / STEP_S, 0.0), len(self.poses) - 1.0)
        index = min(int(steps), len(self.poses) - 2)
        return index, steps - index


class _Robot:
    """Follows waypoints step by step and remembers where it was."""

    def __init__(self, start: Pose2, speed_m_s: float, turn_rad_s: float) -> None:
        self.x, self.y, self.yaw = start.x_m, start.y_m, start.yaw_rad
        self.forward = self.turn = 0.0
        self.max_forward, self.max_turn = speed_m_s, turn_rad_s
        self.poses = [[self.x, self.y, self.yaw]]
        self.speeds = [[0.0, 0.0]]

    def perform(self, waypoint: Waypoint) -> bool:
        """Do one task; False when it takes longer than allowed."""
        while self._busy(waypoint):
            if len(self.poses) * STEP_S > MAX_DURATION_S:
                return False
        for _ in range(round(waypoint.wait_s / STEP_S)):
            self._step(0.0, 0.0)
        return True

    def _busy(self, waypoint: Waypoint) -> bool:
        """One step towards the waypoint; False when nothing is left to do."""
        if waypoint.x_m is not None and waypoint.y_m is not None:
            dx, dy = waypoint.x_m - self.x, waypoint.y_m - self.y
            left_m = math.hypot(dx, dy)
            if left_m < _REACHED_M:
                return False
            error = wrap_angle(math.atan2(dy, dx) - self.yaw)
            slow = math.sqrt(2.0 * _ACCELERATION_M_S2 * left_m)
            aligned = max(0.0, math.cos(min(abs(1.6 * error), math.pi)))
            self._step(min(self.max_forward, slow) * aligned, 2.5 * error)
            return True
        if waypoint.yaw_rad is not None:
            error = wrap_angle(waypoint.yaw_rad - self.yaw)
            if abs(error) < _TURNED_RAD and abs(self.turn) < 0.05:
                return False
            self._step(0.0, 2.5 * error)
            return True
        stopped = abs(self.forward) < 1e-9 and abs(self.turn) < 1e-9
        self._step(0.0, 0.0)
        return not stopped

    def _step(self, forward: float, turn: float) -> None:
        turn = min(max(turn, -self.max_turn), self.max_turn)
        limit = _ACCELERATION_M_S2 * STEP_S
        self.forward += min(max(forward - self.forward, -limit), limit)
        limit = _TURN_ACCELERATION_RAD_S2 * STEP_S
        self.turn += min(max(turn - self.turn, -limit), limit)
        middle = self.yaw + 0.5 * self.turn * STEP_S
        self.x += self.forward * math.cos(middle) * STEP_S
        self.y += self.forward * math.sin(middle) * STEP_S
        self.yaw += self.turn * STEP_S
        self.poses.append([self.x, self.y, self.yaw])
        self.speeds.append([self.forward, self.turn])


def load_path(path: str | Path) -> RobotPath:
    """The robot's path in a world file; errors as in `load_world`."""
    return path_from_mapping(read_yaml(path), str(path))


def path_from_mapping(data: Any, file: str = "world") -> RobotPath:
    """The robot's path from the contents of a world file."""
    fields = Fields(data, file).section("path")
    fields.only("start", "speed_m_s", "turn_rad_s", "waypoints")
    x, y, yaw = fields.numbers("start", 3, -1000.0, 1000.0)
    waypoints = tuple(_waypoint(item) for item in fields.sections("waypoints", minimum=1))
    speed_m_s = fields.number("speed_m_s", 0.01, 3.0, 0.4)
    turn_rad_s = fields.number("turn_rad_s", 0.05, 5.0, 0.9)
    return RobotPath.along(Pose2(x, y, yaw), waypoints, speed_m_s, turn_rad_s)


def _waypoint(fields: Fields) -> Waypoint:
    fields.only("to_m", "turn_to_rad", "wait_s")
    wait_s = fields.number("wait_s", 0.0, MAX_DURATION_S, 0.0)
    if fields.has("to_m"):
        x, y = fields.numbers("to_m", 2, -1000.0, 1000.0)
        return Waypoint(x, y, wait_s=wait_s)
    if fields.has("turn_to_rad"):
        yaw = fields.number("turn_to_rad", -2.0 * math.pi, 2.0 * math.pi)
        return Waypoint(yaw_rad=yaw, wait_s=wait_s)
    if not wait_s:
        raise fields.refuse("waypoint", dict(fields.data), "to_m, turn_to_rad or wait_s")
    return Waypoint(wait_s=wait_s)


def drifting_odometry(
    path: RobotPath, seed: int, error_scale: float = 1.0, rate_hz: float = 50.0
) -> tuple[OdometrySample, ...]:
    """What wheel odometry reports: starts at 0, 0, 0 and drifts.

    Typical errors (common practice for indoor robots), all multiplied by ``error_scale``: the
    wheels' scale is wrong by 1 %, the track width by 1.5 %, speeds are noisy, and the wheels slip
    now and then while the robot turns.
    """
    rng = np.random.default_rng([seed, 7])
    times = np.arange(0.0, path.duration_s + 1e-9, 1.0 / rate_hz)
    true = np.array([path.velocity(float(t)) for t in times])
    scale, track = 1.0 + error_scale * np.array([0.01, 0.015]) * rng.uniform(-1.0, 1.0, 2)
    noise = error_scale * rng.standard_normal((len(times), 2)) * [0.02, 0.03]
    slip = 1.0 + error_scale * 0.25 * (rng.random(len(times)) < 0.01)
    forward = scale * true[:, 0] * (1.0 + noise[:, 0])
    turn = track * true[:, 1] * (1.0 + noise[:, 1]) * slip
    yaw = np.concatenate([[0.0], np.cumsum(0.5 * (turn[1:] + turn[:-1]) / rate_hz)])
    step = 0.5 * (forward[1:] + forward[:-1]) / rate_hz
    heading = 0.5 * (yaw[1:] + yaw[:-1])
    x = np.concatenate([[0.0], np.cumsum(step * np.cos(heading))])
    y = np.concatenate([[0.0], np.cumsum(step * np.sin(heading))])
    covariance = _covariances(x, y, turn / rate_hz, error_scale)
    return tuple(
        OdometrySample(
            float(t), Pose2(float(px), float(py), wrap_angle(float(a))), float(v), float(w), c
        )
        for t, px, py, a, v, w, c in zip(times, x, y, yaw, forward, turn, covariance, strict=True)
    )


_WAY_SIGMA_M, _TURN_SIGMA_RAD, _HEADING_SIGMA_RAD = 0.01, 0.012, 0.003
_LEAST_SIGMA = 1e-4


def _covariances(
    x: FloatArray, y: FloatArray, turned: FloatArray, error_scale: float
) -> FloatArray:
    """Covariance of (x, y, yaw) at each sample, shape (n, 3, 3): a random walk.

    Independent errors of 1 cm per root metre in x and y, 0.012 rad per root radian of turning and
    0.003 rad per root metre in heading, all times ``error_scale``; errors of the heading carry
    every later step aside. The usual propagation ``P' = F P F^T + Q`` of wheel odometry
    (S. Thrun, W. Burgard and D. Fox, Probabilistic Robotics, MIT Press 2005, section 5.4),
    summed in closed form.
    """
    dx, dy = np.diff(x, prepend=x[:1]), np.diff(y, prepend=y[:1])
    way = np.hypot(dx, dy)
    scale = error_scale**2
    place = scale * _WAY_SIGMA_M**2 * np.cumsum(way) + _LEAST_SIGMA**2
    added = _TURN_SIGMA_RAD**2 * np.abs(turned) + _HEADING_SIGMA_RAD**2 * way
    yaw = scale * np.cumsum(added) + _LEAST_SIGMA**2
    before = _shifted(yaw, _LEAST_SIGMA**2)
    x_yaw, y_yaw = -np.cumsum(dy * before), np.cumsum(dx * before)
    old_x, old_y = _shifted(x_yaw, 0.0), _shifted(y_yaw, 0.0)
    xx = place + np.cumsum(dy**2 * before - 2.0 * dy * old_x)
    yy = place + np.cumsum(dx**2 * before + 2.0 * dx * old_y)
    xy = np.cumsum(dx * old_x - dy * old_y - dx * dy * before)
    rows = [[xx, xy, x_yaw], [xy, yy, y_yaw], [x_yaw, y_yaw, yaw]]
    return np.moveaxis(np.array(rows), 2, 0)


def _shifted(values: FloatArray, first: float) -> FloatArray:
    """The values one sample earlier."""
    return np.concatenate([[first], values[:-1]])
