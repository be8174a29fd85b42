"""What may differ between a unit and its maker's data sheet, and by how much."""

from __future__ import annotations

import dataclasses
import math
from dataclasses import dataclass

import numpy as np

from ..head import Head, Transducer
from ..types import FloatArray


@dataclass(frozen=True)
class Parameter:
    """One unknown: its usual deviation from nominal (1 sigma) and the unit it is shown in."""

    name: str
    unit: str
    sigma: float
    display_factor: float = 1.0


# Usual tolerances of small ultrasonic transducers and of mounting them (common practice).
PARAMETERS = (
    Parameter("latency", "us", 50e-6, 1e6),
    Parameter("gain left - right", "dB", 1.5),
    Parameter("phase left - right", "deg", 0.3, math.degrees(1.0)),
    Parameter("left ear x", "mm", 0.5e-3, 1e3),
    Parameter("left ear y", "mm", 0.5e-3, 1e3),
    Parameter("transmitter yaw", "deg", math.radians(1.0), math.degrees(1.0)),
    Parameter("left ear yaw", "deg", math.radians(1.5), math.degrees(1.0)),
    Parameter("right ear yaw", "deg", math.radians(1.5), math.degrees(1.0)),
    Parameter("transmitter beam width", "%", 0.03, 100.0),
    Parameter("left ear beam width", "%", 0.03, 100.0),
    Parameter("right ear beam width", "%", 0.03, 100.0),
    Parameter("transmitter resonance", "Hz", 150.0),
    Parameter("left ear resonance", "Hz", 150.0),
    Parameter("right ear resonance", "Hz", 150.0),
    Parameter("transmitter bandwidth", "%", 0.07, 100.0),
    Parameter("left ear bandwidth", "%", 0.07, 100.0),
    Parameter("right ear bandwidth", "%", 0.07, 100.0),
    Parameter("air temperature error", "K", 0.5),
)
SIGMA: FloatArray = np.array([p.sigma for p in PARAMETERS])
TEMPERATURE_ERROR = len(PARAMETERS) - 1


def apply(nominal: Head, deviation: FloatArray) -> Head:
    """The head whose parameters deviate from the nominal ones, shape (len(PARAMETERS),).

    The origin stays midway between the ears, so the right ear mirrors the left one.
    """
    d = deviation.tolist()
    shift = np.array([d[3], d[4], 0.0])
    return dataclasses.replace(
        nominal,
        latency_s=nominal.latency_s + d[0],
        gain_mismatch_db=nominal.gain_mismatch_db + d[1],
        phase_mismatch_rad=nominal.phase_mismatch_rad + d[2],
        transmitter=_changed(nominal.transmitter, np.zeros(3), d[5], d[8], d[11], d[14]),
        left=_changed(nominal.left, shift, d[6], d[9], d[12], d[15]),
        right=_changed(nominal.right, -shift, d[7], d[10], d[13], d[16]),
    )


def values(head: Head) -> FloatArray:
    """The parameters' values in a head, in SI units; relative ones (widths) absolute."""
    t, left, right = head.transmitter, head.left, head.right
    return np.array(
        [
            head.latency_s, head.gain_mismatch_db, head.phase_mismatch_rad,
            left.position_m[0], left.position_m[1], t.yaw_rad, left.yaw_rad, right.yaw_rad,
            *(x.half_power_beam_width_rad for x in (t, left, right)),
            *(x.resonance_hz for x in (t, left, right)),
            *(x.half_power_bandwidth_hz for x in (t, left, right)),
            0.0,
        ]
    )  # fmt: skip


def _changed(
    t: Transducer, shift: FloatArray, yaw: float, beam: float, resonance: float, band: float
) -> Transducer:
    x, y, z = (np.array(t.position_m) + shift).tolist()
    return Transducer(
        position_m=(x, y, z),
        yaw_rad=t.yaw_rad + yaw,
        half_power_beam_width_rad=min(t.half_power_beam_width_rad * (1.0 + beam), math.pi),
        resonance_hz=t.resonance_hz + resonance,
        half_power_bandwidth_hz=t.half_power_bandwidth_hz * (1.0 + band),
    )
