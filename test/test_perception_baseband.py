"""Baseband: delays and amplitudes pass unchanged at any rate and carrier."""

import dataclasses
import math

import numpy as np
import pytest
from perception_helpers import HEAD, tone_burst
from scipy import signal

from ros_echo_perception.core.perception.baseband import receiver_filter, to_baseband
from ros_echo_perception.core.types import GainCurve

RATES = [
    (96e3, 25e3), (96e3, 40e3), (192e3, 25e3), (192e3, 40e3), (200e3, 40e3), (200e3, 60e3),
    (500e3, 25e3), (500e3, 60e3), (1e6, 40e3), (1e6, 60e3),
]  # fmt: skip
DELAYS = (0.00412345, 0.00453333)


def baseband_of(echo, head=HEAD):
    return to_baseband(echo, receiver_filter(head, echo.sample_rate_hz, echo.carrier_hz))


def centroid_s(baseband, ear):
    """Mean time of the energy: that of a symmetric envelope's peak, free of interpolation."""
    power = np.abs(baseband.samples[ear]) ** 2
    return float(power @ baseband.time_s / power.sum())


def height_at(baseband, ear, time_s):
    """Complex value between the samples (sinc interpolation)."""
    return baseband.samples[ear] @ np.sinc((time_s - baseband.time_s) / baseband.step_s)


@pytest.mark.parametrize(("rate_hz", "carrier_hz"), RATES)
@pytest.mark.parametrize("odd", [0, 1])
def test_delay_in_is_delay_out(rate_hz, carrier_hz, odd):
    n = int(0.012 * rate_hz) // 2 * 2 + odd
    echo = tone_burst(DELAYS, rate_hz=rate_hz, carrier_hz=carrier_hz, n=n)
    baseband = baseband_of(echo)
    for ear, (delay, amplitude) in enumerate(zip(DELAYS, (0.3, 0.2), strict=True)):
        assert centroid_s(baseband, ear) == pytest.approx(delay, abs=0.2e-6)
        peak = height_at(baseband, ear, delay)
        assert abs(peak) == pytest.approx(amplitude, rel=0.01)
        # The carrier's phase is 0 at the delay, so the baseband turns by -w * delay.
        turn = np.angle(peak * np.exp(2j * math.pi * carrier_hz * delay))
        assert abs(turn) / (2.0 * math.pi * carrier_hz) < 0.05e-6


@pytest.mark.parametrize(("rate_hz", "carrier_hz"), RATES)
def test_times_cover_the_record_and_no_more(rate_hz, carrier_hz):
    echo = tone_burst(DELAYS, rate_hz=rate_hz, carrier_hz=carrier_hz, n=int(0.01 * rate_hz) + 7)
    baseband = baseband_of(echo)
    assert baseband.samples.shape == (2, baseband.time_s.size) == baseband.clipped.shape
    np.testing.assert_allclose(np.diff(baseband.time_s), baseband.step_s, rtol=1e-9)
    assert echo.first_sample_offset_s - baseband.step_s < baseband.time_s[0]
    assert baseband.time_s[-1] <= echo.end_time_s + 1e-9
    assert echo.end_time_s - baseband.time_s[-1] < 2 * baseband.step_s


def test_level_scales_amplitude_only():
    quiet = baseband_of(tone_burst(DELAYS, (0.1, 0.1)))
    loud = baseband_of(tone_burst(DELAYS, (0.3, 0.2)))
    np.testing.assert_allclose(loud.samples[0], 3.0 * quiet.samples[0], atol=2e-5)
    np.testing.assert_allclose(loud.samples[1], 2.0 * quiet.samples[1], atol=2e-5)


@pytest.mark.parametrize("offset", [-3000, 1, 8000])
def test_a_constant_offset_changes_nothing(offset):
    echo = tone_burst(DELAYS)
    shifted = dataclasses.replace(echo, samples=echo.samples + np.int16(offset))
    # Median of an envelope on a carrier: 0 within a code or two.
    np.testing.assert_allclose(baseband_of(shifted).samples, baseband_of(echo).samples, atol=2e-6)


def test_input_stays_as_it_is():
    echo = tone_burst(DELAYS, gain=GainCurve(np.array([0.0, 0.01]), np.array([0.0, 20.0])))
    before = echo.samples.copy()
    echo.samples.flags.writeable = False
    baseband_of(echo)
    np.testing.assert_array_equal(echo.samples, before)


def test_gain_curve_is_divided_out():
    curve = GainCurve(np.array([0.001, 0.006]), np.array([0.0, 24.0]))
    echo = tone_burst(DELAYS, (0.05, 0.04))
    time_s = echo.first_sample_offset_s + np.arange(echo.n_samples) / echo.sample_rate_hz
    gained = np.rint(echo.samples * curve.amplitude(time_s)).astype(np.int16)
    with_gain = baseband_of(dataclasses.replace(echo, samples=gained, gain=curve))
    # 24 dB within 5 ms over a pulse of 0.2 ms: the filter's length adds about a per cent.
    peak = np.abs(baseband_of(echo).samples).max(axis=1, keepdims=True)
    np.testing.assert_allclose(
        with_gain.samples / peak, baseband_of(echo).samples / peak, atol=0.02
    )
    assert with_gain.gain[0] == 1.0
    assert with_gain.gain[-1] == pytest.approx(10.0 ** (24.0 / 20.0))


def test_a_later_record_keeps_the_clock():
    full = tone_burst(DELAYS)
    late = tone_burst(DELAYS, first_sample_offset_s=0.0021037)
    for ear in (0, 1):
        assert centroid_s(baseband_of(late), ear) == pytest.approx(DELAYS[ear], abs=0.2e-6)
        phases = [height_at(baseband_of(echo), ear, DELAYS[ear]) for echo in (full, late)]
        assert abs(np.angle(phases[0] / phases[1])) < 0.01


def test_ears_do_not_leak_into_each_other():
    baseband = baseband_of(tone_burst(DELAYS, (0.3, 0.0)))
    assert np.abs(baseband.samples[0]).max() > 0.29
    assert not baseband.samples[1].any()


@pytest.mark.parametrize(("rate_hz", "carrier_hz"), RATES)
def test_response_is_that_of_the_filter(rate_hz, carrier_hz):
    receiver = receiver_filter(HEAD, rate_hz, carrier_hz)
    offset = np.linspace(-0.4 / receiver.step_s, 0.4 / receiver.step_s, 41)
    # Reference library: SciPy's freqz of the same taps, its linear phase taken off.
    _, reference = signal.freqz(receiver.taps() / 2.0, worN=offset, fs=rate_hz)
    reference *= np.exp(2j * math.pi * offset * receiver.delay_samples / rate_hz)
    np.testing.assert_allclose(receiver.response(offset), reference.real, atol=1e-9)
    np.testing.assert_allclose(reference.imag, 0.0, atol=1e-9)
    assert receiver.response(np.zeros(1))[0] == pytest.approx(1.0, abs=1e-9)
    # The pulse's main band passes, the doubled carrier does not.
    assert receiver.response(np.array([1000.0]))[0] > 0.97
    image = receiver.response(np.array([2.0 * carrier_hz]))
    assert abs(image[0]) < 2e-3


def test_clipped_samples_mark_their_neighbourhood_in_their_ear_only():
    echo = tone_burst(DELAYS, (0.5, 0.2))
    samples = echo.samples.copy()
    at = 1500
    samples[1, at] = 32767
    baseband = baseband_of(dataclasses.replace(echo, samples=samples))
    marked = baseband.time_s[baseband.clipped[1]]
    time_s = echo.first_sample_offset_s + at / echo.sample_rate_hz
    assert not baseband.clipped[0].any()
    assert 1 <= marked.size <= 3
    assert np.all(np.abs(marked - time_s) <= 1.001 * baseband.step_s)


@pytest.mark.parametrize("bits", [8, 10, 12, 16])
def test_the_highest_code_of_every_converter_counts_as_clipped(bits):
    step = 2 ** (16 - bits)
    top = 32768 - step
    echo = tone_burst(DELAYS, (0.5, 0.2))
    codes = (echo.samples // step * step).astype(np.int16)
    assert not baseband_of(dataclasses.replace(echo, samples=codes)).clipped.any()
    codes[0, 900] = top
    assert baseband_of(dataclasses.replace(echo, samples=codes)).clipped[0].any()
