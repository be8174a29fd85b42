"""Beams and absorption over the band: what makes an echo from aside duller than one ahead."""

import dataclasses
import math

import numpy as np
import pytest
from echo_data import ROOT
from scipy.special import j1
from test_simulator_signal import peak_of

from ros_echo_perception.core.acoustics import directivity, echo_spectrum
from ros_echo_perception.core.air import absorption_db_per_m
from ros_echo_perception.core.head import load_head
from ros_echo_perception.core.types import Pose2
from ros_echo_perception.sources.bench import bench_source, poles
from ros_echo_perception.sources.echo_paths import HeadMotion, trace
from ros_echo_perception.sources.path_filter import PathFilter, beam
from ros_echo_perception.sources.simulator_config import SimulatorConfig

HEADS = {n: load_head(ROOT / "config" / "heads" / f"{n}.yaml") for n in ("sparrow_52", "heron_180")}
CLEAN = SimulatorConfig(noise_rms=1e-7, adc_bits=16, crosstalk_level=0.0)
AROUND = np.radians(np.arange(-180.0, 180.5, 1.5))


@pytest.mark.parametrize("name", HEADS)
def test_beam_at_the_carrier_is_that_of_the_core(name):
    for transducer in (HEADS[name].transmitter, *HEADS[name].receivers):
        np.testing.assert_allclose(
            beam(transducer, AROUND, 1.0), directivity(transducer, AROUND), atol=1e-14
        )


@pytest.mark.parametrize("ratio", [0.9, 1.15])
def test_beam_at_another_frequency_is_that_of_a_larger_or_smaller_piston(ratio):
    # k a sin(angle): a piston at 1.15 f beams like one of 1.15 times the radius at f.
    horn = HEADS["heron_180"].transmitter
    width = 2.0 * math.asin(math.sin(horn.half_power_beam_width_rad / 2.0) / ratio)
    other = dataclasses.replace(horn, half_power_beam_width_rad=width)
    np.testing.assert_allclose(beam(horn, AROUND, ratio), directivity(other, AROUND), atol=1e-12)


def test_null_of_the_beam_moves_inwards():
    # First null of a piston at k a sin(angle) = 3.8317 (Morse and Ingard 1968, section 7.4); half
    # power at 1.6163.
    horn = dataclasses.replace(HEADS["sparrow_52"].transmitter, half_power_beam_width_rad=0.7)
    ka = 1.61634 / math.sin(0.35)
    for ratio in (0.9, 1.0, 1.1):
        null = math.asin(3.831706 / (ka * ratio))
        around = beam(horn, np.array([null - 0.01, null, null + 0.01]), ratio)
        assert abs(around[1]) < 1e-5
        assert around[0] > 1e-3 > -1e-3 > around[2]


def paths_at(head, range_m, bearing_rad):
    world = poles(*((range_m, b) for b in bearing_rad))
    return trace(world, head, HeadMotion(Pose2()), 343.0, 9.0)


@pytest.mark.parametrize("name", HEADS)
@pytest.mark.parametrize("cycles", [1.0, 3.0, 24.0])
@pytest.mark.parametrize("range_m", [0.5, 5.0])
def test_interpolation_against_every_single_frequency(name, cycles, range_m):
    head = HEADS[name]
    frequency = np.linspace(28e3, 52e3, 961)
    paths = paths_at(head, range_m, np.radians(np.arange(-180.0, 180.0, 10.0)))
    assert paths.length_m.shape == (2, 36)
    way = PathFilter(head, frequency, 21.0, 0.45)
    loss_db = absorption_db_per_m(frequency, 21.0, 0.45) * paths.length_m[..., None]
    for ear, receiver in enumerate(head.receivers):
        exact = 10.0 ** (-loss_db[ear] / 20.0)
        exact *= beam(head.transmitter, paths.departure_rad[ear, :, None], frequency / 40e3)
        exact *= beam(receiver, paths.arrival_rad[ear, :, None], frequency / 40e3)
        ours = way.over_band(way.at_nodes(paths)[ear])
        np.testing.assert_allclose(ours[:, [0, 480, -1]], exact[:, [0, 480, -1]], rtol=1e-9)
        pulse = echo_spectrum(head, ear, frequency, cycles)
        wrong, right = (
            np.abs(np.fft.ifft(part * pulse, 4096, axis=1)).max(axis=1)
            for part in (ours - exact, exact)
        )
        assert np.max(wrong / right) < 0.0005


@pytest.mark.parametrize("name", HEADS)
@pytest.mark.parametrize("bearing_rad", [-0.75, 0.4, 0.75])
def test_echo_from_aside_is_filtered_by_both_beams(name, bearing_rad):
    """Ratio of spectra of two simulated echoes against 2 J1(x)/x of both transducers."""
    head = HEADS[name]
    config = dataclasses.replace(CLEAN, source_level=4.0)
    source = bench_source(head, [poles((1.5, 0.0)), poles((1.5, bearing_rad))], config)
    ahead, aside = (np.fft.rfft(source.echo(k).samples / 32768.0, axis=1) for k in (0, 1))
    frequency = np.fft.rfftfreq(source.echo(0).n_samples, 1.0 / head.sample_rate_hz)
    band = np.abs(frequency - 40e3) < 2e3
    middle = int(np.argmin(np.abs(frequency[band] - 40e3)))

    def law(transducer, point):
        x, y, _ = transducer.position_m
        angle = math.atan2(point[1] - y, point[0] - x) - transducer.yaw_rad
        ka = 1.61634 / math.sin(transducer.half_power_beam_width_rad / 2.0)
        argument = ka * math.sin(angle) * frequency[band] / 40e3
        return 2.0 * j1(argument) / argument

    for ear, receiver in enumerate(head.receivers):
        measured = np.abs(aside[ear, band]) / np.abs(ahead[ear, band])
        expected = 1.0
        for bearing, power in ((bearing_rad, 1), (1e-9, -1)):
            point = 1.5 * math.cos(bearing), 1.5 * math.sin(bearing)
            both = law(head.transmitter, point) * law(receiver, point)
            expected = expected * np.abs(both) ** power
        np.testing.assert_allclose(
            measured / measured[middle], expected / expected[middle], atol=0.004
        )
        assert np.ptp(expected) / expected[middle] > (0.01 if bearing_rad == 0.4 else 0.05)


@pytest.mark.parametrize("name", HEADS)
@pytest.mark.parametrize("range_m", [0.7, 4.0])
def test_truth_knows_the_peak_of_a_filtered_echo(name, range_m):
    bearings = (-0.7, -0.3, 0.0, 0.5)
    config = dataclasses.replace(CLEAN, source_level=3.0 * range_m**1.5)
    source = bench_source(HEADS[name], [poles((range_m, b)) for b in bearings], config)
    for k in range(len(bearings)):
        truth = source.truth(k).reflectors[0]
        for ear in (0, 1):
            assert peak_of(source.echo(k), ear)[1] == pytest.approx(truth.peak[ear], rel=0.004)
