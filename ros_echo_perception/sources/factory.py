"""From the name of a kind of source to an open source."""

from __future__ import annotations

from pathlib import Path

from ..core.errors import SourceError, refuse
from ..core.head import Head
from .base import EchoSource
from .recording import RecordingSource, load_recording
from .robot_path import load_path
from .simulator import SimulatorSource
from .simulator_config import SimulatorConfig
from .world import load_world

KINDS = ("simulator", "recording", "hardware")


def open_source(
    kind: str,
    *,
    head: Head | None = None,
    world_file: str | Path = "",
    recording: str | Path = "",
    config: SimulatorConfig | None = None,
    start_offset_s: float = 0.0,
) -> EchoSource:
    """Open a source of raw echoes.

    Parameters
    ----------
    kind
        One of `KINDS`.
    head, world_file, config
        For the simulator: the head, a world file with a path for the robot, the settings.
    recording
        For a recording: path of its .wav or .json.
    start_offset_s
        Leave out this much of the beginning.

    Raises
    ------
    SourceError
        For an unknown kind, a missing argument, or hardware, for which there is no source yet.
    FileFormatError
        When a file cannot be used.
    """
    if kind == "recording":
        if not recording:
            raise SourceError(refuse("recording", recording, "the path of a .wav with its .json"))
        return RecordingSource(load_recording(recording), start_offset_s)
    if kind == "simulator":
        if head is None or not world_file:
            raise SourceError("The simulator needs a head and a world file. Give both.")
        world, path = load_world(world_file), load_path(world_file)
        return SimulatorSource(head, world, path, config, start_offset_s)
    if kind == "hardware":
        raise SourceError(
            "There is no source for hardware yet. Write a class with the interface of "
            "ros_echo_perception/sources/base.py, open it here, or publish RawEcho messages "
            "from your own driver and start only processing and mapping."
        )
    raise SourceError(refuse("source", kind, "one of " + ", ".join(KINDS)))
