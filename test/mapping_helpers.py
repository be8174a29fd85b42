"""Detections, pings and drives for the tests of the mapping."""

import math

import numpy as np

from ros_echo_perception.core.mapping import LocalMapper, MappingConfig
from ros_echo_perception.core.types import (
    Detection,
    DetectionFlag,
    Ears,
    OdometrySample,
    PingFlag,
    PingResult,
    Pose2,
)

SOUND_M_S = 343.0


def detection(range_m, bearing_rad, sigma_rad=0.01, **values):
    """A two-sided echo; the range is certain to 2 mm."""
    fields = {
        "range_m": range_m,
        "bearing_rad": bearing_rad,
        "range_sigma_m": 0.002,
        "bearing_sigma_rad": sigma_rad,
        "bearing_min_rad": bearing_rad - 2 * sigma_rad,
        "bearing_max_rad": bearing_rad + 2 * sigma_rad,
        "ear_amplitude": (0.1, 0.1),
        "ear_snr_db": (25.0, 25.0),
        "existence_probability": 0.99,
    }
    return Detection(**(fields | values))


def one_sided(range_m, low_rad, high_rad):
    """An echo heard by the left ear alone."""
    return detection(
        range_m,
        (low_rad + high_rad) / 2,
        bearing_min_rad=low_rad,
        bearing_max_rad=high_rad,
        ears=Ears.LEFT_ONLY,
    )


def ping(time_s, *detections, flags=PingFlag.NONE, **values):
    """A ping that could hear from 0.3 to 5 m within 30 degrees to either side."""
    fields = {
        "emission_time_s": time_s,
        "sequence": 0,
        "detections": tuple(detections),
        "speed_of_sound_m_s": SOUND_M_S,
        "range_min_m": 0.3,
        "range_max_m": 5.0,
        "beam_half_width_rad": math.radians(30),
        "noise": (1e-4, 1e-4),
        "flags": flags,
    }
    return PingResult(**(fields | values))


def mapper(mounts=None, **settings):
    return LocalMapper(MappingConfig(**settings), mounts or {"front": Pose2()})


def look(to, times, detections_at, pose_at=lambda t: Pose2(), head="front"):
    """Feed pings at the times with odometry every 20 ms around them."""
    for time_s in times:
        odometry(to, time_s, time_s + 0.1, pose_at)
        found = detections_at(pose_at(time_s))
        to.add_ping(head, ping(time_s, *found))
    odometry(to, times[-1] + 0.1, times[-1] + 0.2, pose_at)
    return to.snapshot()


def odometry(to, start_s, end_s, pose_at=lambda t: Pose2()):
    """Odometry every 20 ms, the times on one common raster."""
    for k in range(math.floor(start_s / 0.02), math.ceil(end_s / 0.02) + 1):
        to.add_odometry(OdometrySample(0.02 * k, pose_at(0.02 * k)))


def value(snapshot, x_m, y_m):
    """Value of the cell at a place."""
    column = math.floor((x_m - snapshot.origin_x_m) / snapshot.resolution_m)
    row = math.floor((y_m - snapshot.origin_y_m) / snapshot.resolution_m)
    return int(snapshot.data[row, column])


def highest(snapshot, x_m, y_m, radius_m=0.1):
    """Highest value among the cells around a place."""
    steps = [-radius_m, -radius_m / 2, 0.0, radius_m / 2, radius_m]
    return max(value(snapshot, x_m + dx, y_m + dy) for dx in steps for dy in steps)


def farthest(snapshot, x_m, y_m):
    """Distance of the occupied cell that is farthest from a place."""
    rows, columns = np.nonzero(snapshot.data >= 65)
    x = snapshot.origin_x_m + (columns + 0.5) * snapshot.resolution_m
    y = snapshot.origin_y_m + (rows + 0.5) * snapshot.resolution_m
    return float(np.hypot(x - x_m, y - y_m).max())


def seen_from(pose, points, sigma_rad=0.01):
    """Exact echoes of points from a head's pose, those within 80 degrees and 4.5 m."""
    found = []
    for x, y in points:
        bearing = math.remainder(math.atan2(y - pose.y_m, x - pose.x_m) - pose.yaw_rad, 2 * math.pi)
        range_m = math.hypot(x - pose.x_m, y - pose.y_m)
        if abs(bearing) < math.radians(80) and 0.3 < range_m < 4.5:
            found.append(detection(range_m, bearing, sigma_rad))
    return sorted(found, key=lambda d: d.range_m)


AMBIGUOUS = DetectionFlag.BEARING_AMBIGUOUS
MULTIPATH = DetectionFlag.MULTIPATH_SUSPECTED


POLES = [(1.5, 0.4), (2.0, -0.6), (3.0, 0.1), (2.5, 1.5)]
LASTING = {"occupied_decay_s": 0.0, "free_decay_s": 0.0}


def along_x(time_s):
    """Half a metre a second, slowly turning."""
    return Pose2(0.5 * time_s, 0.0, 0.1 * time_s)


def every(n, step_s=0.1, start_s=0.1):
    return [start_s + step_s * k for k in range(n)]


def drive_past(points=POLES, n=15, sigma_rad=0.01, pose_at=along_x, **values):
    found = look(
        mapper(**(LASTING | values)), every(n), lambda p: seen_from(p, points, sigma_rad), pose_at
    )
    return found
