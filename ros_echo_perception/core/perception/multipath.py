"""Echoes that fit a second bounce: out to one object, over to another, and back.

The sound runs head - object - wall - head (or the other way round). With the wall as a mirror
that is the way from the head to the object and on to the head's mirror image, so an object at
(r_p, b_p) and a wall whose foot is at (r_w, b_w) give the apparent range

    r = (r_p + sqrt(r_p^2 + 4 r_w^2 - 4 r_p r_w cos(b_p - b_w))) / 2

(law of cosines, image source at 2 r_w).
"""

from __future__ import annotations

import dataclasses
import math
from collections.abc import Sequence

from ..types import Detection, DetectionFlag

_GATE_SIGMAS = 3.0
_GATE_M = 0.02
_WEAKER_DB = 3.0


def flag_multipath(detections: Sequence[Detection]) -> tuple[Detection, ...]:
    """The same detections; those that two stronger, nearer ones explain are flagged.

    Examples
    --------
    >>> second_bounce_m(1.0, 0.0, 2.0, 0.0)
    2.0
    """
    return tuple(
        dataclasses.replace(d, flags=d.flags | DetectionFlag.MULTIPATH_SUSPECTED)
        if _explained(d, detections)
        else d
        for d in detections
    )


def second_bounce_m(
    object_range_m: float, object_bearing_rad: float, wall_range_m: float, wall_bearing_rad: float
) -> float:
    """Apparent range of the echo that goes by way of an object and a wall, m."""
    cos = math.cos(object_bearing_rad - wall_bearing_rad)
    image2 = object_range_m**2 + 4.0 * wall_range_m**2 - 4.0 * object_range_m * wall_range_m * cos
    return 0.5 * (object_range_m + math.sqrt(max(image2, 0.0)))


def _explained(detection: Detection, others: Sequence[Detection]) -> bool:
    parents = [
        d
        for d in others
        if d.range_m < detection.range_m and d.snr_db > detection.snr_db + _WEAKER_DB
    ]
    for thing in parents:
        for wall in parents:
            if thing is wall:
                continue
            predicted_m = second_bounce_m(
                thing.range_m, thing.bearing_rad, wall.range_m, wall.bearing_rad
            )
            # What the parents' bearings leave open moves the prediction.
            spread_m = wall.range_m * math.hypot(thing.bearing_sigma_rad, wall.bearing_sigma_rad)
            gate_m = _GATE_M + _GATE_SIGMAS * detection.range_sigma_m + min(spread_m, _GATE_M)
            if predicted_m > wall.range_m and abs(predicted_m - detection.range_m) < gate_m:
                return True
    return False
