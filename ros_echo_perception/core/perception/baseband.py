"""From samples to complex baseband: one filter, one decimation, phase kept."""

from __future__ import annotations

import math
from dataclasses import dataclass
from functools import lru_cache

import numpy as np
from scipy.signal import firwin, upfirdn

from ..head import Head
from ..types import BoolArray, ComplexArray, FloatArray, IndexArray, RawEcho

_RATE_PER_BANDWIDTH = 4.0
"""Complex rate over the widest receiver bandwidth: the pulse's skirts fit, noise stays white."""
_TAPS_PER_STEP = 10


@dataclass(frozen=True)
class ReceiverFilter:
    """Linear-phase low-pass about the carrier that decimates by a whole number."""

    sample_rate_hz: float
    carrier_hz: float
    decimation: int

    @property
    def step_s(self) -> float:
        """Time between complex samples."""
        return self.decimation / self.sample_rate_hz

    @property
    def delay_samples(self) -> int:
        """Delay of the filter in input samples (half its length)."""
        return self.decimation * _TAPS_PER_STEP // 2

    def taps(self) -> FloatArray:
        """Low-pass taps with gain 2, so that magnitude means envelope."""
        return _low_pass(self.decimation)

    def response(self, offset_hz: FloatArray) -> FloatArray:
        """Real (zero-phase) response at offsets from the carrier, 1 in the pass band."""
        taps = self.taps() / 2.0
        k = np.arange(taps.size) - self.delay_samples
        phase = 2.0 * math.pi * np.outer(offset_hz / self.sample_rate_hz, k)
        return np.asarray(np.cos(phase) @ taps)


@lru_cache(maxsize=16)
def _low_pass(decimation: int) -> FloatArray:
    # Corner at half the complex rate: neighbouring noise samples stay uncorrelated.
    taps: FloatArray = firwin(_TAPS_PER_STEP * decimation + 1, 1.0 / decimation)
    return 2.0 * taps


@lru_cache(maxsize=16)
def _band_pass(receiver: ReceiverFilter) -> ComplexArray:
    taps = receiver.taps()
    k = np.arange(taps.size) - receiver.delay_samples
    turn = 2j * math.pi * receiver.carrier_hz / receiver.sample_rate_hz
    return np.asarray(taps * np.exp(turn * k))


def receiver_filter(head: Head, sample_rate_hz: float, carrier_hz: float) -> ReceiverFilter:
    """The filter for a head and a sample rate."""
    bandwidth_hz = max(ear.half_power_bandwidth_hz for ear in head.receivers)
    decimation = int(sample_rate_hz / (_RATE_PER_BANDWIDTH * bandwidth_hz))
    decimation = max(2, decimation - decimation % 2)
    return ReceiverFilter(sample_rate_hz, carrier_hz, decimation)


@dataclass(frozen=True, eq=False)
class Baseband:
    """Complex envelopes of both ears.

    Attributes
    ----------
    samples
        complex, shape (2, n); magnitude is the envelope as a fraction of full scale, as it
        would be without the receiver's gain curve.
    time_s
        shape (n,), since the emission.
    step_s
        Time between samples.
    clipped
        bool, shape (2, n): a clipped converter sample took part.
    gain
        shape (n,): amplitude of the gain curve, already divided out of ``samples``.
    """

    samples: ComplexArray
    time_s: FloatArray
    step_s: float
    clipped: BoolArray
    gain: FloatArray


def to_baseband(echo: RawEcho, receiver: ReceiverFilter) -> Baseband:
    """Demodulate at the carrier, low-pass and decimate both ears.

    Parameters
    ----------
    echo : n_samples per ear.
    receiver : made by `receiver_filter` for the echo's sample rate.

    Notes
    -----
    y[k] = exp(-j w t_k) sum_i h[i] exp(j w i / fs) x[k M - i]: the band-pass form of the
    demodulator, so that the carrier is multiplied at the low rate only. A constant offset lies
    a carrier away from the pass band and needs no other treatment.
    """
    centred = echo.samples - np.median(echo.samples, axis=1, keepdims=True)
    scaled = centred / echo.full_scale
    filtered = upfirdn(_band_pass(receiver), scaled, down=receiver.decimation, axis=1)
    skip = -(-receiver.delay_samples // receiver.decimation)
    count = (echo.n_samples - 1) // receiver.decimation + 1
    filtered = filtered[:, skip : skip + count]
    sample_index = (skip + np.arange(filtered.shape[1])) * receiver.decimation
    sample_index = sample_index - receiver.delay_samples
    time_s = echo.first_sample_offset_s + sample_index / echo.sample_rate_hz
    mixed = filtered * np.exp(-2j * math.pi * receiver.carrier_hz * time_s)
    gain = echo.gain.amplitude(time_s) if echo.gain is not None else np.ones(time_s.size)
    return Baseband(
        samples=mixed / gain,
        time_s=time_s,
        step_s=receiver.step_s,
        clipped=_clipped(echo, receiver, sample_index),
        gain=gain,
    )


def _clipped(echo: RawEcho, receiver: ReceiverFilter, sample_index: IndexArray) -> BoolArray:
    result = np.zeros((2, sample_index.size), bool)
    full = echo.full_scale
    # The highest positive code of an N-bit converter in 16 bits is one step below full scale.
    hit = (echo.samples <= -full) | (echo.samples >= full - _converter_step(echo))
    if not hit.any():
        return result
    for ear in range(2):
        count = np.concatenate(([0], np.cumsum(hit[ear])))
        low = np.clip(sample_index - receiver.decimation, 0, echo.n_samples)
        high = np.clip(sample_index + receiver.decimation + 1, 0, echo.n_samples)
        result[ear] = count[high] > count[low]
    return result


def _converter_step(echo: RawEcho) -> int:
    """One step of the converter in stored codes: the largest power of two dividing them all."""
    bits = int(np.bitwise_or.reduce(echo.samples, axis=None))
    return (bits & -bits) if bits else 1
