"""Two objects where one seems to be: an exhaustive look at pairs of bearings.

One object fitted to two at one range lands in the middle, a local maximum. The gain of a pair
follows in closed form from the matches and the overlap of its two signals, so all pairs of
bearings at a few ranges are tried at once; refinement then parts their ranges.
"""

from __future__ import annotations

import math

import numpy as np

from ..types import ComplexArray, FloatArray
from .conditioning import Conditioned
from .config import ProcessingConfig
from .joint import signals, window_of
from .model import HeadModel
from .objects import Objects

_MAX_BEARINGS = 170
_RANGE_STEPS = 2  # on each side of the centre
_RANGE_STEP_SIGMAS = 0.4
_PHASE_STEPS = 6.0
_MIN_GAIN = 0.1
_TRIALS = 10
_KEPT_PER_RANGE = 150
_OVERLAP_LIMIT = 0.985


def best_pairs(
    model: HeadModel,
    ping: Conditioned,
    samples: ComplexArray,
    range_m: float,
    config: ProcessingConfig,
) -> list[Objects]:
    """The most likely pairs of objects near a range, best first, at most 10.

    Parameters
    ----------
    samples : complex (2, n), all other objects taken off.
    """
    bearing = _bearings(model, range_m, config)
    step_m = 0.5 * model.speed_m_s * model.pulses[0].envelope_sigma_s * _RANGE_STEP_SIGMAS
    found: list[tuple[float, Objects]] = []
    for k in range(-_RANGE_STEPS, _RANGE_STEPS + 1):
        found += _pairs_at(model, ping, samples, max(range_m + k * step_m, 1e-3), bearing)
    found.sort(key=lambda pair: pair[0], reverse=True)
    return _distinct([objects for _, objects in found], model)


def _bearings(model: HeadModel, range_m: float, config: ProcessingConfig) -> FloatArray:
    wavelength = model.speed_m_s / model.receiver.carrier_hz
    step = wavelength / model.head.baseline_m / _PHASE_STEPS
    count = int(math.ceil(config.max_bearing_rad / step))
    bearing = np.linspace(-config.max_bearing_rad, config.max_bearing_rad, 2 * count + 1)
    gain = model.geometry(np.full(bearing.shape, range_m), bearing).gain.max(axis=0)
    bearing = bearing[gain > _MIN_GAIN * gain.max()]
    if bearing.size <= _MAX_BEARINGS:
        return bearing
    middle = int(np.argmin(np.abs(bearing - float(bearing.mean()))))
    first = max(middle - _MAX_BEARINGS // 2, 0)
    return bearing[first : first + _MAX_BEARINGS]


def _pairs_at(
    model: HeadModel,
    ping: Conditioned,
    samples: ComplexArray,
    range_m: float,
    bearing: FloatArray,
) -> list[tuple[float, Objects]]:
    """The best pairs at one range, as (gain, objects)."""
    n = bearing.size
    places = Objects(np.full(n, range_m), bearing, np.zeros(n), np.ones(n, complex))
    window = window_of(model, ping, places)
    weight = ping.weight[:, window]
    rendered = signals(model, places, ping.time_s[window]).value * weight[:, None, :]
    basis = rendered.transpose(1, 0, 2).reshape(n, -1).astype(np.complex64)
    norm = np.maximum(np.sqrt(np.sum(np.abs(basis) ** 2, axis=1)), 1e-9)
    basis /= norm[:, None]
    match = basis.conj() @ (samples[:, window] * weight).ravel().astype(np.complex64)
    overlap = basis.conj() @ basis.T
    gain = _pair_gain(match, overlap)
    best = np.argpartition(gain.ravel(), -_KEPT_PER_RANGE)[-_KEPT_PER_RANGE:]
    pairs = [divmod(int(flat), n) for flat in best]
    return [
        (float(gain[i, j]), _pair(places, i, j, match, overlap, norm))
        for i, j in pairs
        if gain[i, j] > 0.0
    ]


def _pair_gain(match: ComplexArray, overlap: ComplexArray) -> FloatArray:
    """Likelihood gain of every pair of unit-energy signals: b^H G^-1 b with 2 x 2 G."""
    power = np.abs(match) ** 2
    crossing = (np.conj(match)[:, None] * overlap * match[None, :]).real
    common = overlap.real**2 + overlap.imag**2
    gain = (power[:, None] + power[None, :] - 2.0 * crossing) / np.maximum(1.0 - common, 1e-3)
    gain[common > _OVERLAP_LIMIT] = 0.0
    return np.asarray(np.triu(gain, 1))


def _distinct(pairs: list[Objects], model: HeadModel) -> list[Objects]:
    """The first of each neighbourhood: bearings that differ by more than half a lobe."""
    lobe = 0.5 * model.speed_m_s / model.receiver.carrier_hz / model.head.baseline_m
    chosen: list[Objects] = []
    for pair in pairs:
        bearings = np.sort(pair.bearing_rad)
        if all(np.abs(bearings - np.sort(c.bearing_rad)).max() > lobe for c in chosen):
            chosen.append(pair)
        if len(chosen) == _TRIALS:
            break
    return chosen


def _pair(
    places: Objects, i: int, j: int, match: ComplexArray, overlap: ComplexArray, norm: FloatArray
) -> Objects:
    gram = np.array([[1.0, overlap[i, j]], [np.conj(overlap[i, j]), 1.0]])
    strength = np.linalg.solve(gram, match[[i, j]]) / norm[[i, j]]
    return places.take([i, j]).with_strength(strength)
