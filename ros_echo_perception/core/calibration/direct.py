"""The direct pulse of a unit: what both ears hear of the burst with nothing in front."""

from __future__ import annotations

from collections.abc import Sequence
from typing import Any

import numpy as np

from ..head import Head
from ..perception.baseband import receiver_filter, to_baseband
from ..types import RawEcho

_END_S = 4e-3
_MIN_PINGS = 4


def measure_direct_pulse(head: Head, echoes: Sequence[RawEcho]) -> list[dict[str, Any]]:
    """Median of the first 4 ms over pings of one kind; echoes move, the direct pulse stays.

    Returns
    -------
    One entry for each burst length with at least 4 pings: burst_cycles, first_time_s, step_s,
    and for each ear its real and imaginary parts (fractions of full scale).
    """
    groups: dict[tuple[float, float, float], list[RawEcho]] = {}
    for echo in echoes:
        key = (echo.burst_cycles, echo.sample_rate_hz, echo.first_sample_offset_s)
        groups.setdefault(key, []).append(echo)
    result = []
    for (burst, rate, _), members in groups.items():
        if len(members) < _MIN_PINGS or members[0].gain is not None:
            continue
        receiver = receiver_filter(head, rate, members[0].carrier_hz)
        parts = [to_baseband(e, receiver) for e in members]
        early = parts[0].time_s < _END_S
        stack = np.array([p.samples[:, early] for p in parts])  # (pings, 2, n)
        typical = np.median(stack.real, axis=0) + 1j * np.median(stack.imag, axis=0)
        result.append(
            {
                "burst_cycles": burst,
                "first_time_s": float(parts[0].time_s[0]),
                "step_s": receiver.step_s,
                **{
                    f"{name}_{part}": [float(f"{v:.5g}") for v in getattr(typical[ear], part)]
                    for ear, name in enumerate(("left", "right"))
                    for part in ("real", "imag")
                },
            }
        )
    return result
