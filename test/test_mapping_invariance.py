"""What must not change the map: order, delay, splitting, place and direction of the axes."""

import copy
import math

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from mapping_helpers import (
    LASTING,
    POLES,
    along_x,
    drive_past,
    every,
    highest,
    look,
    mapper,
    ping,
    seen_from,
)

from ros_echo_perception.core.mapping import LocalMapper, MappingConfig, run_mapper
from ros_echo_perception.core.types import OdometrySample, Pose2


def test_a_static_world_seen_twice_only_sharpens():
    def back_and_forth(time_s):
        return along_x(1.5 - abs(time_s % 3.0 - 1.5))

    to = mapper(**LASTING)
    first = look(to, every(30), lambda p: seen_from(p, POLES), back_and_forth)
    second = look(to, every(30, start_s=3.1), lambda p: seen_from(p, POLES), back_and_forth)
    decided = np.abs(first.data.astype(int) - 50) > 30
    assert decided.sum() > 50
    gain = np.abs(second.data.astype(int) - 50) - np.abs(first.data.astype(int) - 50)
    assert np.mean(gain[decided] >= 0) > 0.95
    for pole in POLES:
        assert highest(second, *pole) >= highest(first, *pole) >= 65
    assert (second.data >= 65).sum() <= (first.data >= 65).sum() * 1.3


@given(st.integers(-40, 40), st.integers(-40, 40))
@settings(max_examples=15, deadline=None)
def test_moving_world_and_robot_by_whole_cells_moves_the_map(shift_x, shift_y):
    dx, dy = shift_x / 16, shift_y / 16
    moved_points = [(x + dx, y + dy) for x, y in POLES]
    plain = drive_past(resolution_m=0.0625)
    moved = drive_past(
        moved_points,
        resolution_m=0.0625,
        pose_at=lambda t: Pose2(dx, dy).compose(along_x(t)),
    )
    assert moved.origin_x_m - plain.origin_x_m == pytest.approx(dx)
    assert moved.origin_y_m - plain.origin_y_m == pytest.approx(dy)
    # Points on a border of cells may fall to either side by rounding.
    assert np.mean(moved.data != plain.data) < 0.003


@pytest.mark.parametrize("turn", [0.5, math.pi / 2, 2.5])
def test_turning_world_and_robot_turns_the_map(turn):
    frame = Pose2(0.0, 0.0, turn)
    turned_points = [(p.x_m, p.y_m) for p in (frame.compose(Pose2(x, y)) for x, y in POLES)]
    plain = drive_past()
    turned = drive_past(turned_points, pose_at=lambda t: frame.compose(along_x(t)))
    rows, columns = np.nonzero(turned.data >= 65)
    back = frame.inverse()
    places = [
        back.compose(
            Pose2(
                turned.origin_x_m + (c + 0.5) * turned.resolution_m,
                turned.origin_y_m + (r + 0.5) * turned.resolution_m,
            )
        )
        for r, c in zip(rows, columns, strict=True)
    ]
    assert all(highest(plain, p.x_m, p.y_m) >= 65 for p in places)
    assert rows.size == pytest.approx((plain.data >= 65).sum(), rel=0.4)


def two_heads_events():
    mounts = {"left": Pose2(0.1, 0.1, 0.4), "right": Pose2(0.1, -0.1, -0.4)}
    pings = [
        (head, ping(t, *seen_from(along_x(t).compose(mount), POLES, 0.05)))
        for t in every(15)
        for head, mount in mounts.items()
    ]
    odometry_samples = [OdometrySample(0.02 * k, along_x(0.02 * k)) for k in range(100)]
    return mounts, pings, odometry_samples


def test_order_of_heads_within_one_ping_time_does_not_matter():
    mounts, pings, samples = two_heads_events()
    swapped = [p for k in range(0, len(pings), 2) for p in (pings[k + 1], pings[k])]
    maps = []
    for order in (pings, swapped):
        to = LocalMapper(MappingConfig(), mounts)
        maps.append(run_mapper(to, _merged(order, samples)).data)
        assert to.counts["fused"] == len(pings)
    np.testing.assert_array_equal(*maps)
    assert maps[0].max() >= 65


def _merged(pings, samples):
    """Events in the order of time; pings keep their order among themselves."""
    keyed = [(p[1].emission_time_s, 0, k, p) for k, p in enumerate(pings)]
    keyed += [(s.time_s, 1, k, s) for k, s in enumerate(samples)]
    return [event for *_, event in sorted(keyed, key=lambda e: e[:3])]


@given(st.randoms(use_true_random=False), st.floats(0.0, 0.08))
@settings(max_examples=15, deadline=None)
def test_delays_between_the_topics_change_nothing(random, delay_s):
    """Odometry and pings through their own topics, each in order, with different delays."""
    mounts, pings, samples = two_heads_events()
    config = MappingConfig(settle_s=0.2)
    expected = run_mapper(LocalMapper(config, mounts), _merged(pings, samples))
    keyed = [(p[1].emission_time_s + delay_s * random.random(), k, p) for k, p in enumerate(pings)]
    keyed += [(s.time_s, 1000 + k, s) for k, s in enumerate(samples)]
    events = [event for *_, event in sorted(keyed, key=lambda e: e[:2])]
    got = run_mapper(LocalMapper(config, mounts), events)
    np.testing.assert_array_equal(got.data, expected.data)
    assert got.time_s == expected.time_s


def test_snapshots_and_splitting_change_nothing():
    mounts, pings, samples = two_heads_events()
    events = _merged(pings, samples)
    whole = run_mapper(LocalMapper(MappingConfig(), mounts), events)
    split = LocalMapper(MappingConfig(), mounts)
    for event in events:
        if isinstance(event, OdometrySample):
            split.add_odometry(event)
        else:
            split.add_ping(*event)
        split.snapshot()
    np.testing.assert_array_equal(run_mapper(split, []).data, whole.data)


def test_inputs_are_not_modified():
    mounts, pings, samples = two_heads_events()
    samples[3] = OdometrySample(0.06, along_x(0.06), covariance=np.eye(3))
    before = copy.deepcopy((mounts, pings, [s.covariance for s in samples]))
    run_mapper(LocalMapper(MappingConfig(), mounts), _merged(pings, samples))
    assert mounts == before[0]
    assert pings == before[1]
    np.testing.assert_array_equal(samples[3].covariance, before[2][3])
