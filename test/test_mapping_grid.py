"""The rolling window and the update of its cells."""

import math

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st

from ros_echo_perception.core.mapping import MappingConfig
from ros_echo_perception.core.mapping.grid import RollingGrid, fade
from ros_echo_perception.core.mapping.update import FreeEvidence, GridUpdater, HitEvidence

PLACE = st.floats(-3.0, 3.0)


def painted(width=20, height=14, resolution_m=0.1):
    """A grid whose cells carry a number that tells where they are."""
    grid = RollingGrid(width, height, resolution_m)
    x, y = centres(grid)
    cells = grid.locate(x, y)
    grid.log_odds[cells] = marks(x, y)
    grid.stamp_s[cells] = 0.0
    return grid


def centres(grid):
    x0, y0 = grid.origin_m
    column, row = np.meshgrid(np.arange(grid.width_cells), np.arange(grid.height_cells))
    half = 0.5 * grid.resolution_m
    return (x0 + column * grid.resolution_m + half).ravel(), (
        y0 + row * grid.resolution_m + half
    ).ravel()


def marks(x, y):
    return (0.5 + np.floor(10 * x) + 1000 * np.floor(10 * y)).astype(np.float32)


@given(st.lists(st.tuples(PLACE, PLACE), min_size=1, max_size=6))
def test_shifts_lose_nothing_inside_and_keep_it_bit_for_bit(path):
    grid = painted()
    x, y = centres(grid)
    kept = np.ones(x.size, bool)
    for place in path:
        grid.centre_on(*place)
        kept &= grid.locate(x, y) >= 0
    now_x, now_y = centres(grid)
    values = grid.log_odds[grid.locate(now_x, now_y)]
    old = {(round(a, 3), round(b, 3)) for a, b in zip(x[kept], y[kept], strict=True)}
    survived = np.array(
        [(round(a, 3), round(b, 3)) in old for a, b in zip(now_x, now_y, strict=True)]
    )
    np.testing.assert_array_equal(values[survived], marks(now_x, now_y)[survived])
    assert not values[~survived].any()
    assert np.isnan(grid.stamp_s[grid.locate(now_x, now_y)][~survived]).all()


@given(PLACE, PLACE, PLACE, PLACE)
def test_a_point_is_found_in_the_cell_that_holds_it(x, y, centre_x, centre_y):
    grid = RollingGrid(20, 14, 0.1)
    grid.centre_on(centre_x, centre_y)
    column = math.floor(x * 10.0) - grid.first_ix
    row = math.floor(y * 10.0) - grid.first_iy
    flat = int(grid.locate(np.array([x]), np.array([y]))[0])
    if not (0 <= column < 20 and 0 <= row < 14):
        assert flat == -1
        return
    layer = np.zeros(280)
    layer[flat] = 1.0
    assert np.argwhere(grid.arranged(layer)).tolist() == [[row, column]]


def test_the_robot_stays_in_the_middle_and_small_moves_do_nothing():
    grid = RollingGrid(20, 20, 0.1)
    assert not grid.centre_on(0.05, 0.05)
    assert grid.centre_on(0.25, -0.05)
    assert grid.origin_m == pytest.approx((-0.8, -1.1))


def test_occupancy_is_the_probability_in_per_cent_and_unknown_stays_minus_one():
    grid = RollingGrid(6, 4, 0.1)
    grid.log_odds[:4] = [math.log(9.0), -math.log(9.0), math.log(0.65 / 0.35), 0.001]
    grid.stamp_s[:4] = 0.0
    data = grid.occupancy(0.0, 0.0, 0.0)
    assert data.dtype == np.int8
    assert data.shape == (4, 6)
    assert sorted(data.ravel().tolist()) == [-1] * 21 + [10, 65, 90]


def test_cells_fade_with_their_time_constants():
    values = np.array([2.0, -2.0], np.float32)
    age = np.array([3.0, 3.0])
    np.testing.assert_allclose(
        fade(values, age, 3.0, 6.0), [2 * math.exp(-1), -2 * math.exp(-0.5)], rtol=1e-6
    )
    np.testing.assert_array_equal(fade(values, age, 0.0, 0.0), values)
    np.testing.assert_array_equal(fade(values, np.array([-1.0, np.nan]), 1.0, 1.0), values)


# ---------------------------------------------------------------------- the update
def updater(**settings):
    config = MappingConfig(occupied_decay_s=0.0, free_decay_s=0.0, **settings)
    return GridUpdater(RollingGrid(20, 20, 0.05), config)


def evidence(cell, firm=0.0, soft=0.0, free=0.0):
    cells = np.array([cell])
    return (
        HitEvidence(cells, np.array([firm]), np.array([soft])),
        FreeEvidence(cells, np.array([free])),
    )


def percent(filter_, cell):
    return 100.0 / (1.0 + math.exp(-float(filter_.grid.log_odds[cell])))


def test_log_odds_against_worked_bayes_examples():
    """Thrun, Burgard and Fox, Probabilistic Robotics (2005).

    Section 2.4.2 (values from memory): a door, prior 0.5, sensed "open" with probability 0.6
    if it is open and 0.2 if not: 0.6 * 0.5 / (0.6 * 0.5 + 0.2 * 0.5) = 0.75. A second
    such reading, worked by hand: 0.6 * 0.75 / (0.6 * 0.75 + 0.2 * 0.25) = 0.9. Here each
    likelihood ratio of 3 comes as two echoes of sqrt(3). Section 4.2, binary Bayes filter:
    the same in log-odds adds up.
    """
    door = updater(hit_gain=math.sqrt(3.0) - 1.0, max_hit_log_odds=0.61)
    expected = {2: 75.0, 4: 90.0}
    for echo in range(1, 5):
        door.apply(*evidence(7, firm=1.0), (0.0, 0.0), float(echo))
        if echo in expected:
            assert percent(door, 7) == pytest.approx(expected[echo], abs=1e-3)


def test_free_evidence_adds_up_like_bayes():
    """Inverse model 0.4 of an occupied cell, three times: 0.4^3 / (0.4^3 + 0.6^3), by hand."""
    grid = updater(free_log_odds=math.log(0.6 / 0.4))
    for k in range(3):
        grid.apply(*evidence(3, free=1.0), (0.0, 0.0), float(k))
    assert percent(grid, 3) == pytest.approx(100 * 0.064 / (0.064 + 0.216), abs=1e-3)


def test_one_ping_never_makes_a_cell_occupied_whatever_its_evidence():
    grid = updater(hit_gain=100.0, max_hit_log_odds=0.61)
    grid.apply(*evidence(5, firm=8.0, soft=8.0), (0.0, 0.0), 0.0)
    assert percent(grid, 5) < 65.0


def test_soft_evidence_from_one_place_stops_below_occupied_and_goes_on_from_another():
    grid = updater(hit_gain=20.0)
    for k in range(50):
        grid.apply(*evidence(5, soft=0.5), (0.0, 0.0), float(k))
    assert percent(grid, 5) == pytest.approx(60.0, abs=0.01)
    grid.apply(*evidence(5, soft=0.5), (0.2, 0.0), 51.0)
    assert percent(grid, 5) > 65.0


def test_soft_evidence_never_lowers_what_firm_evidence_has_raised():
    grid = updater(hit_gain=20.0)
    for k in range(5):
        grid.apply(*evidence(5, firm=1.0), (0.0, 0.0), float(k))
    before = percent(grid, 5)
    grid.apply(*evidence(5, soft=0.1), (0.0, 0.0), 6.0)
    assert percent(grid, 5) >= before


def test_log_odds_stay_between_their_limits():
    grid = updater(min_log_odds=-1.0, max_log_odds=2.0)
    for k in range(100):
        grid.apply(*evidence(1, firm=1.0), (0.0, 0.0), float(k))
        grid.apply(*evidence(2, free=1.0), (0.0, 0.0), float(k))
    assert grid.grid.log_odds[[1, 2]].tolist() == [2.0, -1.0]


def test_repeated_cells_count_together_and_free_weight_at_most_once():
    grid = updater(free_log_odds=0.2)
    twice = np.array([4, 4, -1])
    grid.apply(
        HitEvidence(np.array([9, 9]), np.array([0.3, 0.2]), np.zeros(2)),
        FreeEvidence(twice, np.array([0.8, 0.8, 1.0])),
        (0.0, 0.0),
        0.0,
    )
    assert grid.grid.log_odds[4] == pytest.approx(-0.2)
    gain = grid.config.hit_gain
    expected = min(math.log1p(0.5 * gain), grid.config.max_hit_log_odds)
    assert grid.grid.log_odds[9] == pytest.approx(expected, rel=1e-6)
    assert np.count_nonzero(grid.grid.log_odds) == 2


def test_nothing_inside_the_window_touches_nothing():
    grid = updater()
    assert not grid.apply(*evidence(-1, firm=1.0, free=1.0), (0.0, 0.0), 0.0)
    assert not grid.grid.log_odds.any()
