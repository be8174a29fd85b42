"""Bags: what is written is read back by an independent reader, bit for bit."""

import json
import os
import struct
from array import array
from concurrent.futures import ThreadPoolExecutor
from pathlib import Path

import numpy as np
import pytest
from click.testing import CliRunner
from rosbags.highlevel import AnyReader
from rosbags.interfaces import QosDurability, QosReliability

from ros_echo_perception.core.errors import FileFormatError, InvalidEchoError, SourceError
from ros_echo_perception.core.types import FrontEndFlag
from ros_echo_perception.offline.bag_reader import (
    RAW_ECHO,
    echo_from_message,
    odometry_from_message,
    open_bag,
)
from ros_echo_perception.offline.bag_writer import BagWriter, quality
from ros_echo_perception.offline.inputs import open_input
from ros_echo_perception.offline.inspect import inspect_command
from ros_echo_perception.offline.message_types import typestore
from ros_echo_perception.offline.options import NOTHING_EXIT_CODE

STRING = "std_msgs/msg/String"
DETECTIONS = "ros_echo_perception/msg/EchoDetectionArray"


def message(name, **fields):
    return typestore().types[name](**fields)


def header(time_s, frame="echo_head"):
    sec = int(time_s)
    stamp = message("builtin_interfaces/msg/Time", sec=sec, nanosec=round((time_s - sec) * 1e9))
    return message("std_msgs/msg/Header", stamp=stamp, frame_id=frame)


def raw_echo(sequence, time_s, n=128, **changes):
    samples = np.arange(n, dtype=np.int16)
    fields = {
        "header": header(time_s),
        "sequence": sequence,
        "sample_rate_hz": 200e3,
        "carrier_hz": 40e3,
        "burst_cycles": 3.0,
        "first_sample_offset_s": -2e-4,
        "left": samples,
        "right": -samples,
        "full_scale": 32768.0,
        "temperature_c": 21.5,
        "relative_humidity": 0.4,
        "front_end_flags": int(FrontEndFlag.SIMULATED | FrontEndFlag.LEFT_CLIPPED),
        "gain_time_s": np.array([0.0, 0.02], np.float32),
        "gain_db": np.array([0.0, 12.0], np.float32),
    }
    return message(RAW_ECHO, **(fields | changes))


def serialized(value, name):
    return bytes(typestore().serialize_cdr(value, name))


def detections(sequence, time_s, processing_time_s=0.004):
    return message(
        DETECTIONS,
        header=header(time_s),
        sequence=sequence,
        detections=[],
        speed_of_sound_m_s=344.0,
        range_min_m=0.3,
        range_max_m=6.0,
        beam_half_width_rad=0.5,
        left_noise=1e-3,
        right_noise=1e-3,
        flags=0,
        processing_time_s=processing_time_s,
    )


@pytest.fixture
def bag(tmp_path):
    """Pings 3 to 7 without number 5, 0.1 s apart, each answered after 10 ms."""
    with BagWriter(tmp_path / "bag") as writer:
        writer.add_topic("/raw_echo", RAW_ECHO, quality(True, False, 100))
        writer.add_topic("/detections", DETECTIONS, quality(True, False, 50))
        for sequence in (3, 4, 6, 7):
            time_s = 1000.0 + 0.1 * sequence
            ns = round(time_s * 1e9)
            writer.write("/raw_echo", ns, serialized(raw_echo(sequence, time_s), RAW_ECHO))
            writer.write(
                "/detections",
                ns + 10_000_000,
                serialized(detections(sequence, time_s), DETECTIONS),
            )
    return tmp_path / "bag"


def test_any_reader_reads_names_definitions_qos_and_bytes(tmp_path):
    text = struct.pack("<BBBBI4s", 0, 1, 0, 0, 4, b"abc\0")  # CDR little-endian, OMG CDR 1.0
    with BagWriter(tmp_path / "bag") as writer:
        writer.add_topic("/words", STRING, quality(True, True, 7))
        writer.add_topic("/raw", RAW_ECHO, quality(False, False))
        writer.write("/words", 5, text)
        writer.write("/raw", 9, serialized(raw_echo(1, 2.0), RAW_ECHO))
    with AnyReader([tmp_path / "bag"]) as reader:  # types from the bag itself
        by_topic = {c.topic: c for c in reader.connections}
        assert {t: c.msgtype for t, c in by_topic.items()} == {"/words": STRING, "/raw": RAW_ECHO}
        (qos,) = by_topic["/words"].ext.offered_qos_profiles
        assert (qos.reliability, qos.durability, qos.depth) == (
            QosReliability.RELIABLE,
            QosDurability.TRANSIENT_LOCAL,
            7,
        )
        (qos,) = by_topic["/raw"].ext.offered_qos_profiles
        assert qos.reliability is QosReliability.BEST_EFFORT
        (first, second) = reader.messages()
        assert (first[1], second[1]) == (5, 9)
        assert reader.deserialize(first[2], STRING).data == "abc"
        echo = reader.deserialize(second[2], RAW_ECHO)
        np.testing.assert_array_equal(echo.right, -np.arange(128))


def test_writer_replaces_a_bag_and_nothing_else(tmp_path, bag):
    with BagWriter(bag) as writer:
        writer.add_topic("/words", STRING, quality(True, False))
    with AnyReader([bag]) as reader:
        assert reader.message_count == 0
    other = tmp_path / "photos"
    other.mkdir()
    (other / "dear.jpg").write_text("x")
    with pytest.raises(SourceError, match=r"photos.*allowed: a new folder or an earlier bag"):
        BagWriter(other)
    assert (other / "dear.jpg").read_text() == "x"


def test_echoes_of_a_bag_become_raw_echoes(bag):
    source = open_input(bag)
    assert (source.name, source.head_name, source.n_pings, source.n_refused) == ("bag", "", 4, 0)
    echo = source.echo(2)
    assert echo.sequence == 6
    assert echo.emission_time_s == pytest.approx(1000.6, abs=1e-6)
    assert echo.first_sample_offset_s == -2e-4
    assert echo.flags == FrontEndFlag.SIMULATED | FrontEndFlag.LEFT_CLIPPED
    assert echo.gain is not None
    assert echo.gain.gain_db[1] == 12.0
    np.testing.assert_array_equal(echo.samples[0], np.arange(128))
    np.testing.assert_array_equal(echo.samples[1], -np.arange(128))


@pytest.mark.parametrize(
    ("changes", "words"),
    [
        ({"right": np.zeros(5, np.int16)}, "128 and 5 samples"),
        ({"sample_rate_hz": 0.0}, "sample_rate_hz"),
        ({"burst_cycles": float("nan")}, "burst_cycles"),
    ],
)
def test_impossible_messages_are_refused_and_counted(tmp_path, changes, words):
    bad = raw_echo(1, 2.0, **changes)
    with pytest.raises(InvalidEchoError, match=words):
        echo_from_message(bad)
    with BagWriter(tmp_path / "bag") as writer:
        writer.add_topic("/raw_echo", RAW_ECHO, quality(True, False))
        writer.write("/raw_echo", 1, serialized(raw_echo(0, 1.0), RAW_ECHO))
        writer.write("/raw_echo", 2, serialized(bad, RAW_ECHO))
    source = open_input(tmp_path / "bag")
    assert (source.n_pings, source.n_refused) == (1, 1)


def test_odometry_keeps_pose_heading_and_covariance():
    # Quaternion of a turn about z: (0, 0, sin(yaw/2), cos(yaw/2)), REP-103.
    yaw = -2.2
    number = "geometry_msgs/msg/"
    vector = number + "Vector3"
    covariance = np.zeros(36)
    covariance[[0, 7, 35]] = 0.01, 0.02, 0.03
    odometry = message(
        "nav_msgs/msg/Odometry",
        header=header(12.5, "odom"),
        child_frame_id="base_link",
        pose=message(
            number + "PoseWithCovariance",
            pose=message(
                number + "Pose",
                position=message(number + "Point", x=1.0, y=-2.0, z=0.0),
                orientation=message(
                    number + "Quaternion", x=0.0, y=0.0, z=np.sin(yaw / 2), w=np.cos(yaw / 2)
                ),
            ),
            covariance=covariance,
        ),
        twist=message(
            number + "TwistWithCovariance",
            twist=message(
                number + "Twist",
                linear=message(vector, x=0.4, y=0.0, z=0.0),
                angular=message(vector, x=0.0, y=0.0, z=0.3),
            ),
            covariance=np.zeros(36),
        ),
    )
    sample = odometry_from_message(odometry)
    assert sample.time_s == 12.5
    assert (sample.pose.x_m, sample.pose.y_m) == (1.0, -2.0)
    assert sample.pose.yaw_rad == pytest.approx(yaw)
    assert (sample.forward_m_s, sample.turn_rad_s) == (0.4, 0.3)
    np.testing.assert_allclose(np.diag(sample.covariance), [0.01, 0.02, 0.03])


def test_inspect_tells_counts_rates_gaps_and_latency(bag):
    result = CliRunner().invoke(inspect_command, [str(bag)])
    assert result.exit_code == 0, result.output
    lines = {line.split("│")[1].strip(): line for line in result.output.splitlines() if "│" in line}
    topic = [cell.strip() for cell in lines["/raw_echo"].split("│")[1:-1]]
    assert topic == ["/raw_echo", RAW_ECHO, "4", "7.5", "0.2"]  # 3 intervals in 0.4 s
    assert lines["pings lost before recording"].split("│")[2].strip() == "1"
    assert lines["raw echo to detections, median"].split("│")[2].strip() == "10"
    assert lines["of which processing, median"].split("│")[2].strip() == "4"


def test_inspect_of_an_empty_bag_fails(tmp_path):
    with BagWriter(tmp_path / "bag"):
        pass
    result = CliRunner().invoke(inspect_command, [str(tmp_path / "bag")])
    assert result.exit_code == NOTHING_EXIT_CODE
    assert "holds no message" in result.output


def test_what_is_no_bag_is_named(tmp_path):
    (tmp_path / "bag").mkdir()
    (tmp_path / "bag" / "metadata.yaml").write_text("rosbag2_bagfile_information: 7\n")
    with pytest.raises(FileFormatError, match=r"bag: is not a readable rosbag2 recording"), \
            open_bag(tmp_path / "bag"):  # fmt: skip
        pass


def test_two_heads_in_a_bag_need_a_topic(tmp_path):
    with BagWriter(tmp_path / "bag") as writer:
        for topic, sequence in (("/left/raw_echo", 1), ("/right/raw_echo", 2)):
            writer.add_topic(topic, RAW_ECHO, quality(True, False))
            writer.write(topic, sequence, serialized(raw_echo(sequence, 1.0), RAW_ECHO))
    with pytest.raises(FileFormatError, match="/left/raw_echo, /right/raw_echo with --topic"):
        open_input(tmp_path / "bag")
    assert open_input(tmp_path / "bag", "/right/raw_echo").echo(0).sequence == 2


@pytest.mark.ros
def test_messages_serialized_by_ros_are_read_without_ros(tmp_path):
    pytest.importorskip("rclpy")
    from rclpy.serialization import serialize_message

    from ros_echo_perception.msg import RawEcho

    ros = RawEcho(sequence=9, sample_rate_hz=200e3, carrier_hz=40e3, burst_cycles=8.0)
    ros.header.stamp.sec, ros.header.stamp.nanosec = 77, 250_000_000
    ros.full_scale = 2048.0
    ros.left = array("h", range(64))
    ros.right = array("h", range(64, 128))
    with BagWriter(tmp_path / "bag") as writer:
        writer.add_topic("/raw_echo", RAW_ECHO, quality(True, False))
        writer.write("/raw_echo", 1, bytes(serialize_message(ros)))
    echo = open_input(tmp_path / "bag").echo(0)
    assert (echo.sequence, echo.burst_cycles, echo.full_scale) == (9, 8.0, 2048.0)
    assert echo.emission_time_s == 77.25
    np.testing.assert_array_equal(echo.samples, np.arange(128).reshape(2, 64))


@pytest.mark.ros
@pytest.mark.parametrize(
    "name", ["RawEcho", "EchoDetection", "EchoDetectionArray", "FittedEnvelope"]
)
def test_type_hashes_are_those_of_the_ros_build(name):
    """REP-2011 type hashes, computed by rosbags from msg/ and by rosidl when it was built."""
    prefixes = os.environ.get("AMENT_PREFIX_PATH", "").split(os.pathsep)
    paths = [Path(p) / f"share/ros_echo_perception/msg/{name}.json" for p in prefixes if p]
    built = next((path for path in paths if path.exists()), None)
    if built is None:
        pytest.skip("the messages are not built here")
    full = f"ros_echo_perception/msg/{name}"
    hashes = {
        h["type_name"]: h["hash_string"] for h in json.loads(built.read_text())["type_hashes"]
    }
    assert typestore().hash_rihs01(full) == hashes[full]


def test_topics_announced_and_written_from_several_threads_stay_apart(tmp_path):
    """Two topics announced at once used to share a number: messages of one read as the other's."""
    names = [f"/topic_{k}" for k in range(16)]
    with BagWriter(tmp_path / "bag") as bag:

        def use(name):
            bag.add_topic(name, "std_msgs/msg/String", quality(True, False))
            for k in range(20):
                text = f"{name} {k}".encode() + b"\0"
                data = b"\x00\x01\x00\x00" + len(text).to_bytes(4, "little") + text
                bag.write(name, 1_000 + k, data)

        with ThreadPoolExecutor(16) as pool:
            list(pool.map(use, names))
    with AnyReader([tmp_path / "bag"]) as reader:
        seen = {(c.topic, reader.deserialize(d, c.msgtype).data) for c, _, d in reader.messages()}
    assert seen == {(name, f"{name} {k}") for name in names for k in range(20)}
