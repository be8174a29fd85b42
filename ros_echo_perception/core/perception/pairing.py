"""Which echo of the left ear belongs to which of the right: an assignment problem.

References
----------
.. [1] D. F. Crouse, "On implementing 2D rectangular assignment algorithms", IEEE Trans.
   Aerosp. Electron. Syst. 52(4), 2016 (the solver in SciPy).
"""

from __future__ import annotations

import math
from dataclasses import dataclass

import numpy as np
from scipy.optimize import linear_sum_assignment

from ..types import LEFT, RIGHT, FloatArray
from .model import HeadModel

_GATE_SIGMAS = 3.5
_LEVEL_SIGMA = 0.25  # of the log ratio: nominal beams and gains differ by about 2 dB
_FORBIDDEN = 1e6


@dataclass(frozen=True, eq=False)
class EarEchoes:
    """Echoes of one ear: delay since emission and amplitude in noise sigmas, shape (k,)."""

    delay_s: FloatArray
    amplitude: FloatArray


@dataclass(frozen=True)
class Candidate:
    """One or two ears' echoes taken for one object; NaN where an ear has none."""

    delay_s: tuple[float, float]
    amplitude: tuple[float, float]

    @property
    def strength(self) -> float:
        """Root of the summed squares of both ears' amplitudes, noise sigmas."""
        return math.hypot(*(0.0 if math.isnan(a) else a for a in self.amplitude))

    @property
    def mean_delay_s(self) -> float:
        """Mean of the delays that exist."""
        return float(np.nanmean(self.delay_s))


def pair_ears(
    ears: tuple[EarEchoes, EarEchoes],
    model: HeadModel,
    noise_ratio: float,
    pulse_sigma_s: float,
    max_bearing_rad: float,
) -> list[Candidate]:
    """Pair the echoes of both ears; what finds no partner stays alone.

    Parameters
    ----------
    noise_ratio : right noise over left noise, to compare amplitudes given in noise sigmas.

    Notes
    -----
    The cost of a pair is the half chi-square of its difference in delay against the bearing
    that its level ratio implies; its gate is what the baseline allows plus 3.5 sigmas. Staying
    alone costs the gate.
    """
    left, right = ears
    n_left, n_right = left.delay_s.size, right.delay_s.size
    alone = 0.5 * _GATE_SIGMAS**2
    cost = np.full((n_left + n_right, n_left + n_right), _FORBIDDEN)
    if n_left and n_right:
        cost[:n_left, :n_right] = _pair_costs(
            left, right, model, noise_ratio, pulse_sigma_s, max_bearing_rad
        )
    cost[np.arange(n_left), n_right + np.arange(n_left)] = alone
    cost[n_left + np.arange(n_right), np.arange(n_right)] = alone
    cost[n_left:, n_right:] = 0.0
    rows, columns = linear_sum_assignment(cost)
    found = []
    for i, j in zip(rows.tolist(), columns.tolist(), strict=True):
        has_left, has_right = i < n_left, j < n_right
        if has_left or has_right:
            found.append(
                Candidate(
                    (
                        float(left.delay_s[i]) if has_left else math.nan,
                        float(right.delay_s[j]) if has_right else math.nan,
                    ),
                    (
                        float(left.amplitude[i]) if has_left else math.nan,
                        float(right.amplitude[j]) if has_right else math.nan,
                    ),
                )
            )
    return found


def _pair_costs(
    left: EarEchoes,
    right: EarEchoes,
    model: HeadModel,
    noise_ratio: float,
    pulse_sigma_s: float,
    max_bearing_rad: float,
) -> FloatArray:
    bearing = np.linspace(-max_bearing_rad, max_bearing_rad, 121)
    geometry = model.geometry(np.full(bearing.shape, 2.0), bearing)
    difference_s = geometry.delay_s[RIGHT] - geometry.delay_s[LEFT]
    log_ratio = np.log(np.maximum(geometry.gain[LEFT], 1e-6)) - np.log(
        np.maximum(geometry.gain[RIGHT], 1e-6)
    )
    seen_s = right.delay_s[None, :] - left.delay_s[:, None]
    seen_ratio = (
        np.log(left.amplitude[:, None]) - np.log(right.amplitude[None, :]) - math.log(noise_ratio)
    )
    inverse = 1.0 / left.amplitude[:, None] ** 2 + 1.0 / right.amplitude[None, :] ** 2
    delay_sigma = pulse_sigma_s * np.sqrt(inverse) + 0.1 * pulse_sigma_s
    ratio_sigma = np.sqrt(inverse + _LEVEL_SIGMA**2)
    chi2 = ((seen_s[..., None] - difference_s) / delay_sigma[..., None]) ** 2
    chi2 = chi2 + ((seen_ratio[..., None] - log_ratio) / ratio_sigma[..., None]) ** 2
    best = 0.5 * chi2.min(axis=-1)
    return np.where(best < _GATE_SIGMAS**2, best, _FORBIDDEN)
