"""Bad input to the real nodes: dropped, counted, told; the nodes go on."""

import math

import numpy as np
import pytest

pytest.importorskip("rclpy")
pytestmark = [pytest.mark.ros, pytest.mark.filterwarnings("ignore::DeprecationWarning")]

from diagnostic_msgs.msg import DiagnosticArray, DiagnosticStatus  # noqa: E402
from sensor_msgs.msg import LaserScan  # noqa: E402

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


class Processing:
    """The processing node, what it finds, what it says of itself, and a way to send to it.

    A publisher knows of a subscription before that knows of the publisher, so that the first
    messages may be lost: pings numbered 0 are sent until one is heard, and counts start there.
    """

    def __init__(self, start_node, peer):
        self.peer = peer
        self.found = peer.collect(EchoDetectionArray, "detections")
        self.states = peer.collect(DiagnosticArray, "/diagnostics")
        self._publisher = peer.node.create_publisher(RawEcho, "raw_echo", 50)
        self.node = start_node("processing", {"diagnostics_period_s": 0.1})
        peer.wait_for(self._heard, "the processing node to hear")
        peer.wait_for(self._settled, "the last of the first pings")
        self._before = self.state()
        self.found.clear()

    def send(self, msg):
        self._publisher.publish(msg)

    def state(self):
        return self.peer.diagnostics(self.states, "processing")

    def count(self, name):
        """A count since the start of the test."""
        return int(self.state().get(name, 0)) - int(self._before.get(name, 0))

    def _heard(self):
        if not self.found:
            self.send(raw_message(0))
        return self.found

    def _settled(self):
        """Whether the count of received pings has stopped to grow."""
        counts = [
            value.value
            for array in self.states[-4:]
            for value in array.status[0].values
            if value.key == "received"
        ]
        return len(counts) == 4 and counts[0] != "0" and len(set(counts)) == 1


@pytest.fixture
def processing(start_node, peer):
    return Processing(start_node, peer)


def test_malformed_echoes_are_dropped_and_counted_and_the_node_goes_on(processing, peer):
    for sequence, changes in enumerate(BAD.values(), start=1):
        processing.send(raw_message(sequence, **changes))
    last = len(BAD) + 1
    processing.send(raw_message(last))
    peer.wait_for(lambda: processing.found, "the good ping")
    assert [m.sequence for m in processing.found] == [last]
    assert processing.found[0].header.frame_id == "echo_head"
    peer.wait_for(lambda: processing.count("received") == last, "diagnostics")
    assert processing.count("dropped") == len(BAD)
    assert processing.count("dropped: invalid message") == len(BAD)
    assert processing.count("processed") == 1
    state = processing.state()
    assert state["level"] == DiagnosticStatus.WARN
    assert state["missing sequence numbers"] == "0"
    assert "gain curve times" in state["last error"]
    assert "lengths of left and right is (4000, 3999)" in processing.node.text


def test_time_that_jumps_back_is_followed(processing, peer):
    processing.send(raw_message(1))
    processing.send(raw_message(2, time_s=T0_S - 100.0))
    peer.wait_for(lambda: len(processing.found) == 2, "both pings")
    assert conversion.seconds(processing.found[1].header.stamp) == T0_S - 100.0
    peer.wait_for(lambda: processing.count("time jumps") == 1, "the jump")


def test_lost_pings_are_counted(processing, peer):
    for sequence in (1, 2, 6):
        processing.send(raw_message(sequence))
    peer.wait_for(lambda: processing.count("missing sequence numbers") == 3, "losses")


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
    scans = peer.collect(LaserScan, "scan")
    peer.wait_for(lambda: peer.node.count_publishers("/scan") == 1, "the scan")
    assert peer.set_parameters("/processing", **{"scan.range_max_m": 7}).successful

    def answered():
        if len(processing.found) >= len(sent):  # the scan may connect after some pings
            sent.append(raw_message(len(sent) + 1))
            processing.send(sent[-1])
        return scans

    sent = []
    peer.wait_for(answered, "a scan")
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
