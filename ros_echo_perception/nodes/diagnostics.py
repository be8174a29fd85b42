"""State and counts of a node, published as standard diagnostics."""

from __future__ import annotations

import math
import time
from collections import Counter, deque
from collections.abc import Callable, Mapping
from dataclasses import dataclass, field

import numpy as np
from diagnostic_msgs.msg import DiagnosticArray, DiagnosticStatus, KeyValue
from rclpy.clock import Clock, ClockType
from rclpy.node import Node

from .qos import create_publisher
from .topics import DIAGNOSTICS

OK, WARN, ERROR, STALE = (
    DiagnosticStatus.OK,
    DiagnosticStatus.WARN,
    DiagnosticStatus.ERROR,
    DiagnosticStatus.STALE,
)
_WINDOW = 250  # ten seconds at 25 Hz


@dataclass
class Status:
    """What a node says about itself at one moment."""

    level: bytes
    message: str
    values: Mapping[str, object]
    hardware_id: str = ""


@dataclass
class Activity:
    """Counts and times of a stream of messages. Times of the steady clock."""

    received: int = 0
    processed: int = 0
    dropped: Counter[str] = field(default_factory=Counter)
    last_error: str = ""
    _arrivals_s: deque[float] = field(default_factory=lambda: deque(maxlen=_WINDOW))
    _latencies_s: deque[float] = field(default_factory=lambda: deque(maxlen=_WINDOW))

    def arrived(self) -> float:
        """Count a message; returns the time of its arrival."""
        now = time.monotonic()
        self.received += 1
        self._arrivals_s.append(now)
        return now

    def done(self, arrived_s: float) -> float:
        """Count a message as processed; returns how long that took."""
        latency = time.monotonic() - arrived_s
        self.processed += 1
        self._latencies_s.append(latency)
        return latency

    def drop(self, reason: str, error: object = "") -> None:
        """Count a message that could not be used."""
        self.dropped[reason] += 1
        self.last_error = str(error) or reason

    def silence_s(self) -> float:
        """Time since the last arrival; infinite before the first."""
        return time.monotonic() - self._arrivals_s[-1] if self._arrivals_s else math.inf

    def rate_hz(self) -> float:
        """Mean rate over the window, 0 when nothing came lately."""
        if len(self._arrivals_s) < 2 or self.silence_s() > 2.0:
            return 0.0
        span = self._arrivals_s[-1] - self._arrivals_s[0]
        return (len(self._arrivals_s) - 1) / span if span > 0 else 0.0

    def values(self) -> dict[str, object]:
        """All of it for a diagnostic status."""
        values: dict[str, object] = {
            "received": self.received,
            "processed": self.processed,
            "dropped": sum(self.dropped.values()),
            "rate [Hz]": f"{self.rate_hz():.2f}",
        }
        values |= {f"dropped: {reason}": n for reason, n in sorted(self.dropped.items())}
        if self._latencies_s:
            median, p95 = np.percentile(list(self._latencies_s), (50, 95)) * 1e3
            values |= {"latency median [ms]": f"{median:.2f}", "latency p95 [ms]": f"{p95:.2f}"}
        values["last error"] = self.last_error or "none"
        return values


class Reporter:
    """Publishes a status at a steady wall-clock period, also while ROS time stands still."""

    def __init__(self, node: Node, period_s: float, status: Callable[[], Status]) -> None:
        self._node, self._status = node, status
        self._publisher = create_publisher(node, DIAGNOSTICS)
        self._timer = node.create_timer(period_s, self.publish, clock=steady_clock())

    def publish(self) -> None:
        """Publish the present status."""
        status = self._status()
        array = DiagnosticArray()
        array.header.stamp = self._node.get_clock().now().to_msg()
        array.status = [
            DiagnosticStatus(
                level=status.level,
                name=f"{self._node.get_fully_qualified_name().lstrip('/')}",
                message=status.message,
                hardware_id=status.hardware_id,
                values=[KeyValue(key=k, value=str(v)) for k, v in status.values.items()],
            )
        ]
        self._publisher.publish(array)


def steady_clock() -> Clock:
    """A clock that neither simulated time nor a correction of the system clock moves."""
    return Clock(clock_type=ClockType.STEADY_TIME)
