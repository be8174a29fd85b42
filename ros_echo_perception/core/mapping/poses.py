"""The robot's poses over time, from odometry that may come late, twice, with gaps or jumps."""

from __future__ import annotations

import enum
import math
from bisect import bisect_left, bisect_right
from typing import NamedTuple

import numpy as np

from ..errors import OdometryGapError
from ..types import FloatArray, OdometrySample, Pose2, wrap_angle

_JUMP_SLACK_M = 0.05
_JUMP_SLACK_RAD = 0.05
_MAX_VARIANCE = 1e9
"""Larger ones are a way to say that nothing is known."""


class PoseOutcome(enum.Enum):
    """What became of one odometry sample."""

    ADDED = "odometry_added"
    LATE = "odometry_out_of_order"
    DUPLICATE = "odometry_duplicate"
    TOO_OLD = "odometry_too_old"
    INVALID = "odometry_invalid"
    SUSPECT = "odometry_suspect"
    JUMPED = "odometry_jumped"
    RESTARTED = "odometry_time_restarted"


class PoseBuffer:
    """Keeps the newest odometry samples in the order of time and interpolates between them.

    A sample further from its predecessor than the top speeds allow is held back as suspect.
    If the next one agrees with it, the odometry has jumped: everything before is forgotten. If
    the next one agrees with what was before, the suspect was an outlier and is forgotten.
    A sample older than the newest by more than ``time_restart_s`` means that time has
    restarted: everything before is forgotten.
    """

    def __init__(
        self,
        max_gap_s: float = 0.2,
        max_speed_m_s: float = 5.0,
        max_turn_rad_s: float = 10.0,
        time_restart_s: float = 1.0,
        max_samples: int = 5000,
    ) -> None:
        self.max_gap_s = max_gap_s
        self.max_speed_m_s = max_speed_m_s
        self.max_turn_rad_s = max_turn_rad_s
        self.time_restart_s = time_restart_s
        self.max_samples = max_samples
        self.clear()

    def clear(self) -> None:
        """Forget everything."""
        self._time: list[float] = []
        self._x: list[float] = []
        self._y: list[float] = []
        self._yaw: list[float] = []  # unwrapped, so that linear interpolation turns the short way
        self._covariance: list[_Covariance] = []
        self._suspect: OdometrySample | None = None

    def __len__(self) -> int:
        return len(self._time)

    @property
    def newest_time_s(self) -> float:
        """Time of the newest accepted sample, -inf when there is none."""
        return self._time[-1] if self._time else -math.inf

    @property
    def oldest_time_s(self) -> float:
        """Time of the oldest sample still kept, inf when there is none."""
        return self._time[0] if self._time else math.inf

    def add(self, sample: OdometrySample) -> PoseOutcome:
        """Take one sample; never raises."""
        if not _is_valid(sample):
            return PoseOutcome.INVALID
        if sample.time_s < self.newest_time_s - self.time_restart_s:
            self.clear()
            self._insert(0, sample)
            return PoseOutcome.RESTARTED
        i = bisect_left(self._time, sample.time_s)
        if i < len(self._time) and self._time[i] == sample.time_s:
            return PoseOutcome.DUPLICATE
        if i < len(self._time):
            return self._add_late(i, sample)
        return self._add_newest(sample)

    def _add_late(self, i: int, sample: OdometrySample) -> PoseOutcome:
        if i == 0 and len(self._time) >= self.max_samples:
            return PoseOutcome.TOO_OLD
        if self._jumps(max(i - 1, 0), sample):
            return PoseOutcome.SUSPECT
        self._insert(i, sample)
        return PoseOutcome.LATE

    def _add_newest(self, sample: OdometrySample) -> PoseOutcome:
        suspect, self._suspect = self._suspect, None
        if not self._time or not self._jumps(len(self._time) - 1, sample):
            self._insert(len(self._time), sample)
            return PoseOutcome.ADDED
        if suspect is not None and not self._too_fast(suspect.time_s, suspect.pose, sample):
            self.clear()
            self._insert(0, suspect)
            self._insert(bisect_left(self._time, sample.time_s), sample)
            return PoseOutcome.JUMPED
        self._suspect = sample
        return PoseOutcome.SUSPECT

    def _jumps(self, i: int, sample: OdometrySample) -> bool:
        return self._too_fast(self._time[i], Pose2(self._x[i], self._y[i], self._yaw[i]), sample)

    def _too_fast(self, time_s: float, pose: Pose2, sample: OdometrySample) -> bool:
        dt = abs(sample.time_s - time_s)
        moved_m = math.hypot(sample.pose.x_m - pose.x_m, sample.pose.y_m - pose.y_m)
        turned_rad = abs(wrap_angle(sample.pose.yaw_rad - pose.yaw_rad))
        return (
            moved_m > self.max_speed_m_s * dt + _JUMP_SLACK_M
            or turned_rad > self.max_turn_rad_s * dt + _JUMP_SLACK_RAD
        )

    def _insert(self, i: int, sample: OdometrySample) -> None:
        pose = sample.pose
        near = self._yaw[i - 1] if i > 0 else (self._yaw[0] if self._yaw else pose.yaw_rad)
        self._time.insert(i, sample.time_s)
        self._x.insert(i, pose.x_m)
        self._y.insert(i, pose.y_m)
        self._yaw.insert(i, near + wrap_angle(pose.yaw_rad - near))
        self._covariance.insert(i, _covariance(sample) or _UNKNOWN)
        # Trimmed in blocks: deleting from the front of a list moves all of it.
        excess = len(self._time) - self.max_samples
        if excess >= max(1, self.max_samples // 10):
            for column in (self._time, self._x, self._y, self._yaw, self._covariance):
                del column[:excess]

    def pose_at(self, time_s: float) -> Pose2:
        """Interpolated pose: position linear, heading the short way.

        Raises
        ------
        OdometryGapError
            When the time lies outside the kept samples or in a gap longer than ``max_gap_s``.

        Examples
        --------
        >>> poses = PoseBuffer()
        >>> for t in (0.0, 0.1):
        ...     _ = poses.add(OdometrySample(t, Pose2(t, 0.0, 0.0)))
        >>> round(poses.pose_at(0.025).x_m, 6)
        0.025
        """
        x, y, yaw = self.poses_at(np.array([time_s]))[0]
        return Pose2(float(x), float(y), wrap_angle(float(yaw)))

    def poses_at(self, time_s: FloatArray) -> FloatArray:
        """Interpolated x, y and unwrapped yaw, shape (n, 3); see `pose_at`."""
        first, last = float(np.min(time_s)), float(np.max(time_s))
        low, high = self._bracket(first, last)
        times = self._time[low:high]
        return np.stack(
            [
                np.interp(time_s, times, column[low:high])
                for column in (self._x, self._y, self._yaw)
            ],
            axis=1,
        )

    def _bracket(self, first: float, last: float) -> tuple[int, int]:
        """Slice of the samples around the times, all its gaps short enough."""
        if not self._time:
            raise OdometryGapError(f"no odometry at all; a pose was asked for {first:.3f} s.")
        if not self.oldest_time_s <= first <= last <= self.newest_time_s:
            raise OdometryGapError(
                f"no odometry around {first:.3f} to {last:.3f} s; there is some from "
                f"{self.oldest_time_s:.3f} to {self.newest_time_s:.3f} s."
            )
        low = bisect_right(self._time, first) - 1
        high = max(bisect_left(self._time, last) + 1, low + 1)
        for a, b in zip(self._time[low : high - 1], self._time[low + 1 : high], strict=True):
            if b - a > self.max_gap_s:
                raise OdometryGapError(
                    f"odometry has a gap of {b - a:.3f} s around {first:.3f} s; "
                    f"allowed: {self.max_gap_s:g} s (max_pose_gap_s)."
                )
        return low, high

    def relative_variance(self, time_s: float, span_s: float) -> tuple[float, float, float]:
        """Variances of x, y and yaw of the motion over the last ``span_s``.

        The absolute covariance of odometry grows for ever; the content of a local map is only
        off by what was added since it was mapped. For odometry that adds up steps with
        independent errors this is ``P - F P0 F^T``, where F carries the earlier covariance P0
        along the way: its share of heading error moves the place, too, and is no error of the
        motion. Unknown covariances count as no growth.
        """
        if not self._time or span_s <= 0.0:
            return 0.0, 0.0, 0.0
        now = max(bisect_right(self._time, time_s) - 1, 0)
        then = max(bisect_right(self._time, time_s - span_s) - 1, 0)
        new, old = self._covariance[now], self._covariance[then]
        dx, dy = self._x[now] - self._x[then], self._y[now] - self._y[then]
        carried_x = old.x - 2.0 * dy * old.x_yaw + dy * dy * old.yaw
        carried_y = old.y + 2.0 * dx * old.y_yaw + dx * dx * old.yaw
        return (
            max(new.x - carried_x, 0.0),
            max(new.y - carried_y, 0.0),
            max(new.yaw - old.yaw, 0.0),
        )


def has_broken_covariance(sample: OdometrySample) -> bool:
    """Whether a sample brings a covariance that cannot be one; it counts as unknown."""
    return sample.covariance is not None and _covariance(sample) is None


class _Covariance(NamedTuple):
    """What is kept of a covariance of (x, y, yaw)."""

    x: float
    y: float
    yaw: float
    x_yaw: float
    y_yaw: float


_UNKNOWN = _Covariance(0.0, 0.0, 0.0, 0.0, 0.0)


def _is_valid(sample: OdometrySample) -> bool:
    pose = sample.pose
    return all(map(math.isfinite, (sample.time_s, pose.x_m, pose.y_m, pose.yaw_rad)))


def _covariance(sample: OdometrySample) -> _Covariance | None:
    """The covariance as far as it is used; None when there is none or it is impossible."""
    given = sample.covariance
    if given is None or np.shape(given) != (3, 3) or not np.all(np.isfinite(given)):
        return None
    x, y, yaw = (float(v) for v in np.diagonal(given))
    x_yaw, y_yaw = (0.5 * float(given[i, 2] + given[2, i]) for i in (0, 1))
    if min(x, y, yaw) < 0.0 or max(x, y, yaw) > _MAX_VARIANCE:
        return None
    slack = 1.0 + 1e-6  # messages round
    if x_yaw * x_yaw > slack * x * yaw or y_yaw * y_yaw > slack * y * yaw:
        return None
    return _Covariance(x, y, yaw, x_yaw, y_yaw)
