"""The whole demo, short: three nodes over DDS, recorded, compared with the truth."""

import json
import os
import signal
import subprocess
import sys
import time
from pathlib import Path

import numpy as np
import pytest
import yaml
from PIL import Image
from rosbags.highlevel import AnyReader

from ros_echo_perception.offline import plots
from ros_echo_perception.offline.bag_reader import DETECTIONS, RAW_ECHO, messages
from ros_echo_perception.offline.inputs import open_input
from ros_echo_perception.sources.simulator_config import SimulatorConfig

pytest.importorskip("rclpy")
pytestmark = [pytest.mark.ros, pytest.mark.timeout(180)]

SECONDS = 8.0
RATE_HZ = 10.0  # a loaded machine keeps up: what is counted here must be exact
COMMAND = (sys.executable, "-m", "ros_echo_perception.demo")


def nodes_of(folder):
    """Processes of the package whose output goes to the demo's log folder."""
    found = []
    for entry in Path("/proc").iterdir():
        try:
            words = (entry / "cmdline").read_text().split("\0")
            log = os.readlink(entry / "fd" / "1")
        except OSError:
            continue
        if any(w.startswith("ros_echo_perception.nodes.") for w in words) and str(folder) in log:
            found.append(int(entry.name))
    return found


@pytest.fixture(scope="module")
def demo(tmp_path_factory):
    """Output of one run: (folder, summary, text)."""
    out = tmp_path_factory.mktemp("demo") / "out"
    result = subprocess.run(
        [*COMMAND, "--seconds", str(SECONDS), "--rate", str(RATE_HZ), "--out", str(out)],
        capture_output=True,
        text=True,
        timeout=150,
        env={k: v for k, v in os.environ.items() if k != "ROS_DOMAIN_ID"},
    )
    assert result.returncode == 0, result.stdout + result.stderr
    assert nodes_of(out) == []
    return out, json.loads((out / "summary.json").read_text()), result.stdout


def test_demo_says_that_it_is_simulated_and_no_protective_device(demo):
    assert "SIMULATED" in demo[2]
    assert "Not a protective device" in demo[2]
    assert "Summary of the demo" in demo[2]


def test_nothing_is_lost(demo):
    summary = demo[1]
    assert summary["pings_sent"] == pytest.approx(SECONDS * RATE_HZ, abs=4)
    assert summary["pings_received"] == summary["pings_sent"]
    assert summary["messages_lost"] == 0
    assert summary["ping_rate_hz"] == pytest.approx(RATE_HZ, rel=0.03)
    assert 0.0 < summary["processing_median_ms"] <= summary["latency_median_ms"]
    assert summary["latency_median_ms"] <= summary["latency_p95_ms"]


def test_detections_and_map_agree_with_the_true_room(demo):
    summary = demo[1]
    assert summary["detections"] > SECONDS * RATE_HZ  # more than one echo a ping in this room
    assert summary["precision"] > 50.0
    assert summary["recall"] > 50.0
    assert summary["range_error_median_mm"] < 10.0
    assert summary["bearing_error_median_deg"] < 3.0
    assert summary["maps"] >= 4
    assert summary["map_known_m2"] > 1.0
    assert summary["map_occupied_cells"] > 0
    assert summary["map_precision"] > 40.0


def test_bag_has_all_topics_with_types_counts_and_qos(demo):
    folder, summary, _ = demo
    with AnyReader([folder / "bag"]) as reader:
        types = {c.topic: c.msgtype for c in reader.connections}
        counts = {name: info.msgcount for name, info in reader.topics.items()}
        qos = {c.topic: c.ext.offered_qos_profiles[0] for c in reader.connections}
        raw = [m for _, m in messages(reader, RAW_ECHO)]
        arrays = [m for _, m in messages(reader, DETECTIONS)]
    assert types["/raw_echo"] == RAW_ECHO
    assert types["/detections"] == DETECTIONS
    assert types["/map"] == "nav_msgs/msg/OccupancyGrid"
    assert types["/odom"] == "nav_msgs/msg/Odometry"
    assert types["/scan"] == "sensor_msgs/msg/LaserScan"
    assert {"/points", "/markers", "/temperature", "/diagnostics", "/rosout"} <= set(types)
    assert counts["/raw_echo"] == summary["pings_received"]
    unseen = [m.sequence for m in arrays if m.sequence < raw[0].sequence]  # before the recorder
    assert counts["/detections"] == summary["pings_answered"] + len(unseen)
    assert counts["/map"] == summary["maps"]
    assert counts["/odom"] == pytest.approx(
        SECONDS * SimulatorConfig().odometry_rate_hz, rel=0.05, abs=20
    )
    assert qos["/map"].durability.name == "TRANSIENT_LOCAL"
    assert qos["/raw_echo"].reliability.name == "RELIABLE"
    first = raw[0].sequence  # the recorder may be discovered after the processing node
    assert [m.sequence for m in raw] == list(range(first, first + len(raw)))
    assert first < 3.0 * RATE_HZ
    stamps = {m.sequence: (m.header.stamp.sec, m.header.stamp.nanosec) for m in raw}
    for array in arrays[len(unseen) :]:  # stamped with the emission of their echo
        stamp = array.header.stamp
        assert (stamp.sec, stamp.nanosec) == stamps[array.sequence]


def test_bag_serves_the_offline_commands(demo):
    source = open_input(demo[0] / "bag")
    assert source.n_pings == demo[1]["pings_received"]
    assert source.n_refused == 0
    assert np.ptp([sample.pose.x_m for sample in source.odometry]) >= 0.0
    assert source.odometry[0].covariance is not None


def test_picture_shows_map_path_and_true_room(demo):
    with Image.open(demo[0] / "map.png") as image:
        pixels = np.asarray(image.convert("RGB"))
    assert min(pixels.shape[:2]) > 400
    colours = {"#" + bytes(p).hex() for p in np.unique(pixels.reshape(-1, 3), axis=0).tolist()}
    assert {plots.OCCUPIED_CELL, plots.PATH, plots.UNKNOWN_CELL} <= colours
    truth = np.array([int(plots.TRUTH[i : i + 2], 16) for i in (1, 3, 5)])
    near_truth = np.abs(pixels.astype(int) - truth).max(axis=-1) < 50
    assert np.count_nonzero(near_truth) > 500


def test_parameters_are_those_that_ran(demo):
    parameters = yaml.safe_load((demo[0] / "parameters.yaml").read_text())
    assert set(parameters) == {"driver", "processing", "mapping"}
    driver = parameters["driver"]["ros__parameters"]
    assert driver["source"] == "simulator"
    assert driver["simulator.ping_rate_hz"] == RATE_HZ
    mapping = parameters["mapping"]["ros__parameters"]
    assert mapping["mount_x_m"] == [SimulatorConfig().mount_x_m]


def test_a_node_that_cannot_start_ends_the_demo_with_its_log(tmp_path):
    out = tmp_path / "out"
    result = subprocess.run(
        [*COMMAND, "--seconds", "5", "--head", "no_such_head.yaml", "--out", str(out)],
        capture_output=True,
        text=True,
        timeout=60,
    )
    assert result.returncode == 2
    assert "node ended by itself (exit code 1)" in result.stderr
    assert "no_such_head.yaml" in result.stderr
    assert nodes_of(out) == []


def test_interrupting_the_demo_leaves_no_process(tmp_path):
    out = tmp_path / "out"
    process = subprocess.Popen([*COMMAND, "--seconds", "60", "--out", str(out)],
                               stdout=subprocess.DEVNULL, stderr=subprocess.PIPE)  # fmt: skip
    try:
        end = time.monotonic() + 60.0
        while not (out / "parameters.yaml").exists():  # all three nodes are up
            assert time.monotonic() < end
            assert process.poll() is None, process.stderr.read()
            time.sleep(0.1)
        assert len(nodes_of(out)) == 3
        process.send_signal(signal.SIGINT)
        assert process.wait(30.0) == 130
    finally:
        process.kill()
    assert nodes_of(out) == []
    with AnyReader([out / "bag"]) as reader:  # complete and readable all the same
        assert reader.message_count > 0
