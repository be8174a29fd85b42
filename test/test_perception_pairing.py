"""Pairing of the ears' echoes, against trying every way to pair them."""

import itertools
import math

import numpy as np
import pytest
from perception_helpers import HEADS, head_model

from ros_echo_perception.core.perception import pairing
from ros_echo_perception.core.perception.pairing import EarEchoes, pair_ears

MAX_BEARING = 1.22
PULSE_SIGMA = 1.6e-4
HEAD_NAMES = sorted(HEADS)


def ear(*echoes):
    delay, amplitude = zip(*echoes, strict=True) if echoes else ((), ())
    return EarEchoes(np.array(delay, float), np.array(amplitude, float))


def echoes_of(model, range_m, bearing_rad, amplitude):
    """(delay, amplitude) of an object in the left and in the right ear."""
    g = model.geometry(np.array(range_m), np.array(bearing_rad))
    level = amplitude * g.gain / g.gain.max()
    return [(float(d), float(a)) for d, a in zip(g.delay_s, level, strict=True)]


def pair(left, right, model):
    return pair_ears((left, right), model, 1.0, PULSE_SIGMA, MAX_BEARING)


def total_cost(pairs, costs, alone, n_left, n_right):
    return sum(costs[i, j] for i, j in pairs) + alone * (n_left + n_right - 2 * len(pairs))


def best_by_trial(costs, alone):
    """The cheapest of all ways to pair some of the left with some of the right."""
    n_left, n_right = costs.shape
    best = math.inf
    for k in range(min(n_left, n_right) + 1):
        for lefts in itertools.combinations(range(n_left), k):
            for rights in itertools.permutations(range(n_right), k):
                pairs = list(zip(lefts, rights, strict=True))
                best = min(best, total_cost(pairs, costs, alone, n_left, n_right))
    return best


@pytest.mark.parametrize("name", HEAD_NAMES)
@pytest.mark.parametrize("seed", range(12))
def test_no_other_pairing_is_cheaper(name, seed):
    model = head_model(HEADS[name])
    rng = np.random.default_rng([3, seed])
    sizes = rng.integers(0, 5, 2)
    # Crowded: delays within a few gates, so that pairs compete.
    left, right = (
        EarEchoes(rng.uniform(0.008, 0.0105, n), rng.uniform(4.0, 40.0, n)) for n in sizes
    )
    found = pair(left, right, model)
    alone = 0.5 * pairing._GATE_SIGMAS**2
    costs = np.zeros((left.delay_s.size, right.delay_s.size))
    if costs.size:
        costs = pairing._pair_costs(left, right, model, 1.0, PULSE_SIGMA, MAX_BEARING)
    pairs = [
        (int(np.nonzero(left.delay_s == c.delay_s[0])[0][0]),
         int(np.nonzero(right.delay_s == c.delay_s[1])[0][0]))
        for c in found
        if not any(math.isnan(d) for d in c.delay_s)
    ]  # fmt: skip
    cost = total_cost(pairs, costs, alone, left.delay_s.size, right.delay_s.size)
    assert cost == pytest.approx(best_by_trial(costs, alone), abs=1e-9)
    # Each echo is used exactly once.
    for side, echoes in enumerate((left, right)):
        used = sorted(c.delay_s[side] for c in found if not math.isnan(c.delay_s[side]))
        np.testing.assert_array_equal(used, np.sort(echoes.delay_s))


@pytest.mark.parametrize("name", HEAD_NAMES)
def test_objects_are_put_together_again(name):
    model = head_model(HEADS[name])
    places = [(0.8, 0.4), (1.1, -0.3), (1.9, 0.0), (3.2, 0.6)]
    seen = [echoes_of(model, r, b, 30.0) for r, b in places]
    left, right = ear(*(s[0] for s in seen[::-1])), ear(*(s[1] for s in seen))
    found = {c.delay_s for c in pair(left, right, model)}
    assert found == {(s[0][0], s[1][0]) for s in seen}


@pytest.mark.parametrize("name", HEAD_NAMES)
def test_what_the_baseline_does_not_allow_stays_alone(name):
    model = head_model(HEADS[name])
    too_far_s = model.head.baseline_m / model.speed_m_s + 6.0 * PULSE_SIGMA
    found = pair(ear((0.010, 20.0)), ear((0.010 + too_far_s, 20.0)), model)
    assert len(found) == 2
    assert all(math.isnan(c.delay_s[0]) != math.isnan(c.delay_s[1]) for c in found)
    assert {c.strength for c in found} == {20.0}
    assert {round(c.mean_delay_s, 9) for c in found} == {0.01, round(0.010 + too_far_s, 9)}


def test_an_echo_of_one_ear_stays_alone():
    model = head_model()
    for left, right, side in ((ear((0.01, 9.0)), ear(), 0), (ear(), ear((0.01, 9.0)), 1)):
        (found,) = pair(left, right, model)
        assert found.delay_s[side] == 0.01
        assert math.isnan(found.delay_s[1 - side])
        assert math.isnan(found.amplitude[1 - side])
    assert pair(ear(), ear(), model) == []


def test_level_and_delay_together_tell_two_objects_at_one_range():
    model = head_model()
    (l1, r1), (l2, r2) = echoes_of(model, 1.5, 0.5, 40.0), echoes_of(model, 1.5, -0.5, 10.0)
    found = pair(ear(l1, l2), ear(r1, r2), model)
    assert {c.amplitude for c in found} == {(l1[1], r1[1]), (l2[1], r2[1])}


def test_two_like_objects_on_either_side_pair_as_well_in_the_middle():
    """Common practice: two ears' echoes alone cannot tell; the joint fit has to."""
    model = head_model()
    (l1, r1), (l2, r2) = (echoes_of(model, 1.5, b, 40.0) for b in (0.4, -0.4))
    costs = pairing._pair_costs(ear(l1, l2), ear(r1, r2), model, 1.0, PULSE_SIGMA, MAX_BEARING)
    assert costs.max() < 0.1


def test_noise_ratio_compares_ears_of_unequal_noise():
    """Twice the noise in the right ear halves its amplitudes in noise sigmas."""
    model = head_model()
    (left, right) = echoes_of(model, 1.5, 0.0, 40.0)
    heard = (ear(left), ear((right[0], right[1] / 2.0)))
    costs = [
        pairing._pair_costs(*heard, model, ratio, PULSE_SIGMA, MAX_BEARING)[0, 0]
        for ratio in (2.0, 1.0)
    ]
    assert costs[0] < 0.05 < costs[1]
