"""TF where a robot has it. The wheels of ROS 2 come without tf2, so every import is optional."""

from __future__ import annotations

import math
from typing import Any

from geometry_msgs.msg import TransformStamped
from rclpy.node import Node
from rclpy.time import Time

from ..core.errors import SettingError, refuse
from ..core.types import Pose2
from .qos import create_publisher, message_class
from .topics import TF, TF_STATIC


def transform(pose: Pose2, stamp: Any, parent: str, child: str) -> TransformStamped:
    """A planar pose of ``child`` in ``parent`` as transform."""
    msg = TransformStamped()
    msg.header.stamp, msg.header.frame_id, msg.child_frame_id = stamp, parent, child
    msg.transform.translation.x, msg.transform.translation.y = float(pose.x_m), float(pose.y_m)
    msg.transform.rotation.z = math.sin(pose.yaw_rad / 2.0)
    msg.transform.rotation.w = math.cos(pose.yaw_rad / 2.0)
    return msg


class TransformSender:
    """Publishes transforms; does nothing, and says so once, where tf2_msgs is missing."""

    def __init__(self, node: Node) -> None:
        try:
            self._message = message_class(TF)
        except ImportError:
            self._message = None
            node.get_logger().info("tf2_msgs is not installed: no TF is published")
            return
        self._moving = create_publisher(node, TF)
        self._static = create_publisher(node, TF_STATIC)

    def send(self, item: TransformStamped) -> None:
        """Publish a transform that changes."""
        if self._message is not None:
            self._moving.publish(self._message(transforms=[item]))

    def send_static(self, item: TransformStamped) -> None:
        """Publish a transform that stays."""
        if self._message is not None:
            self._static.publish(self._message(transforms=[item]))


class MountFromTf:
    """Pose of a head in the frame of the robot, from TF.

    Raises
    ------
    SettingError
        When tf2_ros is not installed.
    """

    def __init__(self, node: Node, base_frame: str) -> None:
        try:
            from tf2_ros import Buffer, TransformListener
        except ImportError:
            raise SettingError(
                refuse("use_tf", True, "false where tf2_ros is not installed",
                       "install tf2_ros or give mount_x_m, mount_y_m and mount_yaw_rad")
            ) from None  # fmt: skip
        self._base_frame = base_frame
        self._buffer = Buffer()
        self._listener = TransformListener(self._buffer, node)

    def lookup(self, head_frame: str) -> Pose2 | None:
        """The mount, None while TF does not know it: never a guess."""
        if not self._buffer.can_transform(self._base_frame, head_frame, Time()):
            return None
        found = self._buffer.lookup_transform(self._base_frame, head_frame, Time()).transform
        q = found.rotation
        yaw = math.atan2(2.0 * (q.w * q.z + q.x * q.y), 1.0 - 2.0 * (q.y**2 + q.z**2))
        return Pose2(found.translation.x, found.translation.y, yaw)
