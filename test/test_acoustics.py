"""Transducers and pulses against textbook values and an independent simulation in time."""

import dataclasses
import math

import numpy as np
import pytest
from echo_data import ECHO_DATA, ROOT, needs_echo_data
from scipy import signal
from scipy.optimize import brentq, minimize_scalar

from ros_echo_perception.core.acoustics import (
    HALF_POWER_X,
    burst_spectrum,
    directivity,
    echo_spectrum,
    piston_directivity,
    pulse_metrics,
    resonance_response,
)
from ros_echo_perception.core.head import load_head

HEADS = [ROOT / "config" / "heads" / f"{name}.yaml" for name in ("sparrow_52", "heron_180")]


@pytest.fixture(params=HEADS, ids=lambda path: path.stem)
def head(request):
    return load_head(request.param)


def test_piston_against_textbook():
    # -3 dB at x = 1.6163, first null at 3.8317 (first zero of J1), first side lobe -17.57 dB:
    # Kinsler, Frey, Coppens and Sanders, Fundamentals of Acoustics, section 7.4.
    half_power = brentq(lambda x: float(piston_directivity(x)) ** 2 - 0.5, 1.0, 2.0)
    assert half_power == pytest.approx(1.6163, abs=1e-4)
    assert pytest.approx(half_power, abs=1e-5) == HALF_POWER_X
    assert brentq(lambda x: float(piston_directivity(x)), 3.0, 4.5) == pytest.approx(
        3.8317, abs=1e-4
    )
    lobe = minimize_scalar(lambda x: -abs(float(piston_directivity(x))), (4.0, 5.0, 6.5))
    assert 20.0 * math.log10(-lobe.fun) == pytest.approx(-17.57, abs=0.01)


def test_directivity_is_half_power_at_the_edge_of_the_beam(head):
    for transducer in (head.transmitter, *head.receivers):
        edges = transducer.yaw_rad + np.array([-0.5, 0.5]) * transducer.half_power_beam_width_rad
        np.testing.assert_allclose(directivity(transducer, edges) ** 2, 0.5, atol=1e-6)
        assert float(directivity(transducer, transducer.yaw_rad)) == pytest.approx(1.0)


def test_directivity_all_round(head):
    angles = np.linspace(-math.pi, math.pi, 2001)
    pattern = np.abs(directivity(head.left, head.left.yaw_rad + angles))
    np.testing.assert_allclose(pattern, pattern[::-1], atol=1e-12)
    assert np.max(np.abs(np.diff(pattern))) < 0.01  # no jump, also not at 90 degrees
    assert pattern[0] == pytest.approx(0.0, abs=1e-12)
    assert np.argmax(pattern) == 1000


def test_level_contrast_of_the_ears(head):
    # Trade fact (common practice): (R - L)/(R + L) is 0 straight ahead, and within -1 .. +1.
    bearing = np.linspace(-1.0, 1.0, 201)
    left, right = (directivity(ear, bearing) for ear in head.receivers)
    contrast = (right - left) / (right + left)
    assert contrast[100] == pytest.approx(0.0, abs=1e-12)
    assert np.all(np.abs(contrast) <= 1.0)
    ahead = np.abs(bearing) < 0.7
    assert np.all(np.diff(contrast[ahead]) < 0.0)  # a source on the left is louder on the left


def test_resonance_half_power_bandwidth(head):
    # The half-power frequencies of a series circuit multiply to f0^2 and differ by its bandwidth:
    # any textbook of circuits.
    ear = head.left
    half = 0.5 * ear.half_power_bandwidth_hz
    edges = math.hypot(ear.resonance_hz, half) + np.array([-half, half])
    np.testing.assert_allclose(np.abs(resonance_response(ear, edges)) ** 2, 0.5, rtol=1e-9)


@pytest.mark.parametrize(("waveform", "cycles"), [("sine", 3), ("square", 3), ("square", 8)])
def test_burst_spectrum_against_sampled_burst(waveform, cycles):
    carrier_hz, rate_hz = 40e3, 64e6
    # Half a sample of offset keeps the sampled square wave's edges where they belong.
    time_s = (np.arange(round(cycles / carrier_hz * rate_hz)) + 0.5) / rate_hz
    burst = np.sin(2.0 * math.pi * carrier_hz * time_s)
    burst = np.sign(burst) if waveform == "square" else burst
    frequency_hz = np.linspace(34e3, 46e3, 25)
    direct = np.exp(-2j * math.pi * np.outer(frequency_hz, time_s)) @ burst / rate_hz
    ours = -0.5j * burst_spectrum(frequency_hz, carrier_hz, cycles, waveform)
    scale = np.max(np.abs(direct))
    np.testing.assert_allclose(ours / scale, direct / scale, atol=2e-4)


def _pulse_in_time(head, ear, cycles, rate_hz=4e6):
    """The received pulse by two analogue resonators in the time domain; independent of ours."""
    time_s = np.arange(round(0.003 * rate_hz)) / rate_hz
    drive = np.where(
        time_s < cycles / head.carrier_hz, np.sin(2.0 * math.pi * head.carrier_hz * time_s), 0.0
    )
    if head.drive_waveform == "square":
        drive = np.sign(drive)
    for transducer in (head.transmitter, head.receivers[ear]):
        width = 2.0 * math.pi * transducer.half_power_bandwidth_hz
        w0 = 2.0 * math.pi * transducer.resonance_hz
        _, drive, _ = signal.lsim(([width, 0.0], [1.0, width, w0**2]), drive, time_s)
    return time_s, np.abs(signal.hilbert(drive))


@pytest.mark.parametrize("cycles", [3, 16])
def test_pulse_metrics_against_simulation_in_time(head, cycles):
    time_s, envelope = _pulse_in_time(head, 0, cycles)
    metrics = pulse_metrics(head, 0, cycles)
    high = time_s[envelope >= envelope.max() / 2.0]
    # FWHM = 2 sqrt(2 ln 2) sigma = 2.3548 sigma for a Gaussian (any textbook of statistics).
    assert metrics.envelope_sigma_s == pytest.approx((high[-1] - high[0]) / 2.3548, rel=0.02)
    assert metrics.peak_delay_s == pytest.approx(time_s[np.argmax(envelope)], abs=4e-6)
    weight = envelope**2 / np.sum(envelope**2)
    mean = np.sum(weight * time_s)
    spread = math.sqrt(2.0 * np.sum(weight * (time_s - mean) ** 2))
    assert metrics.energy_sigma_s == pytest.approx(spread, rel=0.02)


def test_three_cycles_give_a_sigma_of_5_to_7_periods(head):
    # Trade fact (common practice, no source).
    sigma_periods = pulse_metrics(head, 0, 3).envelope_sigma_s * head.carrier_hz
    assert 5.0 <= sigma_periods <= 7.0


def _steady_power(head, cycles):
    frequency_hz = head.carrier_hz + np.fft.fftfreq(8192, 1 / 24e3)
    emitted = burst_spectrum(
        frequency_hz, head.carrier_hz, cycles, head.drive_waveform
    ) * resonance_response(head.transmitter, frequency_hz)
    return np.max(np.abs(np.fft.ifft(emitted))) ** 2


def test_power_grows_with_the_burst_up_to_20_to_32_cycles(head):
    # Trade fact (common practice, no source): longer bursts gain little more.
    power = {n: _steady_power(head, n) for n in (3, 8, 16, 20, 32, 64)}
    assert power[3] < power[8] < power[16] < power[20]
    assert power[20] > 0.75 * power[64]
    assert power[32] > 0.95 * power[64]


def test_echo_spectrum_is_the_product_of_its_parts(head):
    frequency_hz = np.linspace(38e3, 42e3, 41)
    product = (
        burst_spectrum(frequency_hz, head.carrier_hz, 3, head.drive_waveform)
        * resonance_response(head.transmitter, frequency_hz)
        * resonance_response(head.right, frequency_hz)
    )
    np.testing.assert_allclose(echo_spectrum(head, 1, frequency_hz, 3), product, rtol=1e-12)


def test_wider_band_makes_shorter_pulses(head):
    wide = dataclasses.replace(
        head, left=dataclasses.replace(head.left, half_power_bandwidth_hz=4000.0)
    )
    assert pulse_metrics(wide, 0, 3).energy_sigma_s < pulse_metrics(head, 0, 3).energy_sigma_s
    assert pulse_metrics(wide, 0, 3).rms_bandwidth_hz > pulse_metrics(head, 0, 3).rms_bandwidth_hz


@needs_echo_data
@pytest.mark.parametrize(
    "name", ["calibration_head_a", "calibration_head_b", "long_a_16", "long_b_varied"]
)
def test_pulse_metrics_of_the_shared_echo_data(name):
    from shared_units import unit_of

    from ros_echo_perception.sources.recording import load_recording

    recording = load_recording(ECHO_DATA / "scenes" / name)
    unit = unit_of(recording)
    for cycles, expected in recording.truth["pulse_by_burst_cycles"].items():
        ours = dataclasses.asdict(pulse_metrics(unit, 0, float(cycles)))
        for key, value in expected.items():
            if key == "peak_delay_s":
                assert ours[key] == pytest.approx(value, abs=1.5e-6)
            else:
                assert ours[key] == pytest.approx(value, rel=0.003), key
