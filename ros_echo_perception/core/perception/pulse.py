"""The received pulse as a template: complex baseband, evaluated at any time."""

from __future__ import annotations

import math
from dataclasses import dataclass
from functools import lru_cache

import numpy as np

from ..acoustics import burst_spectrum, echo_spectrum, resonance_response
from ..head import Head
from ..types import ComplexArray, FloatArray
from .baseband import ReceiverFilter

Mask = np.ndarray[tuple[int], np.dtype[np.bool_]]

_OVERSAMPLING = 32
_SPAN_S = 8e-3
_LEAD_S = 1e-3
_TAIL_AMPLITUDE = 3e-4
_CORE_AMPLITUDE = 0.02
_SHIFT_HZ = 20.0
_FAINT = 1e-3


@dataclass(frozen=True, eq=False)
class PulseTemplate:
    """Complex envelope of the pulse in one ear behind the receiver filter, peak magnitude 1.

    Times count from the start of the drive. ``table`` and ``slope`` (its derivative by time)
    are sampled every ``fine_step_s`` from ``first_time_s`` on; outside they are 0.

    A Doppler shift w (rad/s) of what arrives turns the pulse into about
    table * exp(1j * w * turning_s). While the receiver is driven, ``turning_s`` is the time; once
    it rings by itself, it does so at its own resonance and the time stands still. The imaginary
    part says what the receiver's band does to the strength.
    """

    table: ComplexArray
    slope: ComplexArray
    turning_s: ComplexArray
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
    """The templates of both ears on one time axis, looked up together by the kernels.

    Attributes
    ----------
    table
        shape (2, n, 4), left ear first, every ``fine_step_s`` from ``start_s`` on: value and its
        slope, turning time (see `PulseTemplate`) and its slope. Value and slope end with 0.
    """

    def __init__(self, pulses: tuple[PulseTemplate, PulseTemplate]) -> None:
        self.start_s = min(p.start_s for p in pulses)
        self.end_s = max(p.end_s for p in pulses)
        self.core_start_s, self.core_end_s = _core(pulses)
        self.fine_step_s = pulses[0].fine_step_s
        size = int(round((self.end_s - self.start_s) / self.fine_step_s)) + 2
        self.table = np.zeros((2, size, 4), complex)
        # No turn at the left pulse's peak, so that velocity is not confounded with phase.
        at_peak = int(round((pulses[0].peak_time_s - pulses[0].first_time_s) / self.fine_step_s))
        for ear, pulse in enumerate(pulses):
            first = int(round((pulse.first_time_s - self.start_s) / self.fine_step_s))
            turning_s = pulse.turning_s - pulses[0].turning_s[at_peak]
            rate = np.gradient(pulse.turning_s, self.fine_step_s)
            part = np.stack([pulse.table, pulse.slope, turning_s, rate], axis=1)
            self.table[ear, first : first + pulse.table.size] = part


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
    turning_s = _turning(head.head, burst_cycles, frequency_hz, spectrum, band)
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
        turning_s=turning_s[first : last + 2],
        first_time_s=first * step_s - _LEAD_S,
        fine_step_s=step_s,
        peak_time_s=peak * step_s - _LEAD_S,
        envelope_sigma_s=float(high[-1] - high[0]) * step_s / math.sqrt(8.0 * math.log(2.0)),
        energy_s=energy_s,
        noise_bandwidth_hz=float(np.sum(power) / np.max(power)) / (n * step_s),
    )


def _turning(
    head: Head, burst_cycles: float, frequency_hz: FloatArray, spectrum: ComplexArray, band: Mask
) -> ComplexArray:
    """d ln(pulse) / d(1j w) for a shift w of what the transmitter sends."""

    def sent(shift_hz: float) -> ComplexArray:
        shifted = frequency_hz - shift_hz
        burst = burst_spectrum(shifted, head.carrier_hz, burst_cycles, head.drive_waveform)
        return burst * resonance_response(head.transmitter, shifted)

    change = np.zeros(spectrum.size, complex)
    # What follows the transmitter does not move: divide its spectrum out where it has any.
    here = sent(0.0)
    strong = np.abs(here) > 1e-9 * np.abs(here).max()
    slope = (sent(_SHIFT_HZ) - sent(-_SHIFT_HZ)) / (4.0 * math.pi * _SHIFT_HZ)
    change[band] = spectrum[band] * np.where(strong, slope / np.where(strong, here, 1.0), 0.0)
    table, moved = np.fft.ifft(spectrum), np.fft.ifft(change)
    power = np.abs(table) ** 2
    return np.asarray(-1j * moved * table.conj() / (power + _FAINT**2 * power.max()))


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
