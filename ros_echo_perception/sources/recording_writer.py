"""Writes recordings in the format that `recording` reads, "two_ear_echo/1".

``<id>.wav``: stereo, 16 bits, left ear first; ping k is the frames k * samples_per_ping onwards.
``<id>.json``: the sidecar; its fields are those that `load_recording` asks for. Our own optional
field ``origin`` is "simulated" where samples were computed. ``<id>_odometry.csv``: t, x, y, yaw,
vx, wz of base_link. Simulated recordings have the truth too: in the sidecar's ``truth``,
``<id>_truth_pose.csv`` (t, x, y, yaw in the frame of the world) and ``<id>_world.json``.
"""

from __future__ import annotations

import csv
import json
from collections.abc import Iterable, Mapping, Sequence
from dataclasses import dataclass
from pathlib import Path
from typing import Any

import numpy as np
from scipy.io import wavfile

from ..core.errors import InvalidEchoError, refuse
from ..core.types import OdometrySample, Pose2, RawEcho
from .recording import FORMAT, SIMULATED_ORIGIN
from .recording_files import ODOMETRY_COLUMNS, POSE_COLUMNS


@dataclass(frozen=True)
class RecordingLabels:
    """What the sidecar says beside the pings; ``head`` is a type of head, ``unit`` one of them."""

    head: str
    unit: str
    category: str
    tags: tuple[str, ...] = ()
    adc_bits: int = 16
    half_power_beam_width_rad: float | None = None
    simulated: bool = False
    mount: Pose2 | None = None


def write_recording(
    path: str | Path,
    echoes: Sequence[RawEcho],
    labels: RecordingLabels,
    odometry: Sequence[OdometrySample] = (),
    truth: Mapping[str, Any] | None = None,
) -> Path:
    """Write WAV, sidecar and odometry.

    Parameters
    ----------
    path
        Of the recording without extension (".wav" is accepted); its name is the recording's id.
    echoes
        At least one; all alike in sample rate, carrier, length and gain.

    Returns
    -------
    The path without extension.

    Raises
    ------
    InvalidEchoError
        When echoes differ in what a recording has only once.
    """
    base = Path(path)
    base = base.with_suffix("") if base.suffix in (".wav", ".json") else base
    if not echoes:
        raise InvalidEchoError(refuse("echoes", 0, "at least one ping"))
    for echo in echoes[1:]:
        _check_alike(echoes[0], echo)
    base.parent.mkdir(parents=True, exist_ok=True)
    frames = np.concatenate([echo.samples.T for echo in echoes]).astype(np.int16)
    wavfile.write(f"{base}.wav", int(round(echoes[0].sample_rate_hz)), frames)
    side = _sidecar(base.name, echoes, labels)
    if odometry:
        side["odometry_file"] = f"{base.name}_odometry.csv"
        rows = [
            (s.time_s, s.pose.x_m, s.pose.y_m, s.pose.yaw_rad, s.forward_m_s, s.turn_rad_s)
            for s in odometry
        ]
        write_table(base.parent / side["odometry_file"], ODOMETRY_COLUMNS, rows)
    if truth is not None:
        side["truth"] = dict(truth)
    write_json(Path(f"{base}.json"), side)
    return base


def write_poses(path: Path, poses: Iterable[tuple[float, Pose2]]) -> None:
    """Write times and true poses as a table."""
    rows = [(t, pose.x_m, pose.y_m, pose.yaw_rad) for t, pose in poses]
    write_table(path, POSE_COLUMNS, rows)


def write_table(path: Path, columns: Sequence[str], rows: Iterable[Sequence[float]]) -> None:
    """Write a CSV with a header."""
    with path.open("w", newline="", encoding="utf-8") as file:
        writer = csv.writer(file, lineterminator="\n")
        writer.writerow(columns)
        writer.writerows([f"{value:.6f}" for value in row] for row in rows)


def write_json(path: Path, data: Any) -> None:
    """Write JSON that only has finite numbers."""
    path.write_text(json.dumps(data, indent=1, allow_nan=False) + "\n", encoding="utf-8")


def _sidecar(name: str, echoes: Sequence[RawEcho], labels: RecordingLabels) -> dict[str, Any]:
    first = echoes[0]
    side: dict[str, Any] = {"format": FORMAT, "id": name}
    if labels.simulated:
        side["origin"] = SIMULATED_ORIGIN
    side |= {
        "head": labels.head,
        "unit": labels.unit,
        "sample_rate_hz": _whole(first.sample_rate_hz),
        "samples_per_ping": first.n_samples,
        "channels": ["left", "right"],
        "adc_bits": labels.adc_bits,
        "stored_full_scale": _whole(first.full_scale),
        "carrier_hz": first.carrier_hz,
        "gain_curve": None if first.gain is None else {
            "time_s": first.gain.time_s.tolist(), "gain_db": first.gain.gain_db.tolist()
        },
        "nominal_half_power_beam_width_rad": labels.half_power_beam_width_rad,
        "category": labels.category,
        "tags": list(labels.tags),
    }  # fmt: skip
    if labels.mount is not None:
        side["mount_on_robot"] = {
            "parent": "base_link", "x_m": labels.mount.x_m, "y_m": labels.mount.y_m,
            "z_m": 0.0, "yaw_rad": labels.mount.yaw_rad,
        }  # fmt: skip
    side["pings"] = [
        {
            "index": k,
            "time_s": round(echo.emission_time_s, 6),
            "emission_sample": round(-echo.first_sample_offset_s * echo.sample_rate_hz),
            "burst_cycles": _whole(echo.burst_cycles),
            "temperature_c": _or_null(echo.temperature_c),
            "relative_humidity": _or_null(echo.relative_humidity),
        }
        for k, echo in enumerate(echoes)
    ]
    return side


def _check_alike(first: RawEcho, echo: RawEcho) -> None:
    for name in ("sample_rate_hz", "carrier_hz", "n_samples", "full_scale"):
        if getattr(echo, name) != getattr(first, name):
            allowed = f"{getattr(first, name)} as in the first ping of the recording"
            raise InvalidEchoError(refuse(name, getattr(echo, name), allowed))
    if (echo.gain is None) != (first.gain is None) or (
        echo.gain is not None
        and first.gain is not None
        and not (
            np.array_equal(echo.gain.time_s, first.gain.time_s)
            and np.array_equal(echo.gain.gain_db, first.gain.gain_db)
        )
    ):
        raise InvalidEchoError(refuse("gain", "another curve", "that of the first ping"))


def _whole(value: float) -> float | int:
    """Whole numbers are written without a decimal point: burst lengths serve as keys."""
    return int(value) if float(value).is_integer() else value


def _or_null(value: float) -> float | None:
    return value if np.isfinite(value) else None
