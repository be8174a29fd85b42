"""Recordings: written, read back, played."""

import json
import math

import numpy as np
import pytest
from echo_data import ECHO_DATA, ROOT, needs_echo_data
from scipy.io import wavfile
from small_recording import LABELS, make_echoes, make_odometry

from ros_echo_perception.core.errors import InvalidEchoError, SourceError
from ros_echo_perception.core.head import load_head
from ros_echo_perception.core.types import (
    FrontEndFlag,
    GainCurve,
    RawEcho,
)
from ros_echo_perception.sources.factory import open_source
from ros_echo_perception.sources.recording import RecordingSource, load_recording
from ros_echo_perception.sources.recording_writer import RecordingLabels, write_recording
from ros_echo_perception.sources.simulated_recording import write_calibration_recording


@pytest.fixture
def base(tmp_path):
    return write_recording(tmp_path / "small", make_echoes(), LABELS, make_odometry())


def test_round_trip(tmp_path):
    gain = GainCurve(np.array([0.0, 0.01]), np.array([0.0, 12.0]))
    echoes = make_echoes(gain=gain)
    base = write_recording(tmp_path / "new" / "r.wav", echoes, LABELS, make_odometry())
    recording = load_recording(base)
    assert (recording.id, recording.head, recording.unit) == ("r", "sparrow_52", "unit_7")
    assert recording.mount == LABELS.mount
    assert recording.truth is None
    for read, written in zip(recording.odometry, make_odometry(), strict=True):
        assert read.time_s == pytest.approx(written.time_s, abs=1e-6)
        assert read.pose.y_m == pytest.approx(written.pose.y_m, abs=1e-6)
        assert read.pose.yaw_rad == pytest.approx(written.pose.yaw_rad, abs=1e-6)
        assert (read.forward_m_s, read.turn_rad_s) == (0.5, 5.0)
    for k, echo in enumerate(echoes):
        read = recording.echo(k)
        np.testing.assert_array_equal(read.samples, echo.samples)
        for name in ("sample_rate_hz", "carrier_hz", "burst_cycles", "full_scale", "sequence"):
            assert getattr(read, name) == getattr(echo, name), name
        for name in ("emission_time_s", "first_sample_offset_s"):
            assert getattr(read, name) == pytest.approx(getattr(echo, name), abs=1e-9), name
        np.testing.assert_array_equal(read.temperature_c, echo.temperature_c)
        np.testing.assert_array_equal(read.gain.gain_db, gain.gain_db)
        assert read.flags == FrontEndFlag.REPLAYED


@pytest.mark.parametrize("suffix", ["", ".wav", ".json"])
def test_any_of_the_paths_will_do(base, suffix):
    assert load_recording(f"{base}{suffix}").n_pings == 3


def test_only_simulated_recordings_are_flagged_as_simulated(tmp_path):
    labels = RecordingLabels("h", "u", "test", simulated=True)
    base = write_recording(tmp_path / "s", make_echoes(), labels)
    recording = load_recording(base)
    assert recording.echo(0).flags == FrontEndFlag.REPLAYED | FrontEndFlag.SIMULATED
    assert "simulated" in RecordingSource(recording).info.description


def test_clipped_ears_are_flagged(tmp_path):
    echoes = make_echoes()
    echoes[0].samples[0, 5] = -32768
    echoes[1].samples[1, 5] = 32768 - 16  # the highest code of 12 bits
    recording = load_recording(write_recording(tmp_path / "c", echoes, LABELS))
    clipped = FrontEndFlag.LEFT_CLIPPED | FrontEndFlag.RIGHT_CLIPPED
    flags = [recording.echo(k).flags & clipped for k in range(3)]
    assert flags == [FrontEndFlag.LEFT_CLIPPED, FrontEndFlag.RIGHT_CLIPPED, FrontEndFlag.NONE]


def times_of(events):
    return [e.emission_time_s if isinstance(e, RawEcho) else e.time_s for e in events]


def test_source_merges_in_order_of_time_and_can_start_over(base):
    source = RecordingSource(load_recording(base))
    times = times_of(source.events())
    assert len(times) == 3 + 13
    assert times == sorted(times)
    assert times_of(source.events()) == times
    info = source.info
    assert (info.kind, info.n_pings, info.has_odometry) == ("recording", 3, True)
    assert info.mount == LABELS.mount
    source.close()


def test_start_offset(base):
    source = RecordingSource(load_recording(base), start_offset_s=0.11)
    times = times_of(source.events())
    assert min(times) >= 0.11
    assert source.info.n_pings == 2 == sum(isinstance(e, RawEcho) for e in source.events())
    for offset in (-0.1, 10.0, math.nan):
        with pytest.raises(SourceError, match="start_offset_s is"):
            RecordingSource(load_recording(base), offset)


def test_writer_refuses_unlike_echoes(tmp_path):
    gain = GainCurve(np.array([0.0]), np.array([3.0]))
    for odd in (make_echoes(1, n_samples=300), make_echoes(1, gain=gain), []):
        echoes = [*make_echoes(1), *odd] if odd else []
        with pytest.raises(InvalidEchoError, match="allowed"):
            write_recording(tmp_path / "odd", echoes, LABELS)


def test_open_source(base, tmp_path):
    source = open_source("recording", recording=base, start_offset_s=0.11)
    assert source.info.kind == "recording"
    head = load_head(ROOT / "config" / "heads" / "sparrow_52.yaml")
    world = ROOT / "config" / "worlds" / "demo_room.yaml"
    simulator = open_source("simulator", head=head, world_file=world)
    assert simulator.info.kind == "simulator"
    assert "SIMULATED" in simulator.info.description
    for kind, message in [
        ("recording", "recording is ''"),
        ("simulator", "needs a head and a world file"),
        ("hardware", "no source for hardware yet.*publish RawEcho"),
        ("telepathy", "source is 'telepathy'; allowed: one of simulator, recording, hardware"),
    ]:
        with pytest.raises(SourceError, match=message):
            open_source(kind)


def test_calibration_recording(tmp_path):
    head = load_head(ROOT / "config" / "heads" / "heron_180.yaml")
    recording = load_recording(write_calibration_recording(head, tmp_path / "grid", seed=5))
    assert (recording.n_pings, recording.category, recording.simulated) == (32, "calibration", True)
    places = []
    for ping in recording.truth["pings"]:
        (reflector,) = ping["reflectors"]
        assert reflector["scored"]
        places.append((reflector["range_m"], round(math.degrees(reflector["bearing_rad"]))))
    assert sorted({r for r, _ in places}) == [0.35, 0.7, 1.2, 2.0]
    assert sorted({b for _, b in places}) == [-35, -25, -15, -5, 5, 15, 25, 35]
    assert len(set(places)) == 32


@needs_echo_data
@pytest.mark.parametrize(
    "path", sorted(p for p in ECHO_DATA.glob("[sd]*s/*.wav")), ids=lambda p: p.stem
)
def test_shared_echo_data_reads_as_its_own_reader_does(path):
    recording = load_recording(path)
    _, frames = wavfile.read(path)
    side = json.loads(path.with_suffix(".json").read_text())
    assert recording.n_pings == len(side["pings"])
    n = side["samples_per_ping"]
    k = recording.n_pings - 1
    np.testing.assert_array_equal(recording.echo(k).samples.T, frames[k * n : (k + 1) * n])
    assert recording.echo(k).emission_time_s == side["pings"][k]["time_s"]
    clipped = [ping.get("saturated_samples", [0, 0]) for ping in side["truth"]["pings"]]
    for k, (left, right) in enumerate(clipped):
        flags = recording.echo(k).flags
        assert bool(flags & FrontEndFlag.LEFT_CLIPPED) == (left > 0)
        assert bool(flags & FrontEndFlag.RIGHT_CLIPPED) == (right > 0)
