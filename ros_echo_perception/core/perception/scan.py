"""Detections of one ping as a planar scan: an approximation, with its meaning written down.

A sonar is no laser. What a beam of the scan says (REP-117 [1]_):

========  ========================================================================================
value     meaning
========  ========================================================================================
a range   an echo whose bearing may lie in this beam; the nearest one where several do
``-inf``  something was heard nearer than the head can measure (or nearer than ``range_min_m``)
``+inf``  only with ``silence_policy`` = "clear_to_range": nothing was heard up to ``range_max``
``NaN``   no answer. Silence is no evidence of free space: a slanted smooth wall sends the pulse
          away. Also every beam outside the beam of the head, or when the ping was disturbed
========  ========================================================================================

An echo fills the beams from its bearing minus to plus ``width_sigmas`` sigmas (at least the beam
that holds its bearing), and likewise around every other bearing that the ping leaves possible with
at least ``min_alternative_weight``. An echo heard by one ear only fills its whole interval: it
cannot be excluded from any of these beams. A user who steers by openings sets ``one_sided`` to
"omit" and reads such echoes from the detections.

Nothing is said about what lies in front of an echo: consumers should mark from this scan, and clear
by other sensors, unless they accept the risk that "clear_to_range" states.

References
----------
.. [1] REP-117, Informational Distance Measurements, https://www.ros.org/reps/rep-0117.html
"""

from __future__ import annotations

import math
from dataclasses import dataclass

import numpy as np

from ..errors import SettingError, refuse
from ..settings import Settings, setting
from ..types import Detection, Ears, FloatArray, PingFlag, PingResult

_DISTURBED = (
    PingFlag.LEFT_CLIPPED
    | PingFlag.RIGHT_CLIPPED
    | PingFlag.LEFT_DEAD
    | PingFlag.RIGHT_DEAD
    | PingFlag.INTERFERENCE
)
"""With any of these an echo may have been missed: silence says nothing."""


@dataclass(frozen=True)
class ScanConfig(Settings):
    """How detections become a scan."""

    half_width_rad: float = setting(
        0.7854, "The scan reaches from minus to plus this bearing", "rad", 0.1, 1.5708
    )
    beam_step_rad: float = setting(
        0.0175, "Angle between two beams (rounded so that they fit)", "rad", 0.002, 0.2
    )
    range_min_m: float = setting(0.05, "Echoes nearer than this are told as -inf", "m", 0.0, 2.0)
    range_max_m: float = setting(
        10.0,
        "Limit of the scan with never_clear; choose it larger than the radius of the costmap",
        "m", 0.5, 50.0,
    )  # fmt: skip
    silence_policy: str = setting(
        "never_clear",
        "What a silent beam says: NaN (never_clear), or +inf up to clear_range_m (clear_to_range)",
        choices=("never_clear", "clear_to_range"),
    )
    clear_range_m: float = setting(
        2.0,
        "Limit of the scan with clear_to_range: silent beams count as free up to here; "
        "echoes beyond are left out",
        "m", 0.5, 50.0,
    )  # fmt: skip
    width_sigmas: float = setting(
        1.0, "An echo fills its bearing minus to plus this many sigmas", "", 0.0, 5.0
    )
    one_sided: str = setting(
        "fill",
        "Echoes heard by one ear: fill = all beams of their bearing interval; omit = none",
        choices=("fill", "omit"),
    )
    min_existence_probability: float = setting(
        0.5, "Echoes less likely than this are left out", "", 0.0, 1.0
    )
    min_alternative_weight: float = setting(
        0.2, "Other possible bearings of an echo are filled from this probability on", "", 0.0, 1.0
    )

    def check_together(self) -> None:
        """The limit that is published must lie beyond the nearest range."""
        if self.range_limit_m <= self.range_min_m:
            name = "clear_range_m" if self.silence_policy == "clear_to_range" else "range_max_m"
            raise SettingError(
                refuse(name, self.range_limit_m, f"more than range_min_m ({self.range_min_m:g} m)")
            )

    @property
    def range_limit_m(self) -> float:
        """The range_max that the scan states; constant as long as the configuration is."""
        return self.clear_range_m if self.silence_policy == "clear_to_range" else self.range_max_m

    @property
    def n_beams(self) -> int:
        """Number of beams, odd, so that one looks straight ahead."""
        return 2 * max(1, round(self.half_width_rad / self.beam_step_rad)) + 1

    @property
    def angle_increment_rad(self) -> float:
        """Angle between two beams as published."""
        return 2.0 * self.half_width_rad / (self.n_beams - 1)


@dataclass(frozen=True)
class ScanArrays:
    """A scan from the right (negative bearing) to the left, as in sensor_msgs/LaserScan.

    ``ranges_m`` and ``intensities_db`` have shape (n_beams,); the intensity is the SNR of the echo
    that gave the range, 0 where there is none.
    """

    angle_min_rad: float
    angle_max_rad: float
    angle_increment_rad: float
    range_min_m: float
    range_max_m: float
    ranges_m: FloatArray
    intensities_db: FloatArray


def scan_from_result(result: PingResult, config: ScanConfig | None = None) -> ScanArrays:
    """The scan that one ping supports; see the module's text for what its values mean.

    Parameters
    ----------
    result : what processing found in one ping.
    config : angles, limits and policies; the defaults when left out.

    Returns
    -------
    ScanArrays whose geometry depends on the configuration alone.

    Examples
    --------
    >>> echo = Detection(1.5, 0.0, 0.01, 0.001, -0.1, 0.1, (0.1, 0.1), (20.0, 21.0), 0.99)
    >>> ping = PingResult(0.0, 0, (echo,), 343.0, 0.3, 5.0, 0.5, (1e-3, 1e-3))
    >>> scan = scan_from_result(ping)
    >>> scan.ranges_m.size, float(scan.ranges_m[45]), int(np.isnan(scan.ranges_m).sum())
    (91, 1.5, 90)
    """
    config = config or ScanConfig()
    steps = np.arange(config.n_beams, dtype=float)
    angle = np.asarray(config.angle_increment_rad * steps - config.half_width_rad, float)
    ranges = _silent_beams(result, config, angle)
    intensities = np.zeros(config.n_beams)
    for echo in sorted(result.detections, key=lambda item: -item.range_m):  # nearest written last
        value = _stated_range(echo, result, config)
        if value is None:
            continue
        for low, high in _intervals(echo, config):
            beams = _beams_between(low, high, config)
            ranges[beams] = value
            intensities[beams] = echo.snr_db
    return ScanArrays(
        -config.half_width_rad,
        config.half_width_rad,
        config.angle_increment_rad,
        config.range_min_m,
        config.range_limit_m,
        ranges,
        intensities,
    )


def _silent_beams(result: PingResult, config: ScanConfig, angle: FloatArray) -> FloatArray:
    """What the beams say where there is no echo."""
    ranges = np.full(angle.size, math.nan)
    heard_far_enough = result.range_max_m >= config.range_limit_m
    says_free = config.silence_policy == "clear_to_range" and heard_far_enough
    if says_free and not result.flags & _DISTURBED:
        ranges[np.abs(angle) <= result.beam_half_width_rad] = math.inf
    return ranges


def _stated_range(echo: Detection, result: PingResult, config: ScanConfig) -> float | None:
    """The value of an echo's beams, None when it is not told."""
    if echo.existence_probability < config.min_existence_probability:
        return None
    if echo.ears is not Ears.BOTH and config.one_sided == "omit":
        return None
    if echo.range_m > config.range_limit_m:
        return None
    nearest = max(config.range_min_m, result.range_min_m)
    return -math.inf if echo.range_m < nearest else echo.range_m


def _intervals(echo: Detection, config: ScanConfig) -> list[tuple[float, float]]:
    """Bearing intervals in which the echo may lie."""
    if echo.ears is not Ears.BOTH:
        return [(echo.bearing_min_rad, echo.bearing_max_rad)]
    half = config.width_sigmas * echo.bearing_sigma_rad
    bearings = [echo.bearing_rad]
    bearings += [
        bearing for bearing, weight in echo.alternatives if weight >= config.min_alternative_weight
    ]
    return [(bearing - half, bearing + half) for bearing in bearings]


def _beams_between(low: float, high: float, config: ScanConfig) -> slice:
    """Beams whose cell of one increment touches the interval; empty outside the scan."""
    first = math.floor((low + config.half_width_rad) / config.angle_increment_rad + 0.5)
    last = math.floor((high + config.half_width_rad) / config.angle_increment_rad + 0.5)
    return slice(max(first, 0), max(min(last, config.n_beams - 1) + 1, 0))
