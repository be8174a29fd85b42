"""Compiled loops of the searches: matches over range and bearing, pairs of places."""

from __future__ import annotations

import math

import numpy as np

from ..types import ComplexArray, FloatArray, IndexArray
from .compiled import HeadArrays, compiled


@compiled
def _correlate(
    head: HeadArrays,
    ear: int,
    time_s: FloatArray,
    samples: ComplexArray,
    weight: FloatArray,
    low_s: float,
    high_s: float,
    per_step: int,
) -> tuple[ComplexArray, FloatArray]:
    """Weighted match and energy of an ear's pulse at delays from ``low_s`` to ``high_s``.

    b(d) = sum_t conj(p(t - d)) w^2 x, e(d) = sum_t |p(t - d)|^2 w^2, at ``per_step`` delays per
    sample. Lags repeat from sample to sample, so each value of the pulse is looked up once.
    """
    fine_s = (time_s[1] - time_s[0]) / per_step
    count = int((high_s - low_s) / fine_s) + 1
    last = head.pulse.shape[1] - 1
    first = max(0, int((low_s + head.start_s - time_s[0]) / fine_s) // per_step)
    end_s = high_s + head.start_s + last * head.fine_step_s
    stop = min(time_s.size, int((end_s - time_s[0]) / fine_s) // per_step + 2)
    match, energy = np.zeros(count, np.complex128), np.zeros(count)
    if stop <= first:
        return match, energy
    # Entry k: the pulse at the lag of sample ``first`` at the last delay, k delays earlier.
    pulse = np.zeros((stop - first) * per_step + count, np.complex128)
    lag_s = time_s[first] - low_s - (count - 1) * fine_s - head.start_s
    for k in range(pulse.size):
        position = (lag_s + k * fine_s) / head.fine_step_s
        if 0.0 < position < last:
            index = int(position)
            low, high = head.pulse[ear, index, 0], head.pulse[ear, index + 1, 0]
            pulse[k] = low + (position - index) * (high - low)
    for j in range(first, stop):
        w2 = weight[j] ** 2
        if w2 > 0.0:
            x, at = w2 * samples[j], (j - first) * per_step + count - 1
            for d in range(count):
                p = pulse[at - d]
                match[d] += p.conjugate() * x
                energy[d] += (p.real * p.real + p.imag * p.imag) * w2
    return match, energy


@compiled
def coarse_scan(
    head: HeadArrays,
    time_s: FloatArray,
    samples: ComplexArray,
    weight: FloatArray,
    delay_s: FloatArray,
    gain: FloatArray,
    shift_s: FloatArray,
    per_step: int,
) -> tuple[ComplexArray, FloatArray]:
    """Matches (2, n_shift, n) without carrier and energies (n_shift, n) at delays (2, n), shifted.

    m_e = g_e b_e and sum_e g_e^2 e_e, the matches linear between the delays of `_correlate`.
    """
    shifts, n = shift_s.size, delay_s.shape[1]
    match = np.empty((2, shifts, n), np.complex128)
    energy = np.full((shifts, n), 1e-30)
    fine_s = (time_s[1] - time_s[0]) / per_step
    for ear in range(2):
        low_s = delay_s[ear].min() + shift_s.min() - fine_s
        high_s = delay_s[ear].max() + shift_s.max() + 2.0 * fine_s
        b, e = _correlate(head, ear, time_s, samples[ear], weight[ear], low_s, high_s, per_step)
        for k in range(shifts):
            for i in range(n):
                position = (delay_s[ear, i] + shift_s[k] - low_s) / fine_s
                index = min(int(position), b.size - 2)
                fraction, g = position - index, gain[ear, i]
                match[ear, k, i] = g * (b[index] + fraction * (b[index + 1] - b[index]))
                energy[k, i] += g * g * (e[index] + fraction * (e[index + 1] - e[index]))
    return match, energy


@compiled
def best_shift(
    match: ComplexArray, energy: FloatArray, prior: FloatArray, shift_m: FloatArray
) -> tuple[int, float]:
    """Which range shift has the largest gain (|m_L| + |m_R|)^2 / energy + prior, and its sigma.

    The standard deviation is that of the likelihood over all shifts and bearings.
    """
    gain = np.empty(energy.shape)
    best, top = 0, -math.inf
    for k in range(energy.shape[0]):
        for i in range(energy.shape[1]):
            left, right = match[0, k, i], match[1, k, i]
            l2 = left.real * left.real + left.imag * left.imag
            r2 = right.real * right.real + right.imag * right.imag
            gain[k, i] = (l2 + r2 + 2.0 * math.sqrt(l2 * r2)) / energy[k, i] + prior[i]
            if gain[k, i] > top:
                best, top = k, gain[k, i]
    weight = np.zeros(energy.shape[0])
    for k in range(energy.shape[0]):
        for i in range(energy.shape[1]):
            weight[k] += math.exp(gain[k, i] - top)
    weight /= weight.sum()
    mean = np.dot(weight, shift_m)
    return best, math.sqrt(np.dot(weight, (shift_m - mean) ** 2))


@compiled
def fine_scan(
    head: HeadArrays,
    coarse_rad: FloatArray,
    match: ComplexArray,
    energy: FloatArray,
    prior: FloatArray,
    bearing_rad: FloatArray,
    delay_s: FloatArray,
) -> tuple[FloatArray, FloatArray, FloatArray, ComplexArray]:
    """`Scan.aligned`, ``phase_rad``, ``sharpness``, ``strength``; linear between coarse bearings.

    The delays (2, n) of the fine bearings give the carriers that the model expects.
    """
    n, last = bearing_rad.size, coarse_rad.size - 1
    aligned, phase, sharpness = np.empty(n), np.empty(n), np.empty(n)
    strength = np.empty(n, np.complex128)
    step = (coarse_rad[last] - coarse_rad[0]) / last
    for i in range(n):
        position = min(max((bearing_rad[i] - coarse_rad[0]) / step, 0.0), last - 1e-9)
        k = int(position)
        f = position - k
        own = energy[k] + f * (energy[k + 1] - energy[k])
        left = match[0, k] + f * (match[0, k + 1] - match[0, k])
        right = match[1, k] + f * (match[1, k + 1] - match[1, k])
        half = 0.5 * head.omega * (delay_s[0, i] - delay_s[1, i])
        p, q = head.ear_phase[0] - half, head.ear_phase[1] + half
        left *= complex(math.cos(p), -math.sin(p))
        right *= complex(math.cos(q), -math.sin(q))
        loud, other = abs(left), abs(right)
        turned = right * left.conjugate()
        stronger, size = (left, loud) if loud >= other else (right, other)
        aligned[i] = (loud + other) ** 2 / own + prior[k] + f * (prior[k + 1] - prior[k])
        phase[i] = math.atan2(turned.imag, turned.real)
        sharpness[i] = 2.0 * loud * other / own
        strength[i] = stronger * ((loud + other) / own / max(size, 1e-30))
    return aligned, phase, sharpness, strength


@compiled
def lobes(bearing_rad: FloatArray, phase_rad: FloatArray) -> FloatArray:
    """Bearings at which the phase (-pi .. pi, wrapping) passes 0, linear between the grid's."""
    found = np.empty(bearing_rad.size)
    count = 0
    for i in range(bearing_rad.size - 1):
        here, there = phase_rad[i], phase_rad[i + 1]
        # A phase of exactly 0 belongs to one side, or it would count twice.
        if (here >= 0.0) != (there >= 0.0) and abs(here) < math.pi / 2.0:
            # The phase wraps at +-pi; a step that crosses 0 keeps its size when unwrapped.
            turn = there - here
            turn -= 2.0 * math.pi * round(turn / (2.0 * math.pi))
            if turn != 0.0:
                step = bearing_rad[i + 1] - bearing_rad[i]
                found[count] = bearing_rad[i] - here / turn * step
                count += 1
    return found[:count]


@compiled
def pair_scores(
    match: ComplexArray, overlap: ComplexArray, heard: FloatArray, beam_gain: FloatArray,
    overlap_limit: float,
) -> tuple[FloatArray, FloatArray]:  # fmt: skip
    """Gain, and power of the prior cost, of every pair i < j of unit-energy signals, row by row.

    The gain is b^H G^-1 b with the 2 x 2 overlap G, the strengths G^-1 b; ``heard`` turns a
    strength into the amplitude in the better ear. The cost is `split.implausibility` of both, of
    which the logarithm is left to NumPy, which takes many at once. Pairs that overlap too much
    have the gain -inf.
    """
    size = match.size
    gain = np.full(size * (size - 1) // 2, -np.inf, np.float32)
    rarity = np.ones(gain.size, np.float32)
    prior = 1.0 / np.maximum(beam_gain, 1e-3)
    power, heard2 = match.real**2 + match.imag**2, heard**2
    at = -1
    for i in range(size):
        for j in range(i + 1, size):
            at += 1
            o = overlap[i, j]
            common = o.real * o.real + o.imag * o.imag
            if common > overlap_limit:
                continue
            inverse = 1.0 / max(1.0 - common, 1e-3)
            # |b_i - o b_j|^2 and |b_j - conj(o) b_i|^2 share the mixed term.
            p = o.conjugate() * match[i] * match[j].conjugate()
            mixed = 2.0 * p.real
            a2 = max(power[i] - mixed + common * power[j], 0.0)
            b2 = max(power[j] - mixed + common * power[i], 0.0)
            one = max(a2 * heard2[i] * inverse * inverse, 1e-18) * prior[i]
            other = max(b2 * heard2[j] * inverse * inverse, 1e-18) * prior[j]
            gain[at] = power[j] + a2 * inverse
            rarity[at] = one * other
    return gain, rarity


@compiled
def distinct_pairs(
    flat: IndexArray, bearing_rad: FloatArray, lobe_rad: float, most: int
) -> IndexArray:
    """Of pairs by their places in `pair_scores`, the first of each neighbourhood: (k, 2).

    Neighbours differ by no more than ``lobe_rad`` in both bearings.
    """
    chosen = np.empty((most, 2), np.intp)
    known = np.empty((most, 2))
    count = 0
    size = bearing_rad.size
    for place in flat:
        i, rest = 0, place
        while rest >= size - 1 - i:
            rest -= size - 1 - i
            i += 1
        j = i + 1 + rest
        low, high = min(bearing_rad[i], bearing_rad[j]), max(bearing_rad[i], bearing_rad[j])
        new = True
        for k in range(count):
            new &= max(abs(low - known[k, 0]), abs(high - known[k, 1])) > lobe_rad
        if new:
            chosen[count, 0], chosen[count, 1] = i, j
            known[count, 0], known[count, 1] = low, high
            count += 1
            if count == most:
                break
    return chosen[:count]
