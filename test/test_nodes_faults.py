"""Bad input to the real nodes: dropped, counted, told; the nodes go on."""

import math

import numpy as np
import pytest

pytest.importorskip("rclpy")
pytestmark = [pytest.mark.ros, pytest.mark.filterwarnings("ignore::DeprecationWarning")]

from diagnostic_msgs.msg import DiagnosticArray, DiagnosticStatus  # noqa: E402

from ros_echo_perception.core.types import RawEcho as CoreEcho  # noqa: E402
from ros_echo_perception.msg import EchoDetectionArray, RawEcho  # noqa: E402
from ros_echo_perception.nodes import conversion  # noqa: E402

T0_S = 1_700_000_000.0


def raw_message(sequence, time_s=None, **changes):
    """A quiet ping of the default head with one field changed."""
    samples = np.random.default_rng(sequence).normal(0.0, 40.0, (2, 4000)).astype(np.int16)
    echo = CoreEcho(samples, 200e3, 40e3, 3.0, 0.0, sequence=sequence, temperature_c=20.0)
    stamp = conversion.stamp(T0_S + 0.1 * sequence if time_s is None else time_s)
    msg = conversion.raw_echo_to_msg(echo, stamp, "echo_head")
    for name, value in changes.items():
        setattr(msg, name, value)
    return msg


BAD = {
    "different lengths": {"right": [0] * 3999},
    "empty": {"left": [], "right": []},
    "no sample rate": {"sample_rate_hz": 0.0},
    "carrier not a number": {"carrier_hz": math.nan},
    "burst not a number": {"burst_cycles": math.nan},
    "gain that goes back": {"gain_time_s": [0.1, 0.0], "gain_db": [0.0, 1.0]},
}


@pytest.fixture
def processing(start_node, peer):
    """The processing node, what it finds, what it says of itself, and a way to send to it."""
    found = peer.collect(EchoDetectionArray, "detections")
    states = peer.collect(DiagnosticArray, "/diagnostics")
    publisher = peer.node.create_publisher(RawEcho, "raw_echo", 50)
    node = start_node("processing", {"diagnostics_period_s": 0.2})
    peer.wait_for(publisher.get_subscription_count, "processing")
    peer.wait_for(lambda: peer.diagnostics(states, "processing"), "diagnostics")
    return node, found, states, publisher.publish


def test_malformed_echoes_are_dropped_and_counted_and_the_node_goes_on(processing, peer):
    node, found, states, send = processing
    for sequence, changes in enumerate(BAD.values()):
        send(raw_message(sequence, **changes))
    send(raw_message(len(BAD)))
    peer.wait_for(lambda: found, "the good ping")
    assert [m.sequence for m in found] == [len(BAD)]
    assert found[0].header.frame_id == "echo_head"

    def state():
        seen = peer.diagnostics(states, "processing")
        return seen if int(seen["received"]) == len(BAD) + 1 else None

    seen = peer.wait_for(state, "diagnostics")
    assert int(seen["dropped"]) == len(BAD)
    assert int(seen["processed"]) == 1
    assert seen["level"] == DiagnosticStatus.WARN
    assert seen["missing sequence numbers"] == "0"
    assert "gain curve times" in seen["last error"]
    assert "lengths of left and right is (4000, 3999)" in node.text  # the first one is told


def test_time_that_jumps_back_is_followed(processing, peer):
    _, found, states, send = processing
    send(raw_message(0))
    send(raw_message(1, time_s=T0_S - 100.0))
    peer.wait_for(lambda: len(found) == 2, "both pings")
    assert conversion.seconds(found[1].header.stamp) == T0_S - 100.0
    peer.wait_for(lambda: peer.diagnostics(states, "processing")["time jumps"] == "1", "the jump")


def test_lost_pings_are_counted(processing, peer):
    _, found, states, send = processing
    for sequence in (0, 1, 5):
        send(raw_message(sequence))
    peer.wait_for(
        lambda: peer.diagnostics(states, "processing")["missing sequence numbers"] == "3", "losses"
    )


def test_a_refused_parameter_says_why_and_changes_nothing(processing, peer):
    before = peer.parameters("/processing", ["scan.range_min_m", "max_range_m"])
    together = {"scan.range_min_m": 1.9, "scan.range_max_m": 1.0}
    for values, reason in (
        (together, "scan.range_max_m is 1.0; allowed: more than range_min_m (1.9 m)."),
        ({"max_range_m": -1.0}, "out of range"),
        ({"max_range_m": "far"}, "max_range_m is 'far'; allowed: a value of type float."),
        ({"scan.silence_policy": "guess"}, "one of never_clear, clear_to_range"),
        ({"head_file": "other.yaml"}, "read-only"),
    ):
        result = peer.set_parameters("/processing", **values)
        assert not result.successful
        assert reason in result.reason
    assert peer.parameters("/processing", before) == before


def test_an_accepted_parameter_takes_effect_on_the_next_ping(processing, peer):
    from sensor_msgs.msg import LaserScan

    _, found, _, send = processing
    scans = peer.collect(LaserScan, "scan")
    peer.wait_for(lambda: peer.node.count_publishers("/scan") == 1, "the scan")
    assert peer.set_parameters("/processing", **{"scan.range_max_m": 7}).successful

    def answered():
        if len(found) > len(sent) - 1:
            sent.append(len(sent))
            send(raw_message(sent[-1]))
        return scans

    sent = []
    peer.wait_for(answered, "a scan")  # the first pings may go before the scan is connected
    assert scans[0].range_max == 7.0


@pytest.mark.parametrize(
    ("parameters", "text"),
    [
        ({"head_file": "nowhere.yaml"}, "head_file is 'nowhere.yaml'"),
        ({"max_range_m": 1000.0}, "parameter max_range_m cannot be used"),
        ({"scan.silence_policy": "guess"}, "scan.silence_policy is 'guess'"),
    ],
)
def test_a_node_that_cannot_start_says_why_without_a_traceback(start_node, parameters, text):
    node = start_node("processing", parameters)
    assert node.exit_code() == 1
    assert text in node.text
    assert "allowed:" in node.text
    assert "Traceback" not in node.text


def test_a_driver_without_recording_says_what_to_give(start_node, tmp_path):
    for parameters, text in (
        ({"source": "recording"}, "recording is ''; allowed: the path of a .wav"),
        ({"source": "recording", "recording": tmp_path / "no.wav"}, "no.json: cannot be read"),
    ):
        node = start_node("driver", parameters)
        assert node.exit_code() == 1
        assert text in node.text
        assert "Traceback" not in node.text
