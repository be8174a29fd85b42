"""Odometry that comes late, twice, with gaps, jumps and restarts."""

import math

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st
from scipy.spatial.transform import Rotation, Slerp

from ros_echo_perception.core.errors import OdometryGapError
from ros_echo_perception.core.mapping.poses import PoseBuffer, PoseOutcome
from ros_echo_perception.core.types import OdometrySample, Pose2


def sample(time_s, x=0.0, y=0.0, yaw=0.0, covariance=None):
    return OdometrySample(time_s, Pose2(x, y, yaw), covariance=covariance)


def filled(*samples, **settings):
    buffer = PoseBuffer(**settings)
    for item in samples:
        buffer.add(item)
    return buffer


@given(st.floats(-3.1, 3.1), st.floats(-1.0, 1.0), st.floats(0.0, 1.0))
def test_heading_turns_as_spherical_interpolation_of_a_reference_library(start, turn, part):
    """scipy.spatial.transform.Slerp about z is the reference for the short way round."""
    buffer = filled(sample(0.0, yaw=start), sample(0.1, 0.2, -0.1, start + turn), max_turn_rad_s=50)
    got = buffer.pose_at(0.1 * part)
    turns = Rotation.from_euler("z", [start, start + turn])
    expected = Slerp([0.0, 0.1], turns)(0.1 * part).as_euler("xyz")[2]
    assert math.remainder(got.yaw_rad - expected, 2 * math.pi) == pytest.approx(0.0, abs=1e-9)
    assert (got.x_m, got.y_m) == pytest.approx((0.2 * part, -0.1 * part))


def test_heading_across_pi_takes_the_short_way():
    buffer = filled(sample(0.0, yaw=3.1), sample(0.1, yaw=-3.1))
    assert abs(buffer.pose_at(0.05).yaw_rad) == pytest.approx(math.pi, abs=1e-9)


@given(st.permutations(range(8)))
def test_order_of_arrival_does_not_matter(order):
    path = [sample(0.02 * k, 0.01 * k**1.5, -0.02 * k, 0.05 * k) for k in range(8)]
    shuffled = filled(*[path[k] for k in order])
    times = np.linspace(0.0, 0.14, 29)
    np.testing.assert_allclose(
        shuffled.poses_at(times), filled(*path).poses_at(times), rtol=0, atol=1e-12
    )


def test_outcomes_of_late_double_and_invalid_samples():
    buffer = filled(sample(0.0), sample(0.1))
    assert buffer.add(sample(0.05)) is PoseOutcome.LATE
    assert buffer.add(sample(0.05, x=0.01)) is PoseOutcome.DUPLICATE
    assert buffer.add(sample(0.2, x=math.nan)) is PoseOutcome.INVALID
    assert buffer.add(sample(math.inf)) is PoseOutcome.INVALID
    assert len(buffer) == 3


@pytest.mark.parametrize("asked", [-0.01, 0.35, 0.61])
def test_outside_and_in_a_gap_it_refuses_with_figures(asked):
    buffer = filled(sample(0.0), sample(0.1), sample(0.5), sample(0.6), max_gap_s=0.2)
    with pytest.raises(OdometryGapError, match=r"\d\.\d{3} s"):
        buffer.pose_at(asked)


def test_empty_buffer_refuses():
    with pytest.raises(OdometryGapError, match="no odometry at all"):
        PoseBuffer().pose_at(0.0)


def test_an_exact_sample_is_found_even_beside_a_gap():
    buffer = filled(sample(0.0, 1.0), sample(5.0, 1.0))
    assert buffer.pose_at(0.0).x_m == 1.0
    assert buffer.pose_at(5.0).x_m == 1.0


def test_time_that_restarts_forgets_what_was():
    buffer = filled(sample(10.0, 1.0), sample(10.1, 1.0))
    assert buffer.add(sample(0.0, 3.0)) is PoseOutcome.RESTARTED
    assert len(buffer) == 1
    assert buffer.pose_at(0.0).x_m == 3.0


def test_a_lone_outlier_is_ignored():
    buffer = filled(sample(0.0), sample(0.02))
    assert buffer.add(sample(0.04, 7.0)) is PoseOutcome.SUSPECT
    assert buffer.add(sample(0.06, 0.01)) is PoseOutcome.ADDED
    assert buffer.pose_at(0.05).x_m == pytest.approx(0.0075)


def test_a_jump_is_believed_when_the_next_sample_agrees():
    buffer = filled(sample(0.0), sample(0.02))
    assert buffer.add(sample(0.04, 7.0)) is PoseOutcome.SUSPECT
    assert buffer.add(sample(0.06, 7.01)) is PoseOutcome.JUMPED
    assert buffer.pose_at(0.05).x_m == pytest.approx(7.005)
    with pytest.raises(OdometryGapError):
        buffer.pose_at(0.02)


def test_memory_is_bounded_and_the_newest_stay():
    buffer = PoseBuffer(max_samples=100)
    for k in range(10_000):
        buffer.add(sample(0.02 * k))
        assert len(buffer) <= 110
    assert buffer.newest_time_s == pytest.approx(0.02 * 9999)
    assert buffer.add(sample(buffer.oldest_time_s - 0.01)) in (
        PoseOutcome.TOO_OLD,
        PoseOutcome.RESTARTED,
    )


def test_growth_of_variance_over_a_span():
    buffer = PoseBuffer()
    for k in range(101):
        buffer.add(sample(0.1 * k, covariance=np.diag([0.01, 0.02, 0.03]) * (1 + k)))
    assert buffer.relative_variance(10.0, 5.0) == pytest.approx((0.5, 1.0, 1.5))
    assert buffer.relative_variance(10.0, 0.0) == (0.0, 0.0, 0.0)
    assert filled(sample(0.0), sample(1.0)).relative_variance(1.0, 1.0) == (0.0, 0.0, 0.0)


def test_broken_covariance_counts_as_unknown():
    broken = np.full((3, 3), np.nan)
    buffer = filled(sample(0.0), sample(0.1, covariance=broken))
    assert buffer.relative_variance(0.1, 1.0) == (0.0, 0.0, 0.0)
