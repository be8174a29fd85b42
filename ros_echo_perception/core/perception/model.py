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
from .baseband import ReceiverFilter
from .pulse import PulseTemplate, pulse_pair, pulse_templates

_TABLE_STEP_RAD = 2e-3


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
        self.speed_m_s = speed_m_s
        self.receiver = receiver
        self.pulses: tuple[PulseTemplate, PulseTemplate] = pulse_templates(
            head, burst_cycles, receiver
        )
        self.pulse_pair = pulse_pair(self.pulses)
        transducers = (head.transmitter, *head.receivers)
        self._beams = _beam_tables(transducers)
        half_db = head.gain_mismatch_db / 2.0
        self._ear_gain = 10.0 ** (np.array([half_db, -half_db]) / 20.0)
        self._ear_phase = np.array([0.5, -0.5]) * head.phase_mismatch_rad
        places = np.array([t.position_m for t in transducers])
        self._places = (places[:, 0], places[:, 1], places[:, 2] ** 2)
        self.omega = 2.0 * math.pi * receiver.carrier_hz
        # An object that recedes at v lowers the carrier by 2 v / c of itself.
        self.doppler_rad_s_per_m_s = -2.0 * self.omega / speed_m_s

    def delays(self, range_m: FloatArray, bearing_rad: FloatArray) -> FloatArray:
        """Delays of both ears since the emission, shape (2, ...) for places of shape (...)."""
        dx, dy = self._offsets(range_m, np.cos(bearing_rad), np.sin(bearing_rad))
        distance = np.sqrt(dx * dx + dy * dy + self._column(2, dx.ndim))
        return np.asarray(self.head.latency_s + (distance[0] + distance[1:]) / self.speed_m_s)

    def geometry(self, range_m: FloatArray, bearing_rad: FloatArray) -> EarGeometry:
        """Delays since the emission and gains of both ears, with derivatives.

        Parameters
        ----------
        range_m, bearing_rad : equal shapes.
        """
        cos, sin = np.cos(bearing_rad), np.sin(bearing_rad)
        dx, dy = self._offsets(range_m, cos, sin)
        distance = np.sqrt(dx * dx + dy * dy + self._column(2, dx.ndim))
        unit = 1.0 / (distance * self.speed_m_s)
        along = (dx * cos + dy * sin) * unit
        across = (dy * cos - dx * sin) * (range_m * unit)
        travel = distance / self.speed_m_s
        beam, beam_slope, tilt = self._beams.lookup(np.arctan2(dy, dx))
        transmit = self._ear_gain.reshape(2, *(1,) * (dx.ndim - 1)) * beam[0]
        gain = transmit * beam[1:]
        return EarGeometry(
            delay_s=self.head.latency_s + (travel[0] + travel[1:]),
            delay_per_m=along[0] + along[1:],
            delay_per_rad=across[0] + across[1:],
            gain=gain,
            gain_per_rad=transmit * beam_slope[1:] + gain * (beam_slope[0] / (beam[0] + 1e-12)),
            tilt_s=(tilt[0] + tilt[1:]) * (1.0 / self.head.carrier_hz),
        )

    def _offsets(
        self, range_m: FloatArray, cos: FloatArray, sin: FloatArray
    ) -> tuple[FloatArray, FloatArray]:
        """From each transducer to the places, x and y, shape (3, ...)."""
        ndim = np.ndim(range_m) + 1
        return range_m * cos - self._column(0, ndim), range_m * sin - self._column(1, ndim)

    def _column(self, number: int, ndim: int) -> FloatArray:
        return self._places[number].reshape(3, *(1,) * (ndim - 1))

    def carrier(self, geometry: EarGeometry) -> ComplexArray:
        """Phase factors of both ears, exp(-j w (delay - mean delay)) with their mismatch.

        The common phase belongs to the object's strength: so a small step in range is not
        confounded with many turns of the carrier.
        """
        mismatch = self._ear_phase.reshape(2, *(1,) * (geometry.delay_s.ndim - 1))
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


class _BeamTables:
    """Directivities of all three transducers over all directions, looked up linearly."""

    def __init__(self, transducers: tuple[Transducer, ...]) -> None:
        size = int(2 * math.pi / _TABLE_STEP_RAD) + 2
        self._step = 2 * math.pi / (size - 2)
        self._size = size
        angle = -math.pi + np.arange(size) * self._step
        rows = [_beam_rows(t, angle, self._step) for t in transducers]
        # (3 quantities, 3 transducers * size)
        self._table = np.concatenate(rows, axis=1)
        self._offset = np.arange(len(transducers)) * size

    def lookup(self, angle_rad: FloatArray) -> tuple[FloatArray, FloatArray, FloatArray]:
        """Gain, its slope by angle, and its relative slope by relative frequency.

        ``angle_rad`` has shape (3, ...): one row for each transducer.
        """
        position = (angle_rad + math.pi) / self._step
        index = np.minimum(position.astype(np.intp), self._size - 2)
        fraction = position - index
        index += self._offset.reshape(-1, *(1,) * (angle_rad.ndim - 1))
        low = self._table[:, index]
        value, slope, tilt = low + fraction * (self._table[:, index + 1] - low)
        return value, slope, tilt


def _beam_rows(transducer: Transducer, angle: FloatArray, step: float) -> FloatArray:
    value = directivity(transducer, angle)
    slope = np.gradient(value, step)
    # D depends on f sin(angle) only, so d ln D / d ln f = tan(angle) d ln D / d angle; near a
    # null of the beam the quotient is meaningless and is bounded.
    off_axis = angle - transducer.yaw_rad
    front = (np.cos(off_axis) > 0.1) & (value > 0.02)
    tilt = np.where(front, np.tan(off_axis) * slope / np.where(front, value, 1.0), 0.0)
    return np.stack([value, slope, np.clip(tilt, -6.0, 6.0)])


@lru_cache(maxsize=32)
def _beam_tables(transducers: tuple[Transducer, ...]) -> _BeamTables:
    return _BeamTables(transducers)
