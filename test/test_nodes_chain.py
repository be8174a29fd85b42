"""The real nodes as processes over DDS: a simulated pole becomes detections, views and a map."""

import math
import signal

import numpy as np
import pytest
import yaml

pytest.importorskip("rclpy")
pytestmark = [pytest.mark.ros, pytest.mark.filterwarnings("ignore::DeprecationWarning")]

from diagnostic_msgs.msg import DiagnosticArray, DiagnosticStatus  # noqa: E402
from nav_msgs.msg import OccupancyGrid, Odometry  # noqa: E402
from rclpy.qos import DurabilityPolicy, QoSProfile  # noqa: E402
from sensor_msgs.msg import LaserScan, PointCloud2, Temperature  # noqa: E402
from std_srvs.srv import Trigger  # noqa: E402
from visualization_msgs.msg import MarkerArray  # noqa: E402

from ros_echo_perception.msg import (  # noqa: E402
    EchoDetectionArray,
    FittedEnvelope,
    RawEcho,
)
from ros_echo_perception.nodes.conversion import seconds  # noqa: E402

LATCHED = QoSProfile(depth=1, durability=DurabilityPolicy.TRANSIENT_LOCAL)
MOUNT_X_M = 0.12  # default of the simulator and of mapping
POLE_M, RADIUS_M = (1.25, 0.25), 0.03
RANGE_M = math.hypot(POLE_M[0] - MOUNT_X_M, POLE_M[1]) - RADIUS_M
BEARING_RAD = math.atan2(POLE_M[1], POLE_M[0] - MOUNT_X_M)


@pytest.fixture
def world(tmp_path):
    """One pole; the robot stands for a while, then drives half a metre."""
    file = tmp_path / "pole.yaml"
    poles = [{"id": "pole", "centre_m": list(POLE_M), "radius_m": RADIUS_M}]
    way = [{"wait_s": 2.0}, {"to_m": [0.5, 0.0]}, {"wait_s": 60.0}]
    file.write_text(
        yaml.safe_dump(
            {"name": "pole", "poles": poles, "path": {"start": [0, 0, 0], "waypoints": way}}
        )
    )
    return str(file)


@pytest.fixture
def driver(start_node, world):
    """Start the driver with the pole; exact odometry, a rate that any machine keeps up with."""

    def start(**parameters):
        values = {
            "world_file": world, "wait_for_consumer_s": 20.0, "simulator.ping_rate_hz": 10.0,
            "simulator.odometry_error_scale": 0.0, "diagnostics_period_s": 0.2,
        } | parameters  # fmt: skip
        return start_node("driver", values)

    return start


@pytest.mark.smoke
def test_a_pole_is_found_where_it_is(start_node, driver, peer):
    raw = peer.collect(RawEcho, "raw_echo")
    found = peer.collect(EchoDetectionArray, "detections")
    scans = peer.collect(LaserScan, "scan")
    clouds = peer.collect(PointCloud2, "points")
    markers = peer.collect(MarkerArray, "markers")
    envelopes = peer.collect(FittedEnvelope, "envelope")
    air = peer.collect(Temperature, "temperature")
    odometry = peer.collect(Odometry, "odom")
    states = peer.collect(DiagnosticArray, "/diagnostics")
    processing = start_node("processing", {"diagnostics_period_s": 0.2})
    peer.wait_for(lambda: peer.node.count_subscribers("/raw_echo") == 2, "processing")
    source = driver(consumers=2)  # processing and this test
    peer.wait_for(lambda: len(found) >= 12 and len(envelopes) >= 3, "detections")

    # One answer for each ping, in order, with the header of the ping.
    first = found[0].sequence
    assert [m.sequence for m in found] == list(range(first, first + len(found)))
    by_sequence = {m.sequence: m for m in raw}
    for m in found:
        assert m.header == by_sequence[m.sequence].header
        assert m.flags & EchoDetectionArray.FLAG_SIMULATED
    assert all(m.header.frame_id == "echo_head" for m in raw)
    assert all(m.front_end_flags & RawEcho.FLAG_SIMULATED for m in raw)
    steps_s = np.diff([seconds(m.header.stamp) for m in raw])
    assert steps_s.mean() == pytest.approx(0.1, abs=0.01)

    # The robot stands still in these pings: the pole is where geometry says.
    nearest = [min(m.detections, key=lambda d: abs(d.range_m - RANGE_M)) for m in found[:12]]
    assert np.median([d.range_m for d in nearest]) == pytest.approx(RANGE_M, abs=0.03)
    assert np.median([d.bearing_rad for d in nearest]) == pytest.approx(BEARING_RAD, abs=0.1)
    assert all(0.0 < d.bearing_sigma_rad < 0.6 for d in nearest)

    # The views say the same.
    scan = next(s for s in scans if s.header == found[len(found) // 2].header)
    beam = round((BEARING_RAD - scan.angle_min) / scan.angle_increment)
    near = np.array(scan.ranges[beam - 8 : beam + 9])
    assert np.nanmin(np.abs(near - RANGE_M)) < 0.03
    assert not np.any(np.isposinf(scan.ranges))  # silence does not clear
    cloud = clouds[-1]
    xy = np.frombuffer(bytes(cloud.data), np.float32).reshape(cloud.width, -1)[:, :2]
    assert np.min(np.hypot(*xy.T) - RANGE_M) == pytest.approx(0.0, abs=0.03)
    assert len(markers[-1].markers) == 3
    fit = envelopes[-1]
    time_s = fit.first_time_s + fit.step_s * np.arange(len(fit.left_measured))
    around = np.abs(time_s - 2 * RANGE_M / 343.0) < 5e-4
    assert np.max(np.array(fit.left_measured)[around]) > 3 * fit.left_threshold
    assert air[0].temperature == pytest.approx(21.0, abs=2.0)
    assert (odometry[0].header.frame_id, odometry[0].child_frame_id) == ("odom", "base_link")

    # The diagnostics name the source and count the same.
    state = peer.wait_for(lambda: peer.diagnostics(states, "driver"), "diagnostics of driver")
    assert (state["source"], state["level"]) == ("simulator", DiagnosticStatus.WARN)
    assert "SIMULATED" in state["message"]
    state = peer.diagnostics(states, "processing")
    assert (state["dropped"], state["missing sequence numbers"]) == ("0", "0")
    assert int(state["processed"]) >= 5
    assert float(state["latency p95 [ms]"]) > 0.0
    assert 0.0 < float(state["age of last processed [s]"]) < 60.0

    # Ctrl-C and what a launch system sends end both quietly.
    for node, sign in ((source, signal.SIGINT), (processing, signal.SIGTERM)):
        assert node.interrupt(sign) == 0
        assert "Traceback" not in node.text
    assert "SIMULATED" in source.text


def test_the_map_shows_the_pole_also_to_a_late_subscriber_and_in_files(
    start_node, driver, peer, tmp_path
):
    grids = peer.collect(OccupancyGrid, "map", LATCHED)
    start_node("processing")
    start_node("mapping", {"publish_period_s": 0.2, "save_path": tmp_path / "saved"})
    peer.wait_for(lambda: peer.node.count_subscribers("/detections") == 1, "mapping")
    driver()
    truth = (
        POLE_M[0] - RADIUS_M * math.cos(BEARING_RAD),
        POLE_M[1] - RADIUS_M * math.sin(BEARING_RAD),
    )
    peer.wait_for(lambda: grids and distance(grids[-1], truth) < 0.12, "the pole", 30.0)
    assert grids[-1].header.frame_id == "odom"
    assert len(occupied(grids[-1])) < 40  # a pole, not a wall

    late = peer.collect(OccupancyGrid, "map", LATCHED)
    peer.wait_for(lambda: late, "the latched map")
    assert distance(late[0], truth) < 0.12

    answer = peer.call(Trigger, "/mapping/save", Trigger.Request())
    assert answer.success, answer.message
    info = yaml.safe_load((tmp_path / "saved.yaml").read_text())
    pixels = read_pgm(tmp_path / info["image"])
    row, column = np.argwhere(pixels < 255 * (1 - info["occupied_thresh"])).T
    x = info["origin"][0] + (column + 0.5) * info["resolution"]
    y = info["origin"][1] + (pixels.shape[0] - row - 0.5) * info["resolution"]
    assert np.min(np.hypot(x - truth[0], y - truth[1])) < 0.12

    before = len(grids)
    assert peer.call(Trigger, "/mapping/clear", Trigger.Request()).success
    peer.wait_for(lambda: len(grids) > before, "the map after clearing")
    assert np.sum(np.array(grids[before].data) >= 65) < 3

    refused = peer.set_parameters("/mapping", save_path=str(tmp_path / "no" / "folder"))
    assert refused.successful  # a text like any other; the service then says what is wrong
    answer = peer.call(Trigger, "/mapping/save", Trigger.Request())
    assert not answer.success
    assert "cannot be written" in answer.message


def occupied(grid):
    """Centres of the occupied cells, shape (n, 2)."""
    data = np.array(grid.data, np.int8).reshape(grid.info.height, grid.info.width)
    row, column = np.nonzero(data >= 65)
    x = grid.info.origin.position.x + (column + 0.5) * grid.info.resolution
    y = grid.info.origin.position.y + (row + 0.5) * grid.info.resolution
    return np.column_stack([x, y])


def distance(grid, point):
    """From a point to the nearest occupied cell."""
    cells = occupied(grid)
    return np.min(np.hypot(*(cells - point).T)) if len(cells) else math.inf


def read_pgm(path):
    """An independent reader of binary PGM (netpbm, pgm(5): magic, size, maximum, raster)."""
    magic, size, maxval, raster = path.read_bytes().split(b"\n", 3)
    assert (magic, maxval) == (b"P5", b"255")
    width, height = map(int, size.split())
    return np.frombuffer(raster, np.uint8).reshape(height, width)


def test_as_fast_as_consumed_loses_nothing_and_goes_on_after_the_end(start_node, driver, peer):
    raw = peer.collect(RawEcho, "raw_echo", 200)
    found = peer.collect(EchoDetectionArray, "detections", 200)
    states = peer.collect(DiagnosticArray, "/diagnostics")
    start_node("processing", {"max_echoes": 2})
    driver(pacing="consumer", consumers=2)
    peer.wait_for(lambda: len(found) >= 60, "60 pings", 40.0)
    assert [m.sequence for m in found] == list(range(found[0].sequence, found[-1].sequence + 1))
    ahead = max(m.sequence for m in raw) - found[-1].sequence
    assert ahead <= 8
    spans = [seconds(m.header.stamp) for m in (raw[0], raw[59])]
    assert spans[1] - spans[0] == pytest.approx(5.9, abs=0.1)  # the source's time, not ours
    state = peer.wait_for(lambda: peer.diagnostics(states, "driver"), "diagnostics")
    assert state["given up waiting for"] == "0"
