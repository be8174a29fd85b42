"""Where could an object be? Matched filters of each ear and coherent scans over bearing."""

from __future__ import annotations

import math
from dataclasses import dataclass

import numpy as np
from numpy.lib.stride_tricks import sliding_window_view

from ..types import ComplexArray, FloatArray
from .conditioning import Conditioned
from .model import HeadModel

_FINE = 8
_RANGE_STEP_M = 4e-3
_PHASE_STEPS = 7
_COARSE_BEARINGS = 73


def matched_filter(model: HeadModel, ping: Conditioned, samples: ComplexArray) -> FloatArray:
    """Amplitude behind the pulse-matched filter in units of its noise, shape (2, n).

    Element k belongs to the delay ``time_s[k]`` (start of the drive to arrival); in noise its
    square is exponential with mean 1.
    """
    result = np.zeros(samples.shape)
    for ear, pulse in enumerate(model.pulses):
        template = pulse.sampled(ping.step_s, -pulse.start_s % ping.step_s)
        lead = int(round((-pulse.start_s) // ping.step_s))
        weight2 = ping.weight[ear] ** 2
        n, size = samples.shape[1], template.size
        padded = np.zeros((2, n + size), complex)
        padded[0, lead : lead + n] = samples[ear] * weight2
        padded[1, lead : lead + n] = weight2
        windows = sliding_window_view(padded, size, axis=1)[:, :n]
        match = windows[0] @ template.conj()
        energy = windows[1].real @ np.abs(template) ** 2
        full = (
            float(np.sum(np.abs(template) ** 2)) * float(np.median(weight2[weight2 > 0]))
            if (weight2 > 0).any()
            else 1.0
        )
        # Where most of the pulse is masked, a match says nothing.
        good = energy > 1e-3 * full
        result[ear, good] = np.abs(match[good]) / np.sqrt(energy[good])
    return result


def bearing_grid(model: HeadModel, max_bearing_rad: float) -> FloatArray:
    """Bearings so dense that the ears' phase difference turns by less than a sixth between."""
    wavelength_m = model.speed_m_s / model.receiver.carrier_hz
    step = wavelength_m / max(model.head.baseline_m, wavelength_m) / _PHASE_STEPS
    count = int(math.ceil(max_bearing_rad / step))
    return np.linspace(-max_bearing_rad, max_bearing_rad, 2 * count + 1)


@dataclass(frozen=True, eq=False)
class Scan:
    """One object tried over bearing, at the range that suits it best.

    Attributes
    ----------
    range_m, range_sigma_m
        Best range, and its standard deviation over all bearings.
    bearing_rad
        shape (n,), a grid on which all that follows is given.
    aligned
        Log-likelihood gain (nats) if the carrier phases of both ears agreed there, log prior
        of the bearing included. It varies slowly over bearing: level and delay differences.
    phase_rad
        By how much the phase of the right ear's match leads the left one's, against the model:
        0 where the carriers agree.
    sharpness
        What the gain loses to the phases is sharpness * (1 - cos(phase)), nats.
    strength
        Complex strength of the best object there, if the phases agreed.
    """

    range_m: float
    range_sigma_m: float
    bearing_rad: FloatArray
    aligned: FloatArray
    phase_rad: FloatArray
    sharpness: FloatArray
    strength: ComplexArray

    def tops(self) -> list[tuple[float, complex, float]]:
        """Bearing, strength and gain of all lobes (of the best bearing, if there is no lobe),
        best first.

        Between two bearings of the grid the phase passes 0 or not; where it does, the gain is
        the aligned one, however far the grid's own bearings are from the lobe's top.
        """
        lobes = self.lobes()
        if lobes.size == 0:
            gain = self.aligned - self.sharpness * (1.0 - np.cos(self.phase_rad))
            j = int(np.argmax(gain))
            return [(float(self.bearing_rad[j]), complex(self.strength[j]), float(gain[j]))]
        gain = np.interp(lobes, self.bearing_rad, self.aligned)
        order = np.argsort(gain)[::-1]
        at = np.searchsorted(self.bearing_rad, lobes)
        return [(float(lobes[k]), complex(self.strength[at[k]]), float(gain[k])) for k in order]

    def best(self) -> tuple[float, float, complex, float]:
        """Range, bearing, strength and gain of the best place."""
        return (self.range_m, *self.tops()[0])

    def lobes(self) -> FloatArray:
        """Bearings at which the carriers of both ears agree."""
        phase = self.phase_rad
        turn = np.angle(np.exp(1j * np.diff(phase)))
        # The phase wraps at +-pi; a step that crosses 0 keeps its size when unwrapped.
        ahead = phase >= 0.0  # a phase of exactly 0 belongs to one side, or it would count twice
        crosses = (ahead[:-1] != ahead[1:]) & (np.abs(phase[:-1]) < math.pi / 2)
        at = np.nonzero(crosses & (turn != 0.0))[0]
        share = -phase[at] / turn[at]
        return np.asarray(
            self.bearing_rad[at] + share * (self.bearing_rad[at + 1] - self.bearing_rad[at])
        )


def scan(
    model: HeadModel,
    ping: Conditioned,
    samples: ComplexArray,
    range_m: float,
    half_width_m: float,
    bearing_rad: FloatArray,
) -> Scan:
    """Try one object near a range at all bearings, both ears coherent.

    Notes
    -----
    gain = |sum_e g_e conj(phase_e) b_e|^2 / sum_e g_e^2 e_e with b and e the weighted match and
    energy of the pulse at each ear's delay: the likelihood ratio of one object of unknown
    complex strength in Gaussian noise. With m_e the two terms of the sum it is
    (|m_L| + |m_R|)^2 less 2 |m_L| |m_R| (1 - cos phase), over the energy. The first part varies
    slowly and is computed on a coarse grid, from which the range follows; the phases follow
    from the geometry on the fine one. The prior of a bearing is proportional to the better
    ear's gain: an object far off the beams must be so much stronger to be heard.
    """
    steps = max(1, int(round(half_width_m / _RANGE_STEP_M)))
    offset_m = np.linspace(-half_width_m, half_width_m, 2 * steps + 1)
    coarse = np.linspace(bearing_rad[0], bearing_rad[-1], _COARSE_BEARINGS)
    match, energy, prior = _coarse(model, ping, samples, range_m, offset_m, coarse)
    left, right = np.abs(match)
    aligned = (left + right) ** 2 / energy + prior
    i = int(np.argmax(aligned.max(axis=1)))
    best_range = range_m + float(offset_m[i])
    fine = np.array([np.interp(bearing_rad, coarse, row) for row in match[:, i]])
    geometry = model.geometry(np.full(bearing_rad.shape, best_range), bearing_rad)
    fine *= model.carrier(geometry).conj()
    left, right = np.abs(fine)
    energy_fine = np.interp(bearing_rad, coarse, energy[i])
    stronger = np.where(left >= right, fine[0], fine[1])
    direction = stronger / np.maximum(np.abs(stronger), 1e-30)
    return Scan(
        range_m=best_range,
        range_sigma_m=_range_sigma(aligned, offset_m),
        bearing_rad=bearing_rad,
        aligned=(left + right) ** 2 / energy_fine + np.interp(bearing_rad, coarse, prior),
        phase_rad=np.angle(fine[1] * fine[0].conj()),
        sharpness=2.0 * left * right / energy_fine,
        strength=direction * (left + right) / energy_fine,
    )


def _coarse(
    model: HeadModel,
    ping: Conditioned,
    samples: ComplexArray,
    range_m: float,
    offset_m: FloatArray,
    bearing_rad: FloatArray,
) -> tuple[ComplexArray, FloatArray, FloatArray]:
    """Matches (2, n_range, n_bearing) without carrier, energies and log prior of the bearing."""
    geometry = model.geometry(np.full(bearing_rad.shape, range_m), bearing_rad)
    shift_s = 2.0 * offset_m / model.speed_m_s
    match = np.empty((2, offset_m.size, bearing_rad.size), complex)
    energy = np.full(match.shape[1:], 1e-30)
    for ear in range(2):
        delay = geometry.delay_s[ear][None, :] + shift_s[:, None]
        b, e = _correlate(model, ping, samples, ear, delay)
        match[ear] = geometry.gain[ear] * b
        energy += geometry.gain[ear] ** 2 * e
    prior = np.log(np.maximum(geometry.gain.max(axis=0), 1e-3))
    return match, energy, prior


def _range_sigma(aligned: FloatArray, offset_m: FloatArray) -> float:
    weight = np.exp(aligned - aligned.max()).sum(axis=1)
    weight = weight / weight.sum()
    mean = float(weight @ offset_m)
    return math.sqrt(float(weight @ (offset_m - mean) ** 2))


def _correlate(
    model: HeadModel, ping: Conditioned, samples: ComplexArray, ear: int, delay_s: FloatArray
) -> tuple[ComplexArray, FloatArray]:
    """Weighted match and energy of an ear's pulse at delays of any shape (interpolated)."""
    pulse = model.pulses[ear]
    fine = ping.step_s / _FINE
    low, high = float(delay_s.min()) - fine, float(delay_s.max()) + 2 * fine
    grid = low + fine * np.arange(int((high - low) / fine) + 1)
    start = int(np.searchsorted(ping.time_s, low + pulse.start_s))
    stop = int(np.searchsorted(ping.time_s, high + pulse.end_s))
    if stop <= start:
        return np.zeros(delay_s.shape, complex), np.zeros(delay_s.shape)
    time = ping.time_s[start:stop]
    shape = pulse.evaluate(time[None, :] - grid[:, None])[0]
    weight2 = ping.weight[ear, start:stop] ** 2
    b = shape.conj() @ (samples[ear, start:stop] * weight2)
    e = np.abs(shape) ** 2 @ weight2
    position = (delay_s - low) / fine
    index = np.minimum(position.astype(np.intp), grid.size - 2)
    fraction = position - index
    return (
        b[index] + fraction * (b[index + 1] - b[index]),
        e[index] + fraction * (e[index + 1] - e[index]),
    )
