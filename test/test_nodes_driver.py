"""The real driver node over DDS: recordings, loops, clock, quality of service, faults."""

import numpy as np
import pytest
import yaml

pytest.importorskip("rclpy")
pytestmark = [pytest.mark.ros, pytest.mark.filterwarnings("ignore::DeprecationWarning")]

from diagnostic_msgs.msg import DiagnosticArray, DiagnosticStatus  # noqa: E402
from nav_msgs.msg import Odometry  # noqa: E402
from rclpy.qos import QoSProfile, ReliabilityPolicy  # noqa: E402
from rosgraph_msgs.msg import Clock  # noqa: E402
from small_recording import LABELS, make_echoes, make_odometry  # noqa: E402

from ros_echo_perception.core.types import FrontEndFlag  # noqa: E402
from ros_echo_perception.msg import RawEcho  # noqa: E402
from ros_echo_perception.nodes import conversion  # noqa: E402
from ros_echo_perception.sources.recording_writer import write_recording  # noqa: E402

WAIT = {"wait_for_consumer_s": 20.0, "diagnostics_period_s": 0.1}


def test_a_recording_is_played_sample_for_sample_and_marked(start_node, peer, tmp_path):
    echoes, odometry = make_echoes(), make_odometry()
    base = write_recording(tmp_path / "small", echoes, LABELS, odometry)
    raw = peer.collect(RawEcho, "robot/raw_echo")
    odom = peer.collect(Odometry, "robot/odom")
    states = peer.collect(DiagnosticArray, "/diagnostics")
    node = start_node(
        "driver",
        {"source": "recording", "recording": f"{base}.wav", "head_frame": "front"} | WAIT,
        namespace="/robot",
    )
    peer.wait_for(lambda: len(raw) == len(echoes) and len(odom) >= 12, "the recording")
    for msg, echo in zip(raw, echoes, strict=True):
        played = conversion.raw_echo_from_msg(msg)
        np.testing.assert_array_equal(played.samples, echo.samples)
        assert played.flags == FrontEndFlag.REPLAYED
        assert played.first_sample_offset_s == pytest.approx(echo.first_sample_offset_s)
        assert msg.header.frame_id == "front"
    times = np.array([conversion.seconds(m.header.stamp) for m in raw])
    np.testing.assert_allclose(np.diff(times), 0.05, atol=1e-6)
    # Odometry and pings share one clock: sample 5 belongs to 0.1 s, the first ping's time.
    by_place = {round(conversion.odometry_from_msg(m).pose.x_m, 6): m for m in odom}
    assert conversion.seconds(by_place[0.05].header.stamp) == pytest.approx(times[0], abs=1e-6)

    def finished():
        state = peer.diagnostics(states, "robot/driver")
        return state if state and state["phase"] == "finished" else None

    state = peer.wait_for(finished, "the end")
    assert (state["source"], state["pings"]) == ("recording", "3")
    assert state["level"] == DiagnosticStatus.WARN
    assert "REPLAYED" in state["message"]
    assert node.interrupt() == 0


def test_a_loop_never_goes_back_in_time_and_drives_the_clock(start_node, peer, tmp_path):
    base = write_recording(tmp_path / "small", make_echoes(), LABELS, make_odometry())
    raw = peer.collect(RawEcho, "raw_echo")
    best_effort = QoSProfile(depth=50, reliability=ReliabilityPolicy.BEST_EFFORT)
    clock = peer.collect(Clock, "/clock", best_effort)
    start_node(
        "driver",
        {"source": "recording", "recording": base, "loop": True, "publish_clock": True,
         "real_time_factor": 4.0} | WAIT,
    )  # fmt: skip
    peer.wait_for(lambda: len(raw) >= 8, "three rounds")
    assert [m.sequence for m in raw] == list(range(len(raw)))
    times = [conversion.seconds(m.header.stamp) for m in raw]
    assert np.all(np.diff(times) > 0.0)
    assert times[3] - times[2] > 2.0  # the pause between two rounds
    ticks = [conversion.seconds(m.clock) for m in clock]
    assert len(ticks) > 20
    assert np.all(np.diff(ticks) >= 0.0)


def test_quality_of_service_can_be_overridden_and_is_said(start_node, peer, tmp_path):
    base = write_recording(tmp_path / "small", make_echoes(), LABELS)
    file = tmp_path / "qos.yaml"
    override = {"/raw_echo": {"publisher": {"depth": 7, "reliability": "best_effort"}}}
    file.write_text(yaml.safe_dump({"/**": {"ros__parameters": {"qos_overrides": override}}}))
    node = start_node("driver", {"source": "recording", "recording": base}, files=[file])
    peer.wait_for(lambda: "source: " in node.text, "the start")
    assert "publishes /raw_echo: best_effort, volatile, keep_last 7" in node.text
    (info,) = peer.wait_for(
        lambda: peer.node.get_publishers_info_by_topic("/raw_echo"), "the publisher"
    )
    assert info.qos_profile.reliability == ReliabilityPolicy.BEST_EFFORT


def test_hardware_says_what_to_do_instead(start_node):
    node = start_node("driver", {"source": "hardware"})
    assert node.exit_code() == 1
    assert "no source for hardware yet" in node.text
    assert "Traceback" not in node.text
