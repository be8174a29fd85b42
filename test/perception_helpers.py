"""Pings for the tests of perception: made by formula at the baseband, or by the simulator."""

import dataclasses
import math

import numpy as np
from echo_data import ROOT

from ros_echo_perception.core.head import load_head
from ros_echo_perception.core.perception.baseband import receiver_filter
from ros_echo_perception.core.perception.conditioning import Conditioned
from ros_echo_perception.core.perception.joint import Priors, excerpt, refine, signals, window_of
from ros_echo_perception.core.perception.model import HeadModel
from ros_echo_perception.core.perception.objects import Objects
from ros_echo_perception.core.types import PingFlag, RawEcho
from ros_echo_perception.sources.bench import bench_source, poles
from ros_echo_perception.sources.simulator_config import SimulatorConfig

HEADS = {n: load_head(ROOT / "config" / "heads" / f"{n}.yaml") for n in ("sparrow_52", "heron_180")}
HEAD = HEADS["sparrow_52"]
SPEED = 343.5
STILL = Priors(velocity_sigma_m_s=1e-4, max_bearing_rad=1.22)
"""Nothing moves: range, bearing and strength alone are unknown."""


def head_model(head=HEAD, burst=3.0, rate_hz=None):
    receiver = receiver_filter(head, rate_hz or head.sample_rate_hz, head.carrier_hz)
    return HeadModel(head, SPEED, burst, receiver)


def objects(*places, velocity=0.0):
    """From (range_m, bearing_rad, complex strength)."""
    r, b, a = (np.array(part) for part in zip(*places, strict=True))
    speed = np.full(r.size, float(velocity))
    return Objects(r.astype(float), b.astype(float), speed, a.astype(complex))


def noise(rng, shape):
    """Complex, of variance 1."""
    return (rng.standard_normal(shape) + 1j * rng.standard_normal(shape)) / math.sqrt(2.0)


def baseband_ping(model, found, rng=None, end_s=0.016):
    """Objects in white noise of variance 1, as `condition` would hand it on; weights are 1."""
    step = model.receiver.step_s
    time_s = step * np.arange(int(end_s / step))
    samples = np.zeros((2, time_s.size), complex)
    if len(found):
        samples += np.tensordot(found.strength, signals(model, found, time_s).value, axes=(0, 1))
    if rng is not None:
        samples += noise(rng, samples.shape)
    nothing = np.zeros(samples.shape, bool)
    return Conditioned(
        samples, np.ones(samples.shape), time_s, step, (1.0, 1.0), (True, True), nothing, 0.0,
        PingFlag.NONE,
    )  # fmt: skip


def strength_for(model, range_m, bearing_rad, energy_snr_db):
    """Strength at which an object has this 2 E / N0, both ears together.

    In white complex noise of variance 1 a sample, 2 E / N0 is twice the sum of |s|^2.
    """
    one = objects((range_m, bearing_rad, 1.0))
    step = model.receiver.step_s
    time_s = 2.0 * range_m / SPEED + step * np.arange(-200, 600)
    energy = 2.0 * float(np.sum(np.abs(signals(model, one, time_s).value) ** 2))
    return math.sqrt(10.0 ** (energy_snr_db / 10.0) / energy)


def fit(model, ping, start, priors=STILL):
    """The refined objects of a ping, started somewhere."""
    data = excerpt(ping, ping.samples, window_of(model, ping, start))
    return refine(model, data, [start], priors)[0]


def simulated(places, head=HEAD, n=1, radius_m=0.02, **config):
    """Pings of poles at (range_m, bearing_rad), with their source; air exactly known."""
    settings = {"temperature_error_c": 0.0, "humidity_error": 0.0} | config
    source = bench_source(
        head, poles(*places, radius_m=radius_m), SimulatorConfig(**settings), n_pings=n
    )
    return [source.echo(k) for k in range(n)], source


def tone_burst(delays, amplitudes=(0.3, 0.2), rate_hz=200e3, carrier_hz=40e3, n=3001, **changes):
    """A Gaussian envelope of 0.2 ms sigma on the carrier in each ear, phase 0 at its delay."""
    offset_s = changes.pop("first_sample_offset_s", -1e-3)
    sigma_s = changes.pop("sigma_s", 2e-4)
    time_s = offset_s + np.arange(n) / rate_hz
    lag = time_s - np.asarray(delays)[:, None]
    wave = np.exp(-0.5 * (lag / sigma_s) ** 2) * np.cos(2.0 * math.pi * carrier_hz * lag)
    samples = np.rint(32768.0 * np.asarray(amplitudes)[:, None] * wave).astype(np.int16)
    return RawEcho(
        samples, rate_hz, carrier_hz, 3.0, 0.0, offset_s, **({"temperature_c": 20.0} | changes)
    )


def noise_echo(seed, head=HEAD, rms=0.002, n=7200, **changes):
    """Nothing but white noise."""
    rng = np.random.default_rng([77, seed])
    samples = np.rint(32768.0 * rms * rng.standard_normal((2, n))).astype(np.int16)
    return RawEcho(
        samples, head.sample_rate_hz, head.carrier_hz, 3.0, 0.0,
        **({"temperature_c": 20.0, "relative_humidity": 0.5} | changes),
    )  # fmt: skip


def mirrored_head(head):
    """The head seen in a mirror that swaps left and right."""

    def mirrored(transducer):
        x, y, z = transducer.position_m
        return dataclasses.replace(transducer, position_m=(x, -y, z), yaw_rad=-transducer.yaw_rad)

    return dataclasses.replace(
        head,
        transmitter=mirrored(head.transmitter),
        left=mirrored(head.right),
        right=mirrored(head.left),
        gain_mismatch_db=-head.gain_mismatch_db,
        phase_mismatch_rad=-head.phase_mismatch_rad,
    )
