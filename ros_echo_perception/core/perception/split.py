"""Two objects where one seems to be: an exhaustive look at pairs of places.

One object fitted to two at one range lands in the middle, a local maximum. The gain of a pair
follows in closed form from the matches and the overlap of its two signals, so all pairs of a
grid of places are tried at once; refinement then finds their exact places.
"""

from __future__ import annotations

import math

import numpy as np
from scipy.linalg.blas import cherk

from ..types import ComplexArray, FloatArray
from . import kernels_search
from .conditioning import Conditioned
from .config import ProcessingConfig
from .joint import values, window_of
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
    rendered = values(model, places, ping.time_s[window]) * weight
    basis = rendered.reshape(len(places), -1).astype(np.complex64)
    norm = np.maximum(np.sqrt(np.sum(np.abs(basis) ** 2, axis=1)), 1e-9)
    basis /= norm[:, None]
    conjugate = basis.conj()
    match = conjugate @ (samples[:, window] * weight).ravel().astype(np.complex64)
    # basis.conj() @ basis.T, of which the upper triangle is enough.
    overlap = cherk(1.0, conjugate.T, trans=2, lower=1).T
    gain = model.geometry(places.range_m, places.bearing_rad).gain.max(axis=0)
    pair_gain, rarity = kernels_search.pair_scores(
        match, overlap, gain / norm, gain, _OVERLAP_LIMIT
    )
    score = pair_gain - np.log(rarity)
    best = np.argpartition(score, -_KEPT)[-_KEPT:] if score.size > _KEPT else np.arange(score.size)
    best = best[np.argsort(score[best])[::-1]]
    best = best[np.isfinite(score[best])]
    lobe = 0.5 * model.speed_m_s / model.receiver.carrier_hz / model.head.baseline_m
    pairs = kernels_search.distinct_pairs(best, places.bearing_rad, lobe, _TRIALS)
    i, j = pairs[:, 0], pairs[:, 1]
    # Strengths of the signals of unit energy: G^-1 b with the overlap G of the two.
    common = overlap[i, j]
    free = (1.0 - np.abs(common) ** 2) * norm[pairs].T
    one = (match[i] - common * match[j]) / free[0]
    other = (match[j] - np.conj(common) * match[i]) / free[1]
    strength = np.stack([one, other], axis=1).astype(complex)
    return [places.take(p).with_strength(s) for p, s in zip(pairs, strength, strict=True)]


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
