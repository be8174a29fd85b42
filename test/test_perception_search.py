"""Matched filter, scans over bearing, pairs of places, clicks, and the bearing's posterior."""

import math

import numpy as np
import pytest
from perception_helpers import (
    HEADS,
    SPEED,
    baseband_ping,
    head_model,
    mirrored_head,
    noise,
    objects,
    strength_for,
)

from ros_echo_perception.core.acoustics import resonance_response
from ros_echo_perception.core.perception.bearing import among_rivals, bearing_posterior
from ros_echo_perception.core.perception.config import ProcessingConfig
from ros_echo_perception.core.perception.interference import find_click, is_click
from ros_echo_perception.core.perception.objects import no_objects
from ros_echo_perception.core.perception.search import bearing_grid, matched_filter, scan
from ros_echo_perception.core.perception.split import best_pairs

HEAD_NAMES = sorted(HEADS)
CONFIG = ProcessingConfig()


@pytest.mark.parametrize("name", HEAD_NAMES)
def test_matched_filter_peaks_at_the_delay_with_the_energy(name):
    model = head_model(HEADS[name])
    true = objects((1.2, 0.3, strength_for(model, 1.2, 0.3, 30.0)))
    ping = baseband_ping(model, true)
    matched = matched_filter(model, ping, ping.samples)
    geometry = model.geometry(true.range_m, true.bearing_rad)
    for ear in (0, 1):
        peak = int(np.argmax(matched[ear]))
        assert abs(ping.time_s[peak] - geometry.delay_s[ear, 0]) < ping.step_s
    # 2 E / N0 is twice the summed square of the outputs at the delay (in noise of variance 1).
    energy = 2.0 * float(np.sum(matched.max(axis=1) ** 2))
    assert 10.0 * math.log10(energy) == pytest.approx(30.0, abs=0.15)


@pytest.mark.parametrize("name", HEAD_NAMES)
def test_matched_noise_has_exponential_power_of_mean_one(name):
    model = head_model(HEADS[name])
    power = np.concatenate([
        matched_filter(model, p, p.samples)[:, 20:-20].ravel() ** 2
        for p in (
            baseband_ping(model, no_objects(), np.random.default_rng([6, k]), 0.2) for k in (0, 1)
        )
    ])  # fmt: skip
    assert power.mean() == pytest.approx(1.0, abs=0.06)
    # Quantiles of the exponential distribution, -ln(1 - q).
    for q in (0.25, 0.5, 0.9, 0.98):
        assert np.quantile(power, q) == pytest.approx(-math.log(1.0 - q), rel=0.12)


def test_masked_samples_do_not_count():
    model = head_model()
    ping = baseband_ping(model, objects((1.2, 0.0, 50.0)), np.random.default_rng(1))
    ping.samples[0, 30:34] = 1e6
    ping.weight[0, 30:34] = 0.0
    assert matched_filter(model, ping, ping.samples)[0, :60].max() < 5.0
    ping.weight[:] = 0.0
    assert not matched_filter(model, ping, ping.samples).any()


@pytest.mark.parametrize("name", HEAD_NAMES)
@pytest.mark.parametrize("place", [(0.6, 0.5), (1.5, 0.0), (2.2, -0.35)])
def test_scan_finds_the_place_the_strength_and_the_gain(name, place):
    model = head_model(HEADS[name])
    strength = strength_for(model, *place, 40.0) * np.exp(-1.1j)
    ping = baseband_ping(model, objects((*place, strength)))
    bearings = bearing_grid(model, 1.22)
    found = scan(model, ping, ping.samples, place[0] + 0.004, 0.02, bearings)
    range_m, bearing_rad, a, gain = found.best()
    assert range_m == pytest.approx(place[0], abs=5e-3)
    assert bearing_rad == pytest.approx(place[1], abs=float(bearings[1] - bearings[0]))
    assert abs(a) == pytest.approx(abs(strength), rel=0.15)
    # Without noise the gain is the echo's energy |s|^2 = E / N0, half of 40 dB (prior < 3 nats).
    assert gain == pytest.approx(10.0**4 / 2.0, rel=0.05)


def test_bearing_grid_is_symmetric_and_resolves_the_lobes():
    for head in HEADS.values():
        model = head_model(head)
        grid = bearing_grid(model, 1.22)
        np.testing.assert_allclose(grid, -grid[::-1], atol=1e-12)
        assert grid[-1] == pytest.approx(1.22)
        lobe = SPEED / 40e3 / head.baseline_m
        assert grid[1] - grid[0] < lobe / 6.0


def test_mirrored_scene_mirrors_the_scan():
    head = HEADS["sparrow_52"]
    model, mirror = head_model(head), head_model(mirrored_head(head))
    ping = baseband_ping(model, objects((1.2, 0.3, 20.0)), np.random.default_rng(5))
    swapped = baseband_ping(mirror, no_objects())
    swapped.samples[:] = ping.samples[::-1]
    bearings = bearing_grid(model, 1.0)
    a = scan(model, ping, ping.samples, 1.2, 0.012, bearings)
    b = scan(mirror, swapped, swapped.samples, 1.2, 0.012, bearings)
    np.testing.assert_allclose(b.aligned, a.aligned[::-1], rtol=1e-6, atol=1e-6)
    assert b.best()[1] == pytest.approx(-a.best()[1], abs=1e-6)


@pytest.mark.parametrize("name", HEAD_NAMES)
def test_the_best_pair_is_the_true_one(name):
    """Two like objects at one range on either side, and not one in the middle."""
    model = head_model(HEADS[name])
    ahead = [(1.4, 0.35), (1.4, -0.30)]
    true = objects(*((*p, strength_for(model, *p, 40.0)) for p in ahead))
    ping = baseband_ping(model, true, np.random.default_rng(12))
    pairs = best_pairs(model, ping, ping.samples, 1.4, CONFIG)
    assert pairs
    assert all(len(p) == 2 for p in pairs)
    # One left and one right, each within two cycles of the carrier: refining decides those.
    cycle = SPEED / 40e3 / model.head.baseline_m
    off = [np.abs(np.sort(p.bearing_rad) - np.sort(true.bearing_rad)).max() for p in pairs]
    assert min(off) < 2.2 * cycle


def interference_ping(model, kind, height, seed):
    """A spike of the converter in one ear, or a click that rings both receivers' resonances."""
    ping = baseband_ping(model, no_objects(), np.random.default_rng([15, seed]))
    n = 4096
    offset = np.fft.fftfreq(n, ping.step_s / 16)
    time_s = 0.00731
    for ear in (0,) if kind == "spike" else (0, 1):
        spectrum = model.receiver.response(offset) * (np.abs(offset) < 1.5 / ping.step_s)
        if kind == "click":
            frequency = np.maximum(40e3 + offset, 1e3)
            spectrum = spectrum * resonance_response(model.head.receivers[ear], frequency)
        shape = np.fft.ifft(spectrum * np.exp(-2j * math.pi * offset * time_s))
        shape *= height / np.abs(shape).max()
        fine = np.arange(n) * ping.step_s / 16
        values = np.interp(ping.time_s, fine, shape.real) + 1j * np.interp(
            ping.time_s, fine, shape.imag
        )
        ping.samples[ear] += np.where(ping.time_s < fine[-1], values, 0.0)
    return ping, time_s


def best_gain(model, ping, time_s):
    range_m = model.range_of_delay(time_s - model.pulses[0].peak_time_s)
    found = scan(model, ping, ping.samples, range_m, 0.06, bearing_grid(model, 1.22))
    return found.best()[3]


@pytest.mark.parametrize("kind", ["spike", "click"])
@pytest.mark.parametrize("height", [12.0, 40.0])
def test_spikes_and_clicks_are_recognised(kind, height):
    model = head_model()
    known = 0
    for seed in range(10):
        ping, time_s = interference_ping(model, kind, height, seed)
        # A click peaks a little after it starts.
        click = find_click(model.head, model.receiver, ping, ping.samples, time_s)
        known += is_click(click, best_gain(model, ping, time_s), 4.0)
    assert known >= 8


@pytest.mark.parametrize("energy_snr_db", [18.0, 25.0, 35.0])
def test_an_echo_is_no_click(energy_snr_db):
    model = head_model()
    mistaken = 0
    for seed in range(10):
        place = (1.1, 0.3 - 0.06 * seed)
        true = objects((*place, strength_for(model, *place, energy_snr_db)))
        ping = baseband_ping(model, true, np.random.default_rng([16, seed]))
        time_s = 2.0 * 1.1 / SPEED + model.pulses[0].peak_time_s
        click = find_click(model.head, model.receiver, ping, ping.samples, time_s)
        mistaken += is_click(click, best_gain(model, ping, time_s), 4.0)
    assert mistaken == 0


# ------------------------------------------------------------------ posterior of bearing


def posterior(model, place, energy_snr_db, rng=None, level_error=0.02):
    clean = baseband_ping(model, objects((*place, strength_for(model, *place, energy_snr_db))))
    if rng is not None:
        clean.samples[:] += noise(rng, clean.samples.shape)
    found = scan(model, clean, clean.samples, place[0], 0.012, bearing_grid(model, 1.22))
    return bearing_posterior(found, found.best()[1], 1e-3, level_error)


@pytest.mark.parametrize("name", HEAD_NAMES)
def test_a_strong_echo_of_a_known_head_has_one_sharp_bearing(name):
    model = head_model(HEADS[name])
    for bearing in np.linspace(-0.6, 0.6, 13):
        found = posterior(model, (1.4, float(bearing)), 55.0)
        assert not found.ambiguous
        assert found.alternatives == ()
        assert found.bearing_rad == pytest.approx(bearing, abs=0.05 * SPEED / 40e3 / 0.052)
        assert found.sigma_rad < 0.02
        low, high = found.interval_rad
        assert low < bearing < high


@pytest.mark.parametrize("name", HEAD_NAMES)
def test_a_weak_echo_leaves_several_bearings_a_cycle_apart(name):
    """The carrier's phase difference repeats every wavelength over the baseline (sine)."""
    model = head_model(HEADS[name])
    found = posterior(model, (1.4, 0.1), 18.0)
    assert found.ambiguous
    bearings = np.sort([b for b, _ in found.alternatives])
    cycles = np.sin(bearings) * model.head.baseline_m * 40e3 / SPEED
    np.testing.assert_allclose(np.diff(cycles), 1.0, atol=0.25)
    weights = [w for _, w in found.alternatives]
    assert weights == sorted(weights, reverse=True)
    assert 0.7 < sum(weights) <= 1.0 + 1e-9
    # One of them is the truth, and the sigma covers it.
    assert np.abs(bearings - 0.1).min() < 0.02
    assert abs(found.bearing_rad - 0.1) < 2.0 * found.sigma_rad
    assert found.sigma_rad > 0.05


@pytest.mark.parametrize("name", HEAD_NAMES)
def test_an_unknown_level_widens_the_posterior(name):
    model = head_model(HEADS[name])
    known, unknown = (posterior(model, (1.4, 0.1), 30.0, None, e) for e in (0.02, 0.3))
    assert unknown.sigma_rad > known.sigma_rad


def test_rivals_give_the_best_bearing_and_the_scatter_about_it():
    found = among_rivals(((0.2, 0.5), (-0.1, 0.3), (0.4, 0.2)), 0.01)
    assert found.bearing_rad == pytest.approx(0.2)
    variance = 0.3 * 0.3**2 + 0.2 * 0.2**2 + 0.01**2
    assert found.sigma_rad == pytest.approx(math.sqrt(variance))
    assert found.ambiguous
    assert found.alternatives == ((0.2, 0.5), (-0.1, 0.3), (0.4, 0.2))


@pytest.mark.parametrize("energy_snr_db", [18.0, 26.0, 34.0])
def test_the_posterior_is_as_wrong_as_it_says(energy_snr_db):
    """Errors over many draws and bearings: within 95 % intervals, and of the stated size."""
    model = head_model()
    rng = np.random.default_rng(31)
    inside, error2, sigma2, n = 0, 0.0, 0.0, 60
    for bearing in np.linspace(-0.5, 0.5, n):
        found = posterior(model, (1.2, float(bearing)), energy_snr_db, rng)
        low, high = found.interval_rad
        inside += low <= bearing <= high
        error2 += (found.bearing_rad - bearing) ** 2
        sigma2 += found.sigma_rad**2
    assert inside >= 0.88 * n
    # The root mean square is made by few slips, so the band is wide.
    assert 0.2 < math.sqrt(error2 / sigma2) < 1.6
