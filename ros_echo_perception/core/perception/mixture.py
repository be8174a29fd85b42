"""Envelope mixture: expectation-maximisation over pulse-shaped components on binned data.

The envelope of one stretch of the record is taken as a histogram: its samples are weights of
bins, not draws. Components are Gaussians of one common width that may move between bounds set
by the pulse; how many there are is estimated.

References
----------
.. [1] G. J. McLachlan and P. N. Jones, "Fitting mixture models to grouped and truncated data
   via the EM algorithm", Biometrics 44(2), 1988, 571-578.
.. [2] G. Schwarz, "Estimating the dimension of a model", Annals of Statistics 6(2), 1978.
"""

from __future__ import annotations

import math
from dataclasses import dataclass

import numpy as np

from ..types import FloatArray
from . import kernels_ear

_TOLERANCE = 1e-4
_MAX_ROUNDS = 300
_BACKGROUND = 1e-3
_LEAST_EXCESS = 2.5


@dataclass(frozen=True)
class Mixture:
    """Components in the order of time; ``area`` sums to the total weight times the bin width.

    Attributes
    ----------
    time_s, area
        shape (k,).
    sigma_s
        Common width.
    log_likelihood
        Mean per unit weight.
    """

    time_s: FloatArray
    area: FloatArray
    sigma_s: float
    log_likelihood: float

    def heights(self) -> FloatArray:
        """Peak of each component."""
        return np.asarray(self.area / (self.sigma_s * math.sqrt(2.0 * math.pi)))

    def evaluate(self, time_s: FloatArray) -> FloatArray:
        """The sum of all components at the given times."""
        z = (time_s[:, None] - self.time_s) / self.sigma_s
        return np.asarray(np.exp(-0.5 * z * z) @ self.heights())


def fit_mixture(
    time_s: FloatArray,
    weight: FloatArray,
    start_time_s: FloatArray,
    sigma_bounds_s: tuple[float, float],
) -> Mixture:
    """Maximum-likelihood mixture of Gaussians of one width on binned data [1]_.

    Parameters
    ----------
    time_s : shape (n,), equidistant bin centres.
    weight : shape (n,), not negative, not all zero.
    start_time_s : shape (k,), where the components start.
    sigma_bounds_s : smallest and largest common width.

    Returns
    -------
    Mixture of k or fewer components: those that starve are dropped.

    Notes
    -----
    Ends when a round raises the mean log likelihood by less than 1e-4.

    Examples
    --------
    >>> t = np.arange(60.0)
    >>> w = np.exp(-0.5 * ((t - 20.0) / 4.0) ** 2) + 0.5 * np.exp(-0.5 * ((t - 38.0) / 4.0) ** 2)
    >>> m = fit_mixture(t, w, np.array([15.0, 45.0]), (2.0, 8.0))
    >>> m.time_s.round(1).tolist(), round(m.sigma_s, 1), m.heights().round(2).tolist()
    ([20.0, 38.0], 4.0, [1.0, 0.5])
    """
    time_s, weight, start = (np.array(p, float) for p in (time_s, weight, start_time_s))
    low, high = (float(bound) for bound in sigma_bounds_s)
    mean, fraction, sigma, likelihood = kernels_ear.mixture(
        time_s, weight, start, (low, high), _BACKGROUND, _MAX_ROUNDS, _TOLERANCE
    )
    order = np.argsort(mean)
    bin_width = time_s[1] - time_s[0]
    area = fraction[order] * float(weight.sum()) * bin_width
    return Mixture(mean[order], area, sigma, likelihood)


def fit_mixture_of_unknown_order(
    time_s: FloatArray,
    envelope: FloatArray,
    noise_sigma: float,
    sigma_bounds_s: tuple[float, float],
    independent_fraction: float,
    max_components: int,
) -> Mixture:
    """The mixture whose order wins by Schwarz's criterion on the residual noise [2]_.

    Parameters
    ----------
    envelope : shape (n,), noise floor included.
    noise_sigma : standard deviation of an envelope sample.
    independent_fraction : independent samples per sample (noise bandwidth over rate): the
        filter's output is correlated, so n = 2 B T counts, not the number of bins.

    Notes
    -----
    chi2 + 2 k ln(2 B T): each component has a time and a height. A further one starts where
    the envelope exceeds the fit most; the search ends when it does not pay or nothing
    stands out of the noise.
    """
    weight = np.maximum(envelope - noise_sigma, 0.0)
    independent = max(2.0, envelope.size * independent_fraction)
    starts = np.array([time_s[int(np.argmax(weight))]])
    best = fit_mixture(time_s, weight, starts, sigma_bounds_s)
    best_score = _score(best, time_s, weight, noise_sigma, independent)
    while best.time_s.size < max_components:
        excess = weight - best.evaluate(time_s)
        if float(excess.max()) < _LEAST_EXCESS * noise_sigma:
            break
        starts = np.append(best.time_s, time_s[int(np.argmax(excess))])
        candidate = fit_mixture(time_s, weight, starts, sigma_bounds_s)
        score = _score(candidate, time_s, weight, noise_sigma, independent)
        if score >= best_score:
            break
        best, best_score = candidate, score
    return best


def _score(
    mixture: Mixture,
    time_s: FloatArray,
    weight: FloatArray,
    noise_sigma: float,
    independent: float,
) -> float:
    residual = weight - mixture.evaluate(time_s)
    chi2 = float(residual @ residual) / noise_sigma**2 * independent / time_s.size
    return chi2 + 2.0 * mixture.time_s.size * math.log(independent)
