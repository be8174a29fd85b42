"""Whatever odometry or detections say of their own doubt: the work and the smear are bounded."""

import itertools
import math
import time

import numpy as np
import pytest
from mapping_helpers import (
    detection,
    every,
    farthest,
    highest,
    look,
    mapper,
    odometry,
    one_sided,
    ping,
)

from ros_echo_perception.core.mapping import PoseBuffer
from ros_echo_perception.core.mapping.hypotheses import hypotheses_of
from ros_echo_perception.core.mapping.sensor_model import arc_samples
from ros_echo_perception.core.types import OdometrySample, Pose2
from ros_echo_perception.sources.robot_path import RobotPath, Waypoint, drifting_odometry

DRIVE = RobotPath.along(
    Pose2(), (Waypoint(3.0, 0.0), Waypoint(3.0, 2.0), Waypoint(0.0, 2.0), Waypoint(0.0, 0.2))
)
COVARIANCES = {
    "none": lambda t: None,
    "NaN": lambda t: np.full((3, 3), math.nan),
    "negative": lambda t: -np.eye(3),
    "never larger than all": lambda t: np.eye(3) * 1e308,
    "metres": lambda t: np.eye(3) * 0.1 * t,
    "kilometres": lambda t: np.eye(3) * 1e6 * t,
}


# ---------------------------------------------------------------------- simulated odometry
def test_covariance_of_the_simulated_odometry_is_the_usual_propagation():
    """P' = F P F^T + Q step by step (Thrun, Burgard, Fox 2005, section 5.4)."""
    samples = drifting_odometry(DRIVE, seed=3)
    covariance = samples[0].covariance.copy()
    for before, after in itertools.pairwise(samples):
        dx = after.pose.x_m - before.pose.x_m
        dy = after.pose.y_m - before.pose.y_m
        way, turned = math.hypot(dx, dy), abs(after.turn_rad_s) / 50.0
        step = np.array([[1.0, 0.0, -dy], [0.0, 1.0, dx], [0.0, 0.0, 1.0]])
        added = [0.01**2 * way, 0.01**2 * way, 0.012**2 * turned + 0.003**2 * way]
        covariance = step @ covariance @ step.T + np.diag(added)
    np.testing.assert_allclose(samples[-1].covariance, covariance, rtol=1e-9, atol=1e-15)
    assert np.linalg.eigvalsh(covariance).min() > 0.0


def test_covariance_of_the_simulated_odometry_is_that_of_its_errors():
    """Normalised squared errors of 3 degrees of freedom: 3 on average if honest."""
    true = DRIVE.pose(DRIVE.duration_s)
    scores = []
    for seed in range(40):
        last = drifting_odometry(DRIVE, seed)[-1]
        error = np.array(
            [
                last.pose.x_m - true.x_m,
                last.pose.y_m - true.y_m,
                math.remainder(last.pose.yaw_rad - true.yaw_rad, math.tau),
            ]
        )
        scores.append(error @ np.linalg.solve(last.covariance, error))
    assert 0.7 < np.mean(scores) < 6.0


def test_relative_variance_takes_off_what_was_there_before():
    """Over any 2 s it is that of a walk that begins there, however far the robot has come."""
    samples = drifting_odometry(DRIVE, seed=3)
    whole = PoseBuffer()
    for sample in samples:
        whole.add(sample)
    for end in (300, 600, len(samples) - 1):
        part = samples[end - 100 : end + 1]
        covariance = np.zeros((3, 3))
        for before, after in itertools.pairwise(part):
            dx, dy = after.pose.x_m - before.pose.x_m, after.pose.y_m - before.pose.y_m
            way, turned = math.hypot(dx, dy), abs(after.turn_rad_s) / 50.0
            step = np.array([[1.0, 0.0, -dy], [0.0, 1.0, dx], [0.0, 0.0, 1.0]])
            added = [0.01**2 * way, 0.01**2 * way, 0.012**2 * turned + 0.003**2 * way]
            covariance = step @ covariance @ step.T + np.diag(added)
        got = whole.relative_variance(part[-1].time_s, 2.0)
        np.testing.assert_allclose(got, np.diagonal(covariance), rtol=1e-6, atol=1e-12)
        assert math.sqrt(max(got)) < 0.03


# ---------------------------------------------------------------------- bounded smear
@pytest.mark.parametrize("name", COVARIANCES)
def test_a_pole_is_mapped_whatever_the_covariance(name):
    to = mapper(occupied_decay_s=0.0)
    for k in range(200):
        time_s = 0.02 * k
        pose = Pose2(0.2 * time_s, 0.0, 0.0)
        to.add_odometry(OdometrySample(time_s, pose, covariance=COVARIANCES[name](time_s)))
        if k % 5 == 0:
            bearing = math.atan2(0.5, 2.0 - pose.x_m)
            seen = detection(math.hypot(2.0 - pose.x_m, 0.5), bearing)
            to.add_ping("front", ping(time_s, seen))
    found = to.snapshot()
    assert highest(found, 2.0, 0.5) >= 65
    assert highest(found, 2.0, -0.3) < 65
    assert farthest(found, 2.0, 0.5) < 0.3


def test_absurd_covariances_are_counted():
    to = mapper()
    for k in range(50):
        time_s = 0.02 * k
        covariance = np.full((3, 3), math.nan) if k % 10 == 0 else np.eye(3) * 100.0 * time_s
        to.add_odometry(OdometrySample(time_s, Pose2(), covariance=covariance))
    to.add_ping("front", ping(0.5, detection(1.0, 0.0)))
    odometry(to, 1.0, 1.2)
    assert to.counts["fused"] == 1
    assert to.counts["covariance_invalid"] == 5
    assert to.counts["covariance_capped"] == 1


def test_echoes_of_vague_range_are_left_out_and_counted():
    to = mapper()
    found = look(to, every(5), lambda _: [detection(1.0, 0.0, range_sigma_m=0.5)])
    assert found.data.max() == -1
    assert to.counts["detections_vague"] == 5
    assert to.counts["detections_used"] == 0


def test_of_too_many_echoes_the_most_probable_are_used():
    to = mapper(max_detections=2)
    likely = [detection(1.0, 0.0), detection(2.0, 0.4)]
    unlikely = [detection(1.5, -0.4, existence_probability=0.6)]
    found = look(to, every(10), lambda _: [likely[0], *unlikely, likely[1]])
    assert to.counts["detections_excess"] == 10
    assert highest(found, 1.0, 0.0) >= 65
    assert highest(found, 1.5 * math.cos(0.4), -1.5 * math.sin(0.4)) < 50


# ---------------------------------------------------------------------- bounded work
def test_points_are_thinned_where_the_least_is_lost():
    sharp = [detection(2.0, 0.1 * k) for k in range(4)]
    wide = [detection(4.0, 0.0, 3.0, range_sigma_m=0.2) for _ in range(8)]
    heads = np.zeros((12, 3))
    config = mapper().config
    both = hypotheses_of([*sharp, *wide], heads, (0.0, 0.0, 0.0), config)
    alone = hypotheses_of(sharp, heads[:4], (0.0, 0.0, 0.0), config)
    thinned, whole = arc_samples(both, 0.05), arc_samples(alone, 0.05)
    assert thinned.owner.size <= 3_500 + 5 * 11 * len(both)
    narrow_both = (thinned.owner < len(alone)) & ~both.uniform[thinned.owner]
    narrow_alone = ~alone.uniform[whole.owner]
    np.testing.assert_array_equal(thinned.x_m[narrow_both], whole.x_m[narrow_alone])
    weights = np.bincount(thinned.owner, thinned.weight, len(both))
    np.testing.assert_allclose(weights, both.weight)


def _costs_s(covariance, detections):
    """Thread time of fusing each of 120 pings."""
    to, costs = mapper(settle_s=0.0, covariance_span_s=10.0), []
    for k in range(120):
        time_s = 0.1 * k
        pose = lambda t: Pose2(0.3 * t, 0.0, 0.1 * t)  # noqa: E731
        for offset_s in (0.0, 0.03, 0.06):
            t = time_s + offset_s
            to.add_odometry(OdometrySample(t, pose(t), covariance=covariance(t)))
            if offset_s == 0.0:
                to.add_ping("front", ping(t, *detections(k)))
                start = time.thread_time()
        costs.append(time.thread_time() - start)
    assert to.counts["fused"] >= 119
    return np.array(costs)


def _ordinary(k):
    rng = np.random.default_rng(k)
    bearings, ranges = rng.uniform(-1, 1, 8), rng.uniform(0.5, 4.5, 8)
    comb = tuple((-0.6 + 0.15 * j, 1 / 8) for j in range(8))
    two_sided = [
        detection(r, b, 0.05, alternatives=comb if i < 3 else ())
        for i, (r, b) in enumerate(zip(ranges[:6], bearings, strict=False))
    ]
    return [*two_sided, *(one_sided(r, 0.0, 1.2) for r in ranges[6:])]


def _vague(_):
    return [detection(4.5, 0.0, 3.0, range_sigma_m=0.2) for _ in range(8)]


@pytest.mark.parametrize("name", COVARIANCES)
@pytest.mark.parametrize("detections", [_ordinary, _vague])
def test_time_per_ping_is_bounded(name, detections):
    """Bars: 1.5 ms median and 4 ms in 99 of 100; twice that here for a loaded machine."""
    costs = min((_costs_s(COVARIANCES[name], detections) for _ in range(2)), key=np.median)
    assert np.median(costs) < 3e-3
    assert np.percentile(costs, 99) < 8e-3
