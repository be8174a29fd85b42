"""The offline commands on small recordings of our own: values, files, words."""

import dataclasses
import math

import numpy as np
import pytest
import yaml
from offline_helpers import HEADS, PLACES, head_file, make_folder, read_csv, refused, run
from PIL import Image

from ros_echo_perception.core.mapping import MappingConfig
from ros_echo_perception.core.perception.config import ProcessingConfig
from ros_echo_perception.offline.cli import main
from ros_echo_perception.offline.detections_csv import COLUMNS
from ros_echo_perception.offline.inputs import open_input
from ros_echo_perception.offline.settings_file import load_settings

folder = pytest.fixture(make_folder, scope="module")


def test_detect_finds_the_poles_of_both_heads_in_one_call(folder, tmp_path):
    out = tmp_path / "new" / "detections.csv"
    result = run(
        "detect", *(folder / f"bench_{name}.wav" for name in HEADS),
        "--head", head_file(HEADS[1]), "--head", head_file(HEADS[0]), "--out", out,
    )  # fmt: skip
    assert out.read_text().splitlines()[0] == ",".join(COLUMNS)
    assert COLUMNS[:7] == (
        "scene", "ping", "range_m", "bearing_rad", "sigma_range_m", "sigma_bearing_rad",
        "confidence",
    )  # fmt: skip
    rows = read_csv(out)
    assert {row["scene"] for row in rows} == {f"bench_{name}" for name in HEADS}
    for name in HEADS:
        for ping in range(3):
            found = [
                (float(r["range_m"]), float(r["bearing_rad"]))
                for r in rows
                if r["scene"] == f"bench_{name}" and int(r["ping"]) == ping
            ]
            for range_m, bearing_rad in PLACES:
                nearest = min(found, key=lambda f, r=range_m: abs(f[0] - r))
                assert nearest[0] == pytest.approx(range_m, abs=0.01)
                assert nearest[1] == pytest.approx(bearing_rad, abs=math.radians(3.0))
    assert "ms/ping" in result.stdout
    assert "all" in result.stdout


def test_detect_saves_the_settings_it_used(folder, tmp_path):
    given = tmp_path / "mine.yaml"
    given.write_text("max_range_m: 1.2\n")
    out = tmp_path / "d.csv"
    recording = folder / f"bench_{HEADS[0]}.wav"
    run("detect", recording, "--head", head_file(HEADS[0]), "--config", given, "--out", out)
    assert max(float(row["range_m"]) for row in read_csv(out)) <= 1.2
    saved = tmp_path / "d.settings.yaml"
    assert yaml.safe_load(saved.read_text())["recordings"] == [str(recording)]
    again = load_settings(saved, "processing", ProcessingConfig)
    assert again == ProcessingConfig(max_range_m=1.2)
    run("detect", recording, "--head", head_file(HEADS[0]), "--config", saved, "--out",
        tmp_path / "e.csv")  # fmt: skip
    assert (tmp_path / "e.csv").read_text() == out.read_text()


def test_every_command_has_an_example():
    for name, command in main.commands.items():
        text = run(name, "--help").stdout
        assert "Example:" in text
        assert f"python -m ros_echo_perception {name}" in text, name
        assert all(p.help for p in command.params if p.param_type_name == "option"), name


def test_show_draws_a_ping_and_lists_its_detections(folder, tmp_path):
    out = tmp_path / "ping.png"
    arguments = ("show", folder / f"bench_{HEADS[0]}.wav", "--head", head_file(HEADS[0]))
    result = run(*arguments, "--ping", 2, "--out", out)
    with Image.open(out) as image:
        assert image.size[0] > image.size[1] > 500
    ranges = [
        float(line.split("│")[2]) for line in result.stdout.splitlines() if line.startswith("│")
    ]
    for range_m, _ in PLACES:
        assert min(abs(r - range_m) for r in ranges) < 0.01
    assert "--ping is 3; allowed: 0 to 2" in refused(*arguments, "--ping", 3, "--out", out)


def test_simulate_is_deterministic_and_within_the_path(folder, tmp_path):
    arguments = ("simulate", "--head", head_file(HEADS[0]))
    run(*arguments, "--seconds", 0.52, "--out", tmp_path / "a.wav")
    short, long = open_input(tmp_path / "a.wav"), open_input(folder / "drive.wav")
    assert (short.n_pings, long.n_pings) == (13, 32)  # 25 a second
    np.testing.assert_array_equal(short.echo(7).samples, long.echo(7).samples)
    run(*arguments, "--seconds", 0.52, "--seed", 5, "--out", tmp_path / "b.wav")
    assert np.any(open_input(tmp_path / "b.wav").echo(7).samples != short.echo(7).samples)
    line = refused(*arguments, "--seconds", 1e4, "--out", tmp_path / "c.wav")
    assert "--seconds is 10000.0; allowed: 0.04 to" in line


def test_simulate_takes_the_drivers_parameter_file(tmp_path):
    path = tmp_path / "driver.yaml"
    path.write_text(
        "driver:\n  ros__parameters:\n    source: simulator\n    simulator:\n      adc_bits: 10\n"
    )
    run("simulate", "--head", head_file(HEADS[0]), "--seconds", 0.2, "--config", path, "--out",
        tmp_path / "a.wav")  # fmt: skip
    assert np.all(open_input(tmp_path / "a.wav").echo(0).samples % 64 == 0)  # 16 - 10 bits
    path.write_text("adc_bits: 99\n")
    line = refused("simulate", "--head", head_file(HEADS[0]), "--config", path, "--out",
                   tmp_path / "b.wav")  # fmt: skip
    assert f"{path}: adc_bits is 99; allowed: 4 to 16" in line


def test_benchmark_prints_medians_ratio_and_steps(folder):
    result = run("benchmark", "--head", head_file(HEADS[0]), "--pings", 5, "--recording",
                 folder / f"bench_{HEADS[0]}.wav")  # fmt: skip
    lines = [line for line in result.stdout.splitlines() if line.startswith("│")]
    whole = {cells[1].strip(): cells for cells in (line.split("│") for line in lines[:5])}
    assert set(whole) == {"0 echoes", "1 echoes", "4 echoes", "8 echoes", f"bench_{HEADS[0]}"}
    for cells in whole.values():
        median, high, highest, baseline, ratio = (float(c) for c in cells[4:9])
        assert 0.0 < median <= high <= highest
        assert ratio == pytest.approx(median / baseline, rel=0.02)
    assert float(whole["4 echoes"][3]) >= 3.0  # found per ping
    assert any("joint fit of both ears" in line for line in lines)


def test_settings_of_every_field_survive_the_file(tmp_path):
    from ros_echo_perception.offline.settings_file import save_used

    config = dataclasses.replace(MappingConfig(), width_m=12.0, silence_policy="clear_to_range")
    save_used(tmp_path / "s.yaml", "map", {"mapping": config}, {})
    assert load_settings(tmp_path / "s.yaml", "mapping", MappingConfig) == config
