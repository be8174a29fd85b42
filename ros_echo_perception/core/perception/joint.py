"""Both ears at once: objects as (range, bearing, velocity, complex strength).

Echoes overlap as waves, so they are fitted on the complex baseband: every object puts one
delayed pulse into each ear, with gains and carrier phases that its place dictates. Objects are
refined by damped least squares (Levenberg-Marquardt [1]_), many at a time.

References
----------
.. [1] K. Levenberg, Quart. Appl. Math. 2, 1944; D. Marquardt, SIAM J. Appl. Math. 11(2), 1963.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from ..types import ComplexArray, FloatArray
from . import kernels, kernels_delay
from .conditioning import Conditioned
from .model import HeadModel
from .objects import Objects


@dataclass(frozen=True, eq=False)
class Signals:
    """What objects of unit strength put into both ears, with derivatives; (2, k, n) each."""

    value: ComplexArray
    by_range: ComplexArray
    by_bearing: ComplexArray
    by_velocity: ComplexArray


def signals(model: HeadModel, objects: Objects, time_s: FloatArray) -> Signals:
    """Render objects of strength 1 at times of shape (n,), or (k, n): each at its own."""
    times_s = np.empty((len(objects), time_s.shape[-1]))
    times_s[:] = time_s
    places = objects.range_m, objects.bearing_rad, objects.velocity_m_s
    return Signals(*kernels.sounds(model.arrays, *places, times_s))


def values(model: HeadModel, objects: Objects, time_s: FloatArray) -> ComplexArray:
    """Render resting objects of strength 1 at shared times (n,), no derivatives: (k, 2, n)."""
    return kernels.values(model.arrays, objects.range_m, objects.bearing_rad, np.array(time_s))


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
    known = priors.velocity_sigma_m_s, priors.max_bearing_rad
    # Plain copies: of any other layout the kernel would be compiled again.
    time_s, samples, weight = (
        np.array(part, order="C") for part in (data.time_s, data.samples, data.weight)
    )
    result = []
    for number, start in enumerate(problems):
        excerpt_ = time_s[number], samples[number], weight[number]
        found, cost, normal = kernels.refine(model.arrays, *excerpt_, _unknowns(start), *known)
        covariance, loss = kernels.uncertainty(normal, found)
        r, b, v = np.ascontiguousarray(found[:, :3].T)
        objects = Objects(r, b, v, found[:, 3] + 1j * found[:, 4])
        result.append(Refined(objects, cost, covariance, loss))
    return result


def _unknowns(objects: Objects) -> FloatArray:
    """Shape (k, 5)."""
    a = objects.strength
    columns = (objects.range_m, objects.bearing_rad, objects.velocity_m_s, a.real, a.imag)
    return np.ascontiguousarray(np.array(columns, float).T)


def window_of(model: HeadModel, ping: Conditioned, objects: Objects) -> slice:
    """Samples that the objects reach."""
    return windows_of(model, ping, objects)[0]


def windows_of(model: HeadModel, ping: Conditioned, objects: Objects) -> tuple[slice, slice]:
    """Samples that the objects reach, and those that the bodies of their pulses reach."""
    pair = model.pulse_pair
    edges_s = pair.start_s, pair.end_s, pair.core_start_s, pair.core_end_s
    first, last, core_first, core_last = kernels_delay.reached(
        model.arrays, objects.range_m, objects.bearing_rad, ping.time_s, edges_s
    ).tolist()
    return slice(first, max(first, last)), slice(core_first, max(core_first, core_last))
