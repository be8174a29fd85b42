"""Both ears at once: objects as (range, bearing, velocity, complex strength).

Echoes overlap as waves, so they are fitted on the complex baseband: every object puts one
delayed pulse into each ear, with gains and carrier phases that its place dictates. Objects are
refined by damped least squares (Levenberg-Marquardt [1]_), many at a time.

References
----------
.. [1] K. Levenberg, Quart. Appl. Math. 2, 1944; D. Marquardt, SIAM J. Appl. Math. 11(2), 1963.
"""

from __future__ import annotations

import math
from dataclasses import dataclass

import numpy as np

from ..types import BoolArray, ComplexArray, FloatArray
from .conditioning import Conditioned
from .model import HeadModel
from .objects import Objects

_ROUNDS = 12
_TOLERANCE = 2e-3  # of the cost, nats
_MAX_STEP_M, _MAX_STEP_RAD = 0.02, 0.05
_UNKNOWNS = 5  # of an object: range, bearing, velocity, two parts of the strength


@dataclass(frozen=True, eq=False)
class Signals:
    """What objects of unit strength put into both ears, with derivatives; (2, k, n) each."""

    value: ComplexArray
    by_range: ComplexArray
    by_bearing: ComplexArray
    by_velocity: ComplexArray


def signals(model: HeadModel, objects: Objects, time_s: FloatArray) -> Signals:
    """Render objects of strength 1 at times of shape (n,), or (k, n): each at its own."""
    geometry = model.geometry(objects.range_m, objects.bearing_rad)
    factor = (geometry.gain * model.carrier(geometry))[:, :, None]
    lag = time_s - geometry.delay_s[:, :, None]  # (2, k, n)
    pulse, slope = model.pulse_pair.evaluate(lag)
    # Velocity turns the phase about the pulse's peak, so that it is not confounded with phase.
    turning_s, turning_rate = model.pulse_pair.turning(lag)
    omega_d = model.doppler_rad_s_per_m_s * objects.velocity_m_s[:, None]
    if np.any(objects.velocity_m_s):
        factor = factor * np.exp(1j * omega_d * turning_s)
    value = factor * (pulse + (geometry.tilt_s[:, :, None] / (2j * math.pi)) * slope)
    moved = -factor * slope - 1j * omega_d * turning_rate * value
    phase = (-1j * model.omega) * value
    relative_gain = geometry.gain_per_rad / np.maximum(geometry.gain, 1e-9)
    by_range, by_bearing = geometry.delay_per_m, geometry.delay_per_rad
    turn = relative_gain - 1j * model.omega * _relative(by_bearing)
    return Signals(
        value=value,
        by_range=moved * by_range[:, :, None] + phase * _relative(by_range)[:, :, None],
        by_bearing=moved * by_bearing[:, :, None] + value * turn[:, :, None],
        by_velocity=(1j * model.doppler_rad_s_per_m_s) * turning_s * value,
    )


def _relative(slope: FloatArray) -> FloatArray:
    """Of each ear against the mean of both."""
    return np.asarray(slope - 0.5 * (slope[0] + slope[1]))


@dataclass(frozen=True, eq=False)
class Refined:
    """Result of a refinement.

    Attributes
    ----------
    cost
        Weighted sum of squared residuals: minus log likelihood, nats, but for a constant.
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


@dataclass(frozen=True, eq=False)
class Excerpts:
    """What b problems are to explain: times (b, n), samples and weights (b, 2, n).

    Times may go on beyond the record; weights are 0 there.
    """

    time_s: FloatArray
    samples: ComplexArray
    weight: FloatArray


def excerpt(ping: Conditioned, samples: ComplexArray, window: slice, copies: int = 1) -> Excerpts:
    """The same stretch of samples (2, n) for a number of rival explanations."""
    weight = ping.weight[:, window]
    return Excerpts(
        np.broadcast_to(ping.time_s[window], (copies, weight.shape[1])),
        np.broadcast_to(samples[:, window], (copies, *weight.shape)),
        np.broadcast_to(weight, (copies, *weight.shape)),
    )


def excerpts(ping: Conditioned, samples: list[ComplexArray], windows: list[slice]) -> Excerpts:
    """A stretch of its own samples (2, n) for each problem, all as long as the longest."""
    n = max(w.stop - w.start for w in windows)
    index = np.array([w.start for w in windows])[:, None] + np.arange(n)
    inside = index < ping.time_s.size
    index = np.minimum(index, ping.time_s.size - 1)
    weight = np.where(inside, ping.weight[:, index], 0.0)
    parts = np.stack([own[:, row] for own, row in zip(samples, index, strict=True)])
    return Excerpts(ping.time_s[index], parts, weight.transpose(1, 0, 2))


def refine(
    model: HeadModel, data: Excerpts, problems: list[Objects], priors: Priors
) -> list[Refined]:
    """Fit sets of objects, each to its excerpt, by damped least squares [1]_.

    Parameters
    ----------
    problems : as many sets as excerpts, of equally many objects, each fitted on its own. Their
        strengths must be near; those of a scan or of a pair search are.
    """
    problem = _Problems(model, data, priors)
    state = problem.evaluate(_joined(problems))
    damping: FloatArray = np.full(len(problems), 1e-3)
    normal, gradient = problem.normal_equations(state)
    for _ in range(_ROUNDS):
        diagonal = np.einsum("bii->bi", normal)
        damped = normal + (damping[:, None] * diagonal)[:, :, None] * np.eye(diagonal.shape[1])
        step = np.linalg.solve(damped, gradient[:, :, None])[:, :, 0]
        # What the quadratic model promises; too little is not worth a look.
        if float(np.einsum("bi,bi->b", step, gradient).max()) < _TOLERANCE:
            break
        trial = problem.evaluate(problem.moved(state.objects, step))
        gained = state.cost - trial.cost
        better = gained > 0.0
        damping = np.where(better, np.maximum(damping / 8.0, 1e-7), damping * 8.0)
        state = trial if better.all() else problem.chosen(better, trial, state)
        if damping.min() > 1e3:
            break
        if better.any():
            normal, gradient = problem.normal_equations(state)
    return problem.measured(state, normal)


def _joined(rivals: list[Objects]) -> Objects:
    joined = rivals[0]
    for other in rivals[1:]:
        joined = joined.join(other)
    return joined


@dataclass(frozen=True, eq=False)
class _State:
    """All problems' objects (b * k), their signals, residuals (b, 2 n) and costs (b,)."""

    objects: Objects
    rendered: Signals
    residual: ComplexArray
    cost: FloatArray


class _Problems:
    """b excerpts to explain by k objects each."""

    def __init__(self, model: HeadModel, data: Excerpts, priors: Priors) -> None:
        self.model = model
        self.b, _, self.n = data.samples.shape
        self.time_s = data.time_s
        self.weight = data.weight.transpose(1, 0, 2)[:, :, None, :]  # (2, b, 1, n)
        self.target = (data.samples * data.weight).reshape(self.b, -1)
        self.priors = priors

    def _signals(self, objects: Objects) -> Signals:
        k = len(objects) // self.b
        return signals(self.model, objects, np.repeat(self.time_s, k, axis=0))

    def evaluate(self, objects: Objects) -> _State:
        rendered = self._signals(objects)
        sound = objects.strength[None, :, None] * rendered.value
        total = sound.reshape(2, self.b, -1, self.n).sum(axis=2) * self.weight[:, :, 0]
        residual = self.target - total.transpose(1, 0, 2).reshape(self.b, -1)
        velocity = (objects.velocity_m_s / self.priors.velocity_sigma_m_s).reshape(self.b, -1)
        cost = np.einsum("bn,bn->b", residual.real, residual.real)
        cost += np.einsum("bn,bn->b", residual.imag, residual.imag)
        cost += 0.5 * np.sum(velocity**2, axis=1)
        return _State(objects, rendered, residual, cost)

    def normal_equations(self, state: _State) -> tuple[FloatArray, FloatArray]:
        """Normal matrices (b, 5 k, 5 k) and gradients (b, 5 k) for steps of all unknowns."""
        jacobian = self._jacobian(state)
        conjugate = jacobian.conj()
        normal = (conjugate @ jacobian.transpose(0, 2, 1)).real
        gradient = (conjugate @ state.residual[:, :, None])[:, :, 0].real
        velocity = np.arange(2, normal.shape[1], _UNKNOWNS)
        precision = 0.5 / self.priors.velocity_sigma_m_s**2
        normal[:, velocity, velocity] += precision
        gradient[:, velocity] -= precision * state.objects.velocity_m_s.reshape(self.b, -1)
        size = np.einsum("bii->b", normal) / normal.shape[1]
        normal += (1e-12 * size)[:, None, None] * np.eye(normal.shape[1])
        return normal, gradient

    def _jacobian(self, state: _State) -> ComplexArray:
        """Derivatives of the weighted sound by all unknowns, shape (b, 5 k, 2 n)."""
        a = state.objects.strength[None, :, None]
        r = state.rendered
        parts = (a * r.by_range, a * r.by_bearing, a * r.by_velocity, r.value, 1j * r.value)
        stacked = np.stack(parts, axis=2)  # (2, b k, 5, n)
        rows = stacked.reshape(2, self.b, -1, self.n) * self.weight
        return np.asarray(rows.transpose(1, 2, 0, 3).reshape(self.b, -1, 2 * self.n))

    def moved(self, objects: Objects, step: FloatArray) -> Objects:
        step = step.reshape(-1, _UNKNOWNS)
        limit = self.priors.max_bearing_rad
        range_step = np.clip(step[:, 0], -_MAX_STEP_M, _MAX_STEP_M)
        bearing_step = np.clip(step[:, 1], -_MAX_STEP_RAD, _MAX_STEP_RAD)
        return Objects(
            np.maximum(objects.range_m + range_step, 1e-3),
            np.clip(objects.bearing_rad + bearing_step, -limit, limit),
            objects.velocity_m_s + step[:, 2],
            objects.strength + step[:, 3] + 1j * step[:, 4],
        )

    def chosen(self, better: BoolArray, trial: _State, old: _State) -> _State:
        """The trial where it is better, the old state elsewhere."""
        if not better.any():
            return old
        each = np.repeat(better, len(old.objects) // self.b)
        new, kept = trial.objects, old.objects
        objects = Objects(
            np.where(each, new.range_m, kept.range_m),
            np.where(each, new.bearing_rad, kept.bearing_rad),
            np.where(each, new.velocity_m_s, kept.velocity_m_s),
            np.where(each, new.strength, kept.strength),
        )
        mask = each[None, :, None]
        rendered = Signals(
            *(
                np.where(mask, getattr(trial.rendered, name), getattr(old.rendered, name))
                for name in ("value", "by_range", "by_bearing", "by_velocity")
            )
        )
        return _State(
            objects,
            rendered,
            np.where(better[:, None], trial.residual, old.residual),
            np.where(better, trial.cost, old.cost),
        )

    def measured(self, state: _State, normal: FloatArray) -> list[Refined]:
        # The cost is |residual|^2 of complex noise of variance 1, its Hessian 2 * normal.
        inverse = 0.5 * np.linalg.inv(normal)
        k = len(state.objects) // self.b
        result = []
        for number in range(self.b):
            objects = state.objects.take(np.arange(number * k, (number + 1) * k))
            blocks = np.array(
                [
                    inverse[number, _UNKNOWNS * i : _UNKNOWNS * (i + 1)][
                        :, _UNKNOWNS * i : _UNKNOWNS * (i + 1)
                    ]
                    for i in range(k)
                ]
            )
            strength = np.stack([objects.strength.real, objects.strength.imag], axis=1)
            # Setting a strength to 0, all else free to follow: half the Wald statistic.
            pull = np.linalg.solve(blocks[:, 3:, 3:], strength[:, :, None])[:, :, 0]
            loss = 0.5 * np.sum(strength * pull, axis=1)
            result.append(Refined(objects, float(state.cost[number]), blocks[:, :3, :3], loss))
        return result


def window_of(model: HeadModel, ping: Conditioned, objects: Objects) -> slice:
    """Samples that the objects reach."""
    return windows_of(model, ping, objects)[0]


def windows_of(model: HeadModel, ping: Conditioned, objects: Objects) -> tuple[slice, slice]:
    """Samples that the objects reach, and those that the bodies of their pulses reach."""
    delay = model.delays(objects.range_m, objects.bearing_rad)
    low, high, pair = float(delay.min()), float(delay.max()), model.pulse_pair
    edges = np.array(
        [low + pair.start_s, high + pair.end_s, low + pair.core_start_s, high + pair.core_end_s]
    )
    first, last, core_first, core_last = np.searchsorted(ping.time_s, edges).tolist()
    return slice(first, max(first, last)), slice(core_first, max(core_first, core_last))
