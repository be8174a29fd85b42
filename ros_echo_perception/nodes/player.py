"""Plays a source at its own pace in a thread. No ROS here."""

from __future__ import annotations

import heapq
import itertools
import threading
import time
from collections.abc import Callable, Iterable, Iterator
from dataclasses import dataclass, replace

from ..core.errors import EchoPerceptionError
from ..core.types import FrontEndFlag, OdometrySample, RawEcho
from ..sources.base import EchoSource, Event

LOOP_PAUSE_S = 2.0
"""Between the end of a source and its next start: longer than consumers interpolate poses over."""

_BEHIND_S = 0.5  # beyond this the schedule is moved instead of catching up in a burst


def event_time_s(event: Event) -> float:
    """Time of an event on the clock of its source."""
    return event.emission_time_s if isinstance(event, RawEcho) else event.time_s


def release_time_s(event: Event) -> float:
    """When hardware would hand it over: an echo is complete at the end of its record."""
    if isinstance(event, RawEcho):
        return event.emission_time_s + max(event.end_time_s, 0.0)
    return event.time_s


def by_release(events: Iterable[Event]) -> Iterator[Event]:
    """Events in the order of their release, from events in the order of their time.

    If these break off with an exception, it comes after all events that were there.
    """
    waiting: list[tuple[float, int, Event]] = []
    fault: Exception | None = None
    try:
        for count, event in enumerate(events):
            while waiting and waiting[0][0] <= event_time_s(event):
                yield heapq.heappop(waiting)[2]
            heapq.heappush(waiting, (release_time_s(event), count, event))
    except Exception as error:
        fault = error
    while waiting:
        yield heapq.heappop(waiting)[2]
    if fault is not None:
        raise fault


def looped(source: EchoSource, loop: bool) -> Iterator[Event]:
    """Events of a source; in a loop, times and sequence numbers go on increasing.

    Odometry starts at its first pose again, as the scene does: the map stays where it is.
    """
    shift_s, next_sequence = 0.0, 0
    while True:
        first_s: float | None = None
        last_s, offset = 0.0, next_sequence
        for event in source.events():
            if first_s is None:
                first_s = event_time_s(event)
            last_s = max(last_s, release_time_s(event) - first_s)
            if isinstance(event, RawEcho):
                sequence = (offset + event.sequence) & 0xFFFFFFFF
                next_sequence = sequence + 1
                moved = event.emission_time_s + shift_s
                yield replace(event, emission_time_s=moved, sequence=sequence)
            else:
                yield replace(event, time_s=event.time_s + shift_s)
        if not loop or first_s is None:
            return
        shift_s += last_s + LOOP_PAUSE_S


class ConsumerGate:
    """Holds pings back while too many are unanswered: as fast as the consumer, losing none.

    Parameters
    ----------
    window : pings that may be unanswered at a time.
    timeout_s : an answer that takes longer is given up.
    """

    def __init__(self, window: int = 8, timeout_s: float = 2.0) -> None:
        self._window, self._timeout_s = window, timeout_s
        self._open: set[int] = set()
        self._changed = threading.Condition()
        self.given_up = 0

    def wait(self, sequence: int, stop: threading.Event) -> None:
        """Return when the ping may go out."""
        with self._changed:
            end = time.monotonic() + self._timeout_s
            while len(self._open) >= self._window and not stop.is_set():
                if time.monotonic() >= end:
                    self.given_up += len(self._open)
                    self._open.clear()
                self._changed.wait(0.1)
            self._open.add(sequence)

    def answered(self, sequence: int) -> None:
        """The consumer has dealt with this ping."""
        with self._changed:
            self._open.discard(sequence)
            self._changed.notify_all()


@dataclass
class PlayerState:
    """What the player is doing, for diagnostics."""

    phase: str = "starting"  # starting, playing, finished, failed
    pings: int = 0
    odometry: int = 0
    behind_s: float = 0.0
    worst_behind_s: float = 0.0
    error: str = ""


class SourcePlayer:
    """Reads a source in a thread and hands out its events when they are due.

    Parameters
    ----------
    source : what to play; closed at the end.
    emit : called from the thread with each event and its time since the first one, s.
    loop : start again at the end.
    speed : seconds of the source per second; None: not paced, but held back by ``gate``.
    gate : see `ConsumerGate`; only without ``speed``.
    ready : waited for before the first event.
    """

    def __init__(
        self,
        source: EchoSource,
        emit: Callable[[Event, float], None],
        loop: bool = False,
        speed: float | None = 1.0,
        gate: ConsumerGate | None = None,
        ready: Callable[[threading.Event], None] | None = None,
    ) -> None:
        self._source, self._emit, self._loop = source, emit, loop
        self._speed, self._gate, self._ready = speed, gate, ready
        self._stop = threading.Event()
        self._thread = threading.Thread(target=self._run, name="source", daemon=True)
        self.state = PlayerState()

    def start(self) -> None:
        """Begin to play."""
        self._thread.start()

    def stop(self) -> None:
        """Stop and wait for the thread; the source is closed."""
        self._stop.set()
        if self._thread.is_alive():
            self._thread.join(timeout=2.0)

    def _run(self) -> None:
        try:
            if self._ready is not None:
                self._ready(self._stop)
            self._play()
            self.state.phase = "finished"
        except EchoPerceptionError as error:
            self.state.phase, self.state.error = "failed", str(error)
        except Exception as error:  # a fault of a source must show in diagnostics
            self.state.phase = "failed"
            self.state.error = f"{type(error).__name__}: {error}"
        finally:
            self._source.close()

    def _play(self) -> None:
        events = looped(self._source, self._loop)
        first = next(events, None)
        if first is None:
            return
        origin_s, started_s = event_time_s(first), time.monotonic()
        for event in by_release(itertools.chain((first,), events)):
            if self._speed is not None:
                due_s = (release_time_s(event) - origin_s) / self._speed
                started_s = self._wait_until(started_s, due_s)
            elif self._gate is not None and isinstance(event, RawEcho):
                self._gate.wait(event.sequence, self._stop)
            if self._stop.is_set():
                return
            self.state.phase = "playing"
            self._emit(event, event_time_s(event) - origin_s)
            self._count(event)

    def _wait_until(self, started_s: float, due_s: float) -> float:
        """Wait for the due time; returns the start of the schedule, later if far behind."""
        late_s = time.monotonic() - started_s - due_s
        if late_s < 0.0:
            self._stop.wait(-late_s)
        self.state.behind_s = max(late_s, 0.0)
        self.state.worst_behind_s = max(self.state.worst_behind_s, self.state.behind_s)
        return started_s + late_s if late_s > _BEHIND_S else started_s

    def _count(self, event: Event) -> None:
        if isinstance(event, RawEcho):
            self.state.pings += 1
        elif isinstance(event, OdometrySample):
            self.state.odometry += 1


def marked(echo: RawEcho, kind: str) -> RawEcho:
    """The echo with the flag that its kind of source demands."""
    flag = {"simulator": FrontEndFlag.SIMULATED, "recording": FrontEndFlag.REPLAYED}
    return replace(echo, flags=FrontEndFlag(echo.flags | flag.get(kind, FrontEndFlag.NONE)))
