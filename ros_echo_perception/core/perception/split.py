"""Two objects where one seems to be: an exhaustive look at pairs of places.

One object fitted to two at one range lands in the middle, a local maximum. The gain of a pair
follows in closed form from the matches and the overlap of its two signals, so all pairs of a
coarse grid are tried at once.
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

_MAX_PLACES = 520
_RANGE_STEPS = 2  # on each side of the centre
_PHASE_STEPS = 4.0
_MIN_GAIN = 0.1
_TRIALS = 6
_OVERLAP_LIMIT = 0.985


def best_pairs(
    model: HeadModel,
    ping: Conditioned,
    samples: ComplexArray,
    range_m: float,
    config: ProcessingConfig,
) -> list[Objects]:
    """The most likely pairs of objects near a range, best first, at most six.

    Parameters
    ----------
    samples : complex (2, n), all other objects taken off.
    """
    places = _places(model, range_m, config)
    window = window_of(model, ping, places)
    weight = ping.weight[:, window]
    rendered = signals(model, places, ping.time_s[window]).value * weight[:, None, :]
    basis = rendered.transpose(1, 0, 2).reshape(len(places), -1).astype(np.complex64)
    norm = np.sqrt(np.sum(np.abs(basis) ** 2, axis=1))
    basis /= np.maximum(norm, 1e-9)[:, None]
    match = basis.conj() @ (samples[:, window] * weight).ravel().astype(np.complex64)
    overlap = basis.conj() @ basis.T
    gain = _pair_gain(match, overlap)
    return [
        _pair(places, i, j, match, overlap, norm) for i, j in _distinct(gain, places, model)
    ]


def _places(model: HeadModel, range_m: float, config: ProcessingConfig) -> Objects:
    wavelength = model.speed_m_s / model.receiver.carrier_hz
    step = wavelength / model.head.baseline_m / _PHASE_STEPS
    count = int(math.ceil(config.max_bearing_rad / step))
    bearing = np.linspace(-config.max_bearing_rad, config.max_bearing_rad, 2 * count + 1)
    gain = model.geometry(np.full(bearing.shape, range_m), bearing).gain.max(axis=0)
    bearing = bearing[gain > _MIN_GAIN * gain.max()]
    per_range = 2 * _RANGE_STEPS + 1
    if bearing.size * per_range > _MAX_PLACES:
        bearing = np.linspace(bearing[0], bearing[-1], _MAX_PLACES // per_range)
    reach = 0.5 * model.speed_m_s * model.pulses[0].envelope_sigma_s
    ranges = range_m + np.linspace(-reach, reach, per_range)
    r, b = (part.ravel() for part in np.meshgrid(ranges, bearing, indexing="ij"))
    return Objects(np.maximum(r, 1e-3), b, np.zeros(r.size), np.ones(r.size, complex))


def _pair_gain(match: ComplexArray, overlap: ComplexArray) -> FloatArray:
    """Likelihood gain of every pair of unit-energy signals: b^H G^-1 b with 2 x 2 G."""
    power = np.abs(match) ** 2
    crossing = (np.conj(match)[:, None] * overlap * match[None, :]).real
    common = np.minimum(np.abs(overlap) ** 2, 1.0)
    gain = (power[:, None] + power[None, :] - 2.0 * crossing) / np.maximum(1.0 - common, 1e-3)
    gain[common > _OVERLAP_LIMIT] = 0.0
    return np.asarray(np.triu(gain, 1))


def _distinct(gain: FloatArray, places: Objects, model: HeadModel) -> list[tuple[int, int]]:
    """Best pairs that differ from each other by more than a neighbouring lobe or so."""
    candidates = np.argpartition(gain.ravel(), -200)[-200:]
    candidates = candidates[np.argsort(gain.ravel()[candidates])[::-1]]
    lobe = 0.4 * model.speed_m_s / model.receiver.carrier_hz / model.head.baseline_m
    chosen: list[tuple[int, int]] = []
    for flat in candidates.tolist():
        i, j = divmod(flat, gain.shape[1])
        bearings = np.sort(places.bearing_rad[[i, j]])
        known = [np.sort(places.bearing_rad[list(pair)]) for pair in chosen]
        if all(np.max(np.abs(bearings - k)) > lobe for k in known):
            chosen.append((i, j))
        if len(chosen) == _TRIALS:
            break
    return chosen


def _pair(
    places: Objects, i: int, j: int, match: ComplexArray, overlap: ComplexArray, norm: FloatArray
) -> Objects:
    gram = np.array([[1.0, overlap[i, j]], [np.conj(overlap[i, j]), 1.0]])
    strength = np.linalg.solve(gram, match[[i, j]]) / np.maximum(norm[[i, j]], 1e-9)
    both = places.take([i, j])
    return Objects(both.range_m, both.bearing_rad, both.velocity_m_s, strength)
