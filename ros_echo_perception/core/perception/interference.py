"""What is not an echo: spikes of the converter and clicks that ring a receiver.

A click excites the receiver's resonance alone, so it rises faster and rings otherwise than a
burst that has passed the transmitter too; a converter spike is as short as the filter allows.
Each has one delay and one complex height in each ear, fewer unknowns than an object.
"""

from __future__ import annotations

from dataclasses import dataclass
from functools import lru_cache

import numpy as np

from ..acoustics import resonance_response
from ..head import Head, Transducer
from ..types import ComplexArray, FloatArray
from . import kernels_ear
from .baseband import ReceiverFilter
from .conditioning import Conditioned

_FINE = 4
_SPAN_S = 2.5e-3
_LEAD_S = 0.6e-3
_CLEAN_NATS = 8.0


@dataclass(frozen=True, eq=False)
class Click:
    """Interference that explains a stretch of a ping.

    ``gain`` is the log-likelihood gain in nats, ``sound`` complex (2, window) what it adds.
    """

    gain: float
    window: slice
    sound: ComplexArray
    misfit: float


def find_click(
    head: Head, receiver: ReceiverFilter, ping: Conditioned, samples: ComplexArray, time_s: float
) -> Click:
    """The spike or click that explains most around a time, in each ear on its own.

    Parameters
    ----------
    samples : complex (2, n), what is to be explained.
    time_s : where the disturbance peaks, since emission.
    """
    start = int(np.searchsorted(ping.time_s, time_s - 1.2e-3))
    stop = int(np.searchsorted(ping.time_s, time_s + 2.0e-3))
    window = slice(start, stop)
    time = ping.time_s[window]
    near = time_s + np.arange(-0.5e-3, 0.35e-3, ping.step_s / _FINE)
    sound = np.zeros((2, time.size), complex)
    gain, count = 0.0, 0
    for ear in range(2):
        weight = ping.weight[ear, window]
        if not weight.any():
            continue
        best = max(
            (
                _best_delay(shape, receiver, time, near, weight, samples[ear, window])
                for shape in _shapes(head.receivers[ear], receiver)
            ),
            key=lambda found: found[0],
        )
        gain += best[0]
        sound[ear] = best[1]
        count += int(np.count_nonzero(weight))
    left = (samples[:, window] - sound) * ping.weight[:, window]
    misfit = float(np.vdot(left, left).real) - count
    return Click(gain, window, sound, misfit)


def is_click(click: Click, object_gain: float, margin: float) -> bool:
    """Whether the disturbance is interference rather than an echo.

    It must beat the best object by a margin and leave hardly more than noise, so that two
    overlapping echoes, which neither explains, stay echoes.
    """
    return click.gain > object_gain + margin and click.misfit < _CLEAN_NATS + 0.05 * click.gain


def _best_delay(
    shape: ComplexArray,
    receiver: ReceiverFilter,
    time: FloatArray,
    delays: FloatArray,
    weight: FloatArray,
    samples: ComplexArray,
) -> tuple[float, ComplexArray]:
    fine = receiver.step_s / 16
    position, shift = (time + _LEAD_S) / fine, delays / fine
    return kernels_ear.best_delay(shape, position, shift, weight, samples)


@lru_cache(maxsize=16)
def _shapes(ear: Transducer, receiver: ReceiverFilter) -> tuple[ComplexArray, ComplexArray]:
    """Complex envelopes of a spike and of a click, every 1/16 step, from -0.6 ms on."""
    fine = receiver.step_s / 16
    n = int(2 * _SPAN_S / fine)
    offset_hz = np.fft.fftfreq(n, fine)
    band = np.abs(offset_hz) < min(0.9 * receiver.carrier_hz, 1.5 / receiver.step_s)
    flat = np.zeros(n, complex)
    flat[band] = receiver.response(offset_hz[band]) * np.exp(
        -2j * np.pi * offset_hz[band] * _LEAD_S
    )
    ringing = flat.copy()
    ringing[band] *= resonance_response(ear, receiver.carrier_hz + offset_hz[band])
    spike, click = np.fft.ifft(flat), np.fft.ifft(ringing)
    keep = int((_LEAD_S + _SPAN_S) / fine)
    return spike[:keep] / np.abs(spike).max(), click[:keep] / np.abs(click).max()
