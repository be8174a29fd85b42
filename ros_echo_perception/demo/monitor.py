"""What was seen on the topics so far: counts, rates, latencies, detections, map. No ROS here."""

from __future__ import annotations

import math
from collections.abc import Iterable
from dataclasses import dataclass, field

import numpy as np
from numpy.typing import NDArray

from ..core.types import Pose2

_RATE_WINDOW_S = 2.0
OCCUPIED = 65  # nav2 map_server's default occupied_thresh, 0.65


@dataclass(frozen=True)
class SeenDetection:
    """A detection as it came over DDS."""

    range_m: float
    bearing_rad: float
    range_sigma_m: float
    bearing_sigma_rad: float
    existence_probability: float
    both_ears: bool


@dataclass(frozen=True)
class SeenPing:
    """A detection array as it came over DDS, with the time from raw echo to detections."""

    sequence: int
    emission_time_s: float
    latency_s: float
    processing_time_s: float
    detections: tuple[SeenDetection, ...]


@dataclass(frozen=True)
class SeenMap:
    """An occupancy grid; ``data`` has shape (height, width), -1 unknown, else 0 to 100."""

    data: NDArray[np.int8]
    resolution_m: float
    origin_x_m: float
    origin_y_m: float
    frame: str

    @property
    def occupied_cells(self) -> int:
        """Cells at or above the threshold of map servers."""
        return int(np.count_nonzero(self.data >= OCCUPIED))

    @property
    def known_area_m2(self) -> float:
        """Area about which the map says anything."""
        return float(np.count_nonzero(self.data >= 0)) * self.resolution_m**2

    def occupied_points(self) -> NDArray[np.float64]:
        """Centres of the occupied cells, shape (n, 2), in the map's frame."""
        row, column = np.nonzero(self.data >= OCCUPIED)
        return np.column_stack(
            (
                self.origin_x_m + (column + 0.5) * self.resolution_m,
                self.origin_y_m + (row + 0.5) * self.resolution_m,
            )
        )


@dataclass
class Monitor:
    """Collects what the recorder receives. Times are those of publishing, seconds of one clock."""

    raw_published_s: dict[int, float] = field(default_factory=dict)
    raw_flags: int = 0
    pings: dict[int, SeenPing] = field(default_factory=dict)
    path: list[tuple[float, Pose2]] = field(default_factory=list)
    latest_map: SeenMap | None = None
    n_maps: int = 0

    def on_raw(self, sequence: int, flags: int, published_s: float) -> None:
        """A raw echo has come."""
        self.raw_published_s[sequence] = published_s
        self.raw_flags |= flags

    def on_detections(
        self,
        sequence: int,
        emission_time_s: float,
        processing_time_s: float,
        detections: Iterable[SeenDetection],
        published_s: float,
    ) -> None:
        """The detections of one ping have come."""
        latency_s = published_s - self.raw_published_s.get(sequence, math.nan)
        self.pings[sequence] = SeenPing(
            sequence, emission_time_s, latency_s, processing_time_s, tuple(detections)
        )

    def on_odometry(self, time_s: float, pose: Pose2) -> None:
        """A pose of the robot has come."""
        self.path.append((time_s, pose))

    def on_map(self, seen: SeenMap) -> None:
        """A whole map has come."""
        self.latest_map = seen
        self.n_maps += 1

    @property
    def pings_sent(self) -> int:
        """Pings the driver numbered from the first to the last one seen."""
        received = self.raw_published_s
        return max(received) - min(received) + 1 if received else 0

    @property
    def raw_lost(self) -> int:
        """Gaps in the numbers of the raw echoes."""
        return self.pings_sent - len(self.raw_published_s)

    @property
    def answered(self) -> int:
        """Raw echoes that were seen and became detections."""
        return sum(1 for n in self.raw_published_s if n in self.pings)

    @property
    def unanswered(self) -> int:
        """Raw echoes older than the newest detections that never became detections."""
        if not self.pings:
            return len(self.raw_published_s)
        newest = max(self.pings)
        return sum(1 for n in self.raw_published_s if n <= newest and n not in self.pings)

    @property
    def n_detections(self) -> int:
        """Detections of all pings."""
        return sum(len(ping.detections) for ping in self.pings.values())

    def latencies_s(self) -> NDArray[np.float64]:
        """From receipt of the raw echo to receipt of its detections, where both were seen."""
        values = np.array([ping.latency_s for ping in self.pings.values()], float)
        return values[np.isfinite(values)]

    def recent_rate_hz(self, now_s: float) -> float:
        """Rate of raw echoes over the last two seconds."""
        recent = sum(1 for t in self.raw_published_s.values() if t > now_s - _RATE_WINDOW_S)
        return recent / _RATE_WINDOW_S

    def mean_rate_hz(self) -> float:
        """Rate of raw echoes from the first to the last, NaN below two."""
        times = list(self.raw_published_s.values())
        if len(times) < 2:
            return math.nan
        return (len(times) - 1) / (max(times) - min(times))
