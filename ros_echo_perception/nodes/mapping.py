"""Mapping node: detections of one or several heads and odometry to a local grid."""

from __future__ import annotations

import math
from functools import partial
from typing import Any

from rclpy.node import Node
from std_msgs.msg import Header
from std_srvs.srv import Trigger

from ..core.errors import EchoPerceptionError, InvalidEchoError
from ..core.mapping import LocalMapper, MapOutcome, MappingConfig, save_map_image
from ..core.types import Pose2
from . import conversion, topics, views
from .diagnostics import OK, STALE, WARN, Activity, Reporter, Status, steady_clock
from .parameters import ParameterSet
from .qos import create_publisher, create_subscription
from .runtime import run
from .settings import SECTIONS, MappingNodeSettings
from .transforms import MountFromTf

_WARN_PERIOD_S = 5.0
_SKIPPED = MapOutcome.SKIPPED_NO_ODOMETRY.value


class MappingNode(Node):
    """Feeds the mapper and publishes its grid."""

    def __init__(self) -> None:
        super().__init__("mapping")
        self.parameters = ParameterSet(self, SECTIONS["mapping"], self._on_change)
        settings = self.settings
        heads = settings.detection_topics
        # Mounts that TF has yet to tell are placeholders that no ping is mapped with.
        mounts = dict.fromkeys(heads, Pose2()) if settings.use_tf else settings.mounts()
        self._tf = MountFromTf(self, settings.base_frame) if settings.use_tf else None
        self._known_mounts = set() if settings.use_tf else set(heads)
        self.mapper = LocalMapper(self.parameters.get(MappingConfig), mounts)
        self.activity = Activity()
        self._odometry = Activity()
        self._skips_told = 0
        self._published_revision = -1
        self._map = create_publisher(self, topics.MAP)
        self._reporter = Reporter(self, settings.diagnostics_period_s, self._status)
        self.create_timer(settings.publish_period_s, self._publish_map, clock=steady_clock())
        self.create_service(Trigger, "~/clear", self._on_clear)
        self.create_service(Trigger, "~/save", self._on_save)
        create_subscription(self, topics.ODOMETRY, self._on_odometry)
        for topic in heads:
            create_subscription(self, topics.DETECTIONS, partial(self._on_ping, topic), topic)

    @property
    def settings(self) -> MappingNodeSettings:
        """The node's own settings in force."""
        return self.parameters.get(MappingNodeSettings)

    def _on_change(self) -> None:
        config = self.parameters.get(MappingConfig)
        if config != self.mapper.config:
            self.get_logger().warning("new map settings: the map starts afresh")
            self.mapper = LocalMapper(config, self.mapper.mounts)
            self._published_revision, self._skips_told = -1, 0

    def _on_odometry(self, msg: Any) -> None:
        self._odometry.arrived()
        try:
            if msg.header.frame_id != self.settings.odom_frame:
                raise InvalidEchoError(
                    f"header.frame_id is {msg.header.frame_id!r}; "
                    f"allowed: odom_frame, {self.settings.odom_frame!r}."
                )
            self.mapper.add_odometry(conversion.odometry_from_msg(msg))
        except InvalidEchoError as error:
            self._odometry.drop("invalid odometry", error)
            self._warn(f"dropped odometry: {error}")
        self._tell_skips()

    def _on_ping(self, topic: str, msg: Any) -> None:
        arrived_s = self.activity.arrived()
        try:
            result = conversion.result_from_msg(msg)
        except (InvalidEchoError, ValueError) as error:
            self._drop("invalid message", error)
            return
        if not self._mount_is_known(topic, msg.header.frame_id):
            self._drop(
                "no mount", f"TF does not know where {msg.header.frame_id!r} is on the robot"
            )
            return
        outcome = self.mapper.add_ping(topic, result)
        if outcome is MapOutcome.QUEUED:
            self.activity.done(arrived_s)
        else:
            self._drop(outcome.value, f"ping {result.sequence} of {topic}: {outcome.value}")
        self._tell_skips()

    def _mount_is_known(self, topic: str, frame_id: str) -> bool:
        if topic not in self._known_mounts and self._tf is not None:
            mount = self._tf.lookup(frame_id)
            if mount is not None:
                self.mapper.mounts[topic] = mount
                self._known_mounts.add(topic)
        return topic in self._known_mounts

    def _tell_skips(self) -> None:
        skipped = self.mapper.counts[_SKIPPED]
        if skipped > self._skips_told:
            self._skips_told = skipped
            self._warn(f"no odometry around the emission: {skipped} pings skipped so far")

    def _publish_map(self) -> None:
        if self.mapper.revision == self._published_revision:
            return
        snapshot = self.mapper.snapshot()
        stamp = self.get_clock().now().to_msg()
        if math.isfinite(snapshot.time_s):
            stamp = conversion.stamp(snapshot.time_s)
        header = Header(stamp=stamp, frame_id=self.settings.odom_frame)
        origin = (snapshot.origin_x_m, snapshot.origin_y_m)
        self._map.publish(views.grid_to_msg(snapshot.data, snapshot.resolution_m, origin, header))
        self._published_revision = snapshot.revision

    def _on_clear(self, _: Any, response: Any) -> Any:
        self.mapper.clear()
        self._publish_map()
        response.success, response.message = True, "map cleared"
        return response

    def _on_save(self, _: Any, response: Any) -> Any:
        try:
            image, text = save_map_image(self.mapper.snapshot(), self.settings.save_path)
            response.success, response.message = True, f"wrote {image} and {text}"
        except EchoPerceptionError as error:
            response.success, response.message = False, str(error)
            self.get_logger().error(str(error))
        return response

    def _drop(self, reason: str, error: object) -> None:
        self.activity.drop(reason, error)
        self._warn(f"dropped detections, {reason}: {error}")

    def _warn(self, text: str) -> None:
        self.get_logger().warning(text, throttle_duration_sec=_WARN_PERIOD_S)

    def _status(self) -> Status:
        values = self.activity.values()
        values |= {
            "odometry received": self._odometry.received,
            "odometry rate [Hz]": f"{self._odometry.rate_hz():.2f}",
            "odometry dropped": sum(self._odometry.dropped.values()),
            "waiting for odometry": self.mapper.pending,
            "map revision": self.mapper.revision,
            "heads": ", ".join(self.settings.detection_topics),
        }
        values |= dict(sorted(self.mapper.counts.items()))
        return Status(*self._judge(), values)

    def _judge(self) -> tuple[bytes, str]:
        if self.activity.silence_s() > 2.0:
            return STALE, "no detections"
        if self._odometry.silence_s() > 2.0:
            return WARN, "no odometry: nothing can be mapped"
        skipped = self.mapper.counts[_SKIPPED]
        dropped = sum(self.activity.dropped.values())
        if skipped or dropped:
            return WARN, f"{skipped} pings skipped for want of odometry, {dropped} dropped"
        return OK, "mapping"


def main() -> None:
    """Run the node."""
    run(MappingNode)


if __name__ == "__main__":
    main()
