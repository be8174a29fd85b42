"""From the driver's settings to an open source, and from names to head files. No ROS here."""

from __future__ import annotations

from pathlib import Path

from ..core.errors import FileFormatError
from ..offline.resources import shipped


def find_head_file(name: str) -> Path:
    """A head file by its path, or by its name among those that ship with the package.

    Raises
    ------
    FileFormatError
        When there is none.
    """
    path = Path(name).expanduser()
    if path.exists() or path.is_absolute():
        return path
    try:
        return shipped(f"config/heads/{name}")
    except FileFormatError:
        raise FileFormatError(
            f"head_file is {name!r}; allowed: the path of a head file or the name of one in "
            "config/heads. Check the path."
        ) from None
