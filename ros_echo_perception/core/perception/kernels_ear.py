"""Compiled loops over one ear alone: matched filter, envelope mixtures, clicks."""

from __future__ import annotations

import math

import numpy as np

from ..types import ComplexArray, FloatArray
from .compiled import compiled


@compiled
def matched(
    samples: ComplexArray, weight: FloatArray, template: ComplexArray, lead: int
) -> FloatArray:
    """Amplitude behind the matched filter of one ear in units of its noise, shape (n,).

    |sum_k conj(p_k) w^2 x| / sqrt(sum_k |p_k|^2 w^2) over samples ``lead`` before and on; 0 where
    most of the pulse is masked.
    """
    n, size = samples.size, template.size
    weighted, weight2 = np.empty(n, np.complex128), np.empty(n)
    for j in range(n):
        weight2[j] = weight[j] ** 2
        weighted[j] = samples[j] * weight2[j]
    power = template.real**2 + template.imag**2
    result = np.zeros(n)
    heard = weight2[weight2 > 0.0]
    if heard.size == 0:
        return result
    least = 1e-3 * power.sum() * np.median(heard)
    for j in range(n):
        match, energy = 0j, 0.0
        for k in range(max(0, lead - j), min(size, n + lead - j)):
            match += template[k].conjugate() * weighted[j - lead + k]
            energy += power[k] * weight2[j - lead + k]
        if energy > least:
            result[j] = abs(match) / math.sqrt(energy)
    return result


@compiled
def best_delay(
    shape: ComplexArray,
    position: FloatArray,
    shift: FloatArray,
    weight: FloatArray,
    samples: ComplexArray,
) -> tuple[float, ComplexArray]:
    """Gain and sound of a shape at the delay that suits samples (n,) best, nearest look-up.

    Sample j at delay d looks up entry ``position[j] - shift[d]``; gain = |sum conj(s) w^2 x|^2 /
    sum |s|^2 w^2.
    """
    n = samples.size
    gain, height, best = -1.0, 0j, 0
    for d in range(shift.size):
        match, energy = 0j, 0.0
        for j in range(n):
            index = int(np.rint(position[j] - shift[d]))
            if 0 <= index < shape.size:
                s, w2 = shape[index], weight[j] ** 2
                match += s.conjugate() * samples[j] * w2
                energy += (s.real * s.real + s.imag * s.imag) * w2
        energy = max(energy, 1e-30)
        this = (match.real * match.real + match.imag * match.imag) / energy
        if this > gain:
            gain, height, best = this, match * (1.0 / energy), d
    sound = np.zeros(n, np.complex128)
    for j in range(n):
        index = int(np.rint(position[j] - shift[best]))
        if 0 <= index < shape.size:
            sound[j] = height * shape[index]
    return gain, sound


@compiled
def _round(
    time_s: FloatArray,
    share: FloatArray,
    mean: FloatArray,
    fraction: FloatArray,
    sigma: float,
    background: float,
) -> tuple[float, FloatArray, FloatArray, float]:
    """One round of expectation and maximisation: log likelihood of what came in, then new
    masses, means and mean squared width of k components.
    """
    k = mean.size
    mass, first, second = np.zeros(k), np.zeros(k), np.zeros(k)
    density = np.empty(k)
    height = fraction / (sigma * math.sqrt(2.0 * math.pi))
    likelihood = 0.0
    for j in range(time_s.size):
        total = background
        for i in range(k):
            z = (time_s[j] - mean[i]) / sigma
            density[i] = height[i] * math.exp(-0.5 * z * z)
            total += density[i]
        likelihood += share[j] * math.log(total)
        for i in range(k):
            duty, off = density[i] * share[j] / total, time_s[j] - mean[i]
            mass[i] += duty
            first[i] += duty * off
            second[i] += duty * off * off
    # About the old mean in, about the new mean out: no large numbers are subtracted.
    spread = 0.0
    moved = np.empty(k)
    for i in range(k):
        shift = first[i] / mass[i] if mass[i] > 0.0 else 0.0
        moved[i] = mean[i] + shift
        spread += second[i] - shift * first[i]
    return likelihood, mass, moved, spread / max(mass.sum(), 1e-300)


@compiled
def mixture(
    time_s: FloatArray,
    weight: FloatArray,
    start_time_s: FloatArray,
    bounds_s: tuple[float, float],
    background_share: float,
    rounds: int,
    tolerance: float,
) -> tuple[FloatArray, FloatArray, float, float]:
    """Means, fractions, common width and mean log likelihood; see `mixture.fit_mixture`."""
    low, high = bounds_s
    share = weight / weight.sum()
    mean = start_time_s.copy()
    fraction = np.full(mean.size, 1.0 / mean.size)
    sigma, likelihood, previous = math.sqrt(low * high), -math.inf, -math.inf
    # A thin uniform background keeps far-off bins from pulling the components.
    background = background_share / (time_s[-1] - time_s[0] + time_s[1] - time_s[0])
    for _ in range(rounds):
        likelihood, mass, moved, spread = _round(time_s, share, mean, fraction, sigma, background)
        alive = mass > 1e-4
        if not alive.all():
            mean, fraction = mean[alive], fraction[alive] / fraction[alive].sum()
            previous = -math.inf
            continue
        fraction = mass / mass.sum()
        mean = moved
        sigma = min(max(math.sqrt(spread), low), high)
        if likelihood - previous < tolerance:
            break
        previous = likelihood
    return mean, fraction, sigma, likelihood
