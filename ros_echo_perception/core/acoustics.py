"""Transducers: how a piston beams, how a resonator rings, what pulse a burst becomes.

References
----------
.. [1] P. M. Morse and K. U. Ingard, Theoretical Acoustics, 1968, section 7.4: far field of a
   circular piston in a baffle, 2 J1(x) / x with x = k a sin(angle).
.. [2] L. L. Beranek, Acoustics, 1954, chapter 3: a resonant transducer near its resonance as a
   series circuit, 1 / (1 + j Q (f / f0 - f0 / f)), Q = f0 / half-power bandwidth.
"""

from __future__ import annotations

import math
from dataclasses import dataclass

import numpy as np
from scipy.special import j1

from .head import Head, Transducer
from .types import ComplexArray, FloatArray

HALF_POWER_X = 1.616340
"""Argument at which 2 J1(x)/x has fallen to 1/sqrt(2)."""


def piston_directivity(x: FloatArray | float) -> FloatArray:
    """Far-field amplitude of a circular piston, 2 J1(x)/x, 1 at x = 0 [1]_.

    Examples
    --------
    >>> round(float(piston_directivity(HALF_POWER_X)) ** 2, 4)
    0.5
    """
    x = np.asarray(x, float)
    safe = np.where(np.abs(x) < 1e-6, 1e-6, x)
    return np.asarray(2.0 * j1(safe) / safe)


def directivity(transducer: Transducer, angle_rad: FloatArray | float) -> FloatArray:
    """Amplitude of a transducer towards a direction in the head's frame, 1 on its axis.

    More than 90 degrees off axis there is no piston law; sound creeps round the rim, taken as the
    level at 90 degrees falling smoothly to nothing straight behind (common practice).
    """
    off_axis = np.asarray(angle_rad, float) - transducer.yaw_rad
    scale = HALF_POWER_X / math.sin(min(transducer.half_power_beam_width_rad, math.pi) / 2.0)
    cosine = np.cos(off_axis)
    sine = np.where(cosine > 0.0, np.sin(off_axis), 1.0)
    return np.asarray(piston_directivity(scale * sine) * (1.0 + np.minimum(cosine, 0.0)))


def resonance_response(transducer: Transducer, frequency_hz: FloatArray) -> ComplexArray:
    """Complex response of a resonant transducer, 1 at its resonance [2]_."""
    f0 = transducer.resonance_hz
    quality = f0 / transducer.half_power_bandwidth_hz
    f = np.asarray(frequency_hz, float)
    return np.asarray(1.0 / (1.0 + 1j * quality * (f / f0 - f0 / f)))


def burst_spectrum(
    frequency_hz: FloatArray, carrier_hz: float, burst_cycles: float, waveform: str
) -> ComplexArray:
    """Spectrum of the drive near the carrier, as complex baseband of a unit-amplitude burst.

    The burst is a sine (or a square wave) of whole half periods from its zero crossing at time 0.
    With x = f / f0 - 1 and N cycles the exact transforms, apart from the common factor of the
    gate, are 1 / (1 + x/2) for the sine and (4/pi) (pi x/2) cot(pi x/2) / (1 + x) for the square
    wave: the skirts of its harmonics reach into the band and shift the centre by some 20 Hz.

    Returns
    -------
    Complex array like ``frequency_hz`` (absolute frequencies), seconds.
    """
    duration_s = burst_cycles / carrier_hz
    frequency = np.asarray(frequency_hz, float)
    offset_hz = frequency - carrier_hz
    x = frequency / carrier_hz - 1.0
    if waveform == "square":
        # x cot(x) = cos(x) / sinc(x), which has no hole at 0
        height = 4.0 / math.pi * np.cos(0.5 * math.pi * x) / np.sinc(0.5 * x) / (1.0 + x)
    else:
        height = 1.0 / (1.0 + 0.5 * x)
    return np.asarray(
        height
        * duration_s
        * np.sinc(offset_hz * duration_s)
        * np.exp(-1j * math.pi * offset_hz * duration_s)
    )


def echo_spectrum(
    head: Head, ear: int, frequency_hz: FloatArray, burst_cycles: float
) -> ComplexArray:
    """Spectrum of an echo from zero distance: burst, transmitter and one receiver.

    Directivity, spreading, absorption, latency and receiver gain are not in it.
    """
    return np.asarray(
        burst_spectrum(frequency_hz, head.carrier_hz, burst_cycles, head.drive_waveform)
        * resonance_response(head.transmitter, frequency_hz)
        * resonance_response(head.receivers[ear], frequency_hz)
    )


@dataclass(frozen=True)
class PulseMetrics:
    """Shape of a received pulse. Times since the start of the drive."""

    peak_delay_s: float
    envelope_sigma_s: float
    energy_sigma_s: float
    centre_frequency_hz: float
    rms_bandwidth_hz: float
    noise_bandwidth_hz: float


def pulse_metrics(head: Head, ear: int, burst_cycles: float) -> PulseMetrics:
    """Shape of the pulse that a burst becomes in one ear.

    ``envelope_sigma_s`` is the full width at half height / 2.3548; ``energy_sigma_s`` is
    sqrt(2) times the standard deviation of the squared envelope (both equal for a Gaussian);
    bandwidths are those of the squared magnitude spectrum.
    """
    span_hz, n = min(60e3, head.carrier_hz), 16384
    offset = np.fft.fftfreq(n, 1.0 / span_hz)
    frequency = np.asarray(head.carrier_hz + offset, dtype=np.float64)
    spectrum = echo_spectrum(head, ear, frequency, burst_cycles)
    power = np.abs(spectrum) ** 2
    centre = float(np.sum(frequency * power) / np.sum(power))
    rms = math.sqrt(float(np.sum((frequency - centre) ** 2 * power) / np.sum(power)))
    noise = float(np.sum(power) / np.max(power)) * span_hz / n
    padded = np.zeros(4 * n, complex)
    padded[: n // 2], padded[-n // 2 :] = spectrum[: n // 2], spectrum[n // 2 :]
    envelope = np.abs(np.fft.ifft(padded))
    time = np.arange(envelope.size) / (4 * span_hz)
    keep = time < time[-1] / 2
    envelope, time = envelope[keep], time[keep]
    step_s = float(time[1])
    peak_position, peak = _summit(envelope)
    weight = envelope**2 / np.sum(envelope**2)
    mean = float(np.sum(weight * time))
    return PulseMetrics(
        peak_delay_s=peak_position * step_s,
        envelope_sigma_s=_width(envelope, peak / 2.0) * step_s / math.sqrt(8 * math.log(2)),
        energy_sigma_s=math.sqrt(2.0 * float(np.sum(weight * (time - mean) ** 2))),
        centre_frequency_hz=centre,
        rms_bandwidth_hz=rms,
        noise_bandwidth_hz=noise,
    )


def _summit(curve: FloatArray) -> tuple[float, float]:
    """Position (in samples) and height of the maximum, by a parabola through three samples."""
    top = int(np.argmax(curve))
    if not 0 < top < len(curve) - 1:
        return float(top), float(curve[top])
    before, at, after = (float(v) for v in curve[top - 1 : top + 2])
    shift = 0.5 * (before - after) / min(before - 2.0 * at + after, -1e-300)
    return top + shift, at - 0.25 * (before - after) * shift


def _width(curve: FloatArray, level: float) -> float:
    """Samples between the outermost crossings of a level, linear between samples."""
    high = np.flatnonzero(curve >= level)
    first, last = int(high[0]), int(high[-1])
    rise = first - 1 + (level - curve[first - 1]) / (curve[first] - curve[first - 1])
    fall = last + (curve[last] - level) / (curve[last] - curve[last + 1])
    return float(fall - rise)
