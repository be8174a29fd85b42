"""The real mapping node over DDS: poses of the emission, several heads, faults."""

import math

import numpy as np
import pytest

pytest.importorskip("rclpy")
pytestmark = [pytest.mark.ros, pytest.mark.filterwarnings("ignore::DeprecationWarning")]

from diagnostic_msgs.msg import DiagnosticArray  # noqa: E402
from nav_msgs.msg import OccupancyGrid, Odometry  # noqa: E402
from std_msgs.msg import Header  # noqa: E402

from ros_echo_perception.core.types import (  # noqa: E402
    Detection,
    OdometrySample,
    PingResult,
    Pose2,
)
from ros_echo_perception.msg import EchoDetectionArray  # noqa: E402
from ros_echo_perception.nodes import conversion  # noqa: E402

T0_S = 1_700_000_000.0
QUICK = {"diagnostics_period_s": 0.2, "publish_period_s": 0.1}


def ping(time_s, range_m=1.0):
    echo = Detection(
        range_m, 0.0, 0.005, 0.02, -0.04, 0.04, (0.1, 0.1), (30.0, 30.0), 0.99,
        envelope_sigma_s=1e-4,
    )  # fmt: skip
    result = PingResult(time_s, 0, (echo,), 343.0, 0.2, 5.0, 0.5, (1e-3, 1e-3))
    header = Header(stamp=conversion.stamp(time_s), frame_id="echo_head")
    return conversion.result_to_msg(result, header, 0.0)


def odometry(time_s, pose, frame="odom"):
    return conversion.odometry_to_msg(
        OdometrySample(time_s, pose), conversion.stamp(time_s), frame, "base_link"
    )


def raised(grid):
    """Centres of the cells that speak for an obstacle, shape (n, 2)."""
    cells = np.array(grid.data).reshape(grid.info.height, grid.info.width)
    row, column = np.nonzero(cells > 50)
    x = grid.info.origin.position.x + (column + 0.5) * grid.info.resolution
    y = grid.info.origin.position.y + (row + 0.5) * grid.info.resolution
    return np.column_stack([x, y])


class Bench:
    """A mapping node with what it says, and publishers for what it hears."""

    def __init__(self, start_node, peer, parameters, heads=("detections",)):
        self.peer = peer
        self.grids = peer.collect(OccupancyGrid, "map", 5)
        self.states = peer.collect(DiagnosticArray, "/diagnostics")
        self.heads = [peer.node.create_publisher(EchoDetectionArray, h, 50) for h in heads]
        self.odom = peer.node.create_publisher(Odometry, "odom", 50)
        start_node("mapping", QUICK | parameters)
        for publisher in (*self.heads, self.odom):
            peer.wait_for(publisher.get_subscription_count, "mapping")
        self._warm_up()

    def _warm_up(self):
        """Send empty pings and odometry of long ago until the node hears each of the publishers.

        A publisher knows of a subscription before that knows of the publisher, so that the first
        messages may be lost.
        """
        early_s = T0_S - 100.0
        self._send_until("odometry received", lambda: self.odom.publish(odometry(early_s, Pose2())))
        for head in self.heads:
            empty = ping(early_s - 50.0)
            empty.detections = []
            self._send_until("received", lambda h=head, m=empty: h.publish(m))

    def _send_until(self, name, send):
        before = int(self.state(name) or 0)

        def heard():
            send()
            return int(self.state(name) or 0) > before

        self.peer.wait_for(heard, f"a growing count of {name}")

    def state(self, name):
        return (self.peer.diagnostics(self.states, "mapping") or {}).get(name)

    def wait_for_count(self, name, count):
        self.peer.wait_for(lambda: int(self.state(name) or 0) >= count, f"{count} {name}")


def test_pings_without_odometry_are_skipped_and_never_guessed(start_node, peer):
    bench = Bench(start_node, peer, {})
    for k in range(20):
        bench.heads[0].publish(ping(T0_S + 0.1 * k))
    bench.wait_for_count("skipped_no_odometry", 5)
    assert bench.state("fused") is None
    assert all(np.all(np.array(g.data) == -1) for g in bench.grids)

    # With odometry around them the next pings are mapped, at the pose of their emission.
    start_s = T0_S + 10.0
    for k in range(40):
        bench.odom.publish(odometry(start_s + 0.02 * k, Pose2(0.0, 0.02 * k, 0.0)))
    for k in range(10):
        bench.heads[0].publish(ping(start_s + 0.05 * k))
    bench.wait_for_count("fused", 8)

    def along_the_way():
        cells = raised(bench.grids[-1])
        if not len(cells):
            return False
        (x_min, y_min), (x_max, y_max) = cells.min(axis=0), cells.max(axis=0)
        return 1.02 < x_min <= x_max < 1.22 and -0.3 < y_min < 0.1 and 0.35 < y_max < 0.8

    peer.wait_for(along_the_way, "cells 1 m in front of the head, all along its way")

    bad = ping(start_s + 0.6)
    bad.detections[0].range_m = math.nan
    bench.heads[0].publish(bad)
    bench.odom.publish(odometry(start_s + 1.0, Pose2(), frame="map"))
    bench.wait_for_count("dropped: invalid message", 1)
    bench.wait_for_count("odometry dropped", 1)


def test_each_head_is_mapped_from_its_own_mount(start_node, peer):
    heads = ("front/detections", "rear/detections")
    mounts = {
        "detection_topics": "[front/detections, rear/detections]",
        "mount_x_m": "[0.2, -0.2]", "mount_y_m": "[0.0, 0.1]", "mount_yaw_rad": "[0.0, 3.1415]",
    }  # fmt: skip
    bench = Bench(start_node, peer, mounts, heads)
    for k in range(60):
        bench.odom.publish(odometry(T0_S + 0.02 * k, Pose2()))
    for k in range(10):
        bench.heads[0].publish(ping(T0_S + 0.05 * k, 1.0))
        bench.heads[1].publish(ping(T0_S + 0.05 * k + 0.02, 0.8))
    bench.wait_for_count("fused", 20)

    def both():
        cells = raised(bench.grids[-1])
        away = [np.hypot(*(cells - place).T) for place in ((1.2, 0.0), (-1.0, 0.1))]
        if not all(len(a) and a.min() < 0.06 for a in away):
            return False
        return np.all(np.minimum(*away) < 0.35)  # and nothing anywhere else

    peer.wait_for(both, "an obstacle in front and one behind, and no other")


def test_mounts_that_do_not_fit_the_heads_are_refused_at_the_start(start_node):
    node = start_node("mapping", {"detection_topics": "[a, b]"})
    assert node.exit_code() == 1
    assert "mount_x_m is (0.12,); allowed: 2 numbers" in node.text
    assert "Traceback" not in node.text


def test_tf_without_tf2_is_refused_with_the_remedy(start_node):
    try:
        import tf2_ros  # noqa: F401
    except ImportError:
        node = start_node("mapping", {"use_tf": True})
        assert node.exit_code() == 1
        assert "use_tf is True; allowed: false where tf2_ros is not installed" in node.text
        assert "Traceback" not in node.text
    else:
        pytest.skip("tf2_ros is installed here")


def test_a_change_of_the_map_settings_starts_the_map_afresh(start_node, peer):
    bench = Bench(start_node, peer, {})
    for k in range(60):
        bench.odom.publish(odometry(T0_S + 0.02 * k, Pose2()))
    for k in range(10):
        bench.heads[0].publish(ping(T0_S + 0.05 * k))
    peer.wait_for(lambda: bench.grids and len(raised(bench.grids[-1])), "an obstacle")
    refused = peer.set_parameters("/mapping", width_m=4.0)
    assert not refused.successful
    assert "read-only" in refused.reason
    assert len(raised(bench.grids[-1]))
    assert peer.set_parameters("/mapping", max_range_m=2.0).successful
    peer.wait_for(lambda: not len(raised(bench.grids[-1])), "an empty map")
