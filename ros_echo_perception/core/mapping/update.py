"""From the evidence of one ping to new log-odds, only in the cells that it touches.

The binary Bayes filter in log-odds form: S. Thrun, W. Burgard and D. Fox, Probabilistic
Robotics, MIT Press 2005, sections 4.2 and 9.2 (prior 0.5, so that its log-odds are 0).
"""

from __future__ import annotations

import math
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from ..types import FloatArray
from .config import MappingConfig
from .grid import GridArray, IntArray, RollingGrid, fade


@dataclass(frozen=True)
class HitEvidence:
    """Mass of reflectors by cell, from firm and from soft hypotheses; cells may repeat."""

    cells: IntArray
    firm: FloatArray
    soft: FloatArray

    def inside(self) -> HitEvidence:
        """Only what lies inside the window."""
        keep = self.cells >= 0
        return HitEvidence(self.cells[keep], self.firm[keep], self.soft[keep])


@dataclass(frozen=True)
class FreeEvidence:
    """Weight of being free by cell; cells may repeat, more than 1 in all counts as 1."""

    cells: IntArray
    weight: FloatArray

    def inside(self) -> FreeEvidence:
        """Only what lies inside the window."""
        keep = self.cells >= 0
        return FreeEvidence(self.cells[keep], self.weight[keep])


_MATTERS = 0.02
"""Mass from which an echo counts as speaking for a cell."""
_CLEARS_SUPPORT = 0.3
"""Share of its support that a cell loses when the sound surely crossed it."""
_MAX_SUPPORT = 10.0


class GridUpdater:
    """Applies evidence to a grid; keeps scratch arrays so that the cost is that of the cells."""

    def __init__(self, grid: RollingGrid, config: MappingConfig) -> None:
        self.grid, self.config = grid, config
        n = grid.log_odds.size
        self._firm, self._soft, self._free = np.zeros(n), np.zeros(n), np.zeros(n)
        self._number = np.zeros(n, np.int64)
        self._soft_cap = _log_odds(config.soft_max_probability)

    def read(self, cells: IntArray, time_s: float) -> FloatArray:
        """Faded log-odds of cells at a time; 0 for cell -1 (outside the window)."""
        config = self.config
        return self._read(
            self.grid.log_odds, cells, time_s, config.occupied_decay_s, config.free_decay_s
        )

    def read_support(self, cells: IntArray, time_s: float) -> FloatArray:
        """Faded support of cells at a time; 0 for cell -1 (outside the window)."""
        return self._read(self.grid.support, cells, time_s, self.config.occupied_decay_s, 0.0)

    def _read(
        self, layer: GridArray, cells: IntArray, time_s: float, decay_s: float, free_decay_s: float
    ) -> FloatArray:
        age_s = time_s - self.grid.stamp_s[cells]
        return np.where(cells >= 0, fade(layer[cells], age_s, decay_s, free_decay_s), 0.0)

    def apply(
        self, hits: HitEvidence, free: FreeEvidence, head_xy_m: tuple[float, float], time_s: float
    ) -> bool:
        """Add one ping's evidence.

        Returns
        -------
        Whether any cell of the window was touched.
        """
        hits, free = hits.inside(), free.inside()
        cells = np.concatenate([hits.cells, free.cells])
        if cells.size == 0:
            return False
        np.add.at(self._firm, hits.cells, hits.firm)
        np.add.at(self._soft, hits.cells, hits.soft)
        np.add.at(self._free, free.cells, free.weight)
        # Each cell once from here on: of equal cells one keeps its number in the scratch array.
        number = np.arange(cells.size)
        self._number[cells] = number
        cells = cells[self._number[cells] == number]
        masses = self._firm[cells], self._soft[cells], np.minimum(self._free[cells], 1.0)
        for scratch in (self._firm, self._soft, self._free):
            scratch[cells] = 0.0
        self._write(cells, *masses, head_xy_m, time_s)
        return True

    def _write(
        self,
        cells: IntArray,
        firm: FloatArray,
        soft: FloatArray,
        free: FloatArray,
        head_xy_m: tuple[float, float],
        time_s: float,
    ) -> None:
        grid, config = self.grid, self.config
        prior = self.read(cells, time_s)
        matters = firm + soft >= _MATTERS
        confirmed = self._confirm(cells, matters, head_xy_m)
        lowered = prior - config.free_log_odds * np.where(matters, 0.0, free)
        raised = lowered + np.log1p(config.hit_gain * soft)
        capped = np.maximum(np.minimum(raised, self._soft_cap), lowered)
        hit = np.where(confirmed, raised, capped) + np.log1p(config.hit_gain * firm)
        new = np.minimum(hit, prior + config.max_hit_log_odds)
        new = np.clip(new, config.min_log_odds, config.max_log_odds)
        support = self.read_support(cells, time_s) + firm + soft
        support *= 1.0 - _CLEARS_SUPPORT * np.where(matters, 0.0, free)
        grid.support[cells] = np.minimum(support, _MAX_SUPPORT)
        grid.log_odds[cells] = new
        grid.stamp_s[cells] = time_s
        gone = cells[new <= 0.0]
        grid.view_x_m[gone] = np.nan
        grid.view_y_m[gone] = np.nan
        grid.confirmed[gone] = False

    def _confirm(
        self,
        cells: IntArray,
        matters: NDArray[np.bool_],
        head_xy_m: tuple[float, float],
    ) -> NDArray[np.bool_]:
        """Remember who saw a cell first; confirm it once it is seen from elsewhere."""
        grid = self.grid
        distance = np.hypot(
            grid.view_x_m[cells] - head_xy_m[0], grid.view_y_m[cells] - head_xy_m[1]
        )
        new = cells[matters & np.isnan(distance)]
        grid.view_x_m[new], grid.view_y_m[new] = head_xy_m
        again = matters & (distance >= self.config.confirm_distance_m)
        grid.confirmed[cells[again]] = True
        return np.asarray(grid.confirmed[cells])


def _log_odds(probability: float) -> float:
    return math.log(probability / (1.0 - probability))
