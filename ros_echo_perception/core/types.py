"""The data that flows through the package, without ROS.

``RawEcho`` -> (perception) -> ``PingResult`` with ``Detection`` -> (mapping) -> local grid.
"""

from __future__ import annotations

import enum
import math
from dataclasses import dataclass, field
from typing import Any

import numpy as np
from numpy.typing import NDArray

from .errors import InvalidEchoError, refuse

FloatArray = NDArray[np.floating[Any]]
ComplexArray = NDArray[np.complexfloating[Any, Any]]
BoolArray = NDArray[np.bool_]
IndexArray = NDArray[np.intp]
LEFT, RIGHT = 0, 1
"""Index of the ears along the first axis of every two-eared array."""


class FrontEndFlag(enum.IntFlag):
    """What the front end reports about a ping (values of RawEcho.msg)."""

    NONE = 0
    LEFT_CLIPPED = 1
    RIGHT_CLIPPED = 2
    LEFT_FAULT = 4
    RIGHT_FAULT = 8
    SIMULATED = 16
    REPLAYED = 32


class PingFlag(enum.IntFlag):
    """What processing says of a whole ping (values of EchoDetectionArray.msg)."""

    NONE = 0
    LEFT_CLIPPED = 1
    RIGHT_CLIPPED = 2
    LEFT_DEAD = 4
    RIGHT_DEAD = 8
    SIMULATED = 16
    REPLAYED = 32
    OFFSET_DRIFT = 64
    INTERFERENCE = 128
    BURST_UNCALIBRATED = 256


class DetectionFlag(enum.IntFlag):
    """What processing says of one echo (values of EchoDetection.msg)."""

    NONE = 0
    SATURATED = 1
    BEARING_AMBIGUOUS = 2
    CUES_CONTRADICT = 4
    MULTIPATH_SUSPECTED = 8
    NEAR_DIRECT_PULSE = 16


class Ears(enum.IntEnum):
    """Which ears heard an echo (values of EchoDetection.msg)."""

    BOTH = 0
    LEFT_ONLY = 1
    RIGHT_ONLY = 2


@dataclass(frozen=True)
class GainCurve:
    """Receiver gain over the time since emission, already applied to the samples.

    ``time_s`` increases; the gain is linear in dB between the points and constant outside.
    """

    time_s: FloatArray
    gain_db: FloatArray

    def __post_init__(self) -> None:
        time = np.asarray(self.time_s, float)
        gain = np.asarray(self.gain_db, float)
        if time.shape != gain.shape or time.ndim != 1 or time.size == 0:
            raise InvalidEchoError(
                refuse("gain curve lengths", (time.size, gain.size), "equal and at least 1")
            )
        if not (np.all(np.isfinite(time)) and np.all(np.isfinite(gain))):
            raise InvalidEchoError(refuse("gain curve", "not finite", "finite times and gains"))
        if np.any(np.diff(time) <= 0):
            raise InvalidEchoError(refuse("gain curve times", time.tolist(), "increasing times"))
        object.__setattr__(self, "time_s", time)
        object.__setattr__(self, "gain_db", gain)

    def amplitude(self, time_s: FloatArray) -> FloatArray:
        """Amplitude factor at the given times since emission."""
        return np.asarray(10.0 ** (np.interp(time_s, self.time_s, self.gain_db) / 20.0))


@dataclass(frozen=True)
class RawEcho:
    """One ping as both ears heard it.

    Attributes
    ----------
    samples
        int16, shape (2, n_samples), left ear first; full scale is ``full_scale``.
    sample_rate_hz, carrier_hz
        Of the samples and of the burst.
    burst_cycles
        Length of the burst in carrier periods.
    emission_time_s
        Moment at which the burst is commanded, on the clock of the source.
    first_sample_offset_s
        Time of sample 0 since the emission (negative: the record starts earlier).
    temperature_c, relative_humidity
        Air at the head; NaN where not measured.

    Raises
    ------
    InvalidEchoError
        On construction, when any of it is impossible.
    """

    samples: NDArray[np.int16]
    sample_rate_hz: float
    carrier_hz: float
    burst_cycles: float
    emission_time_s: float
    first_sample_offset_s: float = 0.0
    full_scale: float = 32768.0
    temperature_c: float = math.nan
    relative_humidity: float = math.nan
    sequence: int = 0
    flags: FrontEndFlag = FrontEndFlag.NONE
    gain: GainCurve | None = None

    def __post_init__(self) -> None:
        shape = np.shape(self.samples)
        if len(shape) != 2 or shape[0] != 2 or shape[1] < MIN_SAMPLES:
            raise InvalidEchoError(
                refuse("samples shape", shape, f"(2, {MIN_SAMPLES} or more), left ear first")
            )
        _positive("sample_rate_hz", self.sample_rate_hz)
        _positive("carrier_hz", self.carrier_hz)
        _positive("burst_cycles", self.burst_cycles)
        _positive("full_scale", self.full_scale)
        if self.carrier_hz >= self.sample_rate_hz / 2:
            raise InvalidEchoError(
                refuse("carrier_hz", self.carrier_hz, f"below {self.sample_rate_hz / 2:g} Hz")
            )
        for name in ("emission_time_s", "first_sample_offset_s"):
            if not math.isfinite(getattr(self, name)):
                raise InvalidEchoError(refuse(name, getattr(self, name), "a finite time"))

    @property
    def n_samples(self) -> int:
        """Samples of each ear."""
        return int(self.samples.shape[1])

    @property
    def end_time_s(self) -> float:
        """Time of the last sample since the emission."""
        return self.first_sample_offset_s + (self.n_samples - 1) / self.sample_rate_hz


MIN_SAMPLES = 64
"""A shorter record cannot hold one echo of any burst."""


def _positive(name: str, value: float) -> None:
    if not (math.isfinite(value) and value > 0):
        raise InvalidEchoError(refuse(name, value, "a finite value above 0"))


@dataclass(frozen=True)
class Detection:
    """One echo of one ping as an obstacle position; fields as in EchoDetection.msg.

    ``ear_amplitude`` and ``ear_snr_db`` are (left, right).
    """

    range_m: float
    bearing_rad: float
    range_sigma_m: float
    bearing_sigma_rad: float
    bearing_min_rad: float
    bearing_max_rad: float
    ear_amplitude: tuple[float, float]
    ear_snr_db: tuple[float, float]
    existence_probability: float
    range_bearing_covariance: float = 0.0
    alternatives: tuple[tuple[float, float], ...] = ()
    """All bearings left possible as (bearing_rad, weight), most likely first; empty: one only."""
    ears: Ears = Ears.BOTH
    envelope_sigma_s: float = math.nan
    envelope_decay_s: float = 0.0
    radial_velocity_m_s: float = math.nan
    radial_velocity_sigma_m_s: float = math.nan
    flags: DetectionFlag = DetectionFlag.NONE

    @property
    def amplitude(self) -> float:
        """Peak of the envelope in the better ear, fraction of full scale."""
        return float(np.nanmax(self.ear_amplitude))

    @property
    def snr_db(self) -> float:
        """SNR of the better ear."""
        return max(self.ear_snr_db)


@dataclass(frozen=True)
class EnvelopeFit:
    """Measured and fitted envelopes of one ping, for plots; arrays (2, n)."""

    first_time_s: float
    step_s: float
    measured: FloatArray
    fitted: FloatArray
    threshold: tuple[float, float]
    blanking_end_s: float


@dataclass(frozen=True)
class PingResult:
    """All that processing says of one ping; fields as in EchoDetectionArray.msg."""

    emission_time_s: float
    sequence: int
    detections: tuple[Detection, ...]
    speed_of_sound_m_s: float
    range_min_m: float
    range_max_m: float
    beam_half_width_rad: float
    noise: tuple[float, float]
    flags: PingFlag = PingFlag.NONE
    envelope: EnvelopeFit | None = None


@dataclass(frozen=True)
class Pose2:
    """Position and heading in a plane: metres, radians."""

    x_m: float = 0.0
    y_m: float = 0.0
    yaw_rad: float = 0.0

    def compose(self, other: Pose2) -> Pose2:
        """The pose ``other`` given in this pose's frame, in the frame of this pose.

        Examples
        --------
        >>> Pose2(1.0, 0.0, math.pi / 2).compose(Pose2(2.0, 0.0, 0.0)).y_m
        2.0
        """
        c, s = math.cos(self.yaw_rad), math.sin(self.yaw_rad)
        return Pose2(
            self.x_m + c * other.x_m - s * other.y_m,
            self.y_m + s * other.x_m + c * other.y_m,
            wrap_angle(self.yaw_rad + other.yaw_rad),
        )

    def inverse(self) -> Pose2:
        """The pose of the parent frame seen from this one."""
        c, s = math.cos(self.yaw_rad), math.sin(self.yaw_rad)
        return Pose2(
            -c * self.x_m - s * self.y_m, s * self.x_m - c * self.y_m, wrap_angle(-self.yaw_rad)
        )


@dataclass(frozen=True)
class OdometrySample:
    """Pose of base_link in the odometry frame at one time, with velocities in base_link.

    ``covariance`` is that of (x, y, yaw), shape (3, 3), or None when unknown.
    """

    time_s: float
    pose: Pose2
    forward_m_s: float = 0.0
    turn_rad_s: float = 0.0
    covariance: FloatArray | None = field(default=None, compare=False)


def wrap_angle(angle_rad: float) -> float:
    """The same angle in -pi .. pi.

    Examples
    --------
    >>> round(wrap_angle(3 * math.pi / 2), 6)
    -1.570796
    """
    return math.remainder(angle_rad, 2.0 * math.pi)
