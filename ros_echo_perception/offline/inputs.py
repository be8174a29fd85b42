"""What the offline commands read: a recording, or the raw echoes of a bag, behind one face."""

from __future__ import annotations

from collections.abc import Iterator, Mapping, Sequence
from dataclasses import dataclass, field
from pathlib import Path
from typing import Any

from ..core.errors import FileFormatError, InvalidEchoError
from ..core.types import OdometrySample, Pose2, RawEcho
from ..sources.recording import Recording, load_recording
from . import bag_reader

ANY_HEAD = ""
"""Head name of an input that does not say which head made it (a bag)."""


@dataclass(frozen=True)
class EchoInput:
    """Pings in order, with odometry, mount and truth where the input has them.

    ``n_refused`` counts pings of a bag that were impossible and were left out.
    """

    name: str
    path: Path
    head_name: str
    pings: Recording | Sequence[RawEcho]
    odometry: tuple[OdometrySample, ...] = ()
    mount: Pose2 | None = None
    unit: str = ""
    category: str = ""
    truth: Mapping[str, Any] | None = field(default=None, repr=False)
    n_refused: int = 0

    @property
    def n_pings(self) -> int:
        """Number of usable pings."""
        return self.pings.n_pings if isinstance(self.pings, Recording) else len(self.pings)

    def echo(self, k: int) -> RawEcho:
        """Ping number k, from 0."""
        return self.pings.echo(k) if isinstance(self.pings, Recording) else self.pings[k]

    def echoes(self) -> Iterator[RawEcho]:
        """All pings in the order of time."""
        return (self.echo(k) for k in range(self.n_pings))


def is_bag(path: Path) -> bool:
    """Whether a path is a rosbag2 folder or a file of one."""
    return (path / "metadata.yaml").exists() or path.suffix in (".mcap", ".db3")


def open_input(path: Path, topic: str = "") -> EchoInput:
    """Open a recording (.wav with .json) or a bag.

    Parameters
    ----------
    path
        Of the recording or of the bag.
    topic
        Topic of the raw echoes in a bag; may be empty when there is only one.

    Raises
    ------
    FileFormatError
        Naming the file, the field, the value and what is allowed.
    """
    return _from_bag(path, topic) if is_bag(path) else _from_recording(load_recording(path))


def _from_recording(recording: Recording) -> EchoInput:
    return EchoInput(
        name=recording.id,
        path=recording.path,
        head_name=recording.head,
        pings=recording,
        odometry=recording.odometry,
        mount=recording.mount,
        unit=recording.unit,
        category=recording.category,
        truth=recording.truth,
    )


def _from_bag(path: Path, topic: str) -> EchoInput:
    folder = path.parent if path.is_file() else path
    echoes, refused = [], 0
    with bag_reader.open_bag(folder) as reader:
        topics = sorted({c.topic for c in reader.connections if c.msgtype == bag_reader.RAW_ECHO})
        if not topic and len(topics) > 1:
            raise FileFormatError(
                f"{path}: holds raw echoes of several heads; name one of the topics "
                f"{', '.join(topics)} with --topic."
            )
        for _, message in bag_reader.messages(reader, bag_reader.RAW_ECHO, topic):
            try:
                echoes.append(bag_reader.echo_from_message(message))
            except InvalidEchoError:
                refused += 1
        odometry = [
            bag_reader.odometry_from_message(m)
            for _, m in bag_reader.messages(reader, bag_reader.ODOMETRY)
        ]
    return EchoInput(
        name=folder.name,
        path=folder,
        head_name=ANY_HEAD,
        pings=sorted(echoes, key=lambda echo: echo.emission_time_s),
        odometry=tuple(sorted(odometry, key=lambda sample: sample.time_s)),
        n_refused=refused,
    )
