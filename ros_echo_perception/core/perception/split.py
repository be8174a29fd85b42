"""Two objects where one seems to be: an exhaustive look at pairs of places.

One object fitted to two at one range lands in the middle, a local maximum. The gain of a pair
follows in closed form from the matches and the overlap of its two signals, so all pairs of a
grid of places are tried at once; refinement then finds their exact places.
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

_MAX_PLACES = 400
_RANGE_STEPS = 2  # on each side of the centre
_PHASE_STEPS = 5.0
_MIN_GAIN = 0.15
_TRIALS = 12
_KEPT = 300
_OVERLAP_LIMIT = 0.985


def implausibility(heard: FloatArray, beam_gain: FloatArray) -> FloatArray:
    """Prior cost of objects in nats: strong ones that cancel each other, or lie off the beams.

    Parameters
    ----------
    heard : amplitude of each object in its better ear, any unit that is the same for all.
    beam_gain : the better ear's gain towards it.

    Notes
    -----
    Amplitudes a are taken as distributed like a^-2 (few strong, many weak); heard through a
    gain g, an amplitude h = a g at a bearing then has the density g / h^2.
    """
    safe_heard, safe_gain = np.maximum(heard, 1e-12), np.maximum(beam_gain, 1e-3)
    return np.asarray(2.0 * np.log(safe_heard) - np.log(safe_gain))


def best_pairs(
    model: HeadModel,
    ping: Conditioned,
    samples: ComplexArray,
    range_m: float,
    config: ProcessingConfig,
) -> list[Objects]:
    """The most likely pairs of objects near a range, best first, at most twelve.

    Parameters
    ----------
    samples : complex (2, n), all other objects taken off.
    """
    places = _places(model, range_m, config)
    window = window_of(model, ping, places)
    weight = ping.weight[:, window]
    rendered = signals(model, places, ping.time_s[window]).value * weight[:, None, :]
    basis = rendered.transpose(1, 0, 2).reshape(len(places), -1).astype(np.complex64)
    norm = np.maximum(np.sqrt(np.sum(np.abs(basis) ** 2, axis=1)), 1e-9)
    basis /= norm[:, None]
    match = basis.conj() @ (samples[:, window] * weight).ravel().astype(np.complex64)
    overlap = basis.conj() @ basis.T
    gain = model.geometry(places.range_m, places.bearing_rad).gain.max(axis=0)
    score = _scores(match, overlap, gain / norm, gain)
    kept = np.argpartition(score.ravel(), -_KEPT)[-_KEPT:]
    kept = kept[np.argsort(score.ravel()[kept])[::-1]]
    pairs = [divmod(int(flat), len(places)) for flat in kept]
    return [_pair(places, i, j, match, overlap, norm) for i, j in _distinct(pairs, places, model)]


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


def _scores(
    match: ComplexArray, overlap: ComplexArray, heard: FloatArray, beam_gain: FloatArray
) -> FloatArray:
    """Gain less prior cost of every pair of unit-energy signals, upper triangle.

    The gain is b^H G^-1 b with the 2 x 2 overlap G, the strengths G^-1 b; ``heard`` turns a
    strength into the amplitude in the better ear.
    """
    common = np.minimum(overlap.real**2 + overlap.imag**2, 1.0)
    free = np.maximum(1.0 - common, 1e-3)
    strength = np.abs(match[:, None] - overlap * match[None, :]) / free  # of i beside j
    power = np.abs(match) ** 2
    gain = power[None, :] + strength**2 * free
    cost = implausibility(strength * heard[:, None], beam_gain[:, None])
    score = gain - cost - cost.T
    score[common > _OVERLAP_LIMIT] = -np.inf
    score[np.tril_indices(match.size)] = -np.inf
    return np.asarray(score)


def _distinct(
    pairs: list[tuple[int, int]], places: Objects, model: HeadModel
) -> list[tuple[int, int]]:
    """The first of each neighbourhood: bearings that differ by more than half a lobe."""
    lobe = 0.5 * model.speed_m_s / model.receiver.carrier_hz / model.head.baseline_m
    chosen: list[tuple[int, int]] = []
    known: list[FloatArray] = []
    for i, j in pairs:
        bearings = np.sort(places.bearing_rad[[i, j]])
        if all(np.abs(bearings - k).max() > lobe for k in known):
            chosen.append((i, j))
            known.append(bearings)
        if len(chosen) == _TRIALS:
            break
    return chosen


def _pair(
    places: Objects, i: int, j: int, match: ComplexArray, overlap: ComplexArray, norm: FloatArray
) -> Objects:
    gram = np.array([[1.0, overlap[i, j]], [np.conj(overlap[i, j]), 1.0]])
    strength = np.linalg.solve(gram, match[[i, j]]) / norm[[i, j]]
    return places.take([i, j]).with_strength(strength)
