"""First idea of what is there: envelope mixtures of each ear, paired into candidates."""

from __future__ import annotations

import math
from functools import lru_cache

import numpy as np

from ..types import BoolArray, FloatArray
from .conditioning import Conditioned
from .mixture import fit_mixture_of_unknown_order
from .model import HeadModel
from .pairing import Candidate, EarEchoes, pair_ears
from .pulse import PulseTemplate

_OPEN_SIGMAS = 3.0
_ENVELOPE_SIGMA = math.sqrt(0.5)
"""Standard deviation of |signal + noise| for complex noise of variance 1, strong signal."""
_WIDTH_BAND = (0.9, 1.15)
_MAX_PER_STRETCH = 6


def find_candidates(
    model: HeadModel, ping: Conditioned, matched: FloatArray, max_bearing_rad: float
) -> list[Candidate]:
    """Candidates, strongest first.

    Parameters
    ----------
    matched : shape (2, n), from `search.matched_filter`.
    """
    ears = tuple(_ear_echoes(ping, matched[ear], model.pulses[ear]) for ear in range(2))
    sigma_left, sigma_right = ping.noise_sigma
    both = ping.alive[0] and ping.alive[1]
    candidates = pair_ears(
        (ears[0], ears[1]),
        model,
        sigma_right / sigma_left if both else 1.0,
        model.pulses[0].envelope_sigma_s,
        max_bearing_rad,
    )
    return sorted(candidates, key=lambda c: c.strength, reverse=True)


@lru_cache(maxsize=64)
def matched_width_s(pulse: PulseTemplate) -> float:
    """Gaussian width of the pulse's envelope behind its own matched filter."""
    step = pulse.fine_step_s
    n = 2 * pulse.table.size
    spectrum = np.fft.fft(pulse.table, n)
    correlation = np.abs(np.fft.ifft(np.abs(spectrum) ** 2))
    half = int(np.argmax(correlation < correlation[0] / 2.0))
    return 2.0 * half * step / math.sqrt(8.0 * math.log(2.0))


def _ear_echoes(ping: Conditioned, matched: FloatArray, pulse: PulseTemplate) -> EarEchoes:
    width_s = matched_width_s(pulse)
    guard = int(math.ceil(1.5 * width_s / ping.step_s))
    independent = pulse.noise_bandwidth_hz * ping.step_s
    delays: list[float] = []
    heights: list[float] = []
    for part in _stretches(matched > _OPEN_SIGMAS, guard):
        mixture = fit_mixture_of_unknown_order(
            ping.time_s[part],
            matched[part],
            _ENVELOPE_SIGMA,
            (_WIDTH_BAND[0] * width_s, _WIDTH_BAND[1] * width_s),
            independent,
            _MAX_PER_STRETCH,
        )
        height = mixture.heights() + _ENVELOPE_SIGMA
        keep = height > _OPEN_SIGMAS
        delays.extend(mixture.time_s[keep].tolist())
        heights.extend(height[keep].tolist())
    return EarEchoes(np.array(delays), np.array(heights))


def _stretches(active: BoolArray, guard: int) -> list[slice]:
    """Runs of active samples, widened by the guard and merged where they touch."""
    index = np.nonzero(active)[0]
    if index.size == 0:
        return []
    breaks = np.nonzero(np.diff(index) > 2 * guard)[0]
    first = np.concatenate(([index[0]], index[breaks + 1]))
    last = np.concatenate((index[breaks], [index[-1]]))
    return [
        slice(max(int(a) - guard, 0), min(int(b) + guard + 1, active.size))
        for a, b in zip(first, last, strict=True)
    ]
