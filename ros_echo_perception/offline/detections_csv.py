"""The table of detections: one row for each detection."""

from __future__ import annotations

import csv
from collections.abc import Iterable
from pathlib import Path
from typing import Any

from ..core.types import Detection, DetectionFlag, PingResult

COLUMNS = (
    "scene",
    "ping",
    "range_m",
    "bearing_rad",
    "sigma_range_m",
    "sigma_bearing_rad",
    "confidence",
    "covariance_m_rad",
    "snr_db",
    "left_snr_db",
    "right_snr_db",
    "amplitude",
    "ears",
    "bearing_min_rad",
    "bearing_max_rad",
    "radial_velocity_m_s",
    "sigma_radial_velocity_m_s",
    "envelope_sigma_s",
    "envelope_decay_s",
    "flags",
)


def rows(scene: str, ping: int, result: PingResult) -> list[dict[str, Any]]:
    """The rows of one ping."""
    return [_row(scene, ping, detection) for detection in result.detections]


def _row(scene: str, ping: int, d: Detection) -> dict[str, Any]:
    values = (
        f"{d.range_m:.6f}",
        f"{d.bearing_rad:.6f}",
        f"{d.range_sigma_m:.6f}",
        f"{d.bearing_sigma_rad:.6f}",
        f"{d.existence_probability:.4f}",
        f"{d.range_bearing_covariance:.4e}",
        f"{d.snr_db:.2f}",
        f"{d.ear_snr_db[0]:.2f}",
        f"{d.ear_snr_db[1]:.2f}",
        f"{d.amplitude:.6f}",
        d.ears.name.lower(),
        f"{d.bearing_min_rad:.6f}",
        f"{d.bearing_max_rad:.6f}",
        f"{d.radial_velocity_m_s:.4f}",
        f"{d.radial_velocity_sigma_m_s:.4f}",
        f"{d.envelope_sigma_s:.4e}",
        f"{d.envelope_decay_s:.4e}",
        flag_names(d.flags),
    )
    return dict(zip(COLUMNS, (scene, ping, *values), strict=True))


def flag_names(flags: DetectionFlag) -> str:
    """Flags as lower-case words joined by ``|``.

    Examples
    --------
    >>> flag_names(DetectionFlag.SATURATED | DetectionFlag.BEARING_AMBIGUOUS)
    'saturated|bearing_ambiguous'
    """
    return "|".join(
        str(flag.name).lower() for flag in DetectionFlag if flag in flags and flag.value
    )


def write(path: Path, table: Iterable[dict[str, Any]]) -> None:
    """Write all rows under a header line."""
    with path.open("w", newline="") as file:
        writer = csv.DictWriter(file, COLUMNS, lineterminator="\n")
        writer.writeheader()
        writer.writerows(table)
