"""The bench: a head at rest in front of obstacles at known places, one arrangement a ping."""

from __future__ import annotations

import dataclasses
import math
from collections.abc import Sequence
from itertools import product

from ..core.head import Head
from ..core.types import Pose2
from .robot_path import RobotPath
from .simulator import SimulatorSource
from .simulator_config import SimulatorConfig
from .world import Round, World

CALIBRATION_RANGES_M = (0.35, 0.7, 1.2, 2.0)
CALIBRATION_BEARINGS_RAD = tuple(math.radians(b) for b in (-35, -25, -15, -5, 5, 15, 25, 35))
CALIBRATION_POLE_RADIUS_M = 0.010


def round_at(
    range_m: float, bearing_rad: float, radius_m: float = 0.02, kind: str = "pole"
) -> Round:
    """A pole or sphere whose nearest point is at a range and bearing from the head.

    Examples
    --------
    >>> round_at(1.0, 0.0, 0.1).centre_m
    (1.1, 0.0)
    """
    distance = range_m + radius_m
    centre = (distance * math.cos(bearing_rad), distance * math.sin(bearing_rad))
    return Round(f"{kind}_{range_m:g}m_{math.degrees(bearing_rad):+.1f}deg", kind, centre, radius_m)


def poles(*places: tuple[float, float], radius_m: float = 0.02) -> World:
    """A world of poles at (range_m, bearing_rad) and nothing else."""
    return World("bench", (), tuple(round_at(r, b, radius_m) for r, b in places))


def calibration_grid() -> tuple[World, ...]:
    """One pole at each of 4 ranges and 8 bearings, in this order."""
    grid = product(CALIBRATION_RANGES_M, CALIBRATION_BEARINGS_RAD)
    return tuple(poles(place, radius_m=CALIBRATION_POLE_RADIUS_M) for place in grid)


def bench_source(
    head: Head,
    worlds: World | Sequence[World],
    config: SimulatorConfig | None = None,
    n_pings: int | None = None,
) -> SimulatorSource:
    """A head at rest at the origin of the world, looking along x.

    Parameters
    ----------
    worlds
        Ping k meets world k modulo their number.
    config
        Its mount is not used.
    n_pings
        As many as there are worlds if not told.
    """
    config = dataclasses.replace(
        config or SimulatorConfig(), mount_x_m=0.0, mount_y_m=0.0, mount_yaw_rad=0.0
    )
    worlds = (worlds,) if isinstance(worlds, World) else tuple(worlds)
    count = len(worlds) if n_pings is None else n_pings
    # A tenth of an interval more, so that rounding down never loses the last ping.
    duration_s = (count + 0.1) / config.ping_rate_hz + config.record_s
    return SimulatorSource(head, worlds, RobotPath.standing(Pose2(), duration_s), config)
