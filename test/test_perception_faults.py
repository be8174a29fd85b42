"""Faults of the front end: recognised, flagged, and survived."""

import dataclasses
import math

import numpy as np
import pytest
from perception_helpers import HEAD, HEADS, noise_echo, simulated

from ros_echo_perception.core.perception.config import ProcessingConfig
from ros_echo_perception.core.perception.pipeline import EchoPipeline
from ros_echo_perception.core.types import (
    DetectionFlag,
    Ears,
    FrontEndFlag,
    PingFlag,
    PingResult,
    RawEcho,
)

HEAD_NAMES = sorted(HEADS)


def process(echo, head=HEAD, **settings):
    return EchoPipeline(head, ProcessingConfig(**settings)).process(echo)


def assert_sane(result):
    assert isinstance(result, PingResult)
    assert result.range_min_m >= 0.0
    for d in result.detections:
        for value in (d.range_m, d.bearing_rad, d.range_sigma_m, d.bearing_sigma_rad):
            assert math.isfinite(value)
        assert d.range_sigma_m > 0.0
        assert d.bearing_sigma_rad > 0.0
        assert d.bearing_min_rad <= d.bearing_max_rad
        assert 0.0 <= d.existence_probability <= 1.0
        # An echo whose beginning the record still holds may lie a little beyond.
        assert result.range_min_m <= d.range_m <= result.range_max_m + 0.06


@pytest.mark.parametrize("name", HEAD_NAMES)
@pytest.mark.parametrize("dead", [0, 1])
@pytest.mark.parametrize("how", ["constant", "faint noise", "reported"])
def test_a_dead_ear_leaves_one_sided_echoes_over_the_whole_beam(name, dead, how):
    head = HEADS[name]
    (echo,), _ = simulated([(1.1, 0.15)], head)
    samples = echo.samples.copy()
    flags = echo.flags
    if how == "constant":
        samples[dead] = 160
    elif how == "faint noise":
        samples[dead] = np.random.default_rng(2).integers(-2, 3, samples.shape[1]) * 16
    else:
        flags |= (FrontEndFlag.LEFT_FAULT, FrontEndFlag.RIGHT_FAULT)[dead]
    result = process(dataclasses.replace(echo, samples=samples, flags=flags), head)
    flag, other = (PingFlag.LEFT_DEAD, PingFlag.RIGHT_DEAD)[:: 1 - 2 * dead]
    assert flag in result.flags
    assert other not in result.flags
    assert_sane(result)
    (found,) = result.detections
    assert found.ears is (Ears.RIGHT_ONLY, Ears.LEFT_ONLY)[dead]
    # Nothing tells the bearing: a few centimetres of range go with it.
    assert found.range_m == pytest.approx(1.1, abs=0.03)
    assert found.bearing_min_rad < -0.3
    assert found.bearing_max_rad > 0.3
    assert found.bearing_sigma_rad > 0.2
    assert math.isnan(found.ear_amplitude[dead])
    assert found.ear_snr_db[dead] == -math.inf
    assert math.isfinite(found.snr_db)
    assert math.isnan(result.noise[dead])
    assert result.noise[1 - dead] > 0.0


@pytest.mark.parametrize(("overload", "within_m"), [(1.5, 0.03), (2.5, 0.03), (10.0, 0.12)])
def test_a_clipped_echo_is_flagged_and_its_range_still_good(overload, within_m):
    # A pole 0.5 m ahead, its echo as many times full scale. What is clipped is left out, and the
    # flanks that remain tell the less the more is missing: 20 dB over leaves a decimetre.
    (weak,), source = simulated([(0.5, 0.1)], source_level=0.2, crosstalk_level=0.0)
    peak = max(source.truth(0).reflectors[0].peak)
    (echo,), _ = simulated([(0.5, 0.1)], source_level=0.2 * overload / peak, crosstalk_level=0.0)
    assert process(weak).flags & (PingFlag.LEFT_CLIPPED | PingFlag.RIGHT_CLIPPED) == 0
    result = process(echo)
    assert PingFlag.LEFT_CLIPPED in result.flags
    assert_sane(result)
    found = min(result.detections, key=lambda d: abs(d.range_m - 0.5))
    assert found.range_m == pytest.approx(0.5, abs=within_m)
    assert DetectionFlag.SATURATED in found.flags


def test_a_drifting_offset_is_flagged_and_harmless():
    (echo,), _ = simulated([(1.2, -0.2)])
    drift = np.linspace(-2500.0, 2500.0, echo.n_samples)
    moved = dataclasses.replace(echo, samples=(echo.samples + drift).astype(np.int16))
    steady, drifting = process(echo), process(moved)
    assert PingFlag.OFFSET_DRIFT in drifting.flags
    assert PingFlag.OFFSET_DRIFT not in steady.flags
    (a,), (b,) = steady.detections, drifting.detections
    assert b.range_m == pytest.approx(a.range_m, abs=1e-3)
    assert b.bearing_rad == pytest.approx(a.bearing_rad, abs=0.01)


def test_a_record_that_starts_after_the_direct_pulse_serves_as_well():
    (echo,), _ = simulated([(1.2, 0.2)])
    cut = int(round((0.003 - echo.first_sample_offset_s) * echo.sample_rate_hz))
    late = dataclasses.replace(
        echo,
        samples=echo.samples[:, cut:],
        first_sample_offset_s=echo.first_sample_offset_s + cut / echo.sample_rate_hz,
    )
    (a,), (b,) = process(echo).detections, process(late).detections
    assert b.range_m == pytest.approx(a.range_m, abs=1e-3)
    assert b.bearing_rad == pytest.approx(a.bearing_rad, abs=5e-3)


def test_the_direct_pulse_hides_what_is_nearer_than_stated():
    (loud,), _ = simulated([(1.0, 0.0)], crosstalk_level=0.5)
    (silent,), _ = simulated([(1.0, 0.0)], crosstalk_level=0.0)
    blind, seeing = process(loud), process(silent)
    assert 0.1 < blind.range_min_m < 0.6
    assert seeing.range_min_m < 0.1
    assert blind.envelope.blanking_end_s > 2.0 * 0.1 / 343.0
    assert all(d.range_m > blind.range_min_m for d in blind.detections)


def test_range_max_is_where_the_record_ends():
    (echo,), _ = simulated([(1.0, 0.0)], record_s=0.012)
    result = process(echo)
    # Half the way that sound makes in the record, less the pulse's build-up.
    assert result.range_max_m < 343.0 * echo.end_time_s / 2.0
    assert result.range_max_m > 343.0 * echo.end_time_s / 2.0 - 0.15


def test_flags_of_the_front_end_pass_through():
    (echo,), _ = simulated([(1.0, 0.0)])
    assert PingFlag.SIMULATED in process(echo).flags
    replayed = dataclasses.replace(echo, flags=FrontEndFlag.REPLAYED | FrontEndFlag.RIGHT_CLIPPED)
    flags = process(replayed).flags
    assert PingFlag.REPLAYED in flags
    assert PingFlag.RIGHT_CLIPPED in flags
    assert PingFlag.SIMULATED not in flags


def test_a_burst_that_calibration_did_not_see_is_flagged():
    known = dataclasses.replace(HEAD, calibration={"burst_cycles": [3.0], "model_error": 0.02})
    (three,), _ = simulated([(1.0, 0.0)])
    (eight,), _ = simulated([(1.0, 0.0)], burst_cycles=8.0)
    assert PingFlag.BURST_UNCALIBRATED not in process(three, known).flags
    result = process(eight, known)
    assert PingFlag.BURST_UNCALIBRATED in result.flags
    assert result.detections[0].range_m == pytest.approx(1.0, abs=5e-3)


def test_full_scale_noise_is_survived():
    rng = np.random.default_rng(1)
    for samples in (
        20000.0 * rng.standard_normal((2, 7200)),
        rng.choice([-32768, 32767], (2, 7200)),
        np.full((2, 7200), 32767),
    ):
        samples = np.clip(samples, -32768, 32767)
        echo = RawEcho(samples.astype(np.int16), 200e3, 40e3, 3.0, 0.0, temperature_c=20.0)
        result = process(echo)
        assert_sane(result)
        assert PingFlag.LEFT_CLIPPED in result.flags
        assert len(result.detections) <= 12


@pytest.mark.parametrize("n", [64, 65, 100, 257, 1000])
def test_tiny_records_are_survived(n):
    for echo in (noise_echo(1, n=n), noise_echo(2, n=n, first_sample_offset_s=-2e-4)):
        assert_sane(process(echo))


@pytest.mark.parametrize("value", [0, 1, -200])
def test_silence_is_two_dead_ears_and_nothing_heard(value):
    echo = RawEcho(np.full((2, 7200), value, np.int16), 200e3, 40e3, 3.0, 0.0)
    result = process(echo)
    assert result.detections == ()
    assert PingFlag.LEFT_DEAD in result.flags
    assert PingFlag.RIGHT_DEAD in result.flags
    assert all(math.isnan(n) for n in result.noise)


@pytest.mark.parametrize(
    "changes",
    [
        {"temperature_c": 500.0}, {"temperature_c": -300.0}, {"relative_humidity": 7.0},
        {"first_sample_offset_s": 5.0}, {"first_sample_offset_s": -1.0}, {"burst_cycles": 500.0},
        {"burst_cycles": 0.1}, {"full_scale": 1.0},
    ],
)  # fmt: skip
def test_odd_but_possible_values_are_survived(changes):
    (echo,), _ = simulated([(1.0, 0.0)], record_s=0.012)
    assert_sane(process(dataclasses.replace(echo, **changes)))


def test_many_random_pings_are_survived():
    """Fuzz: whatever arrives, a result comes out, and nothing warns."""
    rng = np.random.default_rng(17)
    for _ in range(25):
        n = int(rng.integers(64, 1500))
        scale = 10.0 ** rng.uniform(0.0, 4.5)
        samples = np.clip(scale * rng.standard_cauchy((2, n)), -32768, 32767).astype(np.int16)
        rate_hz = float(rng.choice([96e3, 192e3, 250e3, 1e6]))
        echo = RawEcho(
            samples, rate_hz, 40e3, float(rng.choice([1.0, 3.0, 16.0])), 0.0,
            float(rng.uniform(-1e-3, 3e-3)), temperature_c=float(rng.uniform(-30, 50)),
        )  # fmt: skip
        assert_sane(process(echo))


def test_at_most_as_many_echoes_as_asked_for():
    places = [(0.6 + 0.25 * k, -0.4 + 0.16 * k) for k in range(6)]  # none behind another
    (echo,), _ = simulated(places)
    assert len(process(echo).detections) == 6
    few = process(echo, max_echoes=2)
    assert len(few.detections) == 2
    assert_sane(few)
