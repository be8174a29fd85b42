"""Every way in which the files of a recording can be broken."""

import json
import math

import numpy as np
import pytest
from scipy.io import wavfile
from small_recording import LABELS, make_echoes, make_odometry

from ros_echo_perception.core.errors import FileFormatError
from ros_echo_perception.sources.recording import load_recording
from ros_echo_perception.sources.recording_writer import write_recording


@pytest.fixture
def base(tmp_path):
    return write_recording(tmp_path / "small", make_echoes(), LABELS, make_odometry())


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
