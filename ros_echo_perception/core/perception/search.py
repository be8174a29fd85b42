"""Where could an object be? Matched filters of each ear and coherent scans over bearing."""

from __future__ import annotations

import math
from dataclasses import dataclass
from functools import lru_cache

import numpy as np

from ..types import ComplexArray, FloatArray
from . import kernels_ear, kernels_search
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
    result = np.empty(samples.shape)
    for ear, pulse in enumerate(model.pulses):
        template = pulse.sampled(ping.step_s, -pulse.start_s % ping.step_s)
        lead = int(round((-pulse.start_s) // ping.step_s))
        result[ear] = kernels_ear.matched(samples[ear], ping.weight[ear], template, lead)
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
        return kernels_search.lobes(self.bearing_rad, self.phase_rad)


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
    coarse = _coarse_bearings(float(bearing_rad[0]), float(bearing_rad[-1]))
    offset_m = _offsets(half_width_m)
    geometry = model.geometry(np.full(coarse.size, range_m), coarse)
    prior = np.log(np.maximum(geometry.gain.max(axis=0), 1e-3))
    places = geometry.delay_s, geometry.gain, offset_m * (2.0 / model.speed_m_s)
    match, energy = kernels_search.coarse_scan(
        model.arrays, ping.time_s, samples, ping.weight, *places, _FINE
    )
    i, range_sigma_m = kernels_search.best_shift(match, energy, prior, offset_m)
    best_range = range_m + float(offset_m[i])
    delay_s = model.delays(np.full(bearing_rad.size, best_range), bearing_rad)
    found = kernels_search.fine_scan(
        model.arrays, coarse, match[:, i].copy(), energy[i], prior, bearing_rad, delay_s
    )
    return Scan(best_range, range_sigma_m, bearing_rad, *found)


@lru_cache(maxsize=16)
def _coarse_bearings(first_rad: float, last_rad: float) -> FloatArray:
    return np.linspace(first_rad, last_rad, _COARSE_BEARINGS)


@lru_cache(maxsize=64)
def _offsets(half_width_m: float) -> FloatArray:
    steps = max(1, int(round(half_width_m / _RANGE_STEP_M)))
    return np.linspace(-half_width_m, half_width_m, 2 * steps + 1)
