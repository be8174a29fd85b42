"""Compiled loops around the model of an object: places, sound in both ears, refinement.

All arrays are contiguous; ears and transducers come left first, behind the transmitter. See
`model` for the geometry and `joint` for what is refined.
"""

from __future__ import annotations

import math

import numpy as np

from ..types import ComplexArray, FloatArray
from .compiled import HeadArrays, compiled

_ROUNDS = 12
_TOLERANCE = 2e-3  # of the cost, nats
_MAX_STEP_M, _MAX_STEP_RAD = 0.02, 0.05
_UNKNOWNS = 5  # of an object: range, bearing, velocity, two parts of the strength

Leg = tuple[float, float, float, float, float, float]
Sound = tuple[complex, complex, complex, complex]


@compiled
def _leg(head: HeadArrays, which: int, range_m: float, cos: float, sin: float) -> Leg:
    """From one transducer to a place: travel time, its slopes by range and bearing; the beam."""
    dx, dy = range_m * cos - head.places[which, 0], range_m * sin - head.places[which, 1]
    distance = math.sqrt(dx * dx + dy * dy + head.places[which, 2] ** 2)
    unit = 1.0 / (distance * head.speed_m_s)
    position = (math.atan2(dy, dx) + math.pi) / head.beam_step_rad
    index = min(int(position), head.beams.shape[1] - 2)
    fraction = position - index
    beams = head.beams
    return (
        distance / head.speed_m_s,
        (dx * cos + dy * sin) * unit,
        (dy * cos - dx * sin) * range_m * unit,
        (1.0 - fraction) * beams[which, index, 0] + fraction * beams[which, index + 1, 0],
        (1.0 - fraction) * beams[which, index, 1] + fraction * beams[which, index + 1, 1],
        (1.0 - fraction) * beams[which, index, 2] + fraction * beams[which, index + 1, 2],
    )


@compiled
def _both_ears(head: HeadArrays, range_m: float, bearing_rad: float, out: FloatArray) -> None:
    """Fills (6, 2): delay, its slopes by range and bearing, gain, slope by bearing, tilt."""
    cos, sin = math.cos(bearing_rad), math.sin(bearing_rad)
    sent = _leg(head, 0, range_m, cos, sin)
    for ear in range(2):
        heard = _leg(head, ear + 1, range_m, cos, sin)
        transmit = head.ear_gain[ear] * sent[3]
        gain = transmit * heard[3]
        out[0, ear] = head.latency_s + sent[0] + heard[0]
        out[1, ear] = sent[1] + heard[1]
        out[2, ear] = sent[2] + heard[2]
        out[3, ear] = gain
        out[4, ear] = transmit * heard[4] + gain * (sent[4] / (sent[3] + 1e-12))
        out[5, ear] = (sent[5] + heard[5]) / head.carrier_hz


@compiled
def geometry(head: HeadArrays, range_m: FloatArray, bearing_rad: FloatArray) -> FloatArray:
    """Rows of `EarGeometry`, shape (6, 2, n), of n places."""
    result, at = np.empty((6, 2, range_m.size)), np.empty((6, 2))
    for i in range(range_m.size):
        _both_ears(head, range_m[i], bearing_rad[i], at)
        result[:, :, i] = at
    return result


@compiled
def _scaled(z: complex, factor: float) -> complex:
    return complex(z.real * factor, z.imag * factor)


@compiled
def _turned(z: complex, factor: float) -> complex:
    """1j * factor * z."""
    return complex(-z.imag * factor, z.real * factor)


@compiled
def _carrier(head: HeadArrays, ear: int, at: FloatArray) -> complex:
    """Gain and phase of an ear: g exp(j (mismatch - w (delay - mean delay)))."""
    phase = head.ear_phase[ear] - head.omega * (at[0, ear] - 0.5 * (at[0, 0] + at[0, 1]))
    return complex(at[3, ear] * math.cos(phase), at[3, ear] * math.sin(phase))


@compiled
def values(
    head: HeadArrays, range_m: FloatArray, bearing_rad: FloatArray, time_s: FloatArray
) -> ComplexArray:
    """Sound of resting objects of strength 1 at shared times (n,): (k, 2, n)."""
    result = np.zeros((range_m.size, 2, time_s.size), np.complex128)
    at = np.empty((6, 2))
    last = head.pulse.shape[1] - 1
    for i in range(range_m.size):
        _both_ears(head, range_m[i], bearing_rad[i], at)
        for ear in range(2):
            factor = _carrier(head, ear, at)
            tilt = at[5, ear] / (2.0 * math.pi)
            for j in range(time_s.size):
                position = (time_s[j] - at[0, ear] - head.start_s) / head.fine_step_s
                if 0.0 < position < last:
                    index = int(position)
                    fraction = position - index
                    low, high = head.pulse[ear, index], head.pulse[ear, index + 1]
                    pulse = low[0] + _scaled(high[0] - low[0], fraction)
                    slope = low[1] + _scaled(high[1] - low[1], fraction)
                    result[i, ear, j] = factor * (pulse + _turned(slope, -tilt))
    return result


@compiled
def _sound(
    head: HeadArrays, ear: int, at: FloatArray, factor: complex, velocity: float, lag_s: float
) -> Sound:
    """Value and derivatives by range, bearing and velocity, of strength 1, at one time.

    value = g exp(j phase) exp(j w_d T) (p + tilt p' / (2 pi j)), with the pulse p, the Doppler
    shift w_d and the turning time T at the lag behind the delay.
    """
    position = (lag_s - head.start_s) / head.fine_step_s
    if not 0.0 < position < head.pulse.shape[1] - 1:
        return 0j, 0j, 0j, 0j
    index = int(position)
    fraction = position - index
    low, high = head.pulse[ear, index], head.pulse[ear, index + 1]
    pulse = low[0] + _scaled(high[0] - low[0], fraction)
    slope = low[1] + _scaled(high[1] - low[1], fraction)
    turning = low[2] + _scaled(high[2] - low[2], fraction)
    rate = low[3] + _scaled(high[3] - low[3], fraction)
    omega_d = head.doppler * velocity
    if velocity != 0.0:
        size, phase = math.exp(-omega_d * turning.imag), omega_d * turning.real
        factor = factor * complex(size * math.cos(phase), size * math.sin(phase))
    tilt = at[5, ear] / (2.0 * math.pi)
    value = factor * (pulse + _turned(slope, -tilt))
    moved = -(factor * slope) - _turned(rate * value, omega_d)
    by_range = at[1, ear] - 0.5 * (at[1, 0] + at[1, 1])  # against the mean of both ears
    by_bearing = at[2, ear] - 0.5 * (at[2, 0] + at[2, 1])
    turn = complex(at[4, ear] / max(at[3, ear], 1e-9), -head.omega * by_bearing)
    return (
        value,
        _scaled(moved, at[1, ear]) - _turned(value, head.omega * by_range),
        _scaled(moved, at[2, ear]) + turn * value,
        _turned(turning * value, head.doppler),
    )


@compiled
def sounds(
    head: HeadArrays,
    range_m: FloatArray,
    bearing_rad: FloatArray,
    velocity_m_s: FloatArray,
    time_s: FloatArray,
) -> ComplexArray:
    """Value and derivatives (4, 2, k, n) of k objects of strength 1, each at its times (k, n)."""
    k, n = time_s.shape
    result = np.empty((4, 2, k, n), np.complex128)
    at = np.empty((6, 2))
    for i in range(k):
        _both_ears(head, range_m[i], bearing_rad[i], at)
        for ear in range(2):
            factor = _carrier(head, ear, at)
            for j in range(n):
                sound = _sound(head, ear, at, factor, velocity_m_s[i], time_s[i, j] - at[0, ear])
                for quantity in range(4):
                    result[quantity, ear, i, j] = sound[quantity]
    return result


@compiled
def _evaluate(
    head: HeadArrays, time_s: FloatArray, samples: ComplexArray, weight: FloatArray,
    unknowns: FloatArray, velocity_sigma: float, jacobian: FloatArray, residual: FloatArray,
) -> float:  # fmt: skip
    """Cost of k objects (k, 5) in one excerpt; fills Jacobian (5 k, 4 n) and residual (4 n,).

    Columns: real and imaginary parts of the left ear, then of the right one, weighted.
    """
    n = time_s.size
    at = np.empty((6, 2))
    for ear in range(2):
        for j in range(n):
            wanted = samples[ear, j] * weight[ear, j]
            residual[2 * ear * n + j], residual[(2 * ear + 1) * n + j] = wanted.real, wanted.imag
    prior = 0.0
    for i in range(unknowns.shape[0]):
        _both_ears(head, unknowns[i, 0], unknowns[i, 1], at)
        strength = complex(unknowns[i, 3], unknowns[i, 4])
        velocity = unknowns[i, 2]
        prior += 0.5 * (velocity / velocity_sigma) ** 2
        row = _UNKNOWNS * i
        for ear in range(2):
            factor = _carrier(head, ear, at)
            for j in range(n):
                re, im, w = 2 * ear * n + j, (2 * ear + 1) * n + j, weight[ear, j]
                sound = _sound(head, ear, at, factor, velocity, time_s[j] - at[0, ear])
                for quantity in range(1, 4):
                    slope = strength * sound[quantity]
                    jacobian[row + quantity - 1, re] = w * slope.real
                    jacobian[row + quantity - 1, im] = w * slope.imag
                jacobian[row + 3, re], jacobian[row + 3, im] = w * sound[0].real, w * sound[0].imag
                jacobian[row + 4, re], jacobian[row + 4, im] = -w * sound[0].imag, w * sound[0].real
                heard = strength * sound[0]
                residual[re] -= w * heard.real
                residual[im] -= w * heard.imag
    return float(np.dot(residual, residual)) + prior


@compiled
def _normal_equations(
    jacobian: FloatArray, residual: FloatArray, unknowns: FloatArray, velocity_sigma: float
) -> tuple[FloatArray, FloatArray]:
    """Normal matrix (5 k, 5 k) and gradient (5 k,) for a step of all unknowns."""
    normal = np.dot(jacobian, jacobian.T)
    gradient = np.dot(jacobian, residual)
    precision = 0.5 / velocity_sigma**2
    for i in range(unknowns.shape[0]):
        at = _UNKNOWNS * i + 2
        normal[at, at] += precision
        gradient[at] -= precision * unknowns[i, 2]
    ridge = 1e-12 * np.trace(normal) / normal.shape[0]
    for at in range(normal.shape[0]):
        normal[at, at] += ridge
    return normal, gradient


@compiled
def _moved(unknowns: FloatArray, step: FloatArray, max_bearing_rad: float) -> FloatArray:
    """Unknowns (k, 5) after a step (5 k,) of bounded length."""
    result = unknowns + step.reshape(unknowns.shape)
    for i in range(unknowns.shape[0]):
        range_step = min(max(step[_UNKNOWNS * i], -_MAX_STEP_M), _MAX_STEP_M)
        bearing_step = min(max(step[_UNKNOWNS * i + 1], -_MAX_STEP_RAD), _MAX_STEP_RAD)
        result[i, 0] = max(unknowns[i, 0] + range_step, 1e-3)
        bearing = unknowns[i, 1] + bearing_step
        result[i, 1] = min(max(bearing, -max_bearing_rad), max_bearing_rad)
    return result


@compiled
def refine(
    head: HeadArrays, time_s: FloatArray, samples: ComplexArray, weight: FloatArray,
    unknowns: FloatArray, velocity_sigma: float, max_bearing_rad: float,
) -> tuple[FloatArray, float, FloatArray]:  # fmt: skip
    """Damped least squares: k objects (k, 5), cost, and normal matrix (5 k, 5 k) at the end.

    The excerpt has times (n,), samples and weights (2, n).
    """
    size, n = unknowns.size, time_s.size
    jacobian, residual = np.empty((size, 4 * n)), np.empty(4 * n)
    cost = _evaluate(head, time_s, samples, weight, unknowns, velocity_sigma, jacobian, residual)
    normal, gradient = _normal_equations(jacobian, residual, unknowns, velocity_sigma)
    damping = 1e-3
    for _ in range(_ROUNDS):
        damped = normal.copy()
        for i in range(size):
            damped[i, i] += damping * normal[i, i]
        step = np.linalg.solve(damped, gradient)
        # What the quadratic model promises; too little is not worth a look.
        if np.dot(step, gradient) < _TOLERANCE or damping > 1e3:
            break
        trial = _moved(unknowns, step, max_bearing_rad)
        trial_cost = _evaluate(
            head, time_s, samples, weight, trial, velocity_sigma, jacobian, residual
        )
        if trial_cost < cost:
            unknowns, cost = trial, trial_cost
            normal, gradient = _normal_equations(jacobian, residual, unknowns, velocity_sigma)
            damping = max(damping / 8.0, 1e-7)
        else:
            damping *= 8.0
    return unknowns, cost, normal


@compiled
def uncertainty(normal: FloatArray, unknowns: FloatArray) -> tuple[FloatArray, FloatArray]:
    """Of each object: covariance (k, 3, 3) of range, bearing, velocity; loss without it (k,).

    The cost is |residual|^2 of complex noise of variance 1, its Hessian 2 * normal. The loss is
    half the Wald statistic of strength 0, all else free to follow: a^T C^-1 a / 2.
    """
    k = unknowns.shape[0]
    covariance, loss = np.empty((k, 3, 3)), np.empty(k)
    inverse = 0.5 * np.linalg.inv(normal)
    for i in range(k):
        at = _UNKNOWNS * i
        covariance[i] = inverse[at : at + 3, at : at + 3]
        re, im = unknowns[i, 3], unknowns[i, 4]
        var_re, var_im = inverse[at + 3, at + 3], inverse[at + 4, at + 4]
        common = 0.5 * (inverse[at + 3, at + 4] + inverse[at + 4, at + 3])
        pull = re * re * var_im - 2.0 * re * im * common + im * im * var_re
        loss[i] = 0.5 * pull / (var_re * var_im - common * common)
    return covariance, loss
