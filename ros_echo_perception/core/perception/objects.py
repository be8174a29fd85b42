"""Objects of one ping as columns of numbers."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np

from ..types import ComplexArray, FloatArray, IndexArray


@dataclass(frozen=True, eq=False)
class Objects:
    """k objects of one ping; all arrays shape (k,). Velocity positive = moving away."""

    range_m: FloatArray
    bearing_rad: FloatArray
    velocity_m_s: FloatArray
    strength: ComplexArray

    def __len__(self) -> int:
        return int(self.range_m.size)

    def take(self, index: Sequence[int] | IndexArray) -> Objects:
        """The chosen ones."""
        at = np.asarray(index, np.intp)
        return Objects(
            self.range_m[at], self.bearing_rad[at], self.velocity_m_s[at], self.strength[at]
        )

    def join(self, other: Objects) -> Objects:
        """These and the others."""
        return Objects(
            np.concatenate([self.range_m, other.range_m]),
            np.concatenate([self.bearing_rad, other.bearing_rad]),
            np.concatenate([self.velocity_m_s, other.velocity_m_s]),
            np.concatenate([self.strength, other.strength]),
        )

    def with_strength(self, strength: ComplexArray) -> Objects:
        """The same places with other strengths."""
        return Objects(self.range_m, self.bearing_rad, self.velocity_m_s, strength)


def no_objects() -> Objects:
    """An empty set."""
    return Objects(np.zeros(0), np.zeros(0), np.zeros(0), np.zeros(0, complex))


def one_object(range_m: float, bearing_rad: float, strength: complex) -> Objects:
    """A set of one object at rest."""
    return Objects(np.array([range_m]), np.array([bearing_rad]), np.zeros(1), np.array([strength]))
