"""The whole way from detections and odometry to a local map, as named steps. Read this first."""

from __future__ import annotations

import enum
import math
from collections import Counter
from collections.abc import Iterable, Mapping

import numpy as np

from ..errors import OdometryGapError, SettingError, refuse
from ..types import Detection, OdometrySample, PingResult, Pose2
from .config import CLEAR_TO_RANGE, MappingConfig
from .evidence import (
    arcs_of,
    free_evidence,
    free_paths,
    head_poses,
    hit_evidence,
    prior_of,
    with_silence,
)
from .grid import MapSnapshot, RollingGrid
from .hypotheses import hypotheses_of, is_valid
from .motion import Looks
from .pending import PendingPings, WaitingPing
from .poses import PoseBuffer, PoseOutcome, has_broken_covariance
from .sensor_model import clear_view, share
from .update import GridUpdater


class MapOutcome(enum.Enum):
    """What became of a ping."""

    QUEUED = "queued"
    FUSED = "fused"
    SKIPPED_NO_ODOMETRY = "skipped_no_odometry"
    DROPPED_QUEUE_FULL = "dropped_queue_full"
    DROPPED_TIME_RESTARTED = "dropped_time_restarted"
    UNKNOWN_HEAD = "unknown_head"
    INVALID = "invalid_ping"
    LATE = "late"


class LocalMapper:
    """Fuses pings of one or several heads into a window around the robot.

    Pings wait for the odometry around them and are used in the order of emission, whatever
    the order in which they come, so the same messages give the same map, bit for bit; no
    clock is read. If the odometry's time restarts or its pose jumps, the map is cleared: the
    old cells would stand in a frame that no longer exists.

    Parameters
    ----------
    config
        Settings.
    mounts
        Pose of each head's reference point in base_link, by head id.

    Attributes
    ----------
    counts
        How often each outcome has occurred, by name (values of `MapOutcome`,
        `PoseOutcome`, ``map_cleared``, ``detections_used``, ``detections_invalid``,
        ``detections_vague`` (range too uncertain), ``detections_excess`` (too many in a ping),
        ``covariance_invalid`` (impossible, taken as unknown), ``covariance_capped``).

    Examples
    --------
    >>> mapper = LocalMapper(MappingConfig(), {"front": Pose2(0.1, 0.0, 0.0)})
    >>> mapper.add_odometry(OdometrySample(0.0, Pose2())).value
    'odometry_added'
    >>> mapper.snapshot().data.shape
    (160, 160)
    """

    def __init__(self, config: MappingConfig, mounts: Mapping[str, Pose2]) -> None:
        if not mounts:
            raise SettingError(refuse("mounts", {}, "at least one head", "give its mount pose"))
        for head_id, mount in mounts.items():
            if not all(map(math.isfinite, (mount.x_m, mount.y_m, mount.yaw_rad))):
                raise SettingError(refuse(f"mount of {head_id}", mount, "finite numbers"))
        self.config = config
        self.mounts = dict(mounts)
        self.counts: Counter[str] = Counter()
        self.grid = RollingGrid(config.width_cells, config.height_cells, config.resolution_m)
        self._updater = GridUpdater(self.grid, config)
        self._poses = PoseBuffer(
            config.max_pose_gap_s,
            config.max_speed_m_s,
            config.max_turn_rad_s,
            config.time_restart_s,
        )
        self._looks = {head_id: Looks() for head_id in mounts}
        self._pending = PendingPings(config.max_pending_pings)
        self._revision = 0
        self._map_time_s = math.nan

    # ------------------------------------------------------------------ what comes in
    def add_odometry(self, sample: OdometrySample) -> PoseOutcome:
        """Take one odometry sample and fuse the pings that waited for it; never raises."""
        outcome = self._poses.add(sample)
        self.counts[outcome.value] += 1
        self.counts["covariance_invalid"] += has_broken_covariance(sample)
        if outcome in (PoseOutcome.RESTARTED, PoseOutcome.JUMPED):
            self.clear()
            for looks in self._looks.values():
                looks.clear()
        if outcome is PoseOutcome.RESTARTED:
            limit_s = sample.time_s + self.config.time_restart_s
            dropped = self._pending.drop_later_than(limit_s)
            self.counts[MapOutcome.DROPPED_TIME_RESTARTED.value] += dropped
        self._work(self.config.settle_s)
        return outcome

    def add_ping(self, head_id: str, result: PingResult) -> MapOutcome:
        """Take the detections of one ping; they are fused as soon as their odometry is there.

        Never raises; what cannot be used is counted.
        """
        outcome = self._queue(head_id, result)
        self.counts[outcome.value] += 1
        self._work(self.config.settle_s)
        return outcome

    def flush(self) -> None:
        """Fuse what can be fused without waiting for other heads, at the end of a recording."""
        self._work(0.0)

    def clear(self) -> None:
        """Forget the map; poses and waiting pings stay."""
        self.grid.clear()
        self.counts["map_cleared"] += 1
        self._map_time_s = math.nan
        self._revision += 1

    def snapshot(self) -> MapSnapshot:
        """The map as it is now, faded to the newest ping in it."""
        config, (x, y) = self.config, self.grid.origin_m
        time_s = self._map_time_s
        data = self.grid.occupancy(
            0.0 if math.isnan(time_s) else time_s, config.occupied_decay_s, config.free_decay_s
        )
        return MapSnapshot(data, config.resolution_m, x, y, time_s, self._revision)

    @property
    def revision(self) -> int:
        """Revision of the map without making a snapshot."""
        return self._revision

    @property
    def pending(self) -> int:
        """Pings that wait for odometry."""
        return len(self._pending)

    # ------------------------------------------------------------------ waiting
    def _queue(self, head_id: str, result: PingResult) -> MapOutcome:
        if head_id not in self.mounts:
            return MapOutcome.UNKNOWN_HEAD
        if not _is_valid_ping(result):
            return MapOutcome.INVALID
        if result.emission_time_s < self._map_time_s:
            self.counts[MapOutcome.LATE.value] += 1
        end_s = result.emission_time_s + 2.0 * self.config.max_range_m / result.speed_of_sound_m_s
        fits = self._pending.push(head_id, result, end_s)
        return MapOutcome.QUEUED if fits else MapOutcome.DROPPED_QUEUE_FULL

    def _work(self, settle_s: float) -> None:
        while ping := self._pending.pop_ready(self._poses.newest_time_s - settle_s):
            self.counts[self._fuse(ping).value] += 1
        now_s = max(self._pending.newest_time_s, self._poses.newest_time_s)
        while self._pending.pop_expired(now_s, self.config.max_pose_wait_s):
            self.counts[MapOutcome.SKIPPED_NO_ODOMETRY.value] += 1

    # ------------------------------------------------------------------ the algorithm
    def _fuse(self, ping: WaitingPing) -> MapOutcome:
        config, result, time_s = self.config, ping.result, ping.emission_time_s
        detections = self._usable(result)
        try:
            robot = self._poses.pose_at(time_s)
            emission, heads = head_poses(self._poses, self.mounts[ping.head_id], result, detections)
        except OdometryGapError:
            return MapOutcome.SKIPPED_NO_ODOMETRY
        moved = self.grid.centre_on(robot.x_m, robot.y_m)
        looks = self._looks[ping.head_id]
        asked = looks.asked(time_s, emission, config.motion_span_s)
        looks.add(time_s, emission, np.array([d.range_m for d in detections]))
        possible = hypotheses_of(detections, heads, self._pose_variance(time_s), config, asked)
        paths, path_cells = free_paths(possible, self.grid, result.range_min_m, config)
        clear = clear_view(possible, paths, self._updater.read(path_cells, time_s))
        arcs, arc_cells = arcs_of(possible, self.grid, config)
        known = self._updater.read(arc_cells, time_s)
        support = self._updater.read_support(arc_cells, time_s)
        mass = share(arcs, possible, prior_of(possible, arcs, known, support, config))
        hits = hit_evidence(possible, arcs, arc_cells, mass, clear)
        free = free_evidence(paths, path_cells, clear)
        if config.silence_policy == CLEAR_TO_RANGE:
            free = with_silence(free, self.grid, emission, result, detections, config)
        touched = self._updater.apply(hits, free, (emission.x_m, emission.y_m), time_s)
        self._map_time_s = float(np.fmax(time_s, self._map_time_s))
        self._revision += int(moved or touched)
        self.counts["detections_used"] += len(detections)
        return MapOutcome.FUSED

    def _pose_variance(self, time_s: float) -> tuple[float, float, float]:
        """Variances of x, y, yaw by which the odometry widens echoes, bounded and counted.

        Bounded because an absurd covariance would otherwise smear each echo over the window.
        """
        config = self.config
        limits = (config.max_pose_sigma_m, config.max_pose_sigma_m, config.max_pose_sigma_rad)
        grown = self._poses.relative_variance(time_s, config.covariance_span_s)
        x, y, yaw = (min(g, limit**2) for g, limit in zip(grown, limits, strict=True))
        self.counts["covariance_capped"] += (x, y, yaw) != grown
        return x, y, yaw

    def _usable(self, result: PingResult) -> list[Detection]:
        config = self.config
        valid = [d for d in result.detections if is_valid(d)]
        sharp = [d for d in valid if d.range_sigma_m <= config.max_range_sigma_m]
        used = [
            d
            for d in sharp
            if d.range_m <= config.max_range_m
            and d.existence_probability >= config.min_existence_probability
        ]
        excess = len(used) - config.max_detections
        if excess > 0:
            least = sorted(range(len(used)), key=lambda i: used[i].existence_probability)[:excess]
            used = [d for i, d in enumerate(used) if i not in set(least)]
        self.counts["detections_invalid"] += len(result.detections) - len(valid)
        self.counts["detections_vague"] += len(valid) - len(sharp)
        self.counts["detections_excess"] += max(excess, 0)
        return used


def _is_valid_ping(result: PingResult) -> bool:
    numbers = (
        result.emission_time_s,
        result.speed_of_sound_m_s,
        result.range_min_m,
        result.range_max_m,
        result.beam_half_width_rad,
    )
    return all(map(math.isfinite, numbers)) and result.speed_of_sound_m_s > 1.0


def run_mapper(
    mapper: LocalMapper, events: Iterable[OdometrySample | tuple[str, PingResult]]
) -> MapSnapshot:
    """Feed odometry and (head id, ping) events in any reasonable order; the map at the end."""
    for event in events:
        if isinstance(event, OdometrySample):
            mapper.add_odometry(event)
        else:
            mapper.add_ping(*event)
    mapper.flush()
    return mapper.snapshot()
