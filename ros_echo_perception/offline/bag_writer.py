"""Writes rosbag2 recordings (MCAP) from serialized messages."""

from __future__ import annotations

import shutil
import threading
from pathlib import Path
from types import TracebackType
from typing import Literal

from rosbags.interfaces import (
    Connection,
    Qos,
    QosDurability,
    QosHistory,
    QosLiveliness,
    QosReliability,
    QosTime,
)
from rosbags.rosbag2 import StoragePlugin, Writer

from ..core.errors import SourceError, refuse
from .message_types import typestore

_NO_LIMIT = QosTime(2147483647, 4294967295)  # RMW's "infinite" duration, as rosbag2 writes it


def quality(reliable: bool, keep_last_sample: bool, depth: int = 10) -> Qos:
    """Quality of service of a publisher, as stored with its topic."""
    return Qos(
        history=QosHistory.KEEP_LAST,
        depth=depth,
        reliability=QosReliability.RELIABLE if reliable else QosReliability.BEST_EFFORT,
        durability=QosDurability.TRANSIENT_LOCAL if keep_last_sample else QosDurability.VOLATILE,
        deadline=_NO_LIMIT,
        lifespan=_NO_LIMIT,
        liveliness=QosLiveliness.AUTOMATIC,
        liveliness_lease_duration=_NO_LIMIT,
        avoid_ros_namespace_conventions=False,
    )


class BagWriter:
    """One rosbag2 folder; complete and readable once closed. May be used from several threads.

    Parameters
    ----------
    folder
        Of the bag; an earlier bag there is replaced, anything else there is refused.

    Raises
    ------
    SourceError
        When the folder holds something that is not a bag.
    """

    def __init__(self, folder: Path) -> None:
        _make_room(folder)
        self._writer = Writer(folder, version=9, storage_plugin=StoragePlugin.MCAP)
        self._writer.open()
        # The library numbers topics by how many there are: two at once would share a number.
        self._lock = threading.Lock()
        self._connections: dict[str, Connection] = {}
        self.counts: dict[str, int] = {}

    def add_topic(self, topic: str, type_name: str, qos: Qos) -> None:
        """Announce a topic before its first message."""
        with self._lock:
            self._connections[topic] = self._writer.add_connection(
                topic, type_name, typestore=typestore(), offered_qos_profiles=[qos]
            )
            self.counts[topic] = 0

    def write(self, topic: str, time_ns: int, data: bytes) -> None:
        """Append one serialized message with the time of its receipt."""
        with self._lock:
            self._writer.write(self._connections[topic], time_ns, data)
            self.counts[topic] += 1

    def close(self) -> None:
        """Write index and metadata."""
        with self._lock:
            self._writer.close()

    def __enter__(self) -> BagWriter:
        return self

    def __exit__(
        self,
        kind: type[BaseException] | None,
        error: BaseException | None,
        trace: TracebackType | None,
    ) -> Literal[False]:
        self.close()
        return False


def _make_room(folder: Path) -> None:
    if not folder.exists():
        return
    if not (folder / "metadata.yaml").exists() and any(folder.iterdir()):
        raise SourceError(
            refuse("bag folder", str(folder), "a new folder or an earlier bag",
                   "move it away or name another one")
        )  # fmt: skip
    shutil.rmtree(folder)
