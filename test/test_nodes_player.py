"""The driver's player: order, pace, loops, back-pressure, faults. No ROS."""

import threading
import time

import numpy as np
import pytest

from ros_echo_perception.core.errors import SourceError
from ros_echo_perception.core.types import FrontEndFlag, OdometrySample, Pose2, RawEcho
from ros_echo_perception.nodes.player import (
    LOOP_PAUSE_S,
    ConsumerGate,
    SourcePlayer,
    by_release,
    event_time_s,
    looped,
    marked,
    release_time_s,
)
from ros_echo_perception.sources.base import SourceInfo


def echo(time_s, sequence=0, n=2000, flags=FrontEndFlag.NONE):
    return RawEcho(
        np.zeros((2, n), np.int16), 200e3, 40e3, 3.0, time_s, sequence=sequence, flags=flags
    )


class ListSource:
    """Plays a list; optionally breaks at the end."""

    info = SourceInfo("recording", "a list")

    def __init__(self, events, error=None):
        self.list, self.error, self.closed = events, error, 0

    def events(self):
        yield from self.list
        if self.error is not None:
            raise self.error

    def close(self):
        self.closed += 1


def play(source, **options):
    """Events with their times since the start, after the source has ended."""
    got = []
    player = SourcePlayer(source, lambda event, since: got.append((event, since)), **options)
    player.start()
    player._thread.join(10.0)
    assert not player._thread.is_alive()
    return got, player


def test_an_echo_is_handed_out_when_its_record_has_ended():
    events = [echo(0.0), *(OdometrySample(t, Pose2()) for t in (0.001, 0.009, 0.011, 0.02))]
    order = list(by_release(events))
    assert [type(e).__name__[0] for e in order] == ["O", "O", "R", "O", "O"]
    releases = [release_time_s(e) for e in order]
    assert releases == sorted(releases)
    assert release_time_s(events[0]) == pytest.approx(1999 / 200e3)


def test_a_loop_goes_on_in_time_and_in_numbers():
    source = ListSource([echo(7.0, 3), echo(7.1, 4)])
    events = looped(source, loop=True)
    first, second, third, fourth = (next(events) for _ in range(4))
    assert [e.sequence for e in (first, second, third, fourth)] == [3, 4, 8, 9]
    assert third.emission_time_s - second.emission_time_s > LOOP_PAUSE_S
    assert fourth.emission_time_s - third.emission_time_s == pytest.approx(0.1)


def test_without_loop_the_source_plays_once_and_is_closed():
    source = ListSource([echo(5.0, 0), OdometrySample(5.001, Pose2()), echo(5.05, 1)])
    got, player = play(source, speed=100.0)
    assert [since for _, since in got] == pytest.approx([0.001, 0.0, 0.05], abs=1e-9)
    assert (player.state.phase, player.state.pings, player.state.odometry) == ("finished", 2, 1)
    assert source.closed == 1


def test_the_pace_is_that_of_the_source_times_the_factor():
    source = ListSource([echo(k * 0.1, k) for k in range(6)])
    begin = time.monotonic()
    play(source, speed=2.0)
    assert time.monotonic() - begin == pytest.approx(0.25, abs=0.1)


def test_a_broken_source_fails_with_its_reason_and_without_an_exception():
    got, player = play(ListSource([echo(0.0)], SourceError("cable torn")), speed=100.0)
    assert len(got) == 1
    assert (player.state.phase, player.state.error) == ("failed", "cable torn")


def test_an_empty_source_finishes():
    got, player = play(ListSource([]), loop=True)
    assert not got
    assert player.state.phase == "finished"


def test_the_gate_holds_pings_back_until_they_are_answered():
    gate, stop = ConsumerGate(window=2, timeout_s=5.0), threading.Event()
    gate.wait(0, stop)
    gate.wait(1, stop)
    passed = threading.Event()
    thread = threading.Thread(target=lambda: (gate.wait(2, stop), passed.set()))
    thread.start()
    assert not passed.wait(0.2)
    gate.answered(0)
    assert passed.wait(1.0)
    thread.join()
    assert gate.given_up == 0


def test_the_gate_gives_up_on_a_silent_consumer_and_counts_it():
    gate = ConsumerGate(window=1, timeout_s=0.1)
    begin = time.monotonic()
    for sequence in range(3):
        gate.wait(sequence, threading.Event())
    assert gate.given_up == 2
    assert time.monotonic() - begin < 2.0


def test_stop_ends_a_player_that_waits():
    source = ListSource([echo(0.0), echo(1000.0)])
    player = SourcePlayer(source, lambda event, since: None)
    player.start()
    begin = time.monotonic()
    player.stop()
    assert time.monotonic() - begin < 1.0
    assert source.closed == 1


@pytest.mark.parametrize(
    ("kind", "flag"),
    [("simulator", FrontEndFlag.SIMULATED), ("recording", FrontEndFlag.REPLAYED)],
)
def test_computed_and_replayed_echoes_are_marked_whatever_the_source_says(kind, flag):
    before = echo(0.0, flags=FrontEndFlag.LEFT_CLIPPED)
    assert marked(before, kind).flags == flag | FrontEndFlag.LEFT_CLIPPED
    assert marked(before, "hardware").flags == FrontEndFlag.LEFT_CLIPPED
    assert before.flags == FrontEndFlag.LEFT_CLIPPED
    assert event_time_s(marked(before, kind)) == 0.0
