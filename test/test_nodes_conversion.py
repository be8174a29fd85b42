"""Messages to core types and back, and what viewers get."""

import dataclasses
import math
import time

import numpy as np
import pytest

pytest.importorskip("rclpy")
pytestmark = [
    pytest.mark.ros,
    pytest.mark.filterwarnings("ignore::DeprecationWarning"),
]

from nav_msgs.msg import Odometry  # noqa: E402
from std_msgs.msg import Header  # noqa: E402
from visualization_msgs.msg import Marker  # noqa: E402

from ros_echo_perception.core import types  # noqa: E402
from ros_echo_perception.core.errors import InvalidEchoError  # noqa: E402
from ros_echo_perception.core.perception.scan import scan_from_result  # noqa: E402
from ros_echo_perception.msg import EchoDetection, EchoDetectionArray  # noqa: E402
from ros_echo_perception.msg import RawEcho as RawEchoMsg  # noqa: E402
from ros_echo_perception.nodes import conversion, views  # noqa: E402

STAMP_S = 1_796_134_109.25


def raw_echo(n=7200, **changes):
    samples = np.random.default_rng(1).integers(-32768, 32768, (2, n)).astype(np.int16)
    base = types.RawEcho(
        samples, 200e3, 40e3, 3.5, STAMP_S, -0.0002, 32768.0, 21.5, 0.25, 77,
        types.FrontEndFlag.SIMULATED | types.FrontEndFlag.LEFT_CLIPPED,
        types.GainCurve(np.array([0.0, 0.01]), np.array([0.0, 12.0])),
    )  # fmt: skip
    return dataclasses.replace(base, **changes)


def message(**changes):
    msg = conversion.raw_echo_to_msg(raw_echo(), conversion.stamp(STAMP_S), "echo_head")
    for name, value in changes.items():
        setattr(msg, name, value)
    return msg


def detection(**changes):
    base = types.Detection(
        2.0, 0.3, 0.004, 0.02, 0.26, 0.34, (0.1, 0.2), (20.0, 26.0), 0.875, 1e-5, ((0.5, 0.25),),
        types.Ears.BOTH, 1.5e-4, 2e-5, -0.25, 0.0625, types.DetectionFlag.BEARING_AMBIGUOUS,
    )  # fmt: skip
    return dataclasses.replace(base, **changes)


def one_sided():
    return detection(
        range_m=1.0, ears=types.Ears.LEFT_ONLY, alternatives=(), bearing_min_rad=0.0,
        bearing_max_rad=0.6, ear_amplitude=(0.1, math.nan), ear_snr_db=(20.0, -math.inf),
        flags=types.DetectionFlag.NONE, radial_velocity_m_s=math.nan,
    )  # fmt: skip


def result(*detections, **changes):
    base = types.PingResult(
        STAMP_S, 77, detections, 343.25, 0.25, 5.5, 0.5, (1e-3, 2e-3), types.PingFlag.SIMULATED
    )
    return dataclasses.replace(base, **changes)


def header():
    return Header(stamp=conversion.stamp(STAMP_S), frame_id="echo_head")


def test_raw_echo_survives_the_way_there_and_back_exactly():
    echo = raw_echo()
    back = conversion.raw_echo_from_msg(message())
    np.testing.assert_array_equal(back.samples, echo.samples)
    np.testing.assert_array_equal(back.gain.gain_db, echo.gain.gain_db)
    np.testing.assert_allclose(back.gain.time_s, echo.gain.time_s, rtol=1e-6)
    for field in dataclasses.fields(types.RawEcho):
        if field.name not in ("samples", "gain"):
            assert getattr(back, field.name) == getattr(echo, field.name), field.name


def test_an_echo_without_gain_and_air_comes_back_so():
    echo = raw_echo(gain=None, temperature_c=math.nan, relative_humidity=math.nan)
    back = conversion.raw_echo_from_msg(
        conversion.raw_echo_to_msg(echo, conversion.stamp(STAMP_S), "f")
    )
    assert back.gain is None
    assert math.isnan(back.temperature_c)
    assert math.isnan(back.relative_humidity)


@pytest.mark.parametrize(
    ("changes", "text"),
    [
        ({"right": [1] * 7199}, "lengths of left and right"),
        ({"left": [], "right": []}, "samples shape"),
        ({"sample_rate_hz": 0.0}, "sample_rate_hz is 0.0"),
        ({"sample_rate_hz": math.nan}, "sample_rate_hz is nan"),
        ({"carrier_hz": 150e3}, "carrier_hz"),
        ({"burst_cycles": math.nan}, "burst_cycles is nan"),
        ({"full_scale": -1.0}, "full_scale"),
        ({"first_sample_offset_s": math.inf}, "first_sample_offset_s"),
        ({"gain_db": [1.0]}, "gain curve lengths"),
        ({"gain_time_s": [0.02, 0.01]}, "gain curve times"),
    ],
)
def test_a_malformed_message_is_refused_by_the_name_of_its_field(changes, text):
    with pytest.raises(InvalidEchoError, match=text):
        conversion.raw_echo_from_msg(message(**changes))


def test_unknown_front_end_flags_are_ignored():
    assert conversion.raw_echo_from_msg(message(front_end_flags=1 << 31)).flags == 0


def test_conversion_costs_little_beside_a_ping():
    """36 ms at 200 kHz; generous against load, a loop over elements takes several times this."""
    msg, echo = message(), raw_echo()
    stamp = conversion.stamp(STAMP_S)
    there = min(_timed(conversion.raw_echo_to_msg, echo, stamp, "f") for _ in range(20))
    back = min(_timed(conversion.raw_echo_from_msg, msg) for _ in range(20))
    assert there < 0.5e-3
    assert back < 0.5e-3


def _timed(function, *arguments):
    begin = time.perf_counter()
    function(*arguments)
    return time.perf_counter() - begin


def test_detections_survive_the_way_there_and_back():
    before = result(detection(), one_sided())
    msg = conversion.result_to_msg(before, header(), 0.0125)
    after = conversion.result_from_msg(msg)
    assert msg.header == header()
    assert msg.processing_time_s == pytest.approx(0.0125)
    assert msg.detections[0].snr_db == 26.0
    assert msg.detections[0].amplitude == pytest.approx(0.2)
    for name in ("emission_time_s", "sequence", "range_min_m", "range_max_m", "flags"):
        assert getattr(after, name) == getattr(before, name)
    for a, b in zip(after.detections, before.detections, strict=True):
        for field in dataclasses.fields(types.Detection):
            x, y = getattr(a, field.name), getattr(b, field.name)
            if field.name in ("alternatives", "ears", "flags"):
                x, y = np.ravel(x), np.ravel(y)  # pairs
            assert x == pytest.approx(y, rel=1e-6, nan_ok=True), field.name


@pytest.mark.parametrize(
    ("name", "value"),
    [("range_m", math.nan), ("range_m", -1.0), ("bearing_rad", math.inf),
     ("bearing_sigma_rad", -0.1), ("ears", 3), ("alternative_weight", [0.1, 0.2])],
)  # fmt: skip
def test_detections_that_cannot_be_are_refused(name, value):
    msg = conversion.result_to_msg(result(detection()), header(), 0.0)
    setattr(msg.detections[0], name, value)
    with pytest.raises(InvalidEchoError, match=name):
        conversion.result_from_msg(msg)


def test_constants_of_the_messages_are_those_of_the_core():
    for prefix, flags, message_class in (
        ("FLAG_", types.FrontEndFlag, RawEchoMsg),
        ("FLAG_", types.PingFlag, EchoDetectionArray),
        ("FLAG_", types.DetectionFlag, EchoDetection),
        ("EARS_", types.Ears, EchoDetection),
    ):
        in_message = {n for n in dir(message_class) if n.startswith(prefix)} - {"FLAG_NONE"}
        in_core = {prefix + n for n in flags.__members__} - {"FLAG_NONE"}
        assert in_message == in_core
        for name, value in flags.__members__.items():
            assert getattr(message_class, prefix + name) == value


def test_envelope_keeps_ears_and_time_axis():
    measured = np.array([[1.0, 2.0, 3.0], [4.0, 5.0, 6.0]])
    fit = types.EnvelopeFit(0.001, 1e-5, measured, measured / 2, (0.1, 0.2), 0.0015)
    msg = conversion.envelope_to_msg(fit, 5, header())
    assert list(msg.left_measured) == [1.0, 2.0, 3.0]
    assert list(msg.right_fitted) == [2.0, 2.5, 3.0]
    assert (msg.sequence, msg.first_time_s, msg.step_s) == (5, 0.001, 1e-5)
    assert (msg.left_threshold, msg.right_threshold) == pytest.approx((0.1, 0.2))


@pytest.mark.parametrize("yaw", [-3.0, -0.5, 0.0, 2.0, 3.1])
def test_odometry_survives_the_way_there_and_back(yaw):
    covariance = np.array([[0.04, 0.01, 0.0], [0.01, 0.09, 0.0], [0.0, 0.0, 0.16]])
    sample = types.OdometrySample(STAMP_S, types.Pose2(1.5, -2.0, yaw), 0.4, -0.2, covariance)
    msg = conversion.odometry_to_msg(sample, conversion.stamp(STAMP_S), "odom", "base_link")
    back = conversion.odometry_from_msg(msg)
    assert back.time_s == sample.time_s
    assert (back.pose.x_m, back.pose.y_m) == (1.5, -2.0)
    assert back.pose.yaw_rad == pytest.approx(yaw)
    assert (back.forward_m_s, back.turn_rad_s) == (0.4, -0.2)
    np.testing.assert_allclose(back.covariance, covariance)


def test_odometry_without_orientation_is_refused():
    msg = Odometry()
    msg.pose.pose.orientation.w = 0.0  # what a forgotten field looks like
    with pytest.raises(InvalidEchoError, match="unit quaternion"):
        conversion.odometry_from_msg(msg)


def test_stamps_are_exact_to_the_float():
    assert conversion.stamp(0.9999999999).sec == 1
    assert conversion.stamp(0.9999999999).nanosec == 0
    for time_s in (0.0, 12.5, STAMP_S, 1_796_134_109.123456):
        assert conversion.seconds(conversion.stamp(time_s)) == pytest.approx(time_s, abs=3e-7)


def test_scan_message_has_the_geometry_and_the_values_of_the_scan():
    scan = scan_from_result(result(detection(alternatives=())))
    msg = views.scan_to_msg(scan, header())
    n = len(msg.ranges)
    assert n == len(msg.intensities) == scan.ranges_m.size
    assert msg.angle_min + (n - 1) * msg.angle_increment == pytest.approx(msg.angle_max, abs=1e-5)
    np.testing.assert_allclose(msg.ranges, scan.ranges_m, rtol=1e-6)
    assert (msg.range_max, msg.time_increment) == (10.0, 0.0)


def test_points_are_where_the_echoes_are():
    msg = views.points_to_msg(result(detection(), one_sided()), header())
    dtype = np.dtype(
        {
            "names": [f.name for f in msg.fields],
            "formats": [{7: np.float32, 6: np.uint32}[f.datatype] for f in msg.fields],
            "offsets": [f.offset for f in msg.fields],
            "itemsize": msg.point_step,
        }
    )
    points = np.frombuffer(bytes(msg.data), dtype)
    assert (msg.width, msg.height, msg.row_step) == (2, 1, 2 * msg.point_step)
    np.testing.assert_allclose(np.hypot(points["x"], points["y"]), [2.0, 1.0], rtol=1e-6)
    np.testing.assert_allclose(np.arctan2(points["y"], points["x"]), [0.3, 0.3], rtol=1e-6)
    assert list(points["ears"]) == [0, 1]
    np.testing.assert_allclose(points["bearing_max"], [0.34, 0.6], rtol=1e-6)
    np.testing.assert_allclose(points["intensity"], [26.0, 20.0])


def test_no_echoes_give_an_empty_cloud():
    msg = views.points_to_msg(result(), header())
    assert (msg.width, len(msg.data)) == (0, 0)


def test_markers_draw_two_sigmas_and_one_eared_echoes_as_their_arc():
    msg = views.markers_to_msg(result(detection(alternatives=()), one_sided()), header())
    dots, sectors, arcs = msg.markers
    assert len(dots.points) == 1
    assert dots.points[0].y == pytest.approx(2.0 * math.sin(0.3))
    radius = [math.hypot(p.x, p.y) for p in sectors.points]
    angle = [math.atan2(p.y, p.x) for p in sectors.points]
    assert (min(radius), max(radius)) == pytest.approx((2.0 - 0.008, 2.0 + 0.008))
    assert (min(angle), max(angle)) == pytest.approx((0.3 - 0.04, 0.3 + 0.04))
    arc = [math.atan2(p.y, p.x) for p in arcs.points]
    assert (min(arc), max(arc)) == pytest.approx((0.0, 0.6))
    assert {round(math.hypot(p.x, p.y), 9) for p in arcs.points} == {1.0}
    for marker in msg.markers:
        assert len(marker.colors) == len(marker.points)
        assert marker.action == Marker.ADD


def test_markers_draw_every_bearing_that_remains_possible_and_nothing_between():
    echo = detection(bearing_rad=0.4, alternatives=((0.1, 0.6), (0.8, 0.4)), bearing_sigma_rad=0.3)
    _, sectors, _ = views.markers_to_msg(result(echo), header()).markers
    angle = np.array([math.atan2(p.y, p.x) for p in sectors.points])
    assert np.all((np.abs(angle - 0.1) < 0.0601) | (np.abs(angle - 0.8) < 0.0601))
    strength = {round(c.a, 3) for c in sectors.colors}
    assert strength == {round(0.4 * w * 0.875, 3) for w in (0.6, 0.4)}


def test_markers_of_a_silent_ping_remove_the_last_ones():
    msg = views.markers_to_msg(result(), header())
    assert [m.action for m in msg.markers] == [Marker.DELETE] * 3
    full = views.markers_to_msg(result(detection(), one_sided()), header())
    assert [(m.ns, m.id) for m in msg.markers] == [(m.ns, m.id) for m in full.markers]


def test_grid_rows_run_along_y_and_columns_along_x():
    cells = np.full((3, 4), -1, np.int8)
    cells[2, 1] = 100
    msg = views.grid_to_msg(cells, 0.05, (-1.0, 2.0), header())
    assert (msg.info.width, msg.info.height) == (4, 3)
    assert (msg.info.origin.position.x, msg.info.origin.position.y) == (-1.0, 2.0)
    assert msg.data[2 * 4 + 1] == 100
    assert list(msg.data).count(-1) == 11
