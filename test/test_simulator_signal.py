"""What the simulated ears hear: delays, strengths, noise, converter, Doppler shift."""

import dataclasses
import math

import numpy as np
import pytest
from echo_data import ECHO_DATA, ROOT, needs_echo_data
from scipy import signal

from ros_echo_perception.core.acoustics import pulse_metrics
from ros_echo_perception.core.air import absorption_db_per_m
from ros_echo_perception.core.head import load_head
from ros_echo_perception.core.types import FrontEndFlag, Pose2
from ros_echo_perception.sources.bench import bench_source, poles
from ros_echo_perception.sources.robot_path import RobotPath, Waypoint
from ros_echo_perception.sources.simulator import SimulatorSource
from ros_echo_perception.sources.simulator_config import SimulatorConfig
from ros_echo_perception.sources.world import Surface, World

HEADS = {n: load_head(ROOT / "config" / "heads" / f"{n}.yaml") for n in ("sparrow_52", "heron_180")}
HEAD = HEADS["sparrow_52"]
DEMO = ROOT / "config" / "worlds" / "demo_room.yaml"
CLEAN = SimulatorConfig(noise_rms=1e-7, adc_bits=16, crosstalk_level=0.0)


def envelope(echo):
    """Envelope of both ears as a fraction of full scale, and the times since the emission."""
    time_s = echo.first_sample_offset_s + np.arange(echo.n_samples) / echo.sample_rate_hz
    return time_s, np.abs(signal.hilbert(echo.samples / echo.full_scale, axis=1))


def peak_of(echo, ear):
    """Time and height of the envelope's maximum, between samples."""
    time_s, values = envelope(echo)
    i = int(np.argmax(values[ear]))
    near = slice(i - 8, i + 9)
    curve = np.polynomial.Polynomial.fit(time_s[near] - time_s[i], values[ear, near], 4)
    steps = np.linspace(-3e-5, 3e-5, 6001)
    best = np.argmax(curve(steps))
    return time_s[i] + steps[best], curve(steps)[best]


@pytest.mark.parametrize("name", HEADS)
@pytest.mark.parametrize("range_m", [0.4, 1.7, 3.9])
def test_delay_in_is_delay_out(name, range_m):
    head = dataclasses.replace(HEADS[name], latency_s=4e-5)
    config = dataclasses.replace(CLEAN, source_level=0.4 * range_m**2)
    source = bench_source(head, poles((range_m, 0.2), radius_m=0.1), config)
    (truth,) = source.truth(0).reflectors
    for ear in (0, 1):
        delay_s = pulse_metrics(head, ear, 3).peak_delay_s
        time_s, height = peak_of(source.echo(0), ear)
        # Absorption grows with frequency and moves the peak a little.
        assert time_s == pytest.approx(4e-5 + truth.tof_s[ear] + delay_s, abs=3e-6)
        assert height == pytest.approx(truth.peak[ear], rel=0.02)


def test_peak_delay_is_that_of_the_core():
    wall = World("w", (Surface("w", "wall", (1.0, -2.0), (1.0, 2.0)),))
    straight = dataclasses.replace(
        HEAD,
        left=dataclasses.replace(HEAD.left, yaw_rad=0.0),
        right=dataclasses.replace(HEAD.right, yaw_rad=0.0),
    )
    source = bench_source(straight, wall, dataclasses.replace(CLEAN, source_level=0.5))
    loss = 10.0 ** (-2.0 * 1.30 / 20.0)  # 2 m at about 1.3 dB/m (ISO 9613-1)
    truth = next(r for r in source.truth(0).reflectors if r.kind == "wall")
    assert truth.peak[0] == pytest.approx(0.5 * loss, rel=0.02)


def test_strength_follows_the_laws_of_distance():
    places = [(r, 0.0) for r in (0.5, 1.0, 2.0, 4.0)]
    near = {  # ears at one place, or the angles to them would change with the distance
        side: dataclasses.replace(getattr(HEAD, side), position_m=(0.0, y, 0.0))
        for side, y in (("left", 1e-4), ("right", -1e-4))
    }
    source = bench_source(dataclasses.replace(HEAD, **near), [poles(p) for p in places], CLEAN)
    a = 0.02
    loss_db = float(absorption_db_per_m(40e3, CLEAN.temperature_c, CLEAN.relative_humidity))
    for (r, _), k in zip(places, range(4), strict=True):
        truth = source.truth(k).reflectors[0]
        expected = math.sqrt(a / (a + r)) / (2.0 * r) * 10.0 ** (-2.0 * r * loss_db / 20.0)
        reference = math.sqrt(a / (a + 0.5)) * 10.0 ** (-loss_db / 20.0)
        ratio = truth.peak[0] / source.truth(0).reflectors[0].peak[0]
        assert ratio == pytest.approx(expected / reference, rel=0.01)


def test_level_scales_amplitude_alone():
    quiet = bench_source(HEAD, poles((1.0, 0.1)), dataclasses.replace(CLEAN, source_level=0.2))
    loud = bench_source(HEAD, poles((1.0, 0.1)), dataclasses.replace(CLEAN, source_level=0.6))
    np.testing.assert_allclose(loud.echo(0).samples, 3.0 * quiet.echo(0).samples, atol=2.5)


def test_echoes_add_as_waves():
    one, two = poles((1.0, 0.2)), poles((1.01, -0.3))
    both = World("b", (), one.rounds + two.rounds)
    source = bench_source(HEAD, [one, two, both], CLEAN)
    a, b, total = (source.echo(k).samples.astype(float) for k in range(3))
    np.testing.assert_allclose(total, a + b, atol=2.5)


def test_longer_bursts_return_stronger_echoes():
    peaks = []
    for cycles in (3.0, 8.0, 16.0, 32.0):
        config = dataclasses.replace(CLEAN, burst_cycles=cycles, source_level=0.1)
        peaks.append(peak_of(bench_source(HEAD, poles((1.5, 0.0)), config).echo(0), 0)[1])
    assert np.all(np.diff(peaks) > 0.0)
    assert peaks[3] / peaks[2] < peaks[1] / peaks[0]


def test_two_like_objects_at_one_range_look_like_one_in_the_middle():
    # Trade fact (common practice): both ears hear the same, though nothing is straight ahead.
    source = bench_source(HEAD, poles((1.5, 0.35), (1.5, -0.35)), CLEAN)
    (t_left, left), (t_right, right) = (peak_of(source.echo(0), ear) for ear in (0, 1))
    assert left == pytest.approx(right, rel=1e-3)
    assert t_left == pytest.approx(t_right, abs=1e-6)


def test_measured_noise_and_snr_are_those_of_the_truth():
    config = SimulatorConfig(noise_rms=0.004, adc_bits=10, crosstalk_level=0.0)
    source = bench_source(HEAD, poles((1.0, 0.0)), config, n_pings=12)
    tails = np.concatenate([source.echo(k).samples[:, -2500:] for k in range(12)], axis=1)
    noise = np.mean((tails / 32768.0) ** 2, axis=1)
    # A step of the converter adds 1/12 of its square (W. R. Bennett 1948).
    expected = 0.004**2 + (2.0**-9) ** 2 / 12.0
    np.testing.assert_allclose(noise, expected, rtol=0.02)
    truth = source.truth(0).reflectors[0]
    bandwidth_hz = pulse_metrics(HEAD, 0, 3).noise_bandwidth_hz
    snr = truth.peak[0] ** 2 / 2.0 / (expected * bandwidth_hz / 100e3)
    assert truth.snr_db[0] == pytest.approx(10.0 * math.log10(snr), abs=1e-6)


def test_converter_steps_and_clipping():
    config = SimulatorConfig(adc_bits=8, source_level=20.0)
    source = bench_source(HEAD, poles((0.8, 0.0)), config)
    echo = source.echo(0)
    assert np.all(echo.samples % 256 == 0)
    assert echo.samples.max() == 32767 - 255
    assert echo.samples.min() == -32768
    assert echo.flags == (
        FrontEndFlag.SIMULATED | FrontEndFlag.LEFT_CLIPPED | FrontEndFlag.RIGHT_CLIPPED
    )
    quiet = bench_source(HEAD, poles((0.8, 0.0)), SimulatorConfig()).echo(0)
    assert quiet.flags == FrontEndFlag.SIMULATED


def test_gain_curve_is_applied_and_told():
    config = dataclasses.replace(CLEAN, source_level=0.1)
    rising = dataclasses.replace(config, gain_slope_db_per_s=1000.0, gain_limit_db=12.0)
    plain = bench_source(HEAD, poles((1.0, 0.0), (3.0, 0.0)), config).echo(0)
    echo = bench_source(HEAD, poles((1.0, 0.0), (3.0, 0.0)), rising).echo(0)
    time_s, _ = envelope(echo)
    assert plain.gain is None
    restored = echo.samples / echo.gain.amplitude(time_s)
    np.testing.assert_allclose(restored, plain.samples, atol=2.0)
    assert echo.gain.amplitude(np.array([1.0]))[0] == pytest.approx(10.0 ** (12.0 / 20.0))


@pytest.mark.parametrize("name", HEADS)
def test_crosstalk_covers_the_first_two_milliseconds_and_no_more(name):
    source = bench_source(HEADS[name], World("empty"), dataclasses.replace(CLEAN))
    loud = bench_source(
        HEADS[name], World("empty"), dataclasses.replace(CLEAN, crosstalk_level=0.4)
    )
    assert np.max(np.abs(source.echo(0).samples)) <= 1
    time_s, values = envelope(loud.echo(0))
    assert values.max(axis=1) == pytest.approx([0.4, 0.4], rel=0.03)
    default_noise = SimulatorConfig().noise_rms
    for ear in (0, 1):
        audible = time_s[values[ear] > default_noise]
        assert 1.2e-3 < audible[-1] < 2.2e-3
        assert audible[0] > -5e-5  # nothing before the emission


def test_clicks_come_on_top():
    config = SimulatorConfig(clicks_per_ping=4.0, crosstalk_level=0.0)
    source = bench_source(HEAD, World("empty"), config, n_pings=10)
    peaks = [np.abs(source.echo(k).samples).max() / 32768.0 for k in range(10)]
    assert np.median(peaks) > 6.0 * config.noise_rms


def test_doppler_shifts_the_carrier():
    path = RobotPath.along(Pose2(), (Waypoint(3.0, 0.0),), 1.0, 1.0)
    wall = World("w", (Surface("w", "wall", (4.0, -1.0), (4.0, 1.0)),))
    config = dataclasses.replace(CLEAN, burst_cycles=64.0, source_level=1.0, mount_x_m=0.0)
    source = SimulatorSource(HEAD, wall, path, config)
    k = 55
    speed = source.head_motion(source.emission_time_s(k)).velocity_m_s[0]
    assert speed == pytest.approx(1.0, abs=1e-6)
    truth = next(r for r in source.truth(k).reflectors if r.kind == "wall")
    echo = source.echo(k)
    analytic = signal.hilbert(echo.samples[0] / 32768.0)
    # The steady part of the echo: from 1.2 to 1.45 ms after its start.
    start = int((truth.tof_s[0] - echo.first_sample_offset_s + 1.2e-3) * echo.sample_rate_hz)
    phase = np.unwrap(np.angle(analytic[start : start + 50]))
    frequency_hz = np.polyfit(np.arange(50), phase, 1)[0] * echo.sample_rate_hz / (2 * math.pi)
    c = source.speed_of_sound_m_s
    assert frequency_hz == pytest.approx(40e3 * (c + speed) / (c - speed), abs=15.0)
    assert frequency_hz - 40e3 == pytest.approx(233.0, abs=20.0)


def test_gain_and_phase_mismatch_are_left_minus_right():
    odd = dataclasses.replace(HEAD, gain_mismatch_db=3.0, phase_mismatch_rad=0.5)
    plain = bench_source(HEAD, poles((1.0, 0.0)), CLEAN).echo(0)
    echo = bench_source(odd, poles((1.0, 0.0)), CLEAN).echo(0)

    def analytic(e):
        return signal.hilbert(e.samples.astype(float), axis=1)[:, 1280:1400]

    ratio = np.sum(analytic(echo) * np.conj(analytic(plain)), axis=1) / np.sum(
        np.abs(analytic(plain)) ** 2, axis=1
    )
    difference = ratio[0] / ratio[1]
    assert 20.0 * math.log10(abs(difference)) == pytest.approx(3.0, abs=0.02)
    assert np.angle(difference) == pytest.approx(0.5, abs=5e-3)


@needs_echo_data
@pytest.mark.parametrize("name", ["calibration_head_a", "calibration_head_b"])
def test_samples_against_the_shared_echo_data(name):
    """Same unit, same pole: our waveform is theirs, up to noise, level and the pole's radius."""
    from scipy.optimize import brentq
    from shared_units import unit_of

    from ros_echo_perception.core.air import speed_of_sound
    from ros_echo_perception.sources.recording import load_recording

    recording = load_recording(ECHO_DATA / "scenes" / name)
    unit, truth = unit_of(recording), recording.truth
    humidity = truth["relative_humidity"]
    # Their formula for the speed of sound differs by 0.03 %: take the air that has their speed.
    temperature_c = brentq(
        lambda t: speed_of_sound(t, humidity) - truth["speed_of_sound_m_s"], 0.0, 40.0
    )
    echo = recording.echo(0)
    config = dataclasses.replace(
        CLEAN, temperature_c=temperature_c, relative_humidity=humidity,
        lead_s=-echo.first_sample_offset_s, source_level=0.3,
    )  # fmt: skip
    reflectors = [ping["reflectors"][0] for ping in truth["pings"]]
    worlds = [poles((r["range_m"], r["bearing_rad"]), radius_m=0.02) for r in reflectors]
    source = bench_source(unit, worlds, config)
    gains, checked = [], 0
    for k, reflector in enumerate(reflectors):
        ours = source.truth(k).reflectors[0]
        np.testing.assert_allclose(ours.tof_s, reflector["tof_s"], atol=0.2e-6)
        assert ours.bearing_rad == pytest.approx(reflector["bearing_rad"], abs=1e-5)
        for ear in (0, 1):
            if reflector["snr_db"][ear] < 42.0:
                continue
            start = int((reflector["tof_s"][ear] + config.lead_s) * echo.sample_rate_hz)
            x, y = (
                signal.hilbert(e.samples[ear].astype(float))[start : start + 150]
                for e in (recording.echo(k), source.echo(k))
            )
            likeness = np.vdot(y, x) / math.sqrt(np.vdot(x, x).real * np.vdot(y, y).real)
            assert abs(likeness) > 0.99
            assert abs(np.angle(likeness)) < math.radians(15.0)
            gains.append(20.0 * math.log10(abs(np.vdot(y, x) / np.vdot(y, y).real)))
            checked += 1
    assert checked > 10
    assert np.std(gains) < 0.15  # directivity and spreading agree over the whole grid
