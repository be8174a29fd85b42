"""An individual head differs from its data sheet."""

from __future__ import annotations

import dataclasses

import numpy as np

from ..core.head import Head, Transducer


def individual_unit(head: Head, seed: int, scale: float = 1.0) -> Head:
    """One manufactured unit of a type of head.

    Tolerances at scale 1 (common practice): 1 mm in the distance of the receivers, 1.5 degrees
    in their yaw and 1 in the transmitter's, 0.75 dB in each ear's gain, 150 Hz in each resonance,
    7 % in each bandwidth, a latency of 5 to 60 microseconds.

    Parameters
    ----------
    head
        Nominal head, not changed.
    scale
        Multiplies all tolerances; 0 returns the head as it is.
    """
    if scale == 0.0:
        return head
    rng = np.random.default_rng([seed, 11])

    def within(tolerance: float) -> float:
        return float(scale * tolerance * rng.uniform(-1.0, 1.0))

    shift_m = within(0.0005)

    def varied(transducer: Transducer, yaw_deg: float, side: float) -> Transducer:
        x, y, z = transducer.position_m
        return dataclasses.replace(
            transducer,
            position_m=(x, y + side * shift_m, z),
            yaw_rad=transducer.yaw_rad + float(np.radians(within(yaw_deg))),
            resonance_hz=transducer.resonance_hz + within(150.0),
            half_power_bandwidth_hz=transducer.half_power_bandwidth_hz * (1.0 + within(0.07)),
        )

    return dataclasses.replace(
        head,
        transmitter=varied(head.transmitter, 1.0, 0.0),
        left=varied(head.left, 1.5, 1.0),
        right=varied(head.right, 1.5, -1.0),
        gain_mismatch_db=head.gain_mismatch_db + within(1.5),
        latency_s=head.latency_s + scale * float(rng.uniform(5e-6, 60e-6)),
        calibration={},
    )
