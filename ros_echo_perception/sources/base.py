"""The one interface of all sources of raw echoes."""

from __future__ import annotations

from collections.abc import Iterator
from dataclasses import dataclass
from typing import Protocol

from ..core.types import OdometrySample, Pose2, RawEcho

Event = RawEcho | OdometrySample


@dataclass(frozen=True)
class SourceInfo:
    """What a source is, said at start-up and in diagnostics.

    ``kind`` is "simulator", "recording" or "hardware"; ``duration_s`` and ``n_pings`` are None
    for an endless source; ``mount`` is the pose of the head in base_link, None if not known.
    """

    kind: str
    description: str
    duration_s: float | None = None
    n_pings: int | None = None
    has_odometry: bool = False
    mount: Pose2 | None = None


class EchoSource(Protocol):
    """A stream of raw echoes and, where the source has it, odometry.

    ``events`` yields in the order of time on the source's own clock (float seconds); it never
    sleeps by itself unless it waits for hardware, pacing is the driver's business. It can be
    called again to start over. Broken input raises a SourceError or FileFormatError.
    """

    @property
    def info(self) -> SourceInfo:
        """What the source is; constant."""

    def events(self) -> Iterator[Event]:
        """Raw echoes and odometry in the order of time, from the beginning."""

    def close(self) -> None:
        """Let go of devices and files; harmless when called twice."""
