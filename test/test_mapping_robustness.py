"""The local mapper with gaps, late and broken input, jumps of pose and time; its cost."""

import math
import time

import numpy as np
import pytest
from mapping_helpers import detection, highest, look, mapper, odometry, one_sided, ping

from ros_echo_perception.core.errors import SettingError
from ros_echo_perception.core.mapping import LocalMapper, MapOutcome, MappingConfig
from ros_echo_perception.core.settings import describe
from ros_echo_perception.core.types import OdometrySample, Pose2


def pole(_):
    return [detection(1.0, 0.0)]


def times(n, start_s=0.1):
    return [start_s + 0.1 * k for k in range(n)]


def mapped_pole():
    to = mapper(occupied_decay_s=0.0)
    look(to, times(10), pole)
    assert highest(to.snapshot(), 1.0, 0.0) >= 65
    return to


# ---------------------------------------------------------------------- waiting
def test_a_ping_waits_for_the_odometry_after_it():
    to = mapper()
    odometry(to, 0.0, 0.1)
    assert to.add_ping("front", ping(0.1, detection(1.0, 0.0))) is MapOutcome.QUEUED
    assert to.pending == 1
    assert to.counts["fused"] == 0
    odometry(to, 0.12, 0.3)
    assert to.pending == 0
    assert to.counts["fused"] == 1


def test_without_odometry_near_it_a_ping_is_skipped_and_nothing_changes():
    to = mapper()
    odometry(to, 0.0, 0.2)
    for time_s in times(30, 0.5):
        to.add_ping("front", ping(time_s, detection(1.0, 0.0)))
    assert to.counts["skipped_no_odometry"] > 15
    before = to.snapshot()
    odometry(to, 4.0, 4.2)  # the odometry comes back after a gap
    assert to.pending == 0
    assert to.counts["skipped_no_odometry"] == 30
    np.testing.assert_array_equal(to.snapshot().data, before.data)
    assert to.snapshot().revision == before.revision


def test_memory_is_bounded_when_odometry_never_comes():
    to = mapper(max_pending_pings=20, max_pose_wait_s=60.0)
    for k in range(200):
        to.add_ping("front", ping(0.01 * k))
        assert to.pending <= 20
    assert to.counts["dropped_queue_full"] == 180


def test_a_ping_older_than_the_map_is_used_and_counted():
    to = mapped_pole()
    fused = to.counts["fused"]
    to.add_ping("front", ping(0.55, detection(2.0, 0.3)))
    assert to.counts["late"] == 1
    assert to.counts["fused"] == fused + 1
    assert to.snapshot().time_s == pytest.approx(1.0)


def test_flush_uses_what_needs_no_further_waiting():
    to = mapper(settle_s=1.0)
    odometry(to, 0.0, 0.3)
    to.add_ping("front", ping(0.1, detection(1.0, 0.0)))
    assert to.counts["fused"] == 0
    to.flush()
    assert to.counts["fused"] == 1


# ---------------------------------------------------------------------- broken input
def test_unknown_head_and_broken_pings_are_counted_and_change_nothing():
    to = mapped_pole()
    before = to.snapshot()
    assert to.add_ping("rear", ping(1.1)) is MapOutcome.UNKNOWN_HEAD
    broken = [
        {"time_s": math.nan},
        {"time_s": 1.1, "speed_of_sound_m_s": 0.0},
        {"time_s": 1.1, "range_min_m": math.nan},
        {"time_s": 1.1, "beam_half_width_rad": math.inf},
    ]
    for values in broken:
        assert to.add_ping("front", ping(**values)) is MapOutcome.INVALID
    odometry(to, 1.3, 1.5)
    assert to.counts["unknown_head"] == 1
    assert to.counts["invalid_ping"] == len(broken)
    np.testing.assert_array_equal(to.snapshot().data, before.data)


def test_broken_detections_are_refused_one_by_one_and_never_poison_the_grid():
    good = [detection(1.0, 0.0), detection(2.0, 0.4)]
    bad = [
        detection(math.nan, 0.0),
        detection(1.0, math.nan),
        detection(1.0, 0.0, math.inf),
        detection(1.0, 0.0, existence_probability=math.nan),
        detection(-1.0, 0.0),
    ]
    clean, soiled = mapper(), mapper()
    expected = look(clean, times(10), lambda _: good)
    got = look(soiled, times(10), lambda _: [bad[0], good[0], *bad[1:], good[1]])
    np.testing.assert_array_equal(got.data, expected.data)
    assert soiled.counts["detections_invalid"] == 50
    assert soiled.counts["detections_used"] == 20
    assert np.isfinite(soiled.grid.log_odds).all()


def test_unlikely_and_far_echoes_are_left_out():
    to = mapper(min_existence_probability=0.6, max_range_m=3.0)
    weak = [detection(1.0, 0.0, existence_probability=0.5), detection(3.5, 0.0)]
    found = look(to, times(10), lambda _: weak)
    assert to.counts["detections_used"] == 0
    assert found.data.max() == -1


def test_broken_odometry_is_counted():
    to = mapped_pole()
    to.add_odometry(OdometrySample(1.3, Pose2(math.nan, 0.0, 0.0)))
    assert to.counts["odometry_invalid"] == 1
    assert highest(to.snapshot(), 1.0, 0.0) >= 65


@pytest.mark.parametrize("mounts", [{}, {"front": Pose2(math.nan, 0.0, 0.0)}])
def test_mounts_must_be_there_and_finite(mounts):
    with pytest.raises(SettingError, match="mount"):
        LocalMapper(MappingConfig(), mounts)


@pytest.mark.parametrize(
    ("values", "message"),
    [
        ({"resolution_m": 0.0}, "resolution_m is 0.0; allowed: 0.01 to 1 m"),
        ({"max_hit_log_odds": 0.7}, "max_hit_log_odds is 0.7"),
        ({"silence_policy": "always"}, "never_clear, clear_to_range"),
        ({"width_m": 200.0, "resolution_m": 0.01}, "width_m is 200.0; allowed: 4 to 8192 cells"),
        ({"height_m": 0.5, "resolution_m": 0.5}, "change the window or the resolution|Change"),
        ({"occupied_decay_s": math.nan}, "occupied_decay_s is nan"),
    ],
)
def test_bad_settings_are_named_with_what_is_allowed(values, message):
    with pytest.raises(SettingError, match=message):
        MappingConfig(**values)


def test_a_single_ping_can_never_reach_occupied_within_the_allowed_settings():
    """65 per cent is log-odds log(0.65 / 0.35)."""
    limits = {info.name: info for info in describe(MappingConfig)}
    assert limits["max_hit_log_odds"].maximum < math.log(0.65 / 0.35)
    assert limits["soft_max_probability"].maximum < 0.65


# ---------------------------------------------------------------------- jumps
def test_the_map_is_cleared_when_the_odometry_jumps():
    to = mapped_pole()
    revision = to.revision
    for k in range(3):
        to.add_odometry(OdometrySample(1.3 + 0.02 * k, Pose2(5.0, 5.0, 0.0)))
    assert to.counts["odometry_jumped"] == 1
    assert to.counts["map_cleared"] == 1
    assert to.snapshot().data.max() == -1
    assert to.revision > revision


def test_the_map_stays_when_one_sample_is_an_outlier():
    to = mapped_pole()
    to.add_odometry(OdometrySample(1.30, Pose2(5.0, 5.0, 0.0)))
    to.add_odometry(OdometrySample(1.32, Pose2(0.0, 0.0, 0.0)))
    assert to.counts["map_cleared"] == 0
    assert highest(to.snapshot(), 1.0, 0.0) >= 65


def test_a_looping_bag_starts_a_new_map_and_goes_on():
    to = mapper()
    look(to, times(50, 10.0), pole)
    to.add_ping("front", ping(15.5, detection(1.0, 0.0)))  # of the old time, still waiting
    found = look(to, times(10), lambda _: [detection(2.0, 0.3)])
    assert to.counts["odometry_time_restarted"] == 1
    assert to.counts["dropped_time_restarted"] == 1
    assert highest(found, 1.0, 0.0) < 65
    assert highest(found, 2.0 * math.cos(0.3), 2.0 * math.sin(0.3)) >= 65
    assert found.time_s == pytest.approx(1.0)


def test_clear_forgets_the_map_and_mapping_goes_on():
    to = mapped_pole()
    to.clear()
    assert to.snapshot().data.max() == -1
    assert math.isnan(to.snapshot().time_s)
    found = look(to, times(10, 2.0), pole)
    assert highest(found, 1.0, 0.0) >= 65


def test_revision_tells_whether_anything_changed():
    to = mapped_pole()
    assert to.snapshot().revision == to.snapshot().revision == to.revision
    odometry(to, 1.3, 1.5)
    assert to.snapshot().revision == to.revision
    before = to.revision
    look(to, times(1, 1.6), pole)
    assert to.revision > before


# ---------------------------------------------------------------------- growing doubt
def test_growing_covariance_widens_what_is_mapped():
    def widest(variance_per_s):
        to = mapper(occupied_decay_s=0.0)
        for k in range(150):
            covariance = np.eye(3) * variance_per_s * 0.02 * k
            to.add_odometry(OdometrySample(0.02 * k, Pose2(), covariance=covariance))
        to.add_ping("front", ping(2.5, detection(2.0, 0.0)))
        assert to.counts["fused"] == 1
        return int((to.grid.log_odds > 0.0).sum())

    assert widest(0.004) > 2 * widest(0.0)


# ---------------------------------------------------------------------- cost
def _median_cost_s(size_m):
    rng = np.random.default_rng(3)
    to = mapper(width_m=size_m, height_m=size_m)
    costs = []
    for k in range(60):
        time_s = 0.1 * k
        bearings, ranges = rng.uniform(-1, 1, 8), rng.uniform(0.5, 4.5, 8)
        echoes = [detection(r, b, 0.05) for r, b in zip(ranges[:6], bearings, strict=False)]
        echoes += [one_sided(r, 0.0, 1.2) for r in ranges[6:]]
        odometry(to, time_s, time_s + 0.06, lambda t: Pose2(0.3 * t, 0.0, 0.0))
        to.add_ping("front", ping(time_s, *echoes))
        late = OdometrySample(time_s + 0.0999, Pose2(0.3 * (time_s + 0.0999), 0.0, 0.0))
        start = time.perf_counter()
        to.add_odometry(late)  # fuses the ping
        costs.append(time.perf_counter() - start)
    assert to.counts["fused"] == 60
    return float(np.median(costs)), to


def test_cost_of_a_ping_follows_the_touched_cells_not_the_window():
    """Bars: 1 ms at 8 m, twice that at 40 m; wide margins for a loaded machine."""
    small, to = min((_median_cost_s(8.0) for _ in range(3)), key=lambda pair: pair[0])
    large, _ = min((_median_cost_s(40.0) for _ in range(3)), key=lambda pair: pair[0])
    assert small < 5e-3
    assert large < 2.0 * small
    start = time.perf_counter()
    to.snapshot()
    assert time.perf_counter() - start < 15e-3
