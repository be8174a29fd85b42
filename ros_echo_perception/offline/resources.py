"""Files that ship with the package (config, message definitions), from a checkout or installed."""

from __future__ import annotations

import os
from pathlib import Path

import ros_echo_perception

from ..core.errors import FileFormatError, refuse

PACKAGE = "ros_echo_perception"


def shipped(relative: str) -> Path:
    """Path of a shipped file or folder such as ``config/heads``.

    A checkout counts first, then every prefix of AMENT_PREFIX_PATH.

    Raises
    ------
    FileFormatError
        When no place has it.
    """
    for root in _roots():
        if (root / relative).exists():
            return root / relative
    raise FileFormatError(
        refuse("shipped file", relative, "a file of a checkout or of an installed workspace",
               "source the workspace's setup.bash or run from the checkout")
    )  # fmt: skip


def _roots() -> list[Path]:
    checkouts = [Path(folder).resolve().parent for folder in ros_echo_perception.__path__]
    prefixes = os.environ.get("AMENT_PREFIX_PATH", "").split(os.pathsep)
    shares = [Path(prefix) / "share" / PACKAGE for prefix in prefixes if prefix]
    return [root for root in checkouts if (root / "package.xml").exists()] + shares
