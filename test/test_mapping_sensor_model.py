"""What one echo says of which cells."""

import math
from dataclasses import replace

import numpy as np
import pytest
from mapping_helpers import AMBIGUOUS, MULTIPATH, detection, one_sided
from matplotlib.path import Path as Polygon
from scipy.stats import norm

from ros_echo_perception.core.mapping import MappingConfig
from ros_echo_perception.core.mapping.evidence import prior_of
from ros_echo_perception.core.mapping.grid import RollingGrid
from ros_echo_perception.core.mapping.hypotheses import hypotheses_of, is_valid
from ros_echo_perception.core.mapping.sensor_model import (
    arc_samples,
    clear_view,
    path_samples,
    share,
    silent_samples,
)
from ros_echo_perception.core.types import DetectionFlag, Pose2

CONFIG = MappingConfig(bearing_outlier_weight=0.0)
NO_GROWTH = (0.0, 0.0, 0.0)


def possible(*detections, pose=(0.0, 0.0, 0.0), growth=NO_GROWTH, config=CONFIG):
    return hypotheses_of(detections, np.tile(pose, (len(detections), 1)), growth, config)


def masses(samples, resolution_m=0.05):
    """Mass by cell (ix, iy)."""
    table = {}
    for x, y, w in zip(samples.x_m, samples.y_m, samples.weight, strict=True):
        cell = (math.floor(x / resolution_m), math.floor(y / resolution_m))
        table[cell] = table.get(cell, 0.0) + w
    return table


@pytest.mark.parametrize(
    ("range_m", "bearing", "sigma"), [(2.013, 0.3, 0.05), (0.8, -0.9, 0.1), (4.1, 1.4, 0.01)]
)
def test_masses_of_cells_are_those_of_drawn_reflectors(range_m, bearing, sigma):
    """Independent check: drawn reflectors counted by cell (the range as the arcs blur it)."""
    rng = np.random.default_rng(1)
    n = 400_000
    r = range_m + math.hypot(0.002, 0.0125) * rng.standard_normal(n)
    b = 0.2 + bearing + sigma * rng.standard_normal(n)
    drawn = np.stack([0.5 + r * np.cos(b), -0.3 + r * np.sin(b)])
    keys, counts = np.unique(np.floor(drawn / 0.05).astype(int), axis=1, return_counts=True)
    expected = {(int(i), int(j)): c / n for (i, j), c in zip(keys.T, counts, strict=True)}
    echo = detection(range_m, bearing, sigma, existence_probability=1.0)
    samples = arc_samples(possible(echo, pose=(0.5, -0.3, 0.2)), 0.05)
    got = masses(samples)
    # A point near a border brings its whole weight to one side of it.
    for cell in expected.keys() | got.keys():
        assert got.get(cell, 0.0) == pytest.approx(expected.get(cell, 0.0), abs=0.12)
    places = np.stack([samples.x_m, samples.y_m])
    np.testing.assert_allclose(places @ samples.weight, drawn.mean(1), atol=0.003)
    spread = np.cov(places, aweights=samples.weight, ddof=0)
    np.testing.assert_allclose(spread, np.cov(drawn), rtol=0.25, atol=5e-5)


def test_masses_add_up_to_the_existence_probability():
    echoes = [
        detection(1.0, 0.1, 0.2, existence_probability=0.7),
        one_sided(3.0, -0.5, 0.5),
        detection(2.0, 0.0, alternatives=((0.5, 0.3), (-0.5, 0.2)), flags=AMBIGUOUS),
    ]
    hypotheses = possible(*echoes)
    samples = arc_samples(hypotheses, 0.05, 0.05)
    total = np.bincount(hypotheses.detection[samples.owner], samples.weight)
    np.testing.assert_allclose(total, [0.7, 0.99, 0.99], rtol=1e-9)


def test_alternatives_share_by_weight_and_are_narrow():
    echo = detection(
        2.0,
        0.1,
        0.3,
        alternatives=((0.9, 0.5), (0.4, 0.3), (-0.5, 0.2)),
        existence_probability=1.0,
    )
    samples = arc_samples(possible(echo), 0.05)
    angle = np.arctan2(samples.y_m, samples.x_m)
    for bearing, weight in ((0.9, 0.5), (0.4, 0.3), (-0.5, 0.2)):
        near = np.abs(angle - bearing) < 3 * CONFIG.alternative_sigma_rad
        assert samples.weight[near].sum() == pytest.approx(weight)


def test_what_alternatives_leave_is_for_the_bearing_itself():
    echo = detection(2.0, 0.1, 0.02, alternatives=((0.9, 0.25),), existence_probability=1.0)
    hypotheses = possible(echo)
    assert hypotheses.bearing_rad.tolist() == [0.1, 0.9]
    assert hypotheses.weight.tolist() == pytest.approx([0.75, 0.25])


def test_expected_outliers_take_their_share_and_lie_widely():
    config = replace(CONFIG, bearing_outlier_weight=0.3)
    hypotheses = possible(detection(2.0, 0.1, existence_probability=1.0), config=config)
    assert hypotheses.weight.tolist() == pytest.approx([0.7, 0.3])
    assert hypotheses.uniform.tolist() == [False, True]
    assert hypotheses.spread_rad.tolist() == pytest.approx([0.01, 0.3])


def test_one_sided_echo_fills_its_interval_evenly_and_thinly():
    samples = arc_samples(possible(one_sided(3.0, 0.0, 1.0)), 0.05)
    angle = np.arctan2(samples.y_m, samples.x_m)
    assert angle.min() == pytest.approx(0.0, abs=1e-9)
    assert angle.max() == pytest.approx(1.0)
    shares = np.histogram(angle, 4, (0.0, 1.0), weights=samples.weight)[0]
    np.testing.assert_allclose(shares, 0.99 / 4, rtol=0.03)
    assert max(masses(samples).values()) < 0.05


def test_suspected_multipath_weighs_less():
    echo = detection(2.0, 0.0, flags=MULTIPATH, existence_probability=1.0)
    assert possible(echo).weight.tolist() == [CONFIG.multipath_weight]


@pytest.mark.parametrize(
    ("echo", "soft"),
    [
        (detection(2.0, 0.0, 0.01), False),
        (detection(2.0, 0.0, 0.09), True),  # 18 cm across
        (one_sided(2.0, 0.0, 0.02), True),
        (detection(2.0, 0.0, flags=AMBIGUOUS), True),
        (detection(2.0, 0.0, flags=DetectionFlag.CUES_CONTRADICT), True),
    ],
)
def test_which_echoes_need_agreement_from_elsewhere(echo, soft):
    assert possible(echo).soft.tolist() == [soft]


def test_growing_pose_variance_widens_range_and_bearing():
    hypotheses = possible(detection(2.0, 0.0, 0.03), growth=(0.0004, 0.0004, 0.0016))
    assert hypotheses.range_sigma_m[0] == pytest.approx(math.hypot(0.002, 0.02))
    assert hypotheses.spread_rad[0] == pytest.approx(math.sqrt(0.03**2 + 0.04**2 + 0.01**2))


@pytest.mark.parametrize(
    "broken",
    [
        {"range_m": math.nan},
        {"range_m": -1.0},
        {"bearing_rad": math.inf},
        {"bearing_sigma_rad": math.nan},
        {"range_sigma_m": -0.1},
        {"existence_probability": 1.5},
        {"existence_probability": math.nan},
        {"bearing_min_rad": 1.0, "bearing_max_rad": -1.0},
        {"alternatives": ((math.nan, 0.1),)},
        {"alternatives": ((0.1, 0.7), (0.2, 0.7))},
    ],
)
def test_senseless_detections_are_recognised(broken):
    assert is_valid(detection(2.0, 0.1))
    assert not is_valid(detection(**({"range_m": 2.0, "bearing_rad": 0.1} | broken)))


# ---------------------------------------------------------------------- sharing
def test_sharing_is_the_posterior_of_exactly_one_cause():
    """Equal masses, priors 4 to 1: posterior 0.8 and 0.2 (Bayes, by hand)."""
    hypotheses = possible(detection(1.0, 0.0, existence_probability=1.0))
    samples = arc_samples(hypotheses, 0.05)
    left, right = samples.y_m > 1e-12, samples.y_m < -1e-12
    prior = np.where(left, 4.0, np.where(right, 1.0, 0.0))
    shared = share(samples, hypotheses, prior)
    assert [shared[left].sum(), shared[right].sum()] == pytest.approx([0.8, 0.2], rel=1e-3)


def test_prior_grows_with_what_was_explained_and_falls_where_sound_passed():
    echoes = [detection(1.0, 0.0), detection(2.0, 0.0, flags=AMBIGUOUS)]
    config = CONFIG
    hypotheses = possible(*echoes, config=config)
    samples = arc_samples(hypotheses, 0.05)
    first = np.array([np.argmax(samples.owner == 0), np.argmax(samples.owner == 1)])
    flat = np.zeros(samples.owner.size)
    new = prior_of(hypotheses, samples, flat, flat, config)[first]
    known = prior_of(hypotheses, samples, flat, flat + 2.0, config)[first]
    crossed = prior_of(hypotheses, samples, flat - 1.0, flat, config)[first]
    assert new.tolist() == [config.certain_novelty, config.doubtful_novelty]
    assert (known - new).tolist() == pytest.approx([2.0, 2.0])
    assert crossed / new == pytest.approx([math.exp(-1.0)] * 2)


# ---------------------------------------------------------------------- free paths
@pytest.mark.parametrize("angle", np.linspace(-3.0, 3.0, 9))
@pytest.mark.parametrize("half_width_m", [0.05, 0.12])
def test_paths_cover_their_strip_and_nothing_else(angle, half_width_m):
    """Reference: exact strips as polygons, point-in-polygon by matplotlib.path."""
    pose = np.array([0.013, -0.021, angle])
    hypotheses = possible(detection(2.0, 0.0, 1e-4), pose=pose)
    paths = path_samples(hypotheses, 0.05, 0.3, half_width_m)
    visited = set(masses(paths.samples))
    index = np.arange(-50, 50)
    cells = np.stack(np.meshgrid(index, index), axis=-1).reshape(-1, 2)
    centres = (cells + 0.5) * 0.05
    inner = _strip(pose, 0.33, 1.88, half_width_m - 0.026).contains_points(centres)
    outer = _strip(pose, 0.26, 1.97, half_width_m + 0.036).contains_points(centres)
    must = {tuple(c) for c in cells[inner].tolist()}
    may = {tuple(c) for c in cells[outer].tolist()}
    assert len(must) > 20
    assert must <= visited <= may


def _strip(pose, from_m, to_m, half_width_m):
    c, s = math.cos(pose[2]), math.sin(pose[2])
    corners = [
        (from_m, -half_width_m), (to_m, -half_width_m), (to_m, half_width_m), (from_m, half_width_m)
    ]  # fmt: skip
    return Polygon([(pose[0] + c * a - s * b, pose[1] + s * a + c * b) for a, b in corners])


def test_weight_of_a_path_is_the_probability_that_it_passes_there():
    """Against scipy.stats.norm."""
    paths = path_samples(
        possible(detection(2.0, 0.0, 0.05, existence_probability=1.0)), 0.05, 0.5, 0.05
    )
    for distance in (0.5, 1.5):
        k = int(np.argmin(np.abs(paths.distance_m - distance)))
        sigma = 0.05 * paths.distance_m[k]
        expected = norm.cdf(0.05, scale=sigma) - norm.cdf(-0.05, scale=sigma)
        assert paths.samples.weight[k] == pytest.approx(expected, rel=1e-6)


def test_uncertain_echoes_clear_nothing():
    for echo in (one_sided(2.0, 0.0, 1.0), detection(2.0, 0.0, flags=AMBIGUOUS)):
        assert path_samples(possible(echo), 0.05, 0.3, 0.05).distance_m.size == 0


def test_an_echo_nearer_than_the_nearest_measurable_range_clears_nothing():
    assert path_samples(possible(detection(0.25, 0.0)), 0.05, 0.3, 0.05).distance_m.size == 0


def test_what_stands_in_the_way_makes_an_echo_doubtful():
    hypotheses = possible(detection(2.0, 0.0), detection(2.0, 0.5))
    paths = path_samples(hypotheses, 0.05, 0.3, 0.05)
    wall = (np.abs(paths.samples.x_m - 1.0) < 0.03) & (paths.samples.owner == 0)
    log_odds = np.where(wall, math.log(0.9 / 0.1), 0.0)
    assert clear_view(hypotheses, paths, log_odds) == pytest.approx([1 - (2 * 0.9 - 1), 1.0])


def test_free_and_unknown_cells_do_not_block():
    hypotheses = possible(detection(2.0, 0.0))
    paths = path_samples(hypotheses, 0.05, 0.3, 0.05)
    assert clear_view(hypotheses, paths, np.full(paths.distance_m.size, -1.0)).tolist() == [1.0]


def test_silent_sector_covers_all_its_cells_and_no_others():
    """Reference: exact sector by distance and angle of the cells' centres."""
    grid = RollingGrid(80, 80, 0.05)
    x, y = silent_samples(Pose2(0.0, 0.0, 0.7), 0.5, 0.3, 1.2, 0.05)
    visited = np.zeros(6400, bool)
    visited[grid.locate(x, y)] = True
    index = (np.arange(80) - 40 + 0.5) * 0.05
    cx, cy = (a.ravel() for a in np.meshgrid(index, index))
    distance, off_axis = np.hypot(cx, cy), np.abs(np.arctan2(cy, cx) - 0.7)
    margin = 0.036
    must = (
        (distance > 0.3 + margin)
        & (distance < 1.2 - margin)
        & (off_axis * distance < 0.5 * distance - margin)
    )
    may = (
        (distance > 0.3 - margin)
        & (distance < 1.2 + margin)
        & (off_axis * distance < 0.5 * distance + margin)
    )
    assert must.sum() > 200
    assert not (must & ~visited[grid.locate(cx, cy)]).any()
    assert not (visited[grid.locate(cx, cy)] & ~may).any()
    assert silent_samples(Pose2(), 0.5, 0.3, 0.2, 0.05)[0].size == 0
