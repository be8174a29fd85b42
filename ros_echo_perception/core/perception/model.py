"""What an object at a range and bearing does to both ears: delays, gains, phases.

An object is a point that reflects: the sound runs from the transmitter to it and on to each
ear. One complex strength serves both ears, since the directions in which they are off the
object's normal differ by less than the baseline over the range.
"""

from __future__ import annotations

import math
from dataclasses import dataclass
from functools import lru_cache

import numpy as np

from ..acoustics import directivity
from ..head import Head, Transducer
from ..types import ComplexArray, FloatArray
from . import kernels, kernels_delay
from .baseband import ReceiverFilter
from .compiled import HeadArrays
from .pulse import PulseTemplate, pulse_pair, pulse_templates

_TABLE_SIZE = 3143  # of the beams, two more than go round
_TABLE_STEP_RAD = 2.0 * math.pi / (_TABLE_SIZE - 2)


@dataclass(frozen=True)
class EarGeometry:
    """Delays and gains of both ears; arrays (2, ...), left first, ``...`` like the input."""

    delay_s: FloatArray
    delay_per_m: FloatArray
    delay_per_rad: FloatArray
    gain: FloatArray
    gain_per_rad: FloatArray
    tilt_s: FloatArray
    """Relative slope of the gain over frequency, 1/Hz: beams narrow as frequency rises."""


class HeadModel:
    """A head in air of one speed of sound, for one burst length and receiver filter."""

    def __init__(
        self, head: Head, speed_m_s: float, burst_cycles: float, receiver: ReceiverFilter
    ) -> None:
        self.head = head
        self.receiver = receiver
        self.pulses: tuple[PulseTemplate, PulseTemplate] = pulse_templates(
            head, burst_cycles, receiver
        )
        self.pulse_pair = pulse_pair(self.pulses)
        transducers = (head.transmitter, *head.receivers)
        self.omega = 2.0 * math.pi * receiver.carrier_hz
        # An object that recedes at v lowers the carrier by 2 v / c of itself.
        self.doppler_rad_s_per_m_s = -2.0 * self.omega / speed_m_s
        half_db, half_rad = head.gain_mismatch_db / 2.0, head.phase_mismatch_rad / 2.0
        self.arrays = HeadArrays(
            places=np.array([t.position_m for t in transducers], float),
            beams=_beam_tables(transducers),
            beam_step_rad=_TABLE_STEP_RAD,
            ear_gain=10.0 ** (np.array([half_db, -half_db]) / 20.0),
            ear_phase=np.array([half_rad, -half_rad]),
            pulse=self.pulse_pair.table,
            start_s=self.pulse_pair.start_s,
            fine_step_s=self.pulse_pair.fine_step_s,
            latency_s=float(head.latency_s),
            speed_m_s=float(speed_m_s),
            carrier_hz=float(head.carrier_hz),
            omega=float(self.omega),
            doppler=float(self.doppler_rad_s_per_m_s),
        )

    @property
    def speed_m_s(self) -> float:
        """Speed of sound; for another one make another model."""
        return self.arrays.speed_m_s

    def delays(self, range_m: FloatArray, bearing_rad: FloatArray) -> FloatArray:
        """Delays of both ears since the emission, shape (2, ...) for places of shape (...)."""
        shape = np.shape(range_m)
        return kernels_delay.delays(self.arrays, *_flat(range_m, bearing_rad)).reshape(2, *shape)

    def geometry(self, range_m: FloatArray, bearing_rad: FloatArray) -> EarGeometry:
        """Delays since the emission and gains of both ears, with derivatives.

        Parameters
        ----------
        range_m, bearing_rad : equal shapes.
        """
        rows = kernels.geometry(self.arrays, *_flat(range_m, bearing_rad))
        return EarGeometry(*rows.reshape(6, 2, *np.shape(range_m)))

    def carrier(self, geometry: EarGeometry) -> ComplexArray:
        """Phase factors of both ears, exp(-j w (delay - mean delay)) with their mismatch.

        The common phase belongs to the object's strength: so a small step in range is not
        confounded with many turns of the carrier.
        """
        mismatch = self.arrays.ear_phase.reshape(2, *(1,) * (geometry.delay_s.ndim - 1))
        delay = geometry.delay_s
        relative = delay - 0.5 * (delay[0] + delay[1])
        return np.asarray(np.exp(1j * (mismatch - self.omega * relative)))

    def range_of_delay(self, delay_s: float) -> float:
        """Range straight ahead at which the mean delay of both ears is ``delay_s``.

        With the transmitter at the origin r + sqrt(r^2 + h^2) = L gives r = (L^2 - h^2) / (2 L);
        one step of Newton's method mends what other places of the transducers change.
        """
        path = max((delay_s - self.head.latency_s) * self.speed_m_s, 2e-3)
        ear_m = self.head.baseline_m / 2.0
        r = max((path**2 - ear_m**2) / (2.0 * path), 1e-3)
        geometry = self.geometry(np.array([r]), np.zeros(1))
        slope = max(float(geometry.delay_per_m.mean()), 1e-4)
        return max(r + (delay_s - float(geometry.delay_s.mean())) / slope, 1e-3)


def _flat(range_m: FloatArray, bearing_rad: FloatArray) -> tuple[FloatArray, FloatArray]:
    return np.array(range_m, float).ravel(), np.array(bearing_rad, float).ravel()


@lru_cache(maxsize=32)
def _beam_tables(transducers: tuple[Transducer, ...]) -> FloatArray:
    """Directivities over all directions from -pi on; see `HeadArrays.beams`."""
    angle = -math.pi + np.arange(_TABLE_SIZE) * _TABLE_STEP_RAD
    return np.stack([_beam_rows(t, angle, _TABLE_STEP_RAD) for t in transducers])


def _beam_rows(transducer: Transducer, angle: FloatArray, step: float) -> FloatArray:
    value = directivity(transducer, angle)
    slope = np.gradient(value, step)
    # D depends on f sin(angle) only, so d ln D / d ln f = tan(angle) d ln D / d angle; near a
    # null of the beam the quotient is meaningless and is bounded.
    off_axis = angle - transducer.yaw_rad
    front = (np.cos(off_axis) > 0.1) & (value > 0.02)
    tilt = np.where(front, np.tan(off_axis) * slope / np.where(front, value, 1.0), 0.0)
    return np.stack([value, slope, np.clip(tilt, -6.0, 6.0)], axis=1)
