"""Raw echoes, gain curves and poses."""

import math

import numpy as np
import pytest

from ros_echo_perception.core.errors import InvalidEchoError
from ros_echo_perception.core.types import (
    MIN_SAMPLES,
    Detection,
    GainCurve,
    Pose2,
    RawEcho,
    wrap_angle,
)


def echo(**changes):
    values = {
        "samples": np.zeros((2, 720), np.int16),
        "sample_rate_hz": 200e3,
        "carrier_hz": 40e3,
        "burst_cycles": 3.0,
        "emission_time_s": 1.0,
        "first_sample_offset_s": -2e-4,
    }
    return RawEcho(**(values | changes))


def test_times_of_an_echo():
    assert echo().n_samples == 720
    assert echo().end_time_s == pytest.approx(-2e-4 + 719 / 200e3)


@pytest.mark.parametrize(
    ("changes", "message"),
    [
        ({"samples": np.zeros(720, np.int16)}, "samples shape is (720,)"),
        ({"samples": np.zeros((720, 2), np.int16)}, "samples shape is (720, 2)"),
        ({"samples": np.zeros((2, MIN_SAMPLES - 1), np.int16)}, "samples shape"),
        ({"sample_rate_hz": 0.0}, "sample_rate_hz is 0.0"),
        ({"sample_rate_hz": math.nan}, "sample_rate_hz is nan"),
        ({"sample_rate_hz": math.inf}, "sample_rate_hz is inf"),
        ({"carrier_hz": -1.0}, "carrier_hz is -1.0"),
        ({"carrier_hz": 100e3}, "carrier_hz is 100000.0; allowed: below 100000"),
        ({"burst_cycles": 0.0}, "burst_cycles is 0.0"),
        ({"full_scale": math.nan}, "full_scale is nan"),
        ({"emission_time_s": math.nan}, "emission_time_s is nan"),
        ({"first_sample_offset_s": math.inf}, "first_sample_offset_s is inf"),
    ],
)
def test_impossible_echoes(changes, message):
    with pytest.raises(InvalidEchoError) as error:
        echo(**changes)
    assert message in str(error.value)


def test_gain_curve_is_linear_in_db_and_constant_outside():
    curve = GainCurve(np.array([0.0, 0.01]), np.array([0.0, 20.0]))
    times = np.array([-1.0, 0.0, 0.005, 0.01, 1.0])
    np.testing.assert_allclose(curve.amplitude(times), [1.0, 1.0, 10**0.5, 10.0, 10.0])


@pytest.mark.parametrize(
    ("time_s", "gain_db"),
    [([0.0, 1.0], [0.0]), ([], []), ([0.0, 0.0], [0.0, 1.0]), ([1.0, 0.0], [0.0, 1.0]),
     ([0.0, math.nan], [0.0, 1.0]), ([0.0, 1.0], [0.0, math.inf]), ([[0.0]], [[1.0]])],
)  # fmt: skip
def test_impossible_gain_curves(time_s, gain_db):
    with pytest.raises(InvalidEchoError, match="gain curve"):
        GainCurve(np.array(time_s), np.array(gain_db))


def test_poses_compose_like_matrices():
    rng = np.random.default_rng(0)

    def matrix(pose):
        c, s = math.cos(pose.yaw_rad), math.sin(pose.yaw_rad)
        return np.array([[c, -s, pose.x_m], [s, c, pose.y_m], [0.0, 0.0, 1.0]])

    for _ in range(20):
        a, b = (Pose2(*rng.uniform(-3.0, 3.0, 3)) for _ in range(2))
        np.testing.assert_allclose(matrix(a.compose(b)), matrix(a) @ matrix(b), atol=1e-12)
        np.testing.assert_allclose(matrix(a.inverse()), np.linalg.inv(matrix(a)), atol=1e-12)


def test_wrap_angle():
    for turns in (-3, 0, 5):
        assert wrap_angle(0.3 + 2.0 * math.pi * turns) == pytest.approx(0.3)
    assert abs(wrap_angle(7.0)) <= math.pi


def test_better_ear_of_a_detection():
    detection = Detection(1.0, 0.0, 0.01, 0.1, -0.1, 0.1, (0.2, math.nan), (25.0, -math.inf), 0.9)
    assert detection.amplitude == 0.2
    assert detection.snr_db == 25.0
