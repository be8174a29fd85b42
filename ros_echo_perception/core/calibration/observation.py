"""One calibration ping: the baseband around the pole's echo, and its misfit to a head."""

from __future__ import annotations

import math
from dataclasses import dataclass

import numpy as np

from ..air import speed_of_sound
from ..head import Head
from ..perception.baseband import Baseband, ReceiverFilter, receiver_filter, to_baseband
from ..perception.conditioning import noise_sigma
from ..perception.joint import signals
from ..perception.model import HeadModel
from ..perception.objects import one_object
from ..types import ComplexArray, FloatArray, RawEcho

_BEFORE_S, _AFTER_S = 0.5e-3, 1.9e-3
_MODEL_ERROR = 0.01
_DIRECT_END_S = 2.2e-3
_CLEAR_NATS = 300.0


@dataclass(frozen=True, eq=False)
class Observation:
    """A ping, the pole's place, and the samples to be explained.

    Attributes
    ----------
    samples, weight
        shape (2, n): complex baseband around the echo and 1 / its standard deviation (0 where
        the direct pulse or clipping hides it).
    """

    echo: RawEcho
    range_m: float
    bearing_rad: float
    samples: ComplexArray
    weight: FloatArray
    time_s: FloatArray
    receiver: ReceiverFilter


def observe(echo: RawEcho, range_m: float, bearing_rad: float, nominal: Head) -> Observation:
    """Cut the echo out of a ping."""
    receiver = receiver_filter(nominal, echo.sample_rate_hz, echo.carrier_hz)
    baseband = to_baseband(echo, receiver)
    model = _model(echo, nominal, receiver, 0.0)
    delay = model.geometry(np.array(range_m), np.array(bearing_rad)).delay_s
    first = int(np.searchsorted(baseband.time_s, float(delay.min()) - _BEFORE_S))
    last = int(np.searchsorted(baseband.time_s, float(delay.max()) + _AFTER_S))
    part = slice(first, last)
    samples = baseband.samples[:, part]
    time_s = baseband.time_s[part]
    weight = np.zeros(samples.shape)
    for ear in range(2):
        noise = noise_sigma(baseband.samples[ear], baseband, model.pulses[ear])
        sigma = np.hypot(noise, _MODEL_ERROR * np.abs(samples[ear]))
        known = ~baseband.clipped[ear, part] & (time_s > _hidden_until(baseband, ear, noise))
        weight[ear] = np.where(known, 1.0 / np.maximum(sigma, 1e-12), 0.0)
    return Observation(echo, range_m, bearing_rad, samples, weight, time_s, receiver)


def _hidden_until(baseband: Baseband, ear: int, noise: float) -> float:
    early = (baseband.time_s >= 0.0) & (baseband.time_s < _DIRECT_END_S)
    loud = np.abs(baseband.samples[ear]) > 4.0 * noise
    return _DIRECT_END_S if bool(np.any(early & loud)) else 0.0


def residual(observation: Observation, head: Head, temperature_error_k: float) -> FloatArray:
    """Weighted misfit, real and imaginary parts; the strength is the best one.

    Scaled so that noise alone gives each element variance 1.
    """
    rendered, target = _rendered(observation, head, temperature_error_k)
    strength = np.vdot(rendered, target) / max(float(np.vdot(rendered, rendered).real), 1e-30)
    left = (target - strength * rendered) * math.sqrt(2.0)
    return np.concatenate([left.real, left.imag])


def signal_share(observation: Observation, head: Head) -> float:
    """Energy of the echo that a head explains, in units of the noise."""
    rendered, target = _rendered(observation, head, 0.0)
    energy = max(float(np.vdot(rendered, rendered).real), 1e-30)
    return float(abs(np.vdot(rendered, target)) ** 2) / energy


def level_mismatch(
    observation: Observation, head: Head, temperature_error_k: float
) -> float | None:
    """Log of the level ratio left / right, measured over modelled; None where noise decides."""
    rendered, target = _rendered(observation, head, temperature_error_k)
    heard = []
    for part, signal in zip(np.split(target, 2), np.split(rendered, 2), strict=True):
        energy = float(np.vdot(signal, signal).real)
        match = abs(np.vdot(signal, part))
        if energy <= 0.0 or match**2 < _CLEAR_NATS * energy:
            return None
        heard.append(match / energy)
    return math.log(heard[0] / heard[1])


def _rendered(
    observation: Observation, head: Head, temperature_error_k: float
) -> tuple[ComplexArray, ComplexArray]:
    model = _model(observation.echo, head, observation.receiver, temperature_error_k)
    one = one_object(observation.range_m, observation.bearing_rad, 1.0)
    value = signals(model, one, observation.time_s).value[:, 0, :]
    target = observation.samples * observation.weight
    return (value * observation.weight).ravel(), target.ravel()


def _model(
    echo: RawEcho, head: Head, receiver: ReceiverFilter, temperature_error_k: float
) -> HeadModel:
    temperature = echo.temperature_c if math.isfinite(echo.temperature_c) else 20.0
    humidity = echo.relative_humidity if math.isfinite(echo.relative_humidity) else 0.5
    speed = speed_of_sound(temperature - temperature_error_k, min(max(humidity, 0.0), 1.0))
    return HeadModel(head, speed, echo.burst_cycles, receiver)
