"""Driver node: plays a source of raw echoes (simulator, recording) onto topics."""

from __future__ import annotations

import threading
import time
from typing import Any

from rclpy.node import Node
from rosgraph_msgs.msg import Clock

from ..core.types import OdometrySample, RawEcho
from ..sources.base import Event, SourceInfo
from ..sources.simulator_config import SimulatorConfig
from . import conversion, topics, transforms
from .diagnostics import ERROR, OK, WARN, Reporter, Status
from .parameters import ParameterSet
from .player import ConsumerGate, SourcePlayer, marked
from .qos import create_publisher, create_subscription
from .runtime import run
from .settings import SECTIONS, DriverSettings
from .source import open_configured

_TEMPERATURE_PERIOD_S = 1.0
_MATCHING_S = 0.2  # a subscription learns of a publisher a moment after that has learnt of it


class DriverNode(Node):
    """Publishes raw echoes, odometry and temperature of one source."""

    def __init__(self) -> None:
        super().__init__("driver")
        parameters = ParameterSet(self, SECTIONS["driver"])
        self.settings = parameters.get(DriverSettings)
        source = open_configured(self.settings, parameters.get(SimulatorConfig))
        self.info = source.info
        self._create_publishers()
        self._origin_s = time.time()  # ROS time of the source's first event
        self._next_temperature_s = 0.0
        paced = self.settings.pacing == "real_time"
        self._gate = None if paced else ConsumerGate()
        if self._gate is not None:
            self._answers = create_subscription(self, topics.DETECTIONS, self._on_detections)
        self.player = SourcePlayer(
            source,
            self._emit,
            loop=self.settings.loop,
            speed=self.settings.real_time_factor if paced else None,
            gate=self._gate,
            ready=self._wait_for_consumer,
        )
        self._said = ""
        self._reporter = Reporter(self, self.settings.diagnostics_period_s, self._status)
        self.get_logger().warning(f"source: {live_text(self.info)}")
        self.player.start()

    def _create_publishers(self) -> None:
        self._raw = create_publisher(self, topics.RAW_ECHO)
        self._temperature = create_publisher(self, topics.TEMPERATURE)
        self._odometry = create_publisher(self, topics.ODOMETRY) if self.info.has_odometry else None
        self._clock_publisher = (
            create_publisher(self, topics.CLOCK) if self.settings.publish_clock else None
        )
        self._tf = transforms.TransformSender(self) if self.settings.publish_tf else None
        if self._tf is not None and self.info.mount is not None:
            self._tf.send_static(
                transforms.transform(
                    self.info.mount,
                    conversion.stamp(time.time()),
                    self.settings.base_frame,
                    self.settings.head_frame,
                )
            )

    def _wait_for_consumer(self, stop: threading.Event) -> None:
        end = time.monotonic() + self.settings.wait_for_consumer_s
        while not stop.is_set():
            if self._gate is None and time.monotonic() >= end:
                break
            if self._consumer_is_there():
                stop.wait(_MATCHING_S)
                break
            stop.wait(0.05)
        self._origin_s = time.time()

    def _consumer_is_there(self) -> bool:
        """Whether somebody listens; with pacing = consumer, somebody who also answers."""
        listeners = self._raw.get_subscription_count()
        if self._gate is None:
            return listeners >= self.settings.consumers
        answering = self.get_publishers_info_by_topic(self._answers.topic_name)
        listening = self.get_subscriptions_info_by_topic(self._raw.topic_name)
        common = {_node_of(end) for end in answering} & {_node_of(end) for end in listening}
        return bool(common) and listeners >= max(len(listening), self.settings.consumers)

    def _on_detections(self, msg: Any) -> None:
        if self._gate is not None:
            self._gate.answered(msg.sequence)

    def _emit(self, event: Event, since_start_s: float) -> None:
        """One event of the source onto its topics; runs in the player's thread."""
        time_s = self._origin_s + since_start_s
        if isinstance(event, RawEcho):
            self._publish_echo(event, time_s)
        else:
            self._publish_odometry(event, time_s)

    def _publish_echo(self, echo: RawEcho, time_s: float) -> None:
        self._tick(time_s + max(echo.end_time_s, 0.0))
        stamp, frame = conversion.stamp(time_s), self.settings.head_frame
        self._raw.publish(conversion.raw_echo_to_msg(marked(echo, self.info.kind), stamp, frame))
        if echo.temperature_c == echo.temperature_c and time_s >= self._next_temperature_s:
            self._temperature.publish(
                conversion.temperature_to_msg(echo.temperature_c, stamp, frame)
            )
            self._next_temperature_s = time_s + _TEMPERATURE_PERIOD_S

    def _publish_odometry(self, sample: OdometrySample, time_s: float) -> None:
        self._tick(time_s)
        stamp = conversion.stamp(time_s)
        odom, base = self.settings.odom_frame, self.settings.base_frame
        if self._odometry is not None:
            self._odometry.publish(conversion.odometry_to_msg(sample, stamp, odom, base))
        if self._tf is not None:
            self._tf.send(transforms.transform(sample.pose, stamp, odom, base))

    def _tick(self, time_s: float) -> None:
        if self._clock_publisher is not None:
            self._clock_publisher.publish(Clock(clock=conversion.stamp(time_s)))

    def _status(self) -> Status:
        state = self.player.state
        if state.phase != self._said and state.phase in ("finished", "failed"):
            self.get_logger().warning(f"source {state.phase} {state.error}".rstrip())
            self._said = state.phase
        values = {
            "source": self.info.kind,
            "description": self.info.description,
            "phase": state.phase,
            "pings": state.pings,
            "odometry samples": state.odometry,
            "behind [s]": f"{state.behind_s:.3f}",
            "worst behind [s]": f"{state.worst_behind_s:.3f}",
            "given up waiting for": 0 if self._gate is None else self._gate.given_up,
            "last error": state.error or "none",
        }
        level = OK if self.info.kind == "hardware" else WARN
        level = ERROR if state.phase == "failed" else level
        text = state.error or f"{state.phase}: {live_text(self.info)}"
        return Status(level, text, values, self.info.kind)

    def destroy_node(self) -> None:
        """Stop playing, then end the node."""
        self.player.stop()
        super().destroy_node()


def _node_of(endpoint: Any) -> tuple[str, str]:
    """Namespace and name of the node that an endpoint of a topic belongs to."""
    return endpoint.node_namespace, endpoint.node_name


def live_text(info: SourceInfo) -> str:
    """Which source is live, unmistakably."""
    prefix = {
        "simulator": "SIMULATED data, not from any real head",
        "recording": "REPLAYED data, not live",
    }.get(info.kind, "live hardware")
    return f"{prefix} ({info.description})"


def main() -> None:
    """Run the node."""
    run(DriverNode)


if __name__ == "__main__":
    main()
