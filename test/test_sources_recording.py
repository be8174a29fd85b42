"""Recordings: written, read back, played; and every way in which files can be broken."""

import json
import math

import numpy as np
import pytest
from echo_data import ECHO_DATA, ROOT, needs_echo_data
from scipy.io import wavfile

from ros_echo_perception.core.errors import FileFormatError, InvalidEchoError, SourceError
from ros_echo_perception.core.head import load_head
from ros_echo_perception.core.types import (
    FrontEndFlag,
    GainCurve,
    OdometrySample,
    Pose2,
    RawEcho,
)
from ros_echo_perception.sources.factory import open_source
from ros_echo_perception.sources.recording import RecordingSource, load_recording
from ros_echo_perception.sources.recording_writer import RecordingLabels, write_recording
from ros_echo_perception.sources.simulated_recording import write_calibration_recording

LABELS = RecordingLabels("sparrow_52", "unit_7", "test", adc_bits=12, mount=Pose2(0.1, 0.0, 0.2))


def make_echoes(n=3, gain=None, n_samples=256):
    rng = np.random.default_rng(4)
    return [
        RawEcho(
            samples=(16 * rng.integers(-500, 500, (2, n_samples))).astype(np.int16),
            sample_rate_hz=200e3,
            carrier_hz=40e3,
            burst_cycles=3.0,
            emission_time_s=0.1 + 0.05 * k,
            first_sample_offset_s=-40 / 200e3,
            temperature_c=20.5 if k else math.nan,
            relative_humidity=0.5,
            sequence=k,
            gain=gain,
        )
        for k in range(n)
    ]


def make_odometry():
    return [
        OdometrySample(0.02 * i, Pose2(0.01 * i, -0.02 * i, 0.1 * i), 0.5, 5.0) for i in range(13)
    ]


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


DELETE = object()


@pytest.mark.parametrize(
    ("where", "value", "message"),
    [
        (("format",), "two_ear_echo/9", "format is 'two_ear_echo/9'"),
        (("format",), DELETE, "format is 'missing'"),
        (("channels",), ["right", "left"], "channels is ['right', 'left']"),
        (("channels",), DELETE, "channels is 'missing'"),
        (("sample_rate_hz",), 0, "sample_rate_hz is 0; allowed: a number from 80001"),
        (("sample_rate_hz",), math.nan, "sample_rate_hz is nan"),
        (("sample_rate_hz",), DELETE, "sample_rate_hz is 'missing'"),
        (("sample_rate_hz",), 192000, "sample rate is 200000.0; allowed: 192000"),
        (("carrier_hz",), "40k", "carrier_hz is '40k'"),
        (("samples_per_ping",), 255, "number of frames is 768; allowed: 3 pings x 255"),
        (("samples_per_ping",), 256.5, "samples_per_ping is 256.5"),
        (("samples_per_ping",), 0, "samples_per_ping is 0"),
        (("adc_bits",), 24, "adc_bits is 24; allowed: a whole number from 2 to 16"),
        (("stored_full_scale",), 0, "stored_full_scale is 0"),
        (("head",), None, "head is None"),
        (("pings",), [], "pings is []"),
        (("pings",), {}, "pings is {}"),
        (("pings", 1), 5, "pings[1] is 5"),
        (("pings", 1, "time_s"), DELETE, "pings[1].time_s is 'missing'"),
        (("pings", 2, "time_s"), 0.1, "pings[2].time_s is 0.1; allowed: more than 0.15"),
        (("pings", 0, "time_s"), math.inf, "pings[0].time_s is inf"),
        (("pings", 0, "emission_sample"), 256, "pings[0].emission_sample is 256"),
        (("pings", 0, "burst_cycles"), 0, "pings[0].burst_cycles is 0"),
        (("pings", 0, "relative_humidity"), 45, "pings[0].relative_humidity is 45"),
        (("gain_curve",), 5, "gain_curve is 5"),
        (("gain_curve",), {"time_s": [0, 0], "gain_db": [1, 2]}, "gain_curve.time_s is"),
        (("gain_curve",), {"time_s": [0], "gain_db": [1, 2]}, "gain_curve.gain_db is [1, 2]"),
        (("gain_curve",), {"time_s": []}, "gain_curve.gain_db is 'missing'"),
        (("mount_on_robot", "x_m"), "front", "mount_on_robot.x_m is 'front'"),
        (("odometry_file",), "../../etc/passwd", "odometry_file is '../../etc/passwd'"),
        (("odometry_file",), "none.csv", "none.csv: cannot be read"),
        (("truth",), [], "truth is []"),
    ],
)
def test_malformed_sidecars(base, where, value, message):
    path = base.with_suffix(".json")
    data = json.loads(path.read_text())
    section = data
    for name in where[:-1]:
        section = section[name]
    if value is DELETE:
        del section[where[-1]]
    else:
        section[where[-1]] = value
    path.write_text(json.dumps(data))
    with pytest.raises(FileFormatError) as error:
        load_recording(base)
    assert message in str(error.value)
    assert str(base.parent) in str(error.value)


@pytest.mark.parametrize("text", ["", "{", "[1]", "null", '"text"', "{}", "[" * 100000])
def test_files_that_are_no_sidecars(base, text):
    base.with_suffix(".json").write_text(text)
    with pytest.raises(FileFormatError, match=r"small\.json"):
        load_recording(base)


@pytest.mark.parametrize(
    ("samples", "message"),
    [
        (np.zeros(768, np.int16), "number of channels is 1; allowed: 2"),
        (np.zeros((768, 3), np.int16), "number of channels is 3"),
        (np.zeros((768, 2), np.float32), "sample type is 'float32'; allowed: 16-bit"),
        (np.zeros((768, 2), np.uint8), "sample type is 'uint8'"),
        (np.zeros((767, 2), np.int16), "number of frames is 767"),
        (np.zeros((0, 2), np.int16), "small.wav"),
    ],
)
def test_malformed_wavs(base, samples, message):
    wavfile.write(base.with_suffix(".wav"), 200000, samples)
    with pytest.raises(FileFormatError) as error:
        load_recording(base)
    assert message in str(error.value)


@pytest.mark.parametrize("length", [0, 3, 20, 36, 43, 45, 1001])
def test_truncated_wavs(base, length):
    path = base.with_suffix(".wav")
    path.write_bytes(path.read_bytes()[:length])
    with pytest.raises(FileFormatError, match=r"small\.wav"):
        load_recording(base)


def test_damaged_wav_headers(base):
    path = base.with_suffix(".wav")
    whole = path.read_bytes()
    rng = np.random.default_rng(1)
    refused = 0
    for _ in range(200):
        damaged = bytearray(whole)
        damaged[rng.integers(44)] = rng.integers(256)
        path.write_bytes(damaged)
        try:
            assert load_recording(base).samples.shape == (3, 2, 256)
        except FileFormatError:
            refused += 1
    assert refused > 50


def test_missing_wav(base):
    base.with_suffix(".wav").unlink()
    with pytest.raises(FileFormatError, match=r"small\.wav: cannot be read"):
        load_recording(base)


@pytest.mark.parametrize(
    ("text", "message"),
    [
        ("", "columns is None"),
        ("t,x,y\n0,0,0\n", "columns is ['t', 'x', 'y']"),
        ("t,x,y,yaw,vx,wz\n", "number of rows is 0"),
        ("t,x,y,yaw,vx,wz\n0,0,0,0,0,nan\n", "line 2, wz is 'nan'"),
        ("t,x,y,yaw,vx,wz\n0,0,0,0,0\n", "line 2, wz is None"),
        ("t,x,y,yaw,vx,wz\n0,0,0,0,0,0\n0,0,0,0,0,0\n", "line 3, t is 0.0; allowed: more"),
        ("t,x,y,yaw,vx,wz\n0,0,here,0,0,0\n", "line 2, y is 'here'"),
    ],
)
def test_malformed_odometry(base, text, message):
    path = base.parent / "small_odometry.csv"
    path.write_text(text)
    with pytest.raises(FileFormatError) as error:
        load_recording(base)
    assert message in str(error.value)
    assert "small_odometry.csv" in str(error.value)


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
