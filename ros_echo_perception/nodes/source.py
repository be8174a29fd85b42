"""From the driver's settings to an open source, and from names to head files. No ROS here."""

from __future__ import annotations

from pathlib import Path

from ..core.errors import FileFormatError, SourceError, refuse
from ..core.head import load_head
from ..offline.resources import shipped
from ..sources.base import EchoSource
from ..sources.recording import RecordingSource, load_recording
from ..sources.robot_path import load_path
from ..sources.simulator import SimulatorSource
from ..sources.simulator_config import SimulatorConfig
from ..sources.world import load_world
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
    if settings.source == "recording":
        return RecordingSource(load_recording(settings.recording), settings.start_offset_s)
    if settings.start_offset_s > 0.0:
        raise SourceError(
            refuse("start_offset_s", settings.start_offset_s, "0 with the simulator",
                   "use it with recordings")
        )  # fmt: skip
    world = Path(settings.world_file) if settings.world_file else shipped(DEMO_WORLD)
    head = load_head(find_head_file(settings.head_file))
    return SimulatorSource(head, load_world(world), load_path(world), simulator)
