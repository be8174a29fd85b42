"""A node that records every topic into a bag and tells the monitor what it sees."""

from __future__ import annotations

import importlib
import threading
import time
from collections.abc import Callable, Mapping, Sequence
from typing import Any

import numpy as np
from rclpy.node import Node
from rclpy.qos import DurabilityPolicy, QoSProfile, ReliabilityPolicy
from rclpy.serialization import deserialize_message
from rosbags.interfaces import Qos

from ..core.types import Pose2
from ..offline.bag_reader import DETECTIONS, ODOMETRY, RAW_ECHO, odometry_from_message, stamp_s
from ..offline.bag_writer import BagWriter, quality
from .monitor import Monitor, SeenDetection, SeenMap

OCCUPANCY = "nav_msgs/msg/OccupancyGrid"
_DISCOVERY_PERIOD_S = 0.1
_QUEUE_DEPTH = 200  # 8 s of pings: the disk may stall, the record must not


class Recorder(Node):
    """Subscribes to every topic as soon as somebody publishes it.

    Messages go into the bag as they came, undecoded. ``lock`` guards the monitor, which is read
    from another thread, and the list of topics.
    """

    def __init__(self, bag: BagWriter, monitor: Monitor) -> None:
        super().__init__("demo_recorder")
        self._bag = bag
        self._monitor = monitor
        self.lock = threading.Lock()
        self._handlers: dict[str, Callable[[Any, float], None]] = {
            RAW_ECHO: self._on_raw,
            DETECTIONS: self._on_detections,
            OCCUPANCY: self._on_map,
            ODOMETRY: self._on_odometry,
        }
        # Raw echoes only when told to: the driver starts to ping for its first listener.
        self._subscribed: set[str] = set()
        self._held_back = {RAW_ECHO}
        self.create_timer(_DISCOVERY_PERIOD_S, self._discover)
        self._discover()

    def expect(self, topic: str, type_name: str, depth: int) -> None:
        """Subscribe to a reliable topic, also before it exists."""
        self._held_back.discard(type_name)
        self._subscribe(topic, type_name, quality(True, False, depth))

    def _discover(self) -> None:
        for topic, types in self.get_topic_names_and_types():
            if topic in self._subscribed or len(types) != 1 or types[0] in self._held_back:
                continue
            profiles = [i.qos_profile for i in self.get_publishers_info_by_topic(topic)]
            if profiles:
                self._subscribe(topic, types[0], _offered(profiles))

    def _subscribe(self, topic: str, type_name: str, qos: Qos) -> None:
        with self.lock:  # topics are found in one thread and expected in another
            if topic in self._subscribed:
                return
            self._subscribed.add(topic)
        try:
            message_type = _message_class(type_name)
        except ImportError:
            self.get_logger().warning(f"{topic} is not recorded: {type_name} is not installed")
            return
        self._bag.add_topic(topic, type_name, qos)
        profile = QoSProfile(
            depth=_QUEUE_DEPTH,
            reliability=ReliabilityPolicy[qos.reliability.name],
            durability=DurabilityPolicy[qos.durability.name],
        )
        handler = self._handlers.get(type_name)

        def receive(data: bytes, info: Mapping[str, int]) -> None:
            self._bag.write(topic, time.time_ns(), data)
            if handler is not None:
                message = deserialize_message(data, message_type)
                # When it was published: how late this process comes to it is no one's latency.
                with self.lock:
                    handler(message, info["source_timestamp"] * 1e-9)

        self.create_subscription(message_type, topic, receive, profile, raw=True)

    def _on_raw(self, message: Any, published_s: float) -> None:
        self._monitor.on_raw(message.sequence, message.front_end_flags, published_s)

    def _on_detections(self, message: Any, published_s: float) -> None:
        detections = [
            SeenDetection(
                d.range_m, d.bearing_rad, d.range_sigma_m, d.bearing_sigma_rad,
                d.existence_probability, d.ears == d.EARS_BOTH,
            )
            for d in message.detections
        ]  # fmt: skip
        self._monitor.on_detections(
            message.sequence, stamp_s(message), message.processing_time_s, detections, published_s
        )

    def _on_map(self, message: Any, published_s: float) -> None:
        info = message.info
        self._monitor.on_map(
            SeenMap(
                data=np.array(message.data, np.int8).reshape(info.height, info.width),
                resolution_m=float(info.resolution),
                origin_x_m=float(info.origin.position.x),
                origin_y_m=float(info.origin.position.y),
                frame=message.header.frame_id,
            )
        )

    def _on_odometry(self, message: Any, published_s: float) -> None:
        sample = odometry_from_message(message)
        self._monitor.on_odometry(
            sample.time_s, Pose2(sample.pose.x_m, sample.pose.y_m, sample.pose.yaw_rad)
        )


def _offered(profiles: Sequence[QoSProfile]) -> Qos:
    """What all publishers of a topic offer: a subscriber that asks for no more gets it all."""
    return quality(
        all(p.reliability == ReliabilityPolicy.RELIABLE for p in profiles),
        all(p.durability == DurabilityPolicy.TRANSIENT_LOCAL for p in profiles),
        max(1, max(p.depth for p in profiles)),
    )


def _message_class(type_name: str) -> Any:
    """The Python class of ``package/msg/Name``."""
    package, _, name = type_name.split("/")
    return getattr(importlib.import_module(f"{package}.msg"), name)
