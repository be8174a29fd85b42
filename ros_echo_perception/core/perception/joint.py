"""Both ears at once: objects as (range, bearing, velocity, complex strength).

Echoes overlap as waves, so they are fitted on the complex baseband: every object puts one
delayed pulse into each ear, with gains and carrier phases that its place dictates. Objects are
refined by damped least squares (Levenberg-Marquardt); each is re-searched against the residual
plus itself, the step of the superimposed-signal algorithm [1]_.

References
----------
.. [1] M. Feder and E. Weinstein, "Parameter estimation of superimposed signals using the EM
   algorithm", IEEE Trans. Acoust. Speech Signal Process. 36(4), 1988, 477-489.
.. [2] K. Levenberg 1944; D. Marquardt, SIAM J. Appl. Math. 11(2), 1963, 431-441.
"""

from __future__ import annotations

import math
from dataclasses import dataclass

import numpy as np

from ..types import ComplexArray, FloatArray
from .conditioning import Conditioned
from .model import HeadModel

_ROUNDS = 12
_TOLERANCE = 1e-2  # of the cost, nats


@dataclass(frozen=True, eq=False)
class Objects:
    """k objects of one ping; all arrays shape (k,). Velocity positive = moving away."""

    range_m: FloatArray
    bearing_rad: FloatArray
    velocity_m_s: FloatArray
    strength: ComplexArray

    def __len__(self) -> int:
        return int(self.range_m.size)

    def take(self, index: np.ndarray | list[int]) -> Objects:
        """The chosen ones."""
        index = np.asarray(index, np.intp)
        return Objects(
            self.range_m[index],
            self.bearing_rad[index],
            self.velocity_m_s[index],
            self.strength[index],
        )

    def join(self, other: Objects) -> Objects:
        """These and the others."""
        return Objects(
            np.concatenate([self.range_m, other.range_m]),
            np.concatenate([self.bearing_rad, other.bearing_rad]),
            np.concatenate([self.velocity_m_s, other.velocity_m_s]),
            np.concatenate([self.strength, other.strength]),
        )


def no_objects() -> Objects:
    """An empty set."""
    return Objects(np.zeros(0), np.zeros(0), np.zeros(0), np.zeros(0, complex))


def one_object(range_m: float, bearing_rad: float, strength: complex) -> Objects:
    """A set of one object at rest."""
    return Objects(
        np.array([range_m]), np.array([bearing_rad]), np.zeros(1), np.array([strength])
    )


@dataclass(frozen=True, eq=False)
class Signals:
    """What objects of unit strength put into both ears, with derivatives; (2, k, n) each."""

    value: ComplexArray
    by_range: ComplexArray
    by_bearing: ComplexArray
    by_velocity: ComplexArray


def signals(model: HeadModel, objects: Objects, time_s: FloatArray) -> Signals:
    """Render objects of strength 1 at the given times, shape (n,)."""
    geometry = model.geometry(objects.range_m, objects.bearing_rad)
    factor = (geometry.gain * model.carrier(geometry))[:, :, None]
    lag = time_s - geometry.delay_s[:, :, None]  # (2, k, n)
    pulse, slope = np.empty(lag.shape, complex), np.empty(lag.shape, complex)
    for ear, template in enumerate(model.pulses):
        pulse[ear], slope[ear] = template.evaluate(lag[ear])
    # Velocity turns the phase about the pulse's peak, so that it is not confounded with phase.
    turning_s = lag - model.pulses[0].peak_time_s
    omega_d = model.doppler_rad_s_per_m_s * objects.velocity_m_s[:, None]
    if np.any(objects.velocity_m_s):
        factor = factor * np.exp(1j * omega_d * turning_s)
    value = factor * (pulse + geometry.tilt_s[:, :, None] / (2j * math.pi) * slope)
    moved = -factor * slope - 1j * omega_d * value
    phase = -1j * model.omega * value
    by_range, by_bearing = geometry.delay_per_m, geometry.delay_per_rad
    relative_gain = geometry.gain_per_rad / np.maximum(geometry.gain, 1e-9)
    return Signals(
        value=value,
        by_range=moved * by_range[:, :, None] + phase * _relative(by_range),
        by_bearing=moved * by_bearing[:, :, None]
        + phase * _relative(by_bearing)
        + value * relative_gain[:, :, None],
        by_velocity=1j * model.doppler_rad_s_per_m_s * turning_s * value,
    )


def _relative(slope: FloatArray) -> FloatArray:
    """Of each ear against the mean of both, ready to multiply (2, k, n)."""
    return np.asarray((slope - slope.mean(axis=0))[:, :, None])


@dataclass(frozen=True, eq=False)
class Refined:
    """Result of a refinement.

    Attributes
    ----------
    cost
        Weighted sum of squared residuals, in nats (twice the usual chi-square's half).
    covariance
        shape (k, 3, 3): of (range, bearing, velocity) of each object.
    strength_loss
        shape (k,): linearised loss of likelihood without each object, nats.
    """

    objects: Objects
    cost: float
    covariance: FloatArray
    strength_loss: FloatArray


@dataclass(frozen=True)
class Priors:
    """What is known of an object before the ping: standard deviation of its velocity."""

    velocity_sigma_m_s: float
    max_bearing_rad: float


def refine(
    model: HeadModel,
    ping: Conditioned,
    samples: ComplexArray,
    window: slice,
    objects: Objects,
    priors: Priors,
) -> Refined:
    """Fit the objects' parameters to samples in a window by damped least squares [2]_.

    Parameters
    ----------
    samples : complex (2, n), what the objects are to explain (others taken off).
    """
    time = ping.time_s[window]
    weight = ping.weight[:, window]
    target = (samples[:, window] * weight).ravel()
    damping = 1e-3
    rendered = signals(model, objects, time)
    objects = _with_best_strengths(objects, rendered, weight, target)
    cost, residual = _cost(objects, rendered, weight, target, priors)
    normal = np.eye(5 * len(objects))
    for _ in range(_ROUNDS):
        jacobian = _jacobian(objects, rendered, weight)
        normal, gradient = _normal_equations(jacobian, residual, objects, priors)
        improved = False
        for _ in range(4):
            damped = normal + damping * np.diag(np.diag(normal))
            step = np.linalg.solve(damped, gradient)
            trial = _moved(objects, step, priors)
            rendered_trial = signals(model, trial, time)
            trial_cost, trial_residual = _cost(trial, rendered_trial, weight, target, priors)
            if trial_cost < cost:
                improved = True
                break
            damping *= 8.0
        if not improved:
            break
        gained = cost - trial_cost
        objects, rendered, cost, residual = trial, rendered_trial, trial_cost, trial_residual
        damping = max(damping / 8.0, 1e-7)
        if gained < _TOLERANCE:
            break
    return _measured(objects, cost, normal)


def _with_best_strengths(
    objects: Objects, rendered: Signals, weight: FloatArray, target: ComplexArray
) -> Objects:
    k = len(objects)
    basis = (rendered.value * weight[:, None, :]).transpose(1, 0, 2).reshape(k, -1)
    gram = basis.conj() @ basis.T
    # Objects that coincide, or lie where nothing is known, must not break the solution.
    gram[np.diag_indices(k)] += 1e-6 * gram.trace().real / k + 1e-12
    strength = np.linalg.solve(gram, basis.conj() @ target)
    return Objects(objects.range_m, objects.bearing_rad, objects.velocity_m_s, strength)


def _cost(
    objects: Objects,
    rendered: Signals,
    weight: FloatArray,
    target: ComplexArray,
    priors: Priors,
) -> tuple[float, ComplexArray]:
    sound = np.tensordot(objects.strength, rendered.value, axes=(0, 1))  # (2, n)
    residual = target - (sound * weight).ravel()
    prior = objects.velocity_m_s / priors.velocity_sigma_m_s
    return float(np.vdot(residual, residual).real + 0.5 * (prior @ prior)), residual


def _jacobian(objects: Objects, rendered: Signals, weight: FloatArray) -> ComplexArray:
    """Derivatives of the weighted sound, shape (5 k, 2 n): r, bearing, v, Re a, Im a."""
    a = objects.strength[None, :, None]
    parts = (
        a * rendered.by_range,
        a * rendered.by_bearing,
        a * rendered.by_velocity,
        rendered.value,
        1j * rendered.value,
    )
    stacked = np.stack([part * weight[:, None, :] for part in parts])  # (5, 2, k, n)
    k, n = stacked.shape[2:]
    return stacked.transpose(2, 0, 1, 3).reshape(5 * k, 2 * n)


def _normal_equations(
    jacobian: ComplexArray, residual: ComplexArray, objects: Objects, priors: Priors
) -> tuple[FloatArray, FloatArray]:
    normal = (jacobian.conj() @ jacobian.T).real
    gradient = (jacobian.conj() @ residual).real
    velocity = np.arange(2, normal.shape[0], 5)
    precision = 0.5 / priors.velocity_sigma_m_s**2
    normal[velocity, velocity] += precision
    gradient[velocity] -= precision * objects.velocity_m_s
    normal[np.diag_indices_from(normal)] += 1e-12 * np.trace(normal) / normal.shape[0]
    return normal, gradient


def _moved(objects: Objects, step: FloatArray, priors: Priors) -> Objects:
    step = step.reshape(-1, 5)
    limit = priors.max_bearing_rad
    return Objects(
        np.maximum(objects.range_m + np.clip(step[:, 0], -0.02, 0.02), 1e-3),
        np.clip(objects.bearing_rad + np.clip(step[:, 1], -0.05, 0.05), -limit, limit),
        objects.velocity_m_s + step[:, 2],
        objects.strength + step[:, 3] + 1j * step[:, 4],
    )


def _measured(objects: Objects, cost: float, normal: FloatArray) -> Refined:
    # The cost is |residual|^2 of complex noise of variance 1, its Hessian 2 * normal.
    inverse = 0.5 * np.linalg.pinv(normal, hermitian=True)
    k = len(objects)
    covariance = np.empty((k, 3, 3))
    loss = np.empty(k)
    for i in range(k):
        block = inverse[5 * i : 5 * i + 5, 5 * i : 5 * i + 5]
        covariance[i] = block[:3, :3]
        strength = np.array([objects.strength[i].real, objects.strength[i].imag])
        # Setting the strength to 0, all else free to follow: half the Wald statistic.
        loss[i] = 0.5 * strength @ np.linalg.pinv(block[3:, 3:], hermitian=True) @ strength
    return Refined(objects, cost, covariance, loss)


def window_of(model: HeadModel, ping: Conditioned, objects: Objects) -> slice:
    """Samples that the objects reach."""
    delay = model.geometry(objects.range_m, objects.bearing_rad).delay_s
    first = float(delay.min()) + min(p.start_s for p in model.pulses)
    last = float(delay.max()) + max(p.end_s for p in model.pulses)
    start = int(np.searchsorted(ping.time_s, first))
    stop = int(np.searchsorted(ping.time_s, last, side="right"))
    return slice(start, max(stop, start))
