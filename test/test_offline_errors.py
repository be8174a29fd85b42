"""What the offline commands refuse: one line with file, field, value and range; exit codes."""

import pytest
import yaml
from offline_helpers import HEADS, head_file, make_copied, make_folder, read_csv, refused, run

from ros_echo_perception.core.head import load_head, save_head
from ros_echo_perception.core.perception.config import ProcessingConfig
from ros_echo_perception.offline.options import NOTHING_EXIT_CODE
from ros_echo_perception.offline.resources import shipped
from ros_echo_perception.offline.settings_file import load_settings

folder = pytest.fixture(make_folder, scope="module")
copied = pytest.fixture(make_copied)


def test_config_of_the_node_serves_offline_and_refuses_misspelt_names(tmp_path):
    node_file = shipped("config/processing.yaml")
    assert load_settings(node_file, "processing", ProcessingConfig) == ProcessingConfig()
    path = tmp_path / "processing.yaml"
    path.write_text(
        "processing:\n  ros__parameters:\n    max_rnage_m: 2.0\n    head_file: x.yaml\n"
    )
    line = refused("detect", "x.wav", "--head", "x.yaml", "--config", path, "--out", "x.csv")
    assert f"{path}: setting is 'max_rnage_m'" in line
    assert "max_range_m" in line


@pytest.mark.parametrize(
    ("text", "words"),
    [
        ("[1, 2]", "content is [1, 2]; allowed: a mapping"),
        ("a: [", "is not YAML"),
        ("max_range_m: 99.0", "max_range_m is 99.0; allowed: 0.3 to 30 m"),
        ("max_range_m: far", "max_range_m is 'far'; allowed: a value of type float"),
    ],
)
def test_bad_settings_name_file_value_and_range(folder, tmp_path, text, words):
    path = tmp_path / "bad.yaml"
    path.write_text(text)
    line = refused("detect", folder / f"bench_{HEADS[0]}.wav", "--head", head_file(HEADS[0]),
                   "--config", path, "--out", tmp_path / "x.csv")  # fmt: skip
    assert line.startswith(f"error: {path}: ")
    assert words in line


def test_a_recording_of_another_head_is_refused(folder, tmp_path):
    line = refused("detect", folder / f"bench_{HEADS[0]}.wav", "--head", head_file(HEADS[1]),
                   "--out", tmp_path / "x.csv")  # fmt: skip
    assert f"head is '{HEADS[0]}'; allowed: {HEADS[1]}." in line
    assert f"bench_{HEADS[0]}" in line
    assert not (tmp_path / "x.csv").exists()


def test_two_head_files_of_one_name_are_refused(folder, tmp_path):
    copy = tmp_path / "copy.yaml"
    save_head(load_head(head_file(HEADS[0])), copy)
    line = refused("detect", folder / f"bench_{HEADS[0]}.wav", "--head", head_file(HEADS[0]),
                   "--head", copy, "--out", tmp_path / "x.csv")  # fmt: skip
    assert f"{copy}: name is '{HEADS[0]}'" in line


@pytest.mark.parametrize(
    ("field", "value", "words"),
    [
        ("sample_rate_hz", 0, "sample_rate_hz is 0; allowed: a number from"),
        ("samples_per_ping", "many", "samples_per_ping is 'many'"),
        ("pings", [], "pings"),
        ("format", "other/9", "format is 'other/9'; allowed: one of two_ear_echo/1"),
    ],
)
def test_bad_sidecars_name_file_field_and_value(copied, tmp_path, field, value, words):
    wav, side, save = copied
    side[field] = value
    save()
    line = refused("detect", wav, "--head", head_file(HEADS[0]), "--out", tmp_path / "x.csv")
    assert str(wav.with_suffix(".json")) in line
    assert words in line


def test_damaged_and_missing_files_are_named(copied, tmp_path):
    wav, _, _ = copied
    arguments = ("--head", head_file(HEADS[0]), "--out", tmp_path / "x.csv")
    missing = tmp_path / "nowhere.wav"
    assert str(missing.with_suffix(".json")) in refused("detect", missing, *arguments)
    wav.write_bytes(b"RIFF")
    assert f"{wav}: is not a readable WAV file" in refused("detect", wav, *arguments)
    wav.with_suffix(".json").write_text("{")
    assert "is not JSON" in refused("detect", wav, *arguments)
    line = refused("detect", wav, "--head", tmp_path / "no_head.yaml", "--out", tmp_path / "x.csv")
    assert "no_head.yaml: cannot be read" in line


def test_bad_head_files_name_the_field(folder, tmp_path):
    data = yaml.safe_load(head_file(HEADS[0]).read_text())
    data["receivers"]["left"]["yaw_rad"] = "askew"
    path = tmp_path / "head.yaml"
    path.write_text(yaml.safe_dump(data))
    line = refused("detect", folder / f"bench_{HEADS[0]}.wav", "--head", path, "--out",
                   tmp_path / "x.csv")  # fmt: skip
    assert f"{path}: receivers.left.yaw_rad is 'askew'" in line


def test_wrong_use_is_not_a_traceback():
    assert run("detect", code=2).stderr.startswith("Usage:")
    assert "No such command" in run("no-such-command", code=2).stderr


def test_recording_without_truth_is_processed_too(copied, tmp_path):
    wav, side, save = copied
    del side["truth"]
    save()
    out = tmp_path / "d.csv"
    run("detect", wav, "--head", head_file(HEADS[0]), "--out", out)
    assert len(read_csv(out)) >= 6
    run("show", wav, "--head", head_file(HEADS[0]), "--out", tmp_path / "p.png")


def test_nothing_to_process_is_a_failure(copied, tmp_path):
    wav, side, save = copied
    for ping in side["truth"]["pings"]:
        ping["reflectors"] = []
    save()
    result = run("calibrate", wav, "--head", head_file(HEADS[0]), "--out", tmp_path / "h.yaml",
                 code=NOTHING_EXIT_CODE)  # fmt: skip
    assert "nothing processed" in result.stderr
    assert not (tmp_path / "h.yaml").exists()
