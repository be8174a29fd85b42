"""The local mapper as a whole: evidence from several places, phantoms, motion, invariance."""

import math

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from mapping_helpers import (
    AMBIGUOUS,
    LASTING,
    POLES,
    SOUND_M_S,
    detection,
    drive_past,
    every,
    farthest,
    highest,
    look,
    mapper,
    odometry,
    one_sided,
    ping,
    seen_from,
    value,
)

from ros_echo_perception.core.mapping import LocalMapper, MapOutcome, MappingConfig
from ros_echo_perception.core.types import PingFlag, Pose2


# ---------------------------------------------------------------------- what is found
def test_poles_become_occupied_where_they_are_and_nowhere_else():
    found = drive_past()
    rows, columns = np.nonzero(found.data >= 65)
    x = found.origin_x_m + (columns + 0.5) * found.resolution_m
    y = found.origin_y_m + (rows + 0.5) * found.resolution_m
    distance = np.min([np.hypot(x - px, y - py) for px, py in POLES], axis=0)
    assert distance.max() < 0.15
    for pole in POLES:
        assert highest(found, *pole) >= 65


def test_cells_on_the_way_to_an_echo_are_free_and_the_rest_is_unknown():
    found = look(mapper(), every(20), lambda _: [detection(2.0, 0.0)])
    assert value(found, 1.0, 0.01) < 35
    assert value(found, 1.0, 0.5) == -1
    assert value(found, 2.5, 0.01) == -1


def test_cells_nearer_than_the_nearest_measurable_range_are_kept():
    found = look(mapper(), every(20), lambda _: [detection(2.0, 0.0)])
    assert value(found, 0.15, 0.01) == -1


@given(st.floats(0.4, 4.0), st.floats(-1.2, 1.2), st.floats(0.001, 0.3))
@settings(max_examples=40, deadline=None)
def test_a_single_ping_never_makes_a_cell_occupied(range_m, bearing, sigma):
    echoes = [detection(range_m, bearing, sigma)] * 3
    assert look(mapper(), [0.1], lambda _: echoes).data.max() < 65


def test_a_one_sided_echo_from_one_place_never_becomes_occupied():
    found = look(mapper(), every(200), lambda _: [one_sided(2.0, 0.0, 1.2)])
    assert 50 < found.data.max() < 65


def test_one_sided_echoes_from_several_places_agree_on_the_reflector():
    """Triangulation: the arcs cross at the reflector, and there the map is surest."""

    def heard(pose):
        echo = seen_from(pose, [(1.0, 1.0)])[0]
        return [one_sided(echo.range_m, 0.0, 1.4)]

    to = mapper(**LASTING)
    found = look(to, every(120, 0.05), heard, lambda t: Pose2(0.28 * t - 1.0, 0.0, 0.0))
    assert highest(found, 1.0, 1.0) >= 65
    support = to.grid.arranged(to.grid.support)
    row, column = np.unravel_index(np.argmax(support), support.shape)
    x = found.origin_x_m + (column + 0.5) * found.resolution_m
    y = found.origin_y_m + (row + 0.5) * found.resolution_m
    assert math.hypot(x - 1.0, y - 1.0) < 0.1
    assert (found.data >= 65).sum() < 0.2 * (found.data > 50).sum()


def test_ambiguous_bearings_wait_for_a_second_place():
    def heard(pose):
        true = seen_from(pose, [(2.0, 0.0)])[0]
        wrong = true.bearing_rad + 0.4
        return [
            detection(
                true.range_m, wrong, 0.01, alternatives=((true.bearing_rad, 0.45),), flags=AMBIGUOUS
            )
        ]

    still = look(mapper(**LASTING), every(40), heard)
    assert still.data.max() < 65
    moving = look(mapper(**LASTING), every(40), heard, lambda t: Pose2(0.0, 0.3 * t - 0.6, 0.0))
    assert highest(moving, 2.0, 0.0) >= 65
    assert farthest(moving, 2.0, 0.0) < 0.2


@pytest.mark.parametrize("novelty", [0.01, 1.0])
def test_ambiguous_bearings_are_decided_by_what_is_known(novelty):
    """A pole known from certain echoes explains a later ambiguous one; no phantom beside it."""
    to = mapper(doubtful_novelty=novelty, **LASTING)
    look(to, every(8), lambda _: [detection(2.0, 0.0)])
    both = detection(2.0, 0.2, 0.2, alternatives=((0.4, 0.5), (0.0, 0.5)), flags=AMBIGUOUS)
    aside = lambda t: Pose2(0.0, 0.02 * (t - 1.0), 0.0)  # noqa: E731
    look(to, every(3, start_s=1.0), lambda _: [both], aside)
    there, beside = to.snapshot(), (2.0 * math.cos(0.4), 2.0 * math.sin(0.4))
    assert highest(there, 2.0, 0.0) >= 65
    if novelty < 0.1:
        assert highest(there, *beside) <= 51
    else:
        assert highest(there, *beside) > 51


def test_a_new_obstacle_shows_quickly_beside_a_known_one_at_the_same_distance():
    to = mapper()
    look(to, every(30), lambda _: [detection(2.0, 0.0)])
    found = look(to, every(5, start_s=3.2), lambda _: [detection(2.0, 0.3)])
    assert highest(found, 2.0 * math.cos(0.3), 2.0 * math.sin(0.3)) >= 65


# ---------------------------------------------------------------------- what vanishes
def test_a_phantom_is_cleared_when_echoes_from_behind_it_come_from_elsewhere():
    to = mapper(**LASTING)
    found = look(to, every(3), lambda _: [detection(1.5, 0.0)])
    assert highest(found, 1.5, 0.0, 0.05) >= 65
    aside = lambda t: Pose2(0.0, 0.03 * (t - 2.0), 0.0)  # noqa: E731
    found = look(to, every(60, start_s=2.0), lambda p: seen_from(p, [(3.0, 0.0)]), aside)
    assert highest(found, 1.5, 0.0, 0.05) < 50
    assert highest(found, 3.0, 0.0) >= 65


def test_second_bounces_behind_a_wall_do_not_become_obstacles():
    to = mapper(**LASTING)
    wall_at = 2.0
    forward = lambda t: Pose2(0.1 * t, 0.0, 0.0)  # noqa: E731

    def heard(pose):
        once = wall_at - pose.x_m
        return [detection(once, 0.0), detection(2 * once, 0.0)]

    look(to, every(10), lambda p: heard(p)[:1], forward)
    found = look(to, every(60, start_s=1.3), heard, forward)
    assert highest(found, wall_at, 0.0) >= 65
    beyond = found.data[:, int((wall_at + 0.3 - found.origin_x_m) / found.resolution_m) :]
    assert beyond.max() < 65


def test_what_moves_leaves_no_trail():
    def heard(time_s):
        return [detection(1.0 + 0.25 * time_s, 0.0)]

    to = mapper()
    for time_s in every(100):
        odometry(to, time_s, time_s + 0.1)
        to.add_ping("front", ping(time_s, *heard(time_s)))
    odometry(to, 10.1, 10.2)
    found = to.snapshot()
    occupied = np.nonzero(found.data >= 65)[1] * found.resolution_m + found.origin_x_m
    assert occupied.size > 0
    assert occupied.min() > 1.0 + 0.25 * 10.0 - 0.6


def test_cells_fade_with_time_until_they_are_unknown():
    to = mapper(occupied_decay_s=5.0, free_decay_s=5.0)
    pole = lambda _: [detection(1.0, 0.0)]  # noqa: E731
    assert highest(look(to, every(10), pole), 1.0, 0.0) >= 65
    found = look(to, every(2, start_s=41.0), lambda _: [detection(3.0, 1.0)])
    assert highest(found, 1.0, 0.0) == -1


# ---------------------------------------------------------------------- motion
def test_mount_and_motion_during_the_flight_are_accounted_for():
    """At 3 m/s the head moves 5 cm while the sound travels 3 m out and back."""
    fine = {"resolution_m": 0.01, "width_m": 10.0, "max_speed_m_s": 10.0, "surface_width_m": 0.0}
    mount = Pose2(0.2, 0.1, 0.0)
    start, speed, wall_x = -1.0, 3.0, 3.0
    to = LocalMapper(MappingConfig(**fine, **LASTING), {"front": mount})
    pose_at = lambda t: Pose2(start + speed * t, 0.0, 0.0)  # noqa: E731

    def heard(pose):
        emitted_x = pose.x_m + mount.x_m
        # Out: wall - emitted = c t1; back: (emitted + v t) - wall = -c (t - t1).
        flight_s = 2 * (wall_x - emitted_x) / (SOUND_M_S + speed)
        return [detection(flight_s * SOUND_M_S / 2, 0.0, 0.0005)]

    found = look(to, every(10, 0.02), heard, pose_at)
    rows, columns = np.nonzero(found.data >= 65)
    x = found.origin_x_m + (columns + 0.5) * found.resolution_m
    y = found.origin_y_m + (rows + 0.5) * found.resolution_m
    assert x.mean() == pytest.approx(wall_x, abs=0.006)
    assert y.mean() == pytest.approx(0.1, abs=0.006)


def test_turning_during_the_flight_counts_at_reception():
    turn_rad_s = 3.0
    pose_at = lambda t: Pose2(0.0, 0.0, turn_rad_s * (t - 0.2))  # noqa: E731
    flight_s = 2 * 3.0 / SOUND_M_S

    def heard(pose):
        return [detection(3.0, -(pose.yaw_rad + turn_rad_s * flight_s), 0.0005)]

    fine = {"resolution_m": 0.01, "surface_width_m": 0.0} | LASTING
    found = look(mapper(**fine), every(12, 0.02), heard, pose_at)
    rows = np.nonzero(found.data >= 65)[0]
    assert (found.origin_y_m + (rows + 0.5) * 0.01).mean() == pytest.approx(0.0, abs=0.006)


# ---------------------------------------------------------------------- silence
@pytest.mark.parametrize("flags", [PingFlag.NONE, PingFlag.INTERFERENCE, PingFlag.LEFT_DEAD])
def test_silence_says_nothing_unless_asked_to_and_undisturbed(flags):
    def after_silence(**values):
        to = mapper(**LASTING, **values)
        look(to, every(5), lambda _: [detection(0.8, 0.0), detection(0.8, 0.9)])
        for time_s in every(60, start_s=1.0):
            odometry(to, time_s, time_s + 0.1)
            to.add_ping("front", ping(time_s, flags=flags))
        return to.snapshot()

    never = after_silence()
    assert highest(never, 0.8, 0.0) >= 65
    to_range = after_silence(silence_policy="clear_to_range", clear_range_m=1.0)
    if flags is PingFlag.NONE:
        assert highest(to_range, 0.8, 0.0) < 35
    else:
        assert highest(to_range, 0.8, 0.0) == highest(never, 0.8, 0.0)
    outside_beam = 0.8 * math.cos(0.9), 0.8 * math.sin(0.9)
    assert highest(to_range, *outside_beam) >= 65
    too_far = after_silence(silence_policy="clear_to_range", clear_range_m=0.6)
    assert highest(too_far, 0.8, 0.0) >= 65


def test_silence_before_the_nearest_echo_only():
    to = mapper(silence_policy="clear_to_range", clear_range_m=3.0)
    found = look(to, every(20), lambda _: [detection(1.5, 0.0)])
    assert value(found, 1.0, 0.3) < 35
    assert value(found, 1.8, 0.3) == -1
    assert highest(found, 1.5, 0.0) >= 65
    assert to.counts[MapOutcome.FUSED.value] == 20
