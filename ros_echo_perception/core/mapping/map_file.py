"""Saving a map: PGM and YAML as ROS map servers read them, or NPZ.

The image has row 0 at the largest y. Grey 0 is occupied, 254 free, 205 unknown: the values that
ROS map files use in the mode "trinary" with the thresholds written here.
"""

from __future__ import annotations

import io
import os
from pathlib import Path

import numpy as np
import yaml
from numpy.typing import NDArray

from ..errors import FileFormatError
from .grid import MapSnapshot

OCCUPIED_THRESHOLD, FREE_THRESHOLD = 0.65, 0.196
_OCCUPIED_PERCENT, _FREE_PERCENT = 65, 35
_BLACK, _WHITE, _GREY = 0, 254, 205


def save_map_image(snapshot: MapSnapshot, path: str | Path) -> tuple[Path, Path]:
    """Save ``path.pgm`` and ``path.yaml``; each file appears whole or not at all.

    Occupied are values of 65 and more, free those of 35 and less, the rest is unknown.

    Parameters
    ----------
    snapshot
        The map.
    path
        With or without an ending .yaml or .pgm.

    Returns
    -------
    Paths of the image and of the YAML.

    Raises
    ------
    FileFormatError
        When the files cannot be written.
    """
    path = Path(path)
    stem = path.with_suffix("") if path.suffix in (".yaml", ".yml", ".pgm") else path
    image, text = stem.with_name(stem.name + ".pgm"), stem.with_name(stem.name + ".yaml")
    meta = {
        "image": image.name,
        "mode": "trinary",
        "resolution": float(snapshot.resolution_m),
        "origin": [float(snapshot.origin_x_m), float(snapshot.origin_y_m), 0.0],
        "negate": 0,
        "occupied_thresh": OCCUPIED_THRESHOLD,
        "free_thresh": FREE_THRESHOLD,
    }
    _write(image, _pgm(snapshot.data))
    _write(text, yaml.safe_dump(meta, sort_keys=False).encode())
    return image, text


def save_map_npz(snapshot: MapSnapshot, path: str | Path) -> Path:
    """Save arrays data, resolution, origin_x, origin_y, origin_yaw (compressed NPZ).

    Raises
    ------
    FileFormatError
        When the file cannot be written.
    """
    buffer = io.BytesIO()
    np.savez_compressed(
        buffer,
        data=snapshot.data,
        resolution=snapshot.resolution_m,
        origin_x=snapshot.origin_x_m,
        origin_y=snapshot.origin_y_m,
        origin_yaw=0.0,
    )
    _write(Path(path), buffer.getvalue())
    return Path(path)


def _pgm(data: NDArray[np.int8]) -> bytes:
    grey = np.full(data.shape, _GREY, np.uint8)
    grey[data >= _OCCUPIED_PERCENT] = _BLACK
    grey[(data >= 0) & (data <= _FREE_PERCENT)] = _WHITE
    height, width = data.shape
    return f"P5\n{width} {height}\n255\n".encode() + grey[::-1].tobytes()


def _write(path: Path, content: bytes) -> None:
    """Write beside the target, then rename over it: nobody ever reads half a file."""
    part = path.with_name(f".{path.name}.{os.getpid()}.part")
    try:
        part.write_bytes(content)
        os.replace(part, path)
    except OSError as error:
        part.unlink(missing_ok=True)
        raise FileFormatError(
            f"{path}: cannot be written ({error.strerror or error}). "
            "Give a folder that exists and may be written to."
        ) from None
