"""What one ping says of an object's bearing: all cues at once, several peaks allowed.

Level difference, envelope time difference and carrier phase difference all enter the coherent
likelihood of both ears; the phase makes it a comb whose teeth are a wavelength over the
baseline apart, and the other two weigh the teeth.
"""

from __future__ import annotations

import dataclasses
import math
from dataclasses import dataclass

import numpy as np

from ..types import FloatArray
from .search import Scan

_MIN_WEIGHT = 0.02
_SURE_WEIGHT = 0.95
_MAX_PEAKS = 5


@dataclass(frozen=True)
class BearingPosterior:
    """Summary of the posterior over bearing.

    Attributes
    ----------
    bearing_rad, sigma_rad
        What minimises the squared error, and the root of that error.
    interval_rad
        Holds about 95 % of the probability.
    alternatives
        Other peaks as (bearing_rad, weight), most likely first.
    range_m, range_sigma_m
        Mean and standard deviation of the range over all bearings; NaN and 0 where not known.
    """

    bearing_rad: float
    sigma_rad: float
    interval_rad: tuple[float, float]
    alternatives: tuple[tuple[float, float], ...]
    ambiguous: bool
    range_m: float = math.nan
    range_sigma_m: float = 0.0


def bearing_posterior(
    found: Scan, fitted_bearing_rad: float, fitted_sigma_rad: float
) -> BearingPosterior:
    """Posterior over bearing from a scan of one object (all others taken off).

    Parameters
    ----------
    found : scan around the object's range.
    fitted_bearing_rad, fitted_sigma_rad : the fit's local answer; it sharpens the peak that
        it sits on, which the grid may be too coarse to resolve.

    Notes
    -----
    The prior is uniform. Each local maximum of the range-integrated likelihood is a peak; its
    weight is the probability around it. When one peak holds 95 % or more it alone is reported;
    else the mean over all, which has the smallest expected squared error.
    """
    probability = _over_bearing(found)
    peaks = _peaks(probability)
    centre = np.array([found.bearing_rad[p] for p in peaks])
    own = int(np.argmin(np.abs(centre - fitted_bearing_rad)))
    basin = _basins(probability, peaks)
    weight, mean, spread = _moments(probability, found.bearing_rad, basin, len(peaks))
    mean[own] = fitted_bearing_rad
    step = float(found.bearing_rad[1] - found.bearing_rad[0])
    # A peak narrower than the grid has the width that the fit says, whatever the grid shows.
    spread = np.where(spread < step, fitted_sigma_rad, np.maximum(spread, fitted_sigma_rad))
    spread[own] = max(fitted_sigma_rad, spread[own] if spread[own] > step else 0.0)
    range_m, range_sigma_m = _range_moments(found)
    summary = _summary(weight, mean, spread)
    return dataclasses.replace(summary, range_m=range_m, range_sigma_m=range_sigma_m)


def among_rivals(
    rivals: tuple[tuple[float, float], ...], fitted_sigma_rad: float
) -> BearingPosterior:
    """Posterior from several equally likely explanations, as (bearing_rad, weight)."""
    mean = np.array([bearing for bearing, _ in rivals])
    weight = np.array([share for _, share in rivals])
    return _summary(weight, mean, np.full(mean.size, fitted_sigma_rad))


def _range_moments(found: Scan) -> tuple[float, float]:
    weight = np.exp(found.gain - found.gain.max()).sum(axis=1)
    weight = weight / weight.sum()
    mean = float(weight @ found.range_m)
    return mean, math.sqrt(float(weight @ (found.range_m - mean) ** 2))


def _over_bearing(found: Scan) -> FloatArray:
    log = found.gain - found.gain.max()
    probability = np.exp(log).sum(axis=0)
    return np.asarray(probability / probability.sum())


def _peaks(probability: FloatArray) -> list[int]:
    padded = np.concatenate(([-1.0], probability, [-1.0]))
    inner = (padded[1:-1] >= padded[:-2]) & (padded[1:-1] > padded[2:])
    index = np.nonzero(inner)[0]
    strongest = index[np.argsort(probability[index])[::-1][: 4 * _MAX_PEAKS]]
    return [int(i) for i in np.sort(strongest)]


def _basins(probability: FloatArray, peaks: list[int]) -> np.ndarray:
    """Number of the peak to which each bearing belongs (split at the lowest point between)."""
    basin = np.zeros(probability.size, np.intp)
    for number, (a, b) in enumerate(zip(peaks[:-1], peaks[1:], strict=True)):
        valley = a + int(np.argmin(probability[a : b + 1]))
        basin[valley:] = number + 1
    return basin


def _moments(
    probability: FloatArray, bearing_rad: FloatArray, basin: np.ndarray, count: int
) -> tuple[FloatArray, FloatArray, FloatArray]:
    weight = np.bincount(basin, probability, count)
    safe = np.maximum(weight, 1e-300)
    mean = np.bincount(basin, probability * bearing_rad, count) / safe
    second = np.bincount(basin, probability * (bearing_rad - mean[basin]) ** 2, count) / safe
    return weight, mean, np.sqrt(second)


def _summary(weight: FloatArray, mean: FloatArray, spread: FloatArray) -> BearingPosterior:
    order = np.argsort(weight)[::-1]
    top = int(order[0])
    sure = weight[top] >= _SURE_WEIGHT
    centre = float(mean[top]) if sure else float(weight @ mean)
    variance = float(weight @ (spread**2 + (mean - centre) ** 2))
    ambiguous = not sure
    alternatives = tuple(
        (float(mean[i]), float(weight[i]))
        for i in order
        if i != top and weight[i] >= _MIN_WEIGHT
    )[:_MAX_PEAKS]
    sigma = math.sqrt(variance)
    significant = np.cumsum(weight[order]) - weight[order] < 0.95
    low = float(np.min((mean - 1.96 * spread)[order][significant]))
    high = float(np.max((mean + 1.96 * spread)[order][significant]))
    return BearingPosterior(
        centre, sigma, (low, high), alternatives if ambiguous else (), ambiguous
    )
