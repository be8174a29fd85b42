"""A window of log-odds that rolls with the robot without moving a single value in memory.

Cells are numbered by whole numbers over the whole plane: cell (ix, iy) covers
``ix * resolution .. (ix + 1) * resolution``. A cell is stored at its number modulo the window's
size, so that a shift only empties the rows and columns that come in; all the rest stays as it
is, bit for bit, and the cost grows with the shift, not with the window.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from ..types import FloatArray

IntArray = NDArray[np.int64]
GridArray = NDArray[np.float32]
UNKNOWN = -1
"""Value of a cell of which nothing is known (nav_msgs/OccupancyGrid)."""


@dataclass(frozen=True)
class MapSnapshot:
    """A local map at one time.

    Attributes
    ----------
    data
        int8, shape (height, width); row index grows with y, column index with x. -1 unknown,
        otherwise the probability of being occupied in per cent, 0 to 100.
    origin_x_m, origin_y_m
        Corner of cell [0, 0] in the odometry frame; the axes are parallel to that frame's.
    time_s
        Emission time of the newest ping in the map, NaN when there is none.
    revision
        Grows by at least 1 whenever the map has changed.
    """

    data: NDArray[np.int8]
    resolution_m: float
    origin_x_m: float
    origin_y_m: float
    time_s: float
    revision: int


class RollingGrid:
    """Log-odds, time of the last evidence, and first place of view of each cell.

    Attributes
    ----------
    log_odds
        float32, 0 where nothing is known.
    stamp_s
        float64 time of the last evidence, NaN where there is none.
    support
        float32 number of echoes that the cell has explained so far.
    view_x_m, view_y_m
        float32 place of the head that first found the cell occupied, NaN where none did.
    confirmed
        Whether another place of the head has agreed.

    All flat, of length height * width, addressed by `locate`.
    """

    def __init__(self, width_cells: int, height_cells: int, resolution_m: float) -> None:
        self.width_cells, self.height_cells = width_cells, height_cells
        self.resolution_m = resolution_m
        n = width_cells * height_cells
        self.log_odds: GridArray = np.zeros(n, np.float32)
        self.stamp_s: FloatArray = np.full(n, np.nan)
        self.support: GridArray = np.zeros(n, np.float32)
        self.view_x_m: GridArray = np.full(n, np.nan, np.float32)
        self.view_y_m: GridArray = np.full(n, np.nan, np.float32)
        self.confirmed: NDArray[np.bool_] = np.zeros(n, bool)
        self.first_ix, self.first_iy = -(width_cells // 2), -(height_cells // 2)

    def clear(self) -> None:
        """Forget all cells; the window stays where it is."""
        self._forget(slice(None))

    def _forget(self, cells: slice | IntArray) -> None:
        self.log_odds[cells] = 0.0
        self.stamp_s[cells] = np.nan
        self.support[cells] = 0.0
        self.view_x_m[cells] = np.nan
        self.view_y_m[cells] = np.nan
        self.confirmed[cells] = False

    @property
    def origin_m(self) -> tuple[float, float]:
        """Lower left corner of the window."""
        return self.first_ix * self.resolution_m, self.first_iy * self.resolution_m

    def centre_on(self, x_m: float, y_m: float) -> bool:
        """Move the window by whole cells so that the point is in its middle cell.

        Returns
        -------
        Whether it moved. What stays inside is kept exactly; what comes in is unknown.
        """
        first_ix = int(np.floor(x_m / self.resolution_m)) - self.width_cells // 2
        first_iy = int(np.floor(y_m / self.resolution_m)) - self.height_cells // 2
        shift_x, shift_y = first_ix - self.first_ix, first_iy - self.first_iy
        if shift_x == 0 and shift_y == 0:
            return False
        columns = _incoming(self.first_ix, shift_x, self.width_cells)
        rows = _incoming(self.first_iy, shift_y, self.height_cells)
        across = np.arange(self.width_cells)
        self._forget((rows[:, None] * self.width_cells + across).ravel())
        along = np.arange(self.height_cells) * self.width_cells
        self._forget((along[:, None] + columns).ravel())
        self.first_ix, self.first_iy = first_ix, first_iy
        return True

    def locate(self, x_m: FloatArray, y_m: FloatArray) -> IntArray:
        """Flat index of the cell that holds each point, -1 outside the window."""
        ix = np.floor(x_m * (1.0 / self.resolution_m)).astype(np.int64)
        iy = np.floor(y_m * (1.0 / self.resolution_m)).astype(np.int64)
        column, row = ix - self.first_ix, iy - self.first_iy
        # One unsigned comparison covers both bounds.
        inside = (column.view(np.uint64) < self.width_cells) & (
            row.view(np.uint64) < self.height_cells
        )
        flat = (iy % self.height_cells) * self.width_cells + ix % self.width_cells
        return np.where(inside, flat, -1)

    def arranged(self, layer: NDArray[np.generic]) -> NDArray[np.generic]:
        """A layer as a new array (height, width), row 0 at the lowest y."""
        square = layer.reshape(self.height_cells, self.width_cells)
        shift = (-(self.first_iy % self.height_cells), -(self.first_ix % self.width_cells))
        return np.roll(square, shift, axis=(0, 1))

    def occupancy(
        self, time_s: float, occupied_decay_s: float, free_decay_s: float
    ) -> NDArray[np.int8]:
        """Values of a nav_msgs/OccupancyGrid, int8, shape (height, width).

        The probability 1 - 1 / (1 + exp(log-odds)) in per cent, faded to ``time_s``; -1 where
        nothing is known or where all that was known has faded.
        """
        known = np.flatnonzero(self.log_odds)
        faded = fade(
            self.log_odds[known], time_s - self.stamp_s[known], occupied_decay_s, free_decay_s
        )
        percent = np.rint(100.0 / (1.0 + np.exp(-faded)))
        percent[np.abs(faded) < _FORGOTTEN_LOG_ODDS] = UNKNOWN
        flat = np.full(self.log_odds.size, UNKNOWN, np.int8)
        flat[known] = percent.astype(np.int8)
        return self.arranged(flat).astype(np.int8, copy=False)


_FORGOTTEN_LOG_ODDS = 0.02
"""Less than half a per cent away from 50: says as much as nothing."""


def fade(
    log_odds: GridArray, age_s: FloatArray, occupied_decay_s: float, free_decay_s: float
) -> GridArray:
    """Log-odds after ``age_s`` without evidence: exponential return to 0, 0 = no fading.

    Examples
    --------
    >>> round(float(fade(np.float32([2.0]), np.array([10.0]), 10.0, 0.0)[0] / 2.0), 4)  # 1 / e
    0.3679
    """
    rate_occupied = 1.0 / occupied_decay_s if occupied_decay_s > 0.0 else 0.0
    rate_free = 1.0 / free_decay_s if free_decay_s > 0.0 else 0.0
    if rate_occupied == 0.0 and rate_free == 0.0:
        return log_odds
    age = np.fmax(age_s, 0.0)  # 0 where there is no evidence (NaN)
    rate = np.where(log_odds > 0.0, -rate_occupied, -rate_free)
    return np.asarray(log_odds * np.exp(age * rate), np.float32)


def _incoming(first: int, shift: int, size: int) -> IntArray:
    """Stored rows or columns whose cells leave when the window moves by ``shift``."""
    count = min(abs(shift), size)
    start = first if shift > 0 else first + size - count
    return np.arange(start, start + count) % size
