"""The files beside a sidecar: stereo WAV and tables of poses, read with all checks."""

from __future__ import annotations

import csv
import math
import struct
import warnings
from pathlib import Path

import numpy as np
from numpy.typing import NDArray
from scipy.io import wavfile

from ..core.errors import FileFormatError, refuse
from ..core.fields import read_text
from ..core.types import OdometrySample, Pose2

ODOMETRY_COLUMNS = ("t", "x", "y", "yaw", "vx", "wz")
_DAMAGED = (
    ValueError,
    struct.error,
    EOFError,
    ArithmeticError,
    LookupError,
    TypeError,
    NameError,
    MemoryError,
)
"""What scipy's reader raises on damaged files; it has no exception of its own."""
POSE_COLUMNS = ("t", "x", "y", "yaw")


def read_stereo(path: Path) -> tuple[float, NDArray[np.int16]]:
    """Sample rate and int16 frames, shape (n, 2), of a stereo WAV.

    Raises
    ------
    FileFormatError
        When the file is missing, is no WAV, is not stereo or does not hold 16-bit integers.
    """
    try:
        with warnings.catch_warnings():
            warnings.simplefilter("ignore", wavfile.WavFileWarning)  # unknown chunks are harmless
            rate_hz, samples = wavfile.read(path)
    except OSError as error:
        reason = error.strerror or error
        raise FileFormatError(f"{path}: cannot be read ({reason}). Check the path.") from None
    except _DAMAGED as error:
        raise FileFormatError(f"{path}: is not a readable WAV file ({error}).") from None
    if samples.dtype != np.int16:
        allowed = "16-bit integers"
        raise FileFormatError(refuse("sample type", str(samples.dtype), allowed, file=str(path)))
    if samples.ndim != 2 or samples.shape[1] != 2:
        channels = 1 if samples.ndim == 1 else samples.shape[1]
        allowed = "2, the left ear first"
        raise FileFormatError(refuse("number of channels", channels, allowed, file=str(path)))
    return float(rate_hz), samples


def read_odometry(path: Path) -> tuple[OdometrySample, ...]:
    """Odometry from a table with the columns t, x, y, yaw, vx, wz.

    Raises
    ------
    FileFormatError
        When columns are missing, a value is no finite number, or times do not increase.
    """
    rows = read_table(path, ODOMETRY_COLUMNS)
    return tuple(
        OdometrySample(t, Pose2(x, y, yaw), vx, wz) for t, x, y, yaw, vx, wz in rows.tolist()
    )


def read_table(path: Path, columns: tuple[str, ...]) -> NDArray[np.float64]:
    """The named columns of a CSV with increasing times in its first one, shape (n, columns)."""
    reader = csv.DictReader(read_text(path).splitlines())
    missing = [name for name in columns if name not in (reader.fieldnames or ())]
    if missing:
        raise FileFormatError(
            refuse(
                "columns", reader.fieldnames, "a header with " + ",".join(columns), file=str(path)
            )
        )
    rows: list[list[float]] = []
    for number, row in enumerate(reader, start=2):
        rows.append([_value(path, number, name, row[name]) for name in columns])
        if len(rows) > 1 and rows[-1][0] <= rows[-2][0]:
            allowed = f"more than {rows[-2][0]:g}"
            name = f"line {number}, {columns[0]}"
            raise FileFormatError(refuse(name, rows[-1][0], allowed, file=str(path)))
    if not rows:
        raise FileFormatError(refuse("number of rows", 0, "at least 1", file=str(path)))
    return np.array(rows)


def _value(path: Path, line: int, name: str, text: str | None) -> float:
    try:
        value = float(text or "")
    except ValueError:
        value = math.nan
    if not math.isfinite(value):
        raise FileFormatError(
            refuse(f"line {line}, {name}", text, "a finite number", file=str(path))
        )
    return value
