"""Topics and services of every node, as data: nodes, tests and tables of the README read it.

Names are relative, so that namespaces and remapping work, except those that ROS 2 keeps global.
"""

from __future__ import annotations

from dataclasses import dataclass


@dataclass(frozen=True)
class Topic:
    """One topic: ``message`` is its type, ``qos`` the name of a profile in `QOS`."""

    name: str
    message: str
    qos: str
    description: str


@dataclass(frozen=True)
class Service:
    """One service of a node; ``~`` stands for the node's name."""

    name: str
    type: str
    description: str


@dataclass(frozen=True)
class Qos:
    """Quality of service: what a subscriber has to fit."""

    depth: int
    reliable: bool = True
    latched: bool = False

    def __str__(self) -> str:
        reliability = "reliable" if self.reliable else "best effort"
        durability = "transient local" if self.latched else "volatile"
        return f"{reliability}, {durability}, keep last {self.depth}"


QOS = {
    # Four seconds at 25 pings a second: a pause of a consumer loses nothing.
    "echoes": Qos(depth=100),
    "odometry": Qos(depth=200),
    "results": Qos(depth=50),
    "views": Qos(depth=5),
    "map": Qos(depth=1, latched=True),
    "static": Qos(depth=1, latched=True),
    "clock": Qos(depth=1, reliable=False),
}
"""The shared profiles. All but the clock are reliable: a best-effort subscriber fits them too."""

_MSG = "ros_echo_perception/msg/"
RAW_ECHO = Topic("raw_echo", _MSG + "RawEcho", "echoes", "one ping of both ears")
DETECTIONS = Topic("detections", _MSG + "EchoDetectionArray", "results", "echoes of one ping")
ODOMETRY = Topic("odom", "nav_msgs/msg/Odometry", "odometry", "pose of the robot in odom")
TEMPERATURE = Topic("temperature", "sensor_msgs/msg/Temperature", "views", "air at the head")
SCAN = Topic("scan", "sensor_msgs/msg/LaserScan", "views", "approximation of one ping as a scan")
POINTS = Topic("points", "sensor_msgs/msg/PointCloud2", "views", "echoes as points with sigmas")
MARKERS = Topic(
    "markers", "visualization_msgs/msg/MarkerArray", "views", "echoes with their uncertainty drawn"
)
ENVELOPE = Topic(
    "envelope", _MSG + "FittedEnvelope", "views", "measured and fitted envelope, while subscribed"
)
MAP = Topic("map", "nav_msgs/msg/OccupancyGrid", "map", "local grid in the odometry frame")
DIAGNOSTICS = Topic(
    "/diagnostics", "diagnostic_msgs/msg/DiagnosticArray", "views", "state and counts of the node"
)
TF = Topic("/tf", "tf2_msgs/msg/TFMessage", "odometry", "odom to base_link, if tf2_msgs is there")
TF_STATIC = Topic(
    "/tf_static", "tf2_msgs/msg/TFMessage", "static", "base_link to the head, if tf2_msgs is there"
)
CLOCK = Topic("/clock", "rosgraph_msgs/msg/Clock", "clock", "time of the source, if asked for")

PUBLISHES = {
    "driver": (RAW_ECHO, ODOMETRY, TEMPERATURE, DIAGNOSTICS, TF, TF_STATIC, CLOCK),
    "processing": (DETECTIONS, SCAN, POINTS, MARKERS, ENVELOPE, DIAGNOSTICS),
    "mapping": (MAP, DIAGNOSTICS),
}
SUBSCRIBES = {
    "driver": (DETECTIONS,),  # only as the answer that paces "as fast as consumed"
    "processing": (RAW_ECHO,),
    "mapping": (DETECTIONS, ODOMETRY),
}
SERVICES = {
    "driver": (),
    "processing": (),
    "mapping": (
        Service("~/clear", "std_srvs/srv/Trigger", "forget the map, keep the odometry"),
        Service("~/save", "std_srvs/srv/Trigger", "write the map as PGM and YAML to save_path"),
    ),
}
