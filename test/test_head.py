"""Head files: read, written, refused."""

import dataclasses
import math

import pytest
import yaml
from echo_data import ECHO_DATA, ROOT, needs_echo_data

from ros_echo_perception.core.errors import FileFormatError
from ros_echo_perception.core.head import (
    head_from_mapping,
    head_to_mapping,
    load_head,
    save_head,
)

HEADS = [ROOT / "config" / "heads" / f"{name}.yaml" for name in ("heron_180", "sparrow_52")]
UNIT = ROOT / "config" / "heads" / "sparrow_52_unit1.yaml"


@pytest.mark.parametrize("path", HEADS, ids=lambda path: path.stem)
def test_shipped_heads(path):
    head = load_head(path)
    assert head.name == path.stem
    assert not head.calibrated
    # REP-103: y to the left; the origin is midway between the receivers.
    assert head.left.position_m[1] > 0.0 > head.right.position_m[1]
    for left, right in zip(head.left.position_m, head.right.position_m, strict=True):
        assert left + right == pytest.approx(0.0 if left != right else 2 * left)
    assert head.left.yaw_rad > 0.0 > head.right.yaw_rad
    # Trade facts (common practice): bandwidth about 1 to 2 kHz, beam around 60 degrees.
    assert 1e3 <= head.transmitter.half_power_bandwidth_hz <= 3e3
    assert math.radians(45) <= head.transmitter.half_power_beam_width_rad <= math.radians(75)


def test_shipped_heads_have_different_baselines():
    baselines = sorted(load_head(path).baseline_m for path in HEADS)
    assert baselines == pytest.approx([0.052, 0.180])


def test_calibrated_sample_is_a_unit_of_its_head():
    unit, nominal = load_head(UNIT), load_head(HEADS[1])
    assert unit.calibrated
    assert unit.name == nominal.name
    assert 5e-6 < unit.latency_s < 60e-6
    assert abs(unit.baseline_m - nominal.baseline_m) < 2e-3


def test_save_and_load(tmp_path):
    head = dataclasses.replace(
        load_head(HEADS[0]),
        gain_mismatch_db=-0.7,
        latency_s=3.2e-5,
        phase_mismatch_rad=0.2,
        calibration={"recording": "grid", "sigma": {"latency_s": 1e-6}},
    )
    save_head(head, tmp_path / "unit.yaml")
    assert load_head(tmp_path / "unit.yaml") == head
    assert head.calibrated


@needs_echo_data
def test_heads_of_the_shared_echo_data():
    head_a = load_head(ECHO_DATA / "heads" / "head_a.yaml")
    assert head_a.baseline_m == pytest.approx(0.06)
    assert head_a.left.yaw_rad == pytest.approx(math.radians(30), abs=1e-5)
    assert load_head(ECHO_DATA / "heads" / "head_b.yaml").drive_waveform == "sine"


DELETE = object()


@pytest.mark.parametrize(
    ("where", "value", "message"),
    [
        (("name",), DELETE, "name is 'missing'; allowed: a text"),
        (("name",), 7, "name is 7"),
        (("carrier_hz",), 0.0, "carrier_hz is 0.0; allowed: a number from 1000"),
        (("carrier_hz",), math.nan, "carrier_hz is nan"),
        (("carrier_hz",), True, "carrier_hz is True"),
        (("sample_rate_hz",), 0, "sample_rate_hz is 0; allowed: a number from 80000"),
        (("sample_rate_hz",), "fast", "sample_rate_hz is 'fast'"),
        (("drive_waveform",), "saw", "drive_waveform is 'saw'; allowed: one of square, sine"),
        (("receivers",), DELETE, "receivers is 'missing'"),
        (("receivers",), [1], "receivers is"),
        (("receivers", "left"), DELETE, "receivers.left is 'missing'"),
        (("receivers", "left", "yaw_rad"), 3.0, "receivers.left.yaw_rad is 3.0"),
        (("receivers", "right", "position_m"), [0, 1], "receivers.right.position_m is"),
        (("receivers", "right", "position_m"), [0, math.inf, 0], "position_m is"),
        (("transmitter", "resonance_hz"), -4e4, "transmitter.resonance_hz is -40000.0"),
        (("transmitter", "half_power_beam_width_rad"), 60, "half_power_beam_width_rad is 60"),
        (("gain_mismatch_db",), math.inf, "gain_mismatch_db is inf"),
        (("latency_s",), 1.0, "latency_s is 1.0; allowed: a number from -0.01 to 0.01"),
        (("calibration",), "today", "calibration is 'today'"),
        (("calibration", "model_error"), "small", "calibration.model_error is 'small'"),
        (("calibration", "level_error"), -0.1, "calibration.level_error is -0.1"),
        (("calibration", "burst_cycles"), 3.0, "calibration.burst_cycles is 3.0"),
        (("calibration", "sigma"), [1], "calibration.sigma is [1]"),
        (("calibration", "direct_pulse"), 1, "calibration.direct_pulse is 1"),
        (("calibration", "direct_pulse", 0, "step_s"), 0.0, "direct_pulse[0].step_s is 0.0"),
        (("calibration", "direct_pulse", 0, "left_real"), [0.1], "direct_pulse[0].left_real is"),
        (("calibration", "direct_pulse", 0, "right_imag"), [0.1] * 5, "[0].right_imag is"),
    ],
)
def test_malformed_heads(tmp_path, where, value, message):
    data = head_to_mapping(load_head(UNIT if len(where) > 1 and where[0] == "calibration"
                                     else HEADS[0]))  # fmt: skip
    section = data
    for name in where[:-1]:
        section = section[name]
    if value is DELETE:
        del section[where[-1]]
    else:
        section[where[-1]] = value
    path = tmp_path / "broken.yaml"
    path.write_text(yaml.safe_dump(data))
    with pytest.raises(FileFormatError) as error:
        load_head(path)
    assert message in str(error.value)
    assert str(path) in str(error.value)


@pytest.mark.parametrize("text", ["", "just words", "[1, 2]", "a: [", "\x00", "a: b: c"])
def test_files_that_are_no_heads(tmp_path, text):
    path = tmp_path / "broken.yaml"
    path.write_text(text)
    with pytest.raises(FileFormatError, match=r"broken\.yaml"):
        load_head(path)


def test_missing_and_binary_files(tmp_path):
    with pytest.raises(FileFormatError, match=r"nowhere\.yaml.*cannot be read"):
        load_head(tmp_path / "nowhere.yaml")
    (tmp_path / "binary.yaml").write_bytes(b"\xff\xfe\x00\x80")
    with pytest.raises(FileFormatError, match=r"binary\.yaml"):
        load_head(tmp_path / "binary.yaml")
    with pytest.raises(FileFormatError, match="cannot be read"):
        load_head(tmp_path)


def test_mapping_is_not_modified():
    data = head_to_mapping(load_head(HEADS[0]))
    before = yaml.safe_dump(data)
    head_from_mapping(data)
    assert yaml.safe_dump(data) == before
