"""What the robot's own motion says of an echo's bearing.

When the head moves by a step d, the range to anything at rest changes by ``-|d| cos(angle)``,
the angle being that between the step and the direction to it. This holds for a pole and, since
the foot of the perpendicular slides along it, for a smooth wall as well; they differ only by
the second order of the step. So the echoes of a few earlier pings, heard from some centimetres
to decimetres away, tell which of the bearings that the ears leave open is right: at a wrong one
the object would have been elsewhere then, and nothing was heard there. It is best at the side,
where two ears are at their worst, and says nothing while the head only turns. The idea is that
of triangulation-based fusion [1]_.

References
----------
.. [1] O. Wijk and H. I. Christensen, "Triangulation-based fusion of sonar data with application
   in robot pose tracking", IEEE Transactions on Robotics and Automation 16, 2000, 740-752.
   (The idea only, from memory.)
"""

from __future__ import annotations

import math
from collections import deque
from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np

from ..types import FloatArray, Pose2

_STEPS = (0.05, 0.1, 0.16, 0.24, 0.34, 0.46)
"""Distances (m) from the present place at which earlier pings are asked, one for each."""
_MAX_LOOKS = 60
_SPACING_M = 0.02
_MISS = 0.25
"""Likelihood ratio of an object at rest that was not heard earlier to one that was."""


@dataclass(frozen=True)
class Look:
    """The echoes of an earlier ping."""

    time_s: float
    x_m: float
    y_m: float
    range_m: FloatArray


class Looks:
    """The latest pings of one head, no closer together than `_SPACING_M`."""

    def __init__(self) -> None:
        self._looks: deque[Look] = deque(maxlen=_MAX_LOOKS)

    def clear(self) -> None:
        """Forget all."""
        self._looks.clear()

    def add(self, time_s: float, head: Pose2, range_m: FloatArray) -> None:
        """Remember a ping; one from (nearly) the same place takes the last one's place."""
        if self._looks and time_s <= self._looks[-1].time_s:
            return
        look = Look(time_s, head.x_m, head.y_m, np.sort(range_m))
        if self._looks and self._is_near(self._looks[-1], head, _SPACING_M):
            if range_m.size >= self._looks[-1].range_m.size:
                self._looks[-1] = look
            return
        self._looks.append(look)

    @staticmethod
    def _is_near(look: Look, head: Pose2, distance_m: float) -> bool:
        return math.hypot(look.x_m - head.x_m, look.y_m - head.y_m) < distance_m

    def asked(self, time_s: float, head: Pose2, horizon_s: float) -> list[Look]:
        """Earlier pings from about the distances `_STEPS`, not older than the horizon."""
        found: list[Look] = []
        step = 0
        for look in reversed(self._looks):
            if step == len(_STEPS) or not 0.0 < time_s - look.time_s <= horizon_s:
                break
            if not self._is_near(look, head, _STEPS[step]):
                found.append(look)
                step += 1
                while step < len(_STEPS) and not self._is_near(look, head, _STEPS[step]):
                    step += 1
        return found


def motion_log_likelihood(
    looks: Sequence[Look],
    head_x_m: FloatArray,
    head_y_m: FloatArray,
    range_m: FloatArray,
    direction_rad: FloatArray,
    sigma_m: FloatArray,
) -> FloatArray:
    """Log-likelihood of possible directions to objects at rest, given earlier pings.

    Parameters
    ----------
    looks
        Earlier pings.
    head_x_m, head_y_m, range_m : shape (n,)
        Where the head is now and what range it hears.
    direction_rad : shape (n,)
        Supposed direction to the object in the odometry frame.
    sigma_m : shape (n,)
        Uncertainty of a range predicted from another.

    Returns
    -------
    Shape (n,), 0 at most, smaller for each earlier ping that did not hear the object.
    """
    total = np.zeros(range_m.size)
    cos, sin = np.cos(direction_rad), np.sin(direction_rad)
    for look in looks:
        if look.range_m.size == 0:
            total += math.log(_MISS)
            continue
        dx, dy = head_x_m - look.x_m, head_y_m - look.y_m
        along, across = dx * cos + dy * sin, dy * cos - dx * sin
        wall = range_m + along
        bulge = across**2 / (2.0 * np.maximum(range_m, 0.1))
        # A pole's range lies one bulge beyond the wall's; anything between is possible.
        i = np.searchsorted(look.range_m, wall + 0.5 * bulge)
        miss_m = np.full(range_m.size, np.inf)
        for j in (i - 1, i):
            heard = look.range_m[np.clip(j, 0, look.range_m.size - 1)]
            miss_m = np.minimum(miss_m, np.abs(heard - wall - 0.5 * bulge) - 0.5 * bulge)
        miss_m = np.maximum(miss_m, 0.0)
        total += np.log(_MISS + (1.0 - _MISS) * np.exp(-0.5 * (miss_m / sigma_m) ** 2))
    return total
