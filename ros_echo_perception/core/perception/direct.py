"""The direct pulse from the transmitter into each ear: taken off, and how long it hides echoes."""

from __future__ import annotations

from dataclasses import dataclass
from functools import lru_cache

import numpy as np
from scipy.interpolate import CubicSpline

from ..head import Head
from ..types import ComplexArray, FloatArray
from .baseband import Baseband
from .pulse import PulseTemplate

_SEARCH_S = 0.6e-3
_TAIL_STEPS = 24
_MEASURED_ERROR = 0.15
"""Share of the measured direct pulse that changes between recordings: it comes on several paths
(through the air, the head, the cable) whose ratio shifts."""


@dataclass(frozen=True, eq=False)
class DirectPulse:
    """Of one ear.

    Attributes
    ----------
    samples
        complex, shape (n,): what to take off.
    error
        shape (n,): standard deviation of what may be left.
    covered_s
        Until then, since the emission, nothing else can be heard.
    """

    samples: ComplexArray
    error: FloatArray
    covered_s: float


def direct_pulse(
    head: Head, baseband: Baseband, ear: int, pulse: PulseTemplate, burst: float, noise: float
) -> DirectPulse:
    """The direct pulse: as calibration measured it, or as well as a lone ping shows it.

    Parameters
    ----------
    noise : standard deviation of the ear's complex noise.
    """
    early = baseband.time_s < head.latency_s + _SEARCH_S + pulse.peak_time_s
    silent = DirectPulse(
        np.zeros(baseband.time_s.size, complex), np.zeros(baseband.time_s.size), 0.0
    )
    if not early.any() or float(np.abs(baseband.samples[ear, early]).max()) < 6.0 * noise:
        return silent
    measured = _measured(head, baseband, ear, burst)
    if measured is not None:
        return _scaled(baseband, ear, measured, noise)
    return _unknown(head, baseband, ear, pulse, noise)


def _measured(head: Head, baseband: Baseband, ear: int, burst: float) -> ComplexArray | None:
    for number, entry in enumerate(head.calibration.get("direct_pulse", ())):
        if entry["burst_cycles"] == burst:
            spline, first, last = _spline(_Entry(entry, number, ear))
            inside = (baseband.time_s >= first) & (baseband.time_s <= last)
            shape = np.zeros(baseband.time_s.size, complex)
            shape[inside] = spline(baseband.time_s[inside])
            return shape
    return None


class _Entry:
    """A section of the head file as cache key: sections are never changed in place."""

    def __init__(self, section: dict[str, object], number: int, ear: int) -> None:
        self.section, self.name = section, ("left", "right")[ear]
        self._key = (id(section), number, ear)

    def __hash__(self) -> int:
        return hash(self._key)

    def __eq__(self, other: object) -> bool:
        return isinstance(other, _Entry) and self._key == other._key


@lru_cache(maxsize=32)
def _spline(entry: _Entry) -> tuple[CubicSpline, float, float]:
    section, name = entry.section, entry.name
    values = np.array(section[f"{name}_real"]) + 1j * np.array(section[f"{name}_imag"])
    time = float(section["first_time_s"]) + float(section["step_s"]) * np.arange(values.size)  # type: ignore[arg-type]
    return CubicSpline(time, values), float(time[0]), float(time[-1])


def _scaled(baseband: Baseband, ear: int, shape: ComplexArray, noise: float) -> DirectPulse:
    """The measured shape at the strength of this ping."""
    magnitude = np.abs(shape)
    body = (magnitude > 0.1 * magnitude.max()) & ~baseband.clipped[ear]
    samples = baseband.samples[ear]
    energy = float(np.sum(magnitude[body] ** 2))
    factor = np.vdot(shape[body], samples[body]) / energy if energy > 0 else 1.0
    direct = factor * shape
    error = _MEASURED_ERROR * np.abs(direct)
    # Where its error alone reaches five times the noise, only a roar could be told from it.
    loud = np.nonzero(error > 5.0 * noise)[0]
    covered = float(baseband.time_s[loud[-1]]) if loud.size else 0.0
    return DirectPulse(direct, error, covered)


def _unknown(
    head: Head, baseband: Baseband, ear: int, pulse: PulseTemplate, noise: float
) -> DirectPulse:
    """Nothing is taken off; the head waits until the direct pulse has died away."""
    window = baseband.time_s < head.latency_s + _SEARCH_S + pulse.peak_time_s
    envelope = np.abs(baseband.samples[ear])
    peak = int(np.argmax(np.where(window, envelope, 0.0)))
    first = peak + int(round(2.0 * pulse.envelope_sigma_s / baseband.step_s))
    last = min(first + _TAIL_STEPS, envelope.size - 2)
    end = last
    for k in range(min(first, last), last):
        # Sunk into noise, or an echo rises out of the tail.
        if envelope[k] < 2.5 * noise or envelope[k + 2] > 1.3 * envelope[k]:
            end = k
            break
    nothing = np.zeros(envelope.size, complex)
    return DirectPulse(nothing, np.zeros(envelope.size), float(baseband.time_s[end]))
