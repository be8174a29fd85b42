"""From the driver's settings to an open source, and from names to head files. No ROS here."""

from __future__ import annotations

from pathlib import Path

from ..core.errors import FileFormatError
from ..core.head import load_head
from ..offline.resources import shipped
from ..sources.base import EchoSource
from ..sources.factory import open_source
from ..sources.simulator_config import SimulatorConfig
from .settings import DriverSettings

DEMO_WORLD = "config/worlds/demo_room.yaml"


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


def open_configured(settings: DriverSettings, simulator: SimulatorConfig) -> EchoSource:
    """The source that the settings ask for.

    Raises
    ------
    SourceError, FileFormatError
        When it cannot be opened, with the file, field and value at fault.
    """
    simulated = settings.source == "simulator"
    return open_source(
        settings.source,
        head=load_head(find_head_file(settings.head_file)) if simulated else None,
        world_file=settings.world_file or shipped(DEMO_WORLD),
        recording=settings.recording,
        config=simulator,
        start_offset_s=settings.start_offset_s,
    )
