"""Reads rosbag2 recordings without ROS: raw echoes, odometry, and a summary of every topic."""

from __future__ import annotations

from collections.abc import Iterator
from contextlib import contextmanager
from dataclasses import dataclass, field
from pathlib import Path
from typing import Any

import numpy as np
from rosbags.highlevel import AnyReader, AnyReaderError

from ..core.errors import FileFormatError, InvalidEchoError
from ..core.types import FrontEndFlag, GainCurve, OdometrySample, Pose2, RawEcho
from .message_types import typestore
from .resources import PACKAGE

RAW_ECHO = f"{PACKAGE}/msg/RawEcho"
DETECTIONS = f"{PACKAGE}/msg/EchoDetectionArray"
ODOMETRY = "nav_msgs/msg/Odometry"


@contextmanager
def open_bag(path: str | Path) -> Iterator[AnyReader]:
    """A bag folder, or its MCAP or SQLite file, opened for reading.

    Raises
    ------
    FileFormatError
        When it is no readable bag.
    """
    folder = Path(path)
    folder = folder.parent if folder.is_file() else folder
    try:
        reader = AnyReader([folder], default_typestore=typestore())
        reader.open()
    except (AnyReaderError, FileNotFoundError, OSError) as error:
        raise FileFormatError(
            f"{path}: is not a readable rosbag2 recording ({error}); allowed: the folder with "
            "metadata.yaml."
        ) from None
    try:
        yield reader
    finally:
        reader.close()


def messages(reader: AnyReader, type_name: str, topic: str = "") -> Iterator[tuple[int, Any]]:
    """(time of receipt in ns, message) of one type, on one topic or on all."""
    chosen = [c for c in reader.connections if c.msgtype == type_name and topic in ("", c.topic)]
    if not chosen:
        return
    for connection, time_ns, data in reader.messages(connections=chosen):
        yield time_ns, reader.deserialize(data, connection.msgtype)


def stamp_s(message: Any) -> float:
    """The header's time in seconds."""
    return float(message.header.stamp.sec) + 1e-9 * float(message.header.stamp.nanosec)


def echo_from_message(message: Any) -> RawEcho:
    """A raw echo from its message.

    Raises
    ------
    InvalidEchoError
        When the contents are impossible; the ears' lengths differ, for one.
    """
    left, right = np.asarray(message.left, np.int16), np.asarray(message.right, np.int16)
    if left.shape != right.shape:
        raise InvalidEchoError(
            f"left and right have {left.size} and {right.size} samples; allowed: the same number."
        )
    gain = None
    if len(message.gain_time_s):
        gain = GainCurve(np.asarray(message.gain_time_s, float), np.asarray(message.gain_db, float))
    return RawEcho(
        samples=np.stack([left, right]),
        sample_rate_hz=float(message.sample_rate_hz),
        carrier_hz=float(message.carrier_hz),
        burst_cycles=float(message.burst_cycles),
        emission_time_s=stamp_s(message),
        first_sample_offset_s=float(message.first_sample_offset_s),
        full_scale=float(message.full_scale),
        temperature_c=float(message.temperature_c),
        relative_humidity=float(message.relative_humidity),
        sequence=int(message.sequence),
        flags=FrontEndFlag(int(message.front_end_flags)),
        gain=gain,
    )


def odometry_from_message(message: Any) -> OdometrySample:
    """Planar odometry from its message (covariance of x, y, yaw as given)."""
    pose, turn = message.pose.pose, message.pose.pose.orientation
    yaw = float(
        np.arctan2(2.0 * (turn.w * turn.z + turn.x * turn.y), 1.0 - 2.0 * (turn.y**2 + turn.z**2))
    )
    covariance = np.asarray(message.pose.covariance, float).reshape(6, 6)
    return OdometrySample(
        time_s=stamp_s(message),
        pose=Pose2(float(pose.position.x), float(pose.position.y), yaw),
        forward_m_s=float(message.twist.twist.linear.x),
        turn_rad_s=float(message.twist.twist.angular.z),
        covariance=covariance[np.ix_((0, 1, 5), (0, 1, 5))] if covariance.any() else None,
    )


@dataclass
class TopicSummary:
    """Counts and timing of one topic of a bag."""

    topic: str
    type_name: str
    times_ns: list[int] = field(default_factory=list)

    @property
    def count(self) -> int:
        """Messages."""
        return len(self.times_ns)

    @property
    def rate_hz(self) -> float:
        """Mean rate over the topic's own duration, NaN below two messages."""
        span_s = (self.times_ns[-1] - self.times_ns[0]) * 1e-9 if self.count > 1 else 0.0
        return (self.count - 1) / span_s if span_s > 0 else float("nan")

    @property
    def longest_gap_s(self) -> float:
        """Longest time between two messages, NaN below two messages."""
        return float(np.max(np.diff(self.times_ns))) * 1e-9 if self.count > 1 else float("nan")


def summarize(reader: AnyReader) -> list[TopicSummary]:
    """Counts and timing of every topic, by name."""
    topics = {c.topic: TopicSummary(c.topic, c.msgtype) for c in reader.connections}
    for connection, time_ns, _ in reader.messages():
        topics[connection.topic].times_ns.append(time_ns)
    return [topics[name] for name in sorted(topics)]
