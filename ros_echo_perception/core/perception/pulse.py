"""The received pulse as a template: complex baseband, evaluated at any time."""

from __future__ import annotations

import math
from dataclasses import dataclass
from functools import lru_cache

import numpy as np

from ..acoustics import echo_spectrum
from ..head import Head
from ..types import ComplexArray, FloatArray
from .baseband import ReceiverFilter

_OVERSAMPLING = 32
_SPAN_S = 8e-3
_LEAD_S = 1e-3
_TAIL_AMPLITUDE = 3e-4
_CORE_AMPLITUDE = 0.02


@dataclass(frozen=True, eq=False)
class PulseTemplate:
    """Complex envelope of the pulse in one ear behind the receiver filter, peak magnitude 1.

    Times count from the start of the drive. ``table`` and ``slope`` (its derivative by time)
    are sampled every ``fine_step_s`` from ``first_time_s`` on; outside they are 0.
    """

    table: ComplexArray
    slope: ComplexArray
    first_time_s: float
    fine_step_s: float
    peak_time_s: float
    envelope_sigma_s: float
    energy_s: float
    noise_bandwidth_hz: float

    @property
    def start_s(self) -> float:
        """Before this the pulse is negligible."""
        return self.first_time_s

    @property
    def end_s(self) -> float:
        """After this the pulse is negligible."""
        return self.first_time_s + (self.table.size - 1) * self.fine_step_s

    def evaluate(self, time_s: FloatArray) -> tuple[ComplexArray, ComplexArray]:
        """Value and derivative at times of any shape; linear between the fine samples."""
        position = (time_s - self.first_time_s) / self.fine_step_s
        np.clip(position, 0.0, self.table.size - 1 - 1e-9, out=position)
        index = position.astype(np.intp)
        fraction = position - index
        value = self.table[index]
        value = value + fraction * (self.table[index + 1] - value)
        slope = self.slope[index]
        slope = slope + fraction * (self.slope[index + 1] - slope)
        return value, slope

    def sampled(self, step_s: float, offset_s: float = 0.0) -> ComplexArray:
        """Samples at start_s + offset_s + k * step_s over the whole support."""
        count = int((self.end_s - self.start_s - offset_s) / step_s) + 1
        return self.evaluate(self.start_s + offset_s + np.arange(count) * step_s)[0]


class PulsePair:
    """The templates of both ears on one time axis, looked up together."""

    def __init__(self, pulses: tuple[PulseTemplate, PulseTemplate]) -> None:
        self.start_s = min(p.start_s for p in pulses)
        self.end_s = max(p.end_s for p in pulses)
        self.core_start_s, self.core_end_s = _core(pulses)
        self._fine_step_s = pulses[0].fine_step_s
        self._size = int(round((self.end_s - self.start_s) / self._fine_step_s)) + 2
        self._table = np.zeros((2, 2 * self._size), complex)  # value and slope; both ears
        for ear, pulse in enumerate(pulses):
            first = int(round((pulse.first_time_s - self.start_s) / self._fine_step_s))
            part = slice(ear * self._size + first, ear * self._size + first + pulse.table.size)
            self._table[0, part] = pulse.table
            self._table[1, part] = pulse.slope

    def evaluate(self, time_s: FloatArray) -> tuple[ComplexArray, ComplexArray]:
        """Value and derivative at times of shape (2, ...), left ear first."""
        position = (time_s - self.start_s) / self._fine_step_s
        np.minimum(np.maximum(position, 0.0, out=position), self._size - 1 - 1e-9, out=position)
        index = position.astype(np.intp)
        fraction = position - index
        index[1] += self._size
        low = self._table[:, index]
        value, slope = low + fraction * (self._table[:, index + 1] - low)
        return value, slope


def _core(pulses: tuple[PulseTemplate, PulseTemplate]) -> tuple[float, float]:
    """Where the pulses are more than a fiftieth of their peak."""
    first, last = [], []
    for pulse in pulses:
        strong = np.nonzero(np.abs(pulse.table) > _CORE_AMPLITUDE)[0]
        first.append(pulse.first_time_s + float(strong[0]) * pulse.fine_step_s)
        last.append(pulse.first_time_s + float(strong[-1]) * pulse.fine_step_s)
    return min(first), max(last)


@lru_cache(maxsize=32)
def _pair(pulses: tuple[PulseTemplate, PulseTemplate]) -> PulsePair:
    return PulsePair(pulses)


def pulse_pair(pulses: tuple[PulseTemplate, PulseTemplate]) -> PulsePair:
    """Both templates joined; computed once and kept."""
    return _pair(pulses)


@lru_cache(maxsize=64)
def _template(
    head: _HeadKey, ear: int, burst_cycles: float, receiver: ReceiverFilter
) -> PulseTemplate:
    step_s = receiver.step_s / _OVERSAMPLING
    n = int(_SPAN_S / step_s)
    offset_hz = np.fft.fftfreq(n, step_s)
    limit_hz = min(0.9 * head.head.carrier_hz, 1.5 / receiver.step_s)
    band = np.abs(offset_hz) < limit_hz
    spectrum = np.zeros(n, complex)
    frequency_hz = head.head.carrier_hz + offset_hz[band]
    spectrum[band] = echo_spectrum(head.head, ear, frequency_hz, burst_cycles)
    spectrum[band] *= receiver.response(offset_hz[band])
    spectrum[band] *= np.exp(-2j * math.pi * offset_hz[band] * _LEAD_S)
    table = np.fft.ifft(spectrum)
    magnitude = np.abs(table)
    peak = int(np.argmax(magnitude))
    table = table / magnitude[peak]
    magnitude = magnitude / magnitude[peak]
    slope = np.gradient(table, step_s)
    used = np.nonzero(magnitude > _TAIL_AMPLITUDE)[0]
    first, last = used[0], used[-1]
    high = np.nonzero(magnitude >= 0.5)[0]
    energy_s = float(np.sum(magnitude**2)) * step_s
    power = np.abs(spectrum) ** 2
    return PulseTemplate(
        table=_zero_ended(table[first : last + 2]),
        slope=_zero_ended(slope[first : last + 2]),
        first_time_s=first * step_s - _LEAD_S,
        fine_step_s=step_s,
        peak_time_s=peak * step_s - _LEAD_S,
        envelope_sigma_s=float(high[-1] - high[0]) * step_s / math.sqrt(8.0 * math.log(2.0)),
        energy_s=energy_s,
        noise_bandwidth_hz=float(np.sum(power) / np.max(power)) / (n * step_s),
    )


def _zero_ended(values: ComplexArray) -> ComplexArray:
    """Look-ups outside are clamped to the ends, which must therefore be 0."""
    values = values.copy()
    values[0] = values[-1] = 0.0
    return values


class _HeadKey:
    """Lets a head (with its unhashable notes on calibration) serve as a cache key."""

    def __init__(self, head: Head) -> None:
        self.head = head
        self._key = (
            head.carrier_hz, head.drive_waveform, head.transmitter, head.left, head.right,
        )  # fmt: skip

    def __hash__(self) -> int:
        return hash(self._key)

    def __eq__(self, other: object) -> bool:
        return isinstance(other, _HeadKey) and self._key == other._key


def pulse_templates(
    head: Head, burst_cycles: float, receiver: ReceiverFilter
) -> tuple[PulseTemplate, PulseTemplate]:
    """Templates of both ears (left, right) for a burst length; computed once and kept."""
    key = _HeadKey(head)
    left, right = (_template(key, ear, float(burst_cycles), receiver) for ear in (0, 1))
    return left, right
