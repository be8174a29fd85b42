"""Messages to core types and back, field by field; nothing is computed here."""

from __future__ import annotations

import math
from array import array
from typing import Any

import numpy as np
from builtin_interfaces.msg import Time
from nav_msgs.msg import Odometry
from sensor_msgs.msg import Temperature

from ros_echo_perception.msg import EchoDetection, EchoDetectionArray, FittedEnvelope
from ros_echo_perception.msg import RawEcho as RawEchoMsg

from ..core.errors import InvalidEchoError, refuse
from ..core.types import (
    Detection,
    DetectionFlag,
    Ears,
    EnvelopeFit,
    FrontEndFlag,
    GainCurve,
    OdometrySample,
    PingFlag,
    PingResult,
    Pose2,
    RawEcho,
)

_KNOWN_FRONT_END = int(sum(FrontEndFlag))


def seconds(stamp: Time) -> float:
    """A stamp as float seconds (exact to about 0.3 microseconds for present dates)."""
    return float(stamp.sec + 1e-9 * stamp.nanosec)


def stamp(time_s: float) -> Time:
    """Float seconds as a stamp."""
    whole = math.floor(time_s)
    nanoseconds = round((time_s - whole) * 1e9)
    if nanoseconds >= 1_000_000_000:
        whole, nanoseconds = whole + 1, nanoseconds - 1_000_000_000
    return Time(sec=whole, nanosec=nanoseconds)


def raw_echo_to_msg(echo: RawEcho, time: Time, frame_id: str) -> RawEchoMsg:
    """A ping as message; ``time`` is its emission on the ROS clock."""
    msg = RawEchoMsg()
    msg.header.stamp, msg.header.frame_id = time, frame_id
    msg.sequence = echo.sequence & 0xFFFFFFFF
    msg.sample_rate_hz = float(echo.sample_rate_hz)
    msg.carrier_hz = float(echo.carrier_hz)
    msg.burst_cycles = float(echo.burst_cycles)
    msg.first_sample_offset_s = float(echo.first_sample_offset_s)
    # array.array goes in as one block, a NumPy array element by element.
    msg.left = array("h", np.ascontiguousarray(echo.samples[0], np.int16).tobytes())
    msg.right = array("h", np.ascontiguousarray(echo.samples[1], np.int16).tobytes())
    msg.full_scale = float(echo.full_scale)
    msg.temperature_c = float(echo.temperature_c)
    msg.relative_humidity = float(echo.relative_humidity)
    msg.front_end_flags = int(echo.flags)
    if echo.gain is not None:
        msg.gain_time_s = echo.gain.time_s.astype(np.float32).tolist()
        msg.gain_db = echo.gain.gain_db.astype(np.float32).tolist()
    return msg


def raw_echo_from_msg(msg: RawEchoMsg) -> RawEcho:
    """A ping from a message.

    Raises
    ------
    InvalidEchoError
        Naming the field, its value and what is allowed.
    """
    if len(msg.left) != len(msg.right):
        raise InvalidEchoError(
            refuse("lengths of left and right", (len(msg.left), len(msg.right)), "equal lengths")
        )
    gain = None
    if len(msg.gain_time_s) or len(msg.gain_db):
        gain = GainCurve(np.array(msg.gain_time_s, float), np.array(msg.gain_db, float))
    return RawEcho(
        samples=np.stack((_int16(msg.left), _int16(msg.right))),
        sample_rate_hz=msg.sample_rate_hz,
        carrier_hz=msg.carrier_hz,
        burst_cycles=msg.burst_cycles,
        emission_time_s=seconds(msg.header.stamp),
        first_sample_offset_s=msg.first_sample_offset_s,
        full_scale=msg.full_scale,
        temperature_c=msg.temperature_c,
        relative_humidity=msg.relative_humidity,
        sequence=msg.sequence,
        flags=FrontEndFlag(msg.front_end_flags & _KNOWN_FRONT_END),
        gain=gain,
    )


def _int16(values: Any) -> np.ndarray:
    """int16 samples of a message field without a loop over elements."""
    return np.frombuffer(values, np.int16) if len(values) else np.empty(0, np.int16)


def result_to_msg(result: PingResult, header: Any, processing_time_s: float) -> EchoDetectionArray:
    """All echoes of a ping; ``header`` is that of the raw echo."""
    msg = EchoDetectionArray(header=header, sequence=result.sequence & 0xFFFFFFFF)
    msg.detections = [detection_to_msg(item) for item in result.detections]
    msg.speed_of_sound_m_s = float(result.speed_of_sound_m_s)
    msg.range_min_m, msg.range_max_m = float(result.range_min_m), float(result.range_max_m)
    msg.beam_half_width_rad = float(result.beam_half_width_rad)
    msg.left_noise, msg.right_noise = (float(value) for value in result.noise)
    msg.flags = int(result.flags)
    msg.processing_time_s = float(processing_time_s)
    return msg


def detection_to_msg(item: Detection) -> EchoDetection:
    """One echo as message."""
    msg = EchoDetection()
    for name in _SAME_NAMES:
        setattr(msg, name, float(getattr(item, name)))
    msg.alternative_bearing_rad = [float(bearing) for bearing, _ in item.alternatives]
    msg.alternative_weight = [float(weight) for _, weight in item.alternatives]
    msg.amplitude, msg.snr_db = item.amplitude, float(item.snr_db)
    msg.left_amplitude, msg.right_amplitude = (float(value) for value in item.ear_amplitude)
    msg.left_snr_db, msg.right_snr_db = (float(value) for value in item.ear_snr_db)
    msg.ears, msg.flags = int(item.ears), int(item.flags)
    return msg


_SAME_NAMES = (
    "range_m",
    "bearing_rad",
    "range_sigma_m",
    "bearing_sigma_rad",
    "range_bearing_covariance",
    "bearing_min_rad",
    "bearing_max_rad",
    "existence_probability",
    "envelope_sigma_s",
    "envelope_decay_s",
    "radial_velocity_m_s",
    "radial_velocity_sigma_m_s",
)
"""Numbers with one name in Detection and EchoDetection.msg."""


def result_from_msg(msg: EchoDetectionArray) -> PingResult:
    """The echoes of a ping from a message.

    Raises
    ------
    InvalidEchoError
        When a range, bearing or sigma cannot be one.
    """
    return PingResult(
        emission_time_s=seconds(msg.header.stamp),
        sequence=msg.sequence,
        detections=tuple(detection_from_msg(item) for item in msg.detections),
        speed_of_sound_m_s=msg.speed_of_sound_m_s,
        range_min_m=_finite(msg, "range_min_m"),
        range_max_m=_finite(msg, "range_max_m"),
        beam_half_width_rad=_finite(msg, "beam_half_width_rad"),
        noise=(msg.left_noise, msg.right_noise),
        flags=PingFlag(msg.flags & int(sum(PingFlag))),
    )


def detection_from_msg(msg: EchoDetection) -> Detection:
    """One echo from a message; raises InvalidEchoError as `result_from_msg` says."""
    for name in ("range_m", "range_sigma_m", "bearing_sigma_rad", "existence_probability"):
        _finite(msg, name, minimum=0.0)
    for name in ("bearing_rad", "bearing_min_rad", "bearing_max_rad"):
        _finite(msg, name)
    if len(msg.alternative_bearing_rad) != len(msg.alternative_weight):
        raise InvalidEchoError(
            refuse("alternative_weight", list(msg.alternative_weight), "one for each alternative")
        )
    if msg.ears not in tuple(Ears):
        raise InvalidEchoError(refuse("ears", msg.ears, "0, 1 or 2"))
    values = {name: float(getattr(msg, name)) for name in _SAME_NAMES}
    return Detection(
        ear_amplitude=(msg.left_amplitude, msg.right_amplitude),
        ear_snr_db=(msg.left_snr_db, msg.right_snr_db),
        alternatives=tuple(zip(msg.alternative_bearing_rad, msg.alternative_weight, strict=True)),
        ears=Ears(msg.ears),
        flags=DetectionFlag(msg.flags & int(sum(DetectionFlag))),
        **values,
    )


def _finite(msg: Any, name: str, minimum: float = -math.inf) -> float:
    value = float(getattr(msg, name))
    if not (math.isfinite(value) and value >= minimum):
        allowed = "a finite number" if minimum == -math.inf else f"a finite number from {minimum:g}"
        raise InvalidEchoError(refuse(name, value, allowed))
    return value


def envelope_to_msg(fit: EnvelopeFit, sequence: int, header: Any) -> FittedEnvelope:
    """Measured and fitted envelopes as message."""
    msg = FittedEnvelope(header=header, sequence=sequence & 0xFFFFFFFF)
    msg.first_time_s, msg.step_s = float(fit.first_time_s), float(fit.step_s)
    msg.left_measured, msg.right_measured = (_floats(row) for row in fit.measured)
    msg.left_fitted, msg.right_fitted = (_floats(row) for row in fit.fitted)
    msg.left_threshold, msg.right_threshold = (float(value) for value in fit.threshold)
    msg.blanking_end_s = float(fit.blanking_end_s)
    return msg


def _floats(row: np.ndarray) -> array:
    return array("f", np.ascontiguousarray(row, np.float32).tobytes())


def odometry_to_msg(
    sample: OdometrySample, time: Time, odom_frame: str, base_frame: str
) -> Odometry:
    """Odometry as message; an unknown covariance stays 0."""
    msg = Odometry()
    msg.header.stamp, msg.header.frame_id = time, odom_frame
    msg.child_frame_id = base_frame
    pose = msg.pose.pose
    pose.position.x, pose.position.y = float(sample.pose.x_m), float(sample.pose.y_m)
    pose.orientation.z = math.sin(sample.pose.yaw_rad / 2.0)
    pose.orientation.w = math.cos(sample.pose.yaw_rad / 2.0)
    msg.twist.twist.linear.x = float(sample.forward_m_s)
    msg.twist.twist.angular.z = float(sample.turn_rad_s)
    if sample.covariance is not None:
        covariance = np.zeros((6, 6))
        covariance[np.ix_(_PLANAR, _PLANAR)] = sample.covariance
        msg.pose.covariance = covariance.ravel()
    return msg


_PLANAR = (0, 1, 5)
"""x, y and yaw among x, y, z, roll, pitch, yaw."""


def odometry_from_msg(msg: Odometry) -> OdometrySample:
    """Odometry in the plane: yaw of the orientation, the rest of it left out.

    Raises
    ------
    InvalidEchoError
        When position or orientation are not finite, or the quaternion is no rotation.
    """
    p, q = msg.pose.pose.position, msg.pose.pose.orientation
    norm = math.sqrt(q.x**2 + q.y**2 + q.z**2 + q.w**2)
    if not (math.isfinite(p.x) and math.isfinite(p.y) and abs(norm - 1.0) < 0.1):
        raise InvalidEchoError(
            refuse("odometry pose", (p.x, p.y, norm), "finite x and y, a unit quaternion")
        )
    yaw = math.atan2(2.0 * (q.w * q.z + q.x * q.y), norm**2 - 2.0 * (q.y**2 + q.z**2))
    covariance = np.asarray(msg.pose.covariance, float).reshape(6, 6)[np.ix_(_PLANAR, _PLANAR)]
    known = bool(np.all(np.isfinite(covariance)) and np.any(covariance > 0.0))
    return OdometrySample(
        time_s=seconds(msg.header.stamp),
        pose=Pose2(p.x, p.y, yaw),
        forward_m_s=msg.twist.twist.linear.x,
        turn_rad_s=msg.twist.twist.angular.z,
        covariance=covariance if known else None,
    )


def temperature_to_msg(temperature_c: float, time: Time, frame_id: str) -> Temperature:
    """Air temperature; variance 0 means unknown there."""
    msg = Temperature(temperature=float(temperature_c))
    msg.header.stamp, msg.header.frame_id = time, frame_id
    return msg
