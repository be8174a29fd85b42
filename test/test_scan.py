"""The scan approximation says what its documentation says (values by REP-117)."""

import dataclasses
import math

import numpy as np
import pytest

from ros_echo_perception.core.errors import SettingError
from ros_echo_perception.core.perception.scan import ScanConfig, scan_from_result
from ros_echo_perception.core.types import Detection, Ears, PingFlag, PingResult


def echo(range_m=2.0, bearing_rad=0.0, sigma=0.03, **changes):
    base = Detection(
        range_m, bearing_rad, 0.005, sigma, bearing_rad - 2 * sigma, bearing_rad + 2 * sigma,
        (0.1, 0.2), (21.0, 24.0), 0.95,
    )  # fmt: skip
    return dataclasses.replace(base, **changes)


def ping(*echoes, **changes):
    base = PingResult(5.0, 7, tuple(echoes), 343.0, 0.3, 6.0, 0.5, (1e-3, 1e-3))
    return dataclasses.replace(base, **changes)


def angles(scan):
    return scan.angle_min_rad + scan.angle_increment_rad * np.arange(scan.ranges_m.size)


def test_geometry_depends_on_the_configuration_alone():
    config = ScanConfig(half_width_rad=0.6, beam_step_rad=0.05)
    quiet = scan_from_result(ping(), config)
    busy = scan_from_result(ping(echo(1.0), echo(3.0, 0.4), range_max_m=3.5), config)
    for scan in (quiet, busy):
        assert scan.ranges_m.shape == scan.intensities_db.shape == (25,)
        assert angles(scan)[-1] == pytest.approx(scan.angle_max_rad, abs=1e-12)
        assert (scan.range_min_m, scan.range_max_m) == (0.05, 10.0)
        assert angles(scan)[12] == pytest.approx(0.0, abs=1e-12)


def test_an_echo_fills_exactly_the_beams_within_its_sigma():
    scan = scan_from_result(ping(echo(2.0, 0.2, 0.06)), ScanConfig(width_sigmas=1.0))
    filled = np.isfinite(scan.ranges_m)
    reach = 0.06 + scan.angle_increment_rad / 2
    np.testing.assert_array_equal(filled, np.abs(angles(scan) - 0.2) <= reach)
    assert set(scan.ranges_m[filled]) == {2.0}
    assert set(scan.intensities_db[filled]) == {24.0}
    assert set(scan.intensities_db[~filled]) == {0.0}


def test_positive_bearing_is_left_and_left_is_the_end_of_the_array():
    scan = scan_from_result(ping(echo(2.0, 0.5, 0.0)))
    (beam,) = np.nonzero(np.isfinite(scan.ranges_m))[0]
    assert angles(scan)[beam] == pytest.approx(0.5, abs=scan.angle_increment_rad / 2)
    assert beam > scan.ranges_m.size // 2


def test_a_sharp_echo_still_fills_one_beam_and_a_wide_one_does_not_leave_the_scan():
    assert np.isfinite(scan_from_result(ping(echo(sigma=0.0))).ranges_m).sum() == 1
    wide = scan_from_result(ping(echo(sigma=3.0)))
    assert np.all(wide.ranges_m == 2.0)


@pytest.mark.parametrize("bearing", [-1.2, 1.2])
def test_an_echo_outside_the_scan_fills_nothing(bearing):
    assert np.all(np.isnan(scan_from_result(ping(echo(2.0, bearing, 0.01))).ranges_m))


def test_the_nearest_echo_of_a_beam_wins_whatever_the_order():
    near, far = echo(1.0, 0.0, 0.02), echo(3.0, 0.0, 0.10)
    for order in ((near, far), (far, near)):
        scan = scan_from_result(ping(*order))
        middle = scan.ranges_m.size // 2
        assert scan.ranges_m[middle] == 1.0
        assert scan.ranges_m[middle + 5] == 3.0


def test_one_sided_echo_fills_its_interval_or_is_left_out():
    one = echo(1.5, 0.2, 0.1, ears=Ears.LEFT_ONLY, bearing_min_rad=0.0, bearing_max_rad=0.4)
    scan = scan_from_result(ping(one))
    inside = (angles(scan) >= -0.01) & (angles(scan) <= 0.41)
    np.testing.assert_array_equal(np.isfinite(scan.ranges_m), inside)
    assert np.all(np.isnan(scan_from_result(ping(one), ScanConfig(one_sided="omit")).ranges_m))


def test_other_possible_bearings_are_filled_from_their_weight_on():
    ambiguous = echo(1.5, 0.0, 0.0, alternatives=((0.3, 0.25), (-0.3, 0.1)))
    scan = scan_from_result(ping(ambiguous), ScanConfig(min_alternative_weight=0.2))
    bearings = angles(scan)[np.isfinite(scan.ranges_m)]
    np.testing.assert_allclose(bearings, [0.0, 0.3], atol=scan.angle_increment_rad / 2)


def test_rep_117_minus_infinity_nearer_than_can_be_measured():
    scan = scan_from_result(ping(echo(0.2, 0.0, 0.0), range_min_m=0.3))
    assert scan.ranges_m[scan.ranges_m.size // 2] == -math.inf
    assert scan.range_min_m == 0.05  # stable, although this ping could hear from 0.3 m only
    behind = scan_from_result(ping(echo(0.2, 0.0, 0.0), echo(2.0, 0.0, 0.0), range_min_m=0.3))
    assert behind.ranges_m[behind.ranges_m.size // 2] == -math.inf


def test_silence_never_clears_by_default():
    assert np.all(np.isnan(scan_from_result(ping()).ranges_m))


def test_silence_may_clear_up_to_the_stated_range_within_the_beam():
    config = ScanConfig(silence_policy="clear_to_range", clear_range_m=2.5)
    scan = scan_from_result(ping(echo(1.0, 0.0, 0.0), echo(4.0, 0.3, 0.05)), config)
    assert scan.range_max_m == 2.5
    in_beam = np.abs(angles(scan)) <= 0.5
    middle = scan.ranges_m.size // 2
    assert scan.ranges_m[middle] == 1.0
    others = np.delete(scan.ranges_m, middle)
    np.testing.assert_array_equal(np.isposinf(others), np.delete(in_beam, middle))
    np.testing.assert_array_equal(np.isnan(others), ~np.delete(in_beam, middle))


@pytest.mark.parametrize(
    "changes",
    [
        {"range_max_m": 2.0},  # the record ended before the stated range
        {"flags": PingFlag.LEFT_DEAD},
        {"flags": PingFlag.RIGHT_CLIPPED},
        {"flags": PingFlag.INTERFERENCE | PingFlag.SIMULATED},
    ],
)
def test_a_ping_that_could_not_hear_does_not_clear(changes):
    config = ScanConfig(silence_policy="clear_to_range", clear_range_m=2.5)
    assert np.all(np.isnan(scan_from_result(ping(**changes), config).ranges_m))


def test_an_unlikely_echo_is_left_out():
    scan = scan_from_result(ping(echo(existence_probability=0.4)))
    assert np.all(np.isnan(scan.ranges_m))


def test_no_finite_range_lies_outside_the_stated_limits():
    rng = np.random.default_rng(4)
    echoes = [echo(float(r), float(b)) for r, b in rng.uniform((0.0, -1.0), (14.0, 1.0), (60, 2))]
    for config in (ScanConfig(), ScanConfig(silence_policy="clear_to_range", clear_range_m=1.0)):
        scan = scan_from_result(ping(*echoes), config)
        finite = scan.ranges_m[np.isfinite(scan.ranges_m)]
        assert finite.size
        assert finite.min() >= scan.range_min_m
        assert finite.max() <= scan.range_max_m


def test_limits_that_contradict_are_refused():
    with pytest.raises(SettingError, match="range_max_m is 1.0; allowed: more than range_min_m"):
        ScanConfig(range_min_m=1.0, range_max_m=1.0)
    with pytest.raises(SettingError, match="clear_range_m"):
        ScanConfig(silence_policy="clear_to_range", range_min_m=2.0, clear_range_m=2.0)
    with pytest.raises(SettingError, match="one of never_clear, clear_to_range"):
        ScanConfig(silence_policy="free")
