"""What its way does to the spectrum of an echo: both beams and the air, at every frequency.

Beams narrow and absorption grows as frequency rises, so an echo from aside or from far away is
weaker in its upper half: a filter of its own for every echo. All of these filters are smooth
over the band, so they are computed at a few frequencies and interpolated by a polynomial.
"""

from __future__ import annotations

import math

import numpy as np
from numpy.polynomial.chebyshev import chebpts2, chebvander

from ..core.acoustics import HALF_POWER_X, piston_directivity
from ..core.air import absorption_db_per_m
from ..core.head import Head, Transducer
from ..core.types import FloatArray
from .echo_paths import EchoPaths

N_NODES = 9
"""Chebyshev points of the second kind, so with both ends of the band. Pulses are right to 0.05 % of
their peak in all directions for beams of 50 degrees or more, outside of the nulls for narrower."""
_NEPER_PER_DB = math.log(10.0) / 20.0


def beam(
    transducer: Transducer, angle_rad: FloatArray, relative_frequency: FloatArray | float
) -> FloatArray:
    """Amplitude of a transducer towards a direction at multiples of the carrier.

    At the carrier it is `core.acoustics.directivity`. The argument of the piston's law, k a
    sin(angle), is proportional to the frequency; the half-power beam width is that at the carrier.

    Parameters
    ----------
    angle_rad, relative_frequency
        In the head's frame, and frequency / carrier; their shapes are broadcast.

    Examples
    --------
    >>> horn = Transducer((0.0, 0.0, 0.0), 0.0, 1.0, 40e3, 1.5e3)
    >>> [round(float(beam(horn, np.array(0.5), f)), 4) for f in (0.9, 1.0, 1.1)]
    [0.7578, 0.7071, 0.6536]
    """
    off_axis = angle_rad - transducer.yaw_rad
    scale = HALF_POWER_X / math.sin(transducer.half_power_beam_width_rad / 2.0)
    cosine = np.cos(off_axis)
    sine = np.where(cosine > 0.0, np.sin(off_axis), 1.0)
    behind = 1.0 + np.minimum(cosine, 0.0)
    return np.asarray(behind * piston_directivity(scale * sine * relative_frequency))


class PathFilter:
    """Beams of one unit and absorption of one air, over a band of frequencies.

    Parameters
    ----------
    frequency_hz
        Increasing, shape (bins,).
    """

    def __init__(
        self,
        unit: Head,
        frequency_hz: FloatArray,
        temperature_c: float,
        relative_humidity: float,
    ) -> None:
        self._unit = unit
        centre = 0.5 * (frequency_hz[0] + frequency_hz[-1])
        half = 0.5 * (frequency_hz[-1] - frequency_hz[0])
        nodes = chebpts2(N_NODES)
        self.node_hz = np.asarray(centre + half * nodes)
        place = (frequency_hz - centre) / half
        degree = N_NODES - 1
        self.spread = np.asarray(
            np.linalg.solve(chebvander(nodes, degree).T, chebvander(place, degree).T)
        )
        """Polynomials that turn values at the nodes into values over the band, (nodes, bins)."""
        self._absorption = _NEPER_PER_DB * absorption_db_per_m(
            self.node_hz, temperature_c, relative_humidity
        )

    def at_nodes(self, paths: EchoPaths) -> FloatArray:
        """Amplitude of both beams and absorption at the nodes, (2, n, nodes).

        Frequencies are those received: a Doppler shift at the transmitter's beam, 0.3 % at
        walking speed, is not followed.
        """
        relative = self.node_hz / self._unit.carrier_hz
        gain = np.exp(-self._absorption * paths.length_m[..., None])
        gain *= beam(self._unit.transmitter, paths.departure_rad[..., None], relative)
        for ear, receiver in enumerate(self._unit.receivers):
            gain[ear] *= beam(receiver, paths.arrival_rad[ear, :, None], relative)
        return np.asarray(gain)

    def over_band(self, at_nodes: FloatArray) -> FloatArray:
        """From values at the nodes, (n, nodes), to the band, (n, bins)."""
        # einsum rather than @: a threaded product would fight the other nodes for the cores.
        return np.asarray(np.einsum("nk,kf->nf", at_nodes, self.spread))
