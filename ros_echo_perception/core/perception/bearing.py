"""What one ping says of an object's bearing: all cues at once, several peaks allowed.

Level difference, envelope time difference and carrier phase difference all enter the coherent
likelihood of both ears. The phase makes it a comb whose teeth are a wavelength over the baseline
apart; the other two, which vary slowly, weigh the teeth.
"""

from __future__ import annotations

import dataclasses
import math
from dataclasses import dataclass

import numpy as np
from scipy.special import i0e, i1e

from ..types import FloatArray
from .search import Scan

_MIN_WEIGHT = 0.02
_SURE_WEIGHT = 0.95
_MAX_PEAKS = 8


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
        All bearings that remain possible as (bearing_rad, weight), most likely first; empty
        when one alone does.
    range_sigma_m
        Standard deviation of the range over all bearings; 0 where not known.
    """

    bearing_rad: float
    sigma_rad: float
    interval_rad: tuple[float, float]
    alternatives: tuple[tuple[float, float], ...]
    range_sigma_m: float = 0.0

    @property
    def ambiguous(self) -> bool:
        """Whether several bearings remain."""
        return bool(self.alternatives)


def bearing_posterior(
    found: Scan, fitted_bearing_rad: float, fitted_sigma_rad: float, level_error: float
) -> BearingPosterior:
    """Posterior over bearing from a scan of one object (all others taken off).

    Parameters
    ----------
    found : scan around the object's range.
    fitted_bearing_rad, fitted_sigma_rad : the fit's local answer, which sharpens its own tooth.
    level_error : standard deviation of the ears' log level ratio that the head file leaves.

    Notes
    -----
    Integrated over the phase within a tooth, exp(gain) gives exp(aligned) I0(s) exp(-s) with s
    the sharpness (von Mises), and a spread of about 1/sqrt(s) of phase. A ratio of levels that
    is off by delta costs G delta^2 / 4 of a gain G; with an error of the head on top of the
    noise the cost shrinks to 1 / (1 + G level_error^2 / 2) of it. When one tooth holds 95 % or
    more it alone is reported; else the mean over all, which has the least expected squared
    error.
    """
    teeth = _teeth(found)
    top = float(teeth.log_weight.max())
    softening = 1.0 + 0.5 * max(top, 0.0) * level_error**2
    loss = (top - teeth.log_weight) / softening
    weight = np.exp(-loss) * teeth.width_rad
    weight /= weight.sum()
    mean, spread = teeth.bearing_rad, np.maximum(teeth.spread_rad, 1e-5)
    own = int(np.argmin(np.abs(mean - fitted_bearing_rad)))
    if abs(mean[own] - fitted_bearing_rad) < teeth.width_rad[own]:
        mean[own] = fitted_bearing_rad
        spread[own] = max(fitted_sigma_rad, spread[own])
    summary = _summary(weight, mean, spread)
    return dataclasses.replace(summary, range_sigma_m=found.range_sigma_m)


def among_rivals(
    rivals: tuple[tuple[float, float], ...], fitted_sigma_rad: float
) -> BearingPosterior:
    """Posterior from several likely explanations of a ping, as (bearing_rad, weight), best first.

    They differ in more than this object, so their mean explains nothing: the best one is
    reported, with the scatter of all about it.
    """
    mean = np.array([bearing for bearing, _ in rivals])
    weight = np.array([share for _, share in rivals])
    summary = _summary(weight, mean, np.full(mean.size, fitted_sigma_rad))
    offset = mean[0] - summary.bearing_rad
    return dataclasses.replace(
        summary, bearing_rad=float(mean[0]), sigma_rad=math.hypot(summary.sigma_rad, offset)
    )


@dataclass(frozen=True, eq=False)
class _Teeth:
    """Peaks of the comb: places, log weight density, distance of neighbours, spread; (n,)."""

    bearing_rad: FloatArray
    log_weight: FloatArray
    width_rad: FloatArray
    spread_rad: FloatArray


def _teeth(found: Scan) -> _Teeth:
    grid = found.bearing_rad
    step = float(grid[1] - grid[0])
    density = found.aligned + np.log(np.maximum(i0e(found.sharpness), 1e-300))
    lobes = found.lobes()
    if lobes.size < 2 or float(found.sharpness.max()) < 1.0:
        # One ear only: no phase to compare, every bearing of the grid stands for itself.
        return _Teeth(grid.copy(), density, np.full(grid.size, step), np.full(grid.size, step))
    turn = np.abs(np.angle(np.exp(1j * np.diff(found.phase_rad)))) / step
    slope = np.maximum(np.interp(lobes, grid[:-1] + step / 2.0, turn), 1e-3)
    sharpness = np.interp(lobes, grid, found.sharpness)
    # Variance of the von Mises distribution, bounded by that of the uniform one.
    resultant = i1e(sharpness) / i0e(sharpness)
    phase_variance = np.minimum(-2.0 * np.log(np.maximum(resultant, 1e-3)), math.pi**2 / 3.0)
    return _Teeth(
        bearing_rad=lobes,
        log_weight=np.interp(lobes, grid, density),
        width_rad=np.minimum(2.0 * math.pi / slope, grid[-1]),
        spread_rad=np.sqrt(phase_variance) / slope,
    )


def _summary(weight: FloatArray, mean: FloatArray, spread: FloatArray) -> BearingPosterior:
    order = np.argsort(weight)[::-1]
    top = int(order[0])
    sure = bool(weight[top] >= _SURE_WEIGHT)
    centre = float(mean[top]) if sure else float(weight @ mean)
    sigma = math.sqrt(float(weight @ (spread**2 + (mean - centre) ** 2)))
    significant = np.cumsum(weight[order]) - weight[order] < 0.95
    low = float(np.min((mean - 1.96 * spread)[order][significant]))
    high = float(np.max((mean + 1.96 * spread)[order][significant]))
    alternatives = tuple(
        (float(mean[i]), float(weight[i])) for i in order if weight[i] >= _MIN_WEIGHT
    )[:_MAX_PEAKS]
    return BearingPosterior(centre, sigma, (low, high), () if sure else alternatives)
