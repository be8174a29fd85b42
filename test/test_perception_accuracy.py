"""The joint fit reaches the bound, and says how well it did."""

import dataclasses
import math

import numpy as np
import pytest
from perception_helpers import (
    HEAD,
    HEADS,
    SPEED,
    STILL,
    baseband_ping,
    fit,
    head_model,
    noise,
    objects,
    strength_for,
)

from ros_echo_perception.core.acoustics import burst_spectrum, echo_spectrum, resonance_response
from ros_echo_perception.core.perception.joint import Priors, signals, window_of

HEAD_NAMES = sorted(HEADS)
DRAWS = 120
PLACE = (1.0, 0.15)


def draws(model, true, priors=STILL, n=DRAWS, seed=1):
    """Fits of the same objects in n draws of noise, started at the truth."""
    clean = baseband_ping(model, true)
    rng = np.random.default_rng([9, seed])
    found = []
    for _ in range(n):
        ping = baseband_ping(model, true)
        ping.samples[:] = clean.samples + noise(rng, clean.samples.shape)
        found.append(fit(model, ping, true, priors))
    return found


def range_bound_m(model, energy_snr_db):
    """sigma = 1 / (d beta), phase unknown; d^2 = 2 E / N0 of both ears, beta the rms bandwidth.

    Kay, Fundamentals of Statistical Signal Processing I, 1993, chapter 3 (delay estimation);
    bandwidth about the centroid because amplitude and phase are unknown too. From the spectra
    that the transducers have, not from the table that the fit uses.
    """
    offset = np.linspace(-15e3, 15e3, 6001)
    spread = 0.0
    for ear in (0, 1):
        spectrum = echo_spectrum(
            model.head, ear, model.receiver.carrier_hz + offset, 3.0
        ) * model.receiver.response(offset)
        power = np.abs(spectrum) ** 2
        centre = (power @ offset) / power.sum()
        spread += 0.5 * (power @ (offset - centre) ** 2) / power.sum()
    beta = 2.0 * math.pi * math.sqrt(spread)
    return SPEED / 2.0 / (10.0 ** (energy_snr_db / 20.0) * beta)


@pytest.mark.parametrize("name", HEAD_NAMES)
@pytest.mark.parametrize("energy_snr_db", [20.0, 30.0])
def test_range_of_a_single_echo_reaches_the_cramer_rao_bound(name, energy_snr_db):
    model = head_model(HEADS[name])
    true = objects((*PLACE, strength_for(model, *PLACE, energy_snr_db) * np.exp(0.7j)))
    found = draws(model, true)
    error = np.array([float(f.objects.range_m[0]) for f in found]) - PLACE[0]
    bound = range_bound_m(model, energy_snr_db)
    assert 0.8 < np.sqrt(np.mean(error**2)) / bound < 1.3
    assert abs(error.mean()) < 0.2 * bound
    stated = np.sqrt(np.mean([f.covariance[0, 0, 0] for f in found]))
    assert stated == pytest.approx(float(np.std(error)), rel=0.3)


@pytest.mark.parametrize("name", HEAD_NAMES)
def test_bearing_scatters_as_its_covariance_says(name):
    """Once the phase's cycle is known: c / (w b cos) sqrt(1/dl^2 + 1/dr^2), see below."""
    model = head_model(HEADS[name])
    place = (1.5, 0.0)
    true = objects((*place, strength_for(model, *place, 30.0)))
    found = draws(model, true)
    error = np.array([float(f.objects.bearing_rad[0]) for f in found])
    stated = np.sqrt(np.mean([f.covariance[0, 1, 1] for f in found]))
    assert stated == pytest.approx(float(np.std(error)), rel=0.3)
    assert abs(error.mean()) < 0.2 * stated
    # Closed form straight ahead: each ear's phase has sigma 1 / d_ear (Rife and Boorstyn 1974),
    # the difference of the ways changes with the bearing by the baseline.
    d_ear = 10.0 ** (30.0 / 20.0) / math.sqrt(2.0)
    closed = math.sqrt(2.0) / d_ear * SPEED / (2.0 * math.pi * 40e3 * model.head.baseline_m)
    assert stated == pytest.approx(closed, rel=0.15)


def test_covariance_of_two_overlapping_echoes_is_their_scatter():
    model = head_model()
    first, second = (1.0, 0.1), (1.04, -0.2)  # about 1.5 pulse sigmas apart
    true = objects(
        (*first, strength_for(model, *first, 40.0)),
        (*second, strength_for(model, *second, 40.0) * np.exp(1.0j)),
    )
    found = draws(model, true, n=80)
    assert all(len(f.objects) == 2 for f in found)
    for k, (range_m, _) in enumerate((first, second)):
        error = np.array([float(f.objects.range_m[k]) for f in found]) - range_m
        stated = np.sqrt(np.mean([f.covariance[k, 0, 0] for f in found]))
        assert stated == pytest.approx(float(np.std(error)), rel=0.3)
        assert abs(error.mean()) < 0.35 * stated


@pytest.mark.parametrize("shift_m", [-0.01, 0.004, 0.012])
def test_refine_comes_back_from_a_displaced_start(shift_m):
    model = head_model()
    true = objects((*PLACE, 40.0 * np.exp(0.3j)))
    ping = baseband_ping(model, true)
    start = objects((PLACE[0] + shift_m, PLACE[1] + 0.02, 1.0))
    found = fit(model, ping, start)
    assert found.objects.range_m[0] == pytest.approx(PLACE[0], abs=1e-5)
    assert found.objects.bearing_rad[0] == pytest.approx(PLACE[1], abs=1e-4)
    assert found.objects.strength[0] == pytest.approx(true.strength[0], rel=1e-3)
    assert found.cost < 1e-2


def test_a_later_object_is_found_later_by_as_much():
    """37 samples of the baseband later: the range moves by c / 2 times that."""
    model = head_model()
    step = model.receiver.step_s
    true = objects((2.0, 0.0, strength_for(model, 2.0, 0.0, 30.0)))
    near = baseband_ping(model, true)
    late = baseband_ping(model, true)
    late.samples[:] = np.roll(near.samples, 37, axis=1)
    moved = objects((2.0 + 37 * step * SPEED / 2.0, 0.0, 1.0))
    found = [fit(model, p, s).objects for p, s in ((near, true), (late, moved))]
    difference = float(found[1].range_m[0] - found[0].range_m[0])
    # The ways to two ears are a hair longer than twice the range; it shrinks with the range.
    assert difference == pytest.approx(37 * step * SPEED / 2.0, abs=1e-4)


def test_cost_is_the_energy_that_is_left():
    model = head_model()
    true = objects((*PLACE, 30.0))
    ping = baseband_ping(model, true, np.random.default_rng(8))
    found = fit(model, ping, true)
    window = window_of(model, ping, true)
    time_s = ping.time_s[window]
    sound = found.objects.strength[0] * signals(model, found.objects, time_s).value[:, 0]
    left = ping.samples[:, window] - sound
    assert found.cost == pytest.approx(float(np.sum(np.abs(left) ** 2)), rel=1e-6)
    # Noise of variance 1 in n complex samples leaves n, less half a parameter each.
    n = 2 * time_s.size
    assert abs(found.cost - n) < 4.0 * math.sqrt(n)


def ahead_model(burst):
    """Ears that look straight ahead, where no beam colours the pulse."""
    straight = {
        side: dataclasses.replace(getattr(HEAD, side), yaw_rad=0.0) for side in ("left", "right")
    }
    model = head_model(dataclasses.replace(HEAD, **straight), burst)
    model.burst = burst
    return model


def received(model, ear, shift_hz):
    """Pulse of a burst whose frequencies all arrive shifted, from the spectra: the burst and the
    transmitter's ringing move, the receiver's resonance and the filter do not. (times, pulse)"""
    head, receiver = model.head, model.receiver
    step, n = receiver.step_s / 32, 32 * 96
    offset = np.fft.fftfreq(n, step)
    band = np.abs(offset) < 1.5 / receiver.step_s
    frequency, burst = head.carrier_hz + offset[band], model.burst
    sent = burst_spectrum(frequency - shift_hz, head.carrier_hz, burst, head.drive_waveform)
    sent = sent * resonance_response(head.transmitter, frequency - shift_hz)
    spectrum = np.zeros(n, complex)
    spectrum[band] = sent * resonance_response(head.receivers[ear], frequency)
    spectrum[band] *= receiver.response(offset[band]) * np.exp(-2j * math.pi * offset[band] * 1e-3)
    return step * np.arange(n) - 1e-3, np.fft.ifft(spectrum)


def doppler_ping(model, velocity, energy_snr_db, rng=None):
    """An object straight ahead whose sound arrives shifted by -2 v f0 / c."""
    true = objects((1.0, 0.0, strength_for(model, 1.0, 0.0, energy_snr_db)))
    ping = baseband_ping(model, true)
    delay = model.geometry(true.range_m, true.bearing_rad).delay_s[:, 0]
    for ear in (0, 1):
        time_s, pulse = received(model, ear, -2.0 * velocity * 40e3 / SPEED)
        lag = ping.time_s - delay[ear]
        shape = np.interp(lag, time_s, pulse.real) + 1j * np.interp(lag, time_s, pulse.imag)
        ping.samples[ear] *= 0.0
        ping.samples[ear] += float(abs(true.strength[0])) * shape / np.abs(pulse).max()
    if rng is not None:
        ping.samples[:] += noise(rng, ping.samples.shape)
    return ping, true


@pytest.mark.parametrize("velocity", [-0.8, 0.5, 1.0])
@pytest.mark.parametrize("burst", [8.0, 16.0, 24.0])
def test_a_receding_object_lowers_the_carrier(velocity, burst):
    # Closed formula for a moving reflector, to first order: shift = -2 v f0 / c.
    model = ahead_model(burst)
    loose = Priors(velocity_sigma_m_s=50.0, max_bearing_rad=1.22)
    ping, start = doppler_ping(model, velocity, 60.0)
    found = fit(model, ping, start, loose)
    assert found.objects.velocity_m_s[0] == pytest.approx(velocity, rel=0.05)
    assert found.objects.range_m[0] == pytest.approx(1.0, abs=1e-3)


def test_stated_velocity_sigma_is_the_scatter_and_falls_with_longer_bursts():
    loose = Priors(velocity_sigma_m_s=50.0, max_bearing_rad=1.22)
    stated = []
    for burst in (3.0, 32.0):
        model = ahead_model(burst)
        rng = np.random.default_rng(21)
        found = []
        for _ in range(60):
            ping, start = doppler_ping(model, 0.4, 35.0, rng)
            found.append(fit(model, ping, start, loose))
        velocity = np.array([float(f.objects.velocity_m_s[0]) for f in found])
        stated.append(float(np.sqrt(np.mean([f.covariance[0, 2, 2] for f in found]))))
        assert stated[-1] == pytest.approx(float(np.std(velocity)), rel=0.3)
        assert abs(velocity.mean() - 0.4) < 0.4 * stated[-1]
    assert stated[1] < 0.75 * stated[0]


def test_prior_holds_the_velocity_where_the_ping_says_little():
    model = ahead_model(3.0)
    ping, start = doppler_ping(model, 0.0, 12.0, np.random.default_rng(2))
    found = fit(model, ping, start, Priors(velocity_sigma_m_s=0.3, max_bearing_rad=1.22))
    assert abs(found.objects.velocity_m_s[0]) < 0.9
    assert found.covariance[0, 2, 2] < 0.3**2 * 1.001


def test_coinciding_objects_do_not_break_the_fit():
    model = head_model()
    true = objects((*PLACE, 40.0))
    ping = baseband_ping(model, true, np.random.default_rng(3))
    found = fit(model, ping, objects((*PLACE, 1.0), (*PLACE, 1.0)))
    for part in (found.objects.range_m, found.objects.bearing_rad, found.covariance):
        assert np.all(np.isfinite(part))
    sound = abs(found.objects.strength.sum())
    assert sound == pytest.approx(40.0, rel=0.2)
