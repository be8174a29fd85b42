"""The received pulse and the head's geometry, against formulas of their own."""

import math

import numpy as np
import pytest
from perception_helpers import HEADS, SPEED, head_model, mirrored_head, objects, simulated

from ros_echo_perception.core.acoustics import pulse_metrics
from ros_echo_perception.core.perception.baseband import receiver_filter, to_baseband
from ros_echo_perception.core.perception.joint import signals
from ros_echo_perception.core.perception.model import HeadModel

HEAD_NAMES = sorted(HEADS)
BURSTS = [3.0, 8.0, 16.0, 24.0]


@pytest.mark.parametrize("name", HEAD_NAMES)
@pytest.mark.parametrize("burst", BURSTS)
def test_pulse_has_the_shape_that_its_metrics_say(name, burst):
    model = head_model(HEADS[name], burst)
    for ear, pulse in enumerate(model.pulses):
        metrics = pulse_metrics(HEADS[name], ear, burst)
        # The receiver filter widens a short pulse a little and delays nothing.
        assert pulse.peak_time_s == pytest.approx(metrics.peak_delay_s, abs=2e-5)
        assert pulse.envelope_sigma_s == pytest.approx(metrics.envelope_sigma_s, rel=0.05)
        assert pulse.noise_bandwidth_hz == pytest.approx(metrics.noise_bandwidth_hz, rel=0.05)


@pytest.mark.parametrize("name", HEAD_NAMES)
def test_three_cycles_return_five_to_seven_periods_at_any_height(name):
    # Common practice: the equivalent Gaussian sigma of a three-cycle echo is 5 to 7 periods.
    model = head_model(HEADS[name])
    for pulse in model.pulses:
        assert 5.0 < pulse.envelope_sigma_s * model.receiver.carrier_hz < 7.0


@pytest.mark.parametrize("name", HEAD_NAMES)
def test_pulse_slope_is_its_derivative_and_its_ends_are_silent(name):
    pulse = head_model(HEADS[name]).pulses[0]
    time_s = np.linspace(pulse.start_s + 3e-5, pulse.end_s - 3e-5, 700)
    h = 1e-6
    numeric = (pulse.evaluate(time_s + h)[0] - pulse.evaluate(time_s - h)[0]) / (2.0 * h)
    largest = np.abs(pulse.slope).max()
    np.testing.assert_allclose(pulse.evaluate(time_s)[1], numeric, atol=0.01 * largest)
    assert np.abs(pulse.evaluate(np.array([pulse.peak_time_s]))[0]) == pytest.approx(1.0, abs=1e-4)
    outside = np.array([pulse.start_s - 1e-3, pulse.end_s + 1e-3, 1.0])
    np.testing.assert_allclose(pulse.evaluate(outside)[0], 0.0, atol=1e-9)


def ears_by_hand(head, range_m, bearing_rad):
    """Delays by Pythagoras, receiver-filter-free."""
    place = np.array([range_m * math.cos(bearing_rad), range_m * math.sin(bearing_rad), 0.0])
    out = np.linalg.norm(place - np.array(head.transmitter.position_m))
    back = [np.linalg.norm(place - np.array(ear.position_m)) for ear in head.receivers]
    return np.array([head.latency_s + (out + way) / SPEED for way in back])


@pytest.mark.parametrize("name", HEAD_NAMES)
@pytest.mark.parametrize("place", [(0.3, 0.6), (1.0, 0.0), (2.5, -0.5), (5.0, 1.1)])
def test_delays_are_path_lengths_over_the_speed_of_sound(name, place):
    geometry = head_model(HEADS[name]).geometry(np.array(place[0]), np.array(place[1]))
    np.testing.assert_allclose(geometry.delay_s, ears_by_hand(HEADS[name], *place), atol=1e-12)


@pytest.mark.parametrize("name", HEAD_NAMES)
def test_slopes_of_the_geometry_are_derivatives(name):
    model = head_model(HEADS[name])
    r, b, h = np.array([0.4, 1.3, 3.0]), np.array([0.5, -0.1, -0.7]), 1e-4
    g = model.geometry(r, b)
    further, nearer = model.geometry(r + h, b), model.geometry(r - h, b)
    lefter, righter = model.geometry(r, b + h), model.geometry(r, b - h)
    np.testing.assert_allclose(
        g.delay_per_m, (further.delay_s - nearer.delay_s) / (2 * h), rtol=1e-5
    )
    np.testing.assert_allclose(
        g.delay_per_rad, (lefter.delay_s - righter.delay_s) / (2 * h), rtol=1e-4, atol=1e-10
    )
    # The code takes a turn seen from the ear for one seen from the origin: exact far away.
    far = model.geometry(20.0 * r, b)
    ends = [model.geometry(20.0 * r, b + sign * h).gain for sign in (1.0, -1.0)]
    np.testing.assert_allclose(far.gain_per_rad, (ends[0] - ends[1]) / (2 * h), atol=0.01)


@pytest.mark.parametrize("name", HEAD_NAMES)
def test_level_contrast_is_zero_ahead_and_negative_to_the_left(name):
    # Common practice: (R - L) / (R + L) runs from -1 to +1 and passes 0 straight ahead.
    bearing = np.radians(np.arange(-45.0, 46.0, 5.0))
    gain = head_model(HEADS[name]).geometry(np.full(bearing.shape, 2.0), bearing).gain
    contrast = (gain[1] - gain[0]) / (gain[1] + gain[0])
    assert contrast[bearing.size // 2] == pytest.approx(0.0, abs=1e-12)
    assert np.all(np.diff(contrast) < 0.0)
    assert -1.0 < contrast[-1] < -0.3
    np.testing.assert_allclose(contrast, -contrast[::-1], atol=1e-9)


@pytest.mark.parametrize("name", HEAD_NAMES)
def test_mirrored_head_mirrors_everything(name):
    r, b = np.array([0.5, 2.0]), np.array([0.3, -0.6])
    plain = head_model(HEADS[name]).geometry(r, b)
    mirror = head_model(mirrored_head(HEADS[name])).geometry(r, -b)
    np.testing.assert_allclose(mirror.delay_s, plain.delay_s[::-1], atol=1e-15)
    np.testing.assert_allclose(mirror.gain, plain.gain[::-1], atol=1e-9)


@pytest.mark.parametrize("name", HEAD_NAMES)
@pytest.mark.parametrize("place", [(0.15, 0.0), (0.7, 0.0), (4.0, 0.0)])
def test_range_of_delay_undoes_the_geometry(name, place):
    model = head_model(HEADS[name])
    delay_s = float(np.mean(ears_by_hand(HEADS[name], *place)))
    assert model.range_of_delay(delay_s) == pytest.approx(place[0], abs=2e-5)


@pytest.mark.parametrize("name", HEAD_NAMES)
def test_carrier_turns_with_the_difference_of_the_ways(name):
    model = head_model(HEADS[name])
    g = model.geometry(np.array([2.0]), np.array([0.2]))
    left, right = model.carrier(g)[:, 0]
    expected = 2.0 * math.pi * 40e3 * float(g.delay_s[1, 0] - g.delay_s[0, 0])
    assert np.angle(left / right) == pytest.approx(math.remainder(expected, 2 * math.pi), abs=1e-9)


@pytest.mark.parametrize("velocity", [0.0, 0.8])
@pytest.mark.parametrize("name", HEAD_NAMES)
def test_signals_have_the_derivatives_that_they_state(name, velocity):
    model = head_model(HEADS[name], 8.0)
    time_s = np.arange(0.004, 0.012, model.receiver.step_s)
    at = objects((1.0, 0.2, 1.0), (1.1, -0.35, 1.0), velocity=velocity)
    found = signals(model, at, time_s)
    for name_of, derivative, h, tolerance in (
        # The slope of the tilt (how beams narrow over the band) is left out on purpose.
        ("range_m", found.by_range, 2e-4, 0.12),
        ("bearing_rad", found.by_bearing, 1e-3, 0.01),
        ("velocity_m_s", found.by_velocity, 1e-3, 0.001),
    ):
        ends = []
        for sign in (1.0, -1.0):
            moved = objects((1.0, 0.2, 1.0), (1.1, -0.35, 1.0), velocity=velocity)
            getattr(moved, name_of)[:] += sign * h
            ends.append(signals(model, moved, time_s).value)
        numeric = (ends[0] - ends[1]) / (2.0 * h)
        error = np.linalg.norm(derivative - numeric, axis=2) / np.linalg.norm(numeric, axis=2)
        assert error.max() < tolerance, name_of


@pytest.mark.parametrize("name", HEAD_NAMES)
def test_model_renders_what_the_simulator_sends(name):
    """Two ways to the same sound: frequency by frequency at the carrier, and the template."""
    head = HEADS[name]
    echoes, source = simulated(
        [(1.2, 0.25)], head, noise_rms=1e-7, adc_bits=16, crosstalk_level=0.0, source_level=3.0,
    )  # fmt: skip
    receiver = receiver_filter(head, head.sample_rate_hz, head.carrier_hz)
    model = HeadModel(head, source.speed_of_sound_m_s, 3.0, receiver)
    baseband = to_baseband(echoes[0], receiver)
    value = signals(model, objects((1.2, 0.25, 1.0)), baseband.time_s).value[:, 0, :]
    strength = np.vdot(value, baseband.samples) / np.vdot(value, value)
    left = baseband.samples - strength * value
    # Absorption and the pole colour the echo a little: the model leaves a few per cent.
    assert np.linalg.norm(left) < 0.04 * np.linalg.norm(baseband.samples)
