"""Publishers and subscriptions with the shared profiles, open to overrides, said at start."""

from __future__ import annotations

from collections.abc import Callable
from importlib import import_module
from typing import Any

from rclpy.node import Node
from rclpy.publisher import Publisher
from rclpy.qos import QoSDurabilityPolicy, QoSPolicyKind, QoSProfile, QoSReliabilityPolicy
from rclpy.qos_overriding_options import QoSOverridingOptions
from rclpy.subscription import Subscription

from .topics import QOS, Topic

_OVERRIDABLE = (
    QoSPolicyKind.HISTORY,
    QoSPolicyKind.DEPTH,
    QoSPolicyKind.RELIABILITY,
    QoSPolicyKind.DURABILITY,
)


def profile(topic: Topic) -> QoSProfile:
    """The quality of service of a topic."""
    qos = QOS[topic.qos]
    return QoSProfile(
        depth=qos.depth,
        reliability=(
            QoSReliabilityPolicy.RELIABLE if qos.reliable else QoSReliabilityPolicy.BEST_EFFORT
        ),
        durability=(
            QoSDurabilityPolicy.TRANSIENT_LOCAL if qos.latched else QoSDurabilityPolicy.VOLATILE
        ),
    )


def message_class(topic: Topic) -> Any:
    """The Python class of the topic's messages; ImportError where its package is missing."""
    package, _, name = topic.message.split("/")
    return getattr(import_module(f"{package}.msg"), name)


def create_publisher(node: Node, topic: Topic) -> Publisher:
    """A publisher of the topic; ``qos_overrides.<topic>.publisher.*`` parameters change its QoS."""
    qos = profile(topic)
    publisher = node.create_publisher(
        message_class(topic), topic.name, qos, qos_overriding_options=_overriding()
    )
    _say(node, "publishes", publisher.topic_name, qos)
    return publisher


def create_subscription(
    node: Node, topic: Topic, callback: Callable[[Any], None], name: str = ""
) -> Subscription:
    """A subscription to the topic (or to ``name`` with its type and QoS), overridable likewise."""
    qos = profile(topic)
    subscription = node.create_subscription(
        message_class(topic),
        name or topic.name,
        callback,
        qos,
        qos_overriding_options=_overriding(),
    )
    _say(node, "subscribes to", subscription.topic_name, qos)
    return subscription


def _overriding() -> QoSOverridingOptions:
    return QoSOverridingOptions(_OVERRIDABLE)


def _say(node: Node, verb: str, name: str, qos: QoSProfile) -> None:
    node.get_logger().info(
        f"{verb} {name}: {qos.reliability.name.lower()}, {qos.durability.name.lower()}, "
        f"{qos.history.name.lower()} {qos.depth}"
    )
