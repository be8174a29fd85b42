"""Ping-to-ping existence and second bounces."""

from __future__ import annotations

import dataclasses
import math

import numpy as np
import pytest

from ros_echo_perception.core.perception.consistency import PingToPing
from ros_echo_perception.core.perception.multipath import flag_multipath, second_bounce_m
from ros_echo_perception.core.types import Detection, DetectionFlag


def detection(range_m, bearing_rad=0.0, snr_db=30.0, sigma_m=0.001):
    return Detection(
        range_m=range_m,
        bearing_rad=bearing_rad,
        range_sigma_m=sigma_m,
        bearing_sigma_rad=0.01,
        bearing_min_rad=bearing_rad - 0.02,
        bearing_max_rad=bearing_rad + 0.02,
        ear_amplitude=(0.1, 0.1),
        ear_snr_db=(snr_db, snr_db),
        existence_probability=1.0,
    )


def existences(pings, step_s=0.1):
    memory = PingToPing()
    return [
        [d.existence_probability for d in memory.weigh([detection(r) for r in ranges], k * step_s)]
        for k, ranges in enumerate(pings)
    ]


def test_what_stays_is_believed_throughout():
    assert existences([[1.0, 2.0]] * 6) == [[1.0, 1.0]] * 6


def test_what_comes_elsewhere_each_time_is_soon_not_believed():
    rng = np.random.default_rng(0)
    found = existences([[float(r)] for r in rng.permutation(np.linspace(0.6, 5.0, 12))])
    assert found[0] == [1.0]  # nothing to compare with yet
    assert found[1] == [pytest.approx(2 / 3)]
    assert all(p < 0.5 for (p,) in found[3:])


def test_new_things_that_stay_are_believed_at_once_in_the_end():
    pings, known = [], []
    for k in range(12):
        known = [*known, 0.6 + 0.3 * k]
        pings.append(known)
    assert existences(pings)[-1][-1] > 0.85


def test_a_thing_that_moves_as_robots_do_stays_the_same_thing():
    assert all(p == [1.0] for p in existences([[1.0 + 0.1 * k] for k in range(5)]))


@pytest.mark.parametrize("gap_s", [5.0, -3.0])
def test_after_a_gap_or_a_jump_back_nothing_is_held_against_an_echo(gap_s):
    memory = PingToPing()
    memory.weigh([detection(1.0)], 10.0)
    assert memory.weigh([detection(3.0)], 10.0 + gap_s)[0].existence_probability == 1.0


def test_reset_forgets_what_was_learned():
    memory = PingToPing()
    for k in range(8):
        memory.weigh([detection(0.6 + 0.5 * k)], 0.1 * k)
    memory.reset()
    memory.weigh([detection(1.0)], 1.0)
    assert memory.weigh([detection(3.0)], 1.1)[0].existence_probability == pytest.approx(2 / 3)


def test_weak_echoes_teach_nothing():
    memory = PingToPing()
    for k in range(8):
        memory.weigh([detection(0.6 + 0.5 * k, snr_db=12.0)], 0.1 * k)
    assert memory.weigh([detection(5.0)], 0.8)[0].existence_probability == pytest.approx(2 / 3)


def test_second_bounce_is_the_way_by_the_mirror_image():
    """Outside check: the image method for a plane reflector (Allen and Berkley 1979)."""
    rng = np.random.default_rng(2)
    for _ in range(50):
        wall_m, wall_rad = rng.uniform(1.0, 4.0), rng.uniform(-0.5, 0.5)
        thing_m, thing_rad = rng.uniform(0.3, 0.9), rng.uniform(-0.5, 0.5)
        thing = thing_m * np.array([math.cos(thing_rad), math.sin(thing_rad)])
        image = 2.0 * wall_m * np.array([math.cos(wall_rad), math.sin(wall_rad)])
        way = np.hypot(*thing) + np.hypot(*(image - thing))
        assert second_bounce_m(thing_m, thing_rad, wall_m, wall_rad) == pytest.approx(way / 2)


def test_only_the_second_bounce_is_flagged():
    pole, wall = detection(1.0, 0.3, 35.0), detection(2.0, -0.2, 40.0)
    bounce_m = second_bounce_m(1.0, 0.3, 2.0, -0.2)
    ghost, other = detection(bounce_m, 0.1, 20.0), detection(3.1, 0.1, 20.0)
    flagged = flag_multipath([pole, wall, ghost, other])
    assert [bool(d.flags & DetectionFlag.MULTIPATH_SUSPECTED) for d in flagged] == [
        False, False, True, False,
    ]  # fmt: skip
    assert [dataclasses.replace(d, flags=DetectionFlag.NONE) for d in flagged] == [
        pole, wall, ghost, other,
    ]  # fmt: skip


def test_a_stronger_echo_is_no_second_bounce():
    pole, wall = detection(1.0, 0.3, 25.0), detection(2.0, -0.2, 25.0)
    strong = detection(second_bounce_m(1.0, 0.3, 2.0, -0.2), 0.1, 40.0)
    assert not flag_multipath([pole, wall, strong])[2].flags
