"""Objects of one ping as columns of numbers."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np

from ..types import ComplexArray, FloatArray


@dataclass(frozen=True, eq=False)
class Objects:
    """k objects of one ping; all arrays shape (k,). Velocity positive = moving away."""

    range_m: FloatArray
    bearing_rad: FloatArray
    velocity_m_s: FloatArray
    strength: ComplexArray

    def __len__(self) -> int:
        return int(self.range_m.size)

    def columns(self) -> tuple[FloatArray, FloatArray, FloatArray, ComplexArray]:
        """The four arrays in the order of the fields."""
        return self.range_m, self.bearing_rad, self.velocity_m_s, self.strength

    def take(self, index: Sequence[int] | np.ndarray) -> Objects:
        """The chosen ones."""
        chosen = np.asarray(index, np.intp)
        return Objects(*(column[chosen] for column in self.columns()))

    def join(self, other: Objects) -> Objects:
        """These and the others."""
        pairs = zip(self.columns(), other.columns(), strict=True)
        return Objects(*(np.concatenate(pair) for pair in pairs))

    def with_strength(self, strength: ComplexArray) -> Objects:
        """The same places with other strengths."""
        return Objects(self.range_m, self.bearing_rad, self.velocity_m_s, strength)


def no_objects() -> Objects:
    """An empty set."""
    return Objects(np.zeros(0), np.zeros(0), np.zeros(0), np.zeros(0, complex))


def one_object(range_m: float, bearing_rad: float, strength: complex) -> Objects:
    """A set of one object at rest."""
    return Objects(
        np.array([range_m]), np.array([bearing_rad]), np.zeros(1), np.array([strength])
    )
