"""The command ``calibrate``: a simulated unit's errors are found, with places from either side."""

import csv
import json
import math
import shutil

import pytest
from offline_helpers import HEADS, head_file, refused, run

from ros_echo_perception.core.head import load_head
from ros_echo_perception.offline.calibrate import places_of, read_places
from ros_echo_perception.offline.inputs import open_input


@pytest.fixture(scope="module")
def pole(tmp_path_factory):
    """A recording of a unit that differs from its data sheet, and its calibrated head file."""
    folder = tmp_path_factory.mktemp("pole")
    head = head_file(HEADS[0])
    run("simulate-calibration", "--head", head, "--seed", 4, "--out", folder / "pole.wav")
    result = run("calibrate", folder / "pole.wav", "--head", head, "--out", folder / "unit.yaml")
    return folder, result.stdout


def test_latency_gain_and_ear_distance_are_found(pole):
    folder, _ = pole
    unit = json.loads((folder / "pole.json").read_text())["truth"]["unit"]
    nominal, found = load_head(head_file(HEADS[0])), load_head(folder / "unit.yaml")
    assert found.name == nominal.name
    assert found.calibrated
    assert unit["drive_latency_s"] >= 5e-6
    assert found.latency_s == pytest.approx(unit["drive_latency_s"], abs=5e-6)
    baseline_m = math.dist(
        unit["left_receiver"]["position_m"], unit["right_receiver"]["position_m"]
    )
    assert found.baseline_m == pytest.approx(baseline_m, abs=1e-4)
    assert abs(found.baseline_m - baseline_m) < abs(nominal.baseline_m - baseline_m)


def test_held_back_pings_are_better_than_nominal(pole):
    _, text = pole
    rows = {
        cells[1].strip(): (float(cells[3]), float(cells[4]))
        for cells in (line.split("│") for line in text.splitlines() if line.count("│") == 5)
    }
    for error in ("range, mean", "range, rms"):
        nominal, calibrated = rows[error]
        assert abs(calibrated) < abs(nominal)
    assert rows["range, rms"][1] < 2.0  # mm
    assert rows["bearing, rms"][1] < 1.0  # deg


def test_places_from_a_table_give_the_same_head(pole, tmp_path):
    folder, _ = pole
    for name in ("pole.wav", "pole.json"):
        shutil.copy(folder / name, tmp_path / name)
    places = places_of(open_input(folder / "pole.wav"))
    side = json.loads((tmp_path / "pole.json").read_text())
    del side["truth"]
    (tmp_path / "pole.json").write_text(json.dumps(side))
    with (tmp_path / "places.csv").open("w", newline="") as file:
        writer = csv.writer(file)
        writer.writerow(["ping", "range_m", "bearing_rad"])
        writer.writerows([k, *place] for k, place in places.items())
    arguments = ("calibrate", tmp_path / "pole.wav", "--head", head_file(HEADS[0]), "--out",
                 tmp_path / "unit.yaml")  # fmt: skip
    assert "truth.pings is 'missing'" in refused(*arguments)
    run(*arguments, "--places", tmp_path / "places.csv")
    assert (tmp_path / "unit.yaml").read_text() == (folder / "unit.yaml").read_text()


@pytest.mark.parametrize(
    ("text", "words"),
    [
        ("ping,range_m\n0,1.0\n", "columns is"),
        ("ping,range_m,bearing_rad\n0,far,0.1\n", "line 2, range_m is 'far'"),
        ("ping,range_m,bearing_rad\n0,1.0,0.1\n0,1.0,0.2\n", "line 3, ping is '0'"),
        ("ping,range_m,bearing_rad\n0,-1.0,0.1\n", "line 2, range_m is '-1.0'"),
        ("ping,range_m,bearing_rad\n0,1.0,20\n", "line 2, bearing_rad is '20'"),
        ("ping,range_m,bearing_rad\n99,1.0,0.1\n", "ping is 99; allowed: 0 to 31"),
    ],
)
def test_bad_places_are_named(pole, tmp_path, text, words):
    path = tmp_path / "places.csv"
    path.write_text(text)
    line = refused("calibrate", pole[0] / "pole.wav", "--head", head_file(HEADS[0]), "--places",
                   path, "--out", tmp_path / "h.yaml")  # fmt: skip
    assert f"{path}: {words}" in line
    assert not (tmp_path / "h.yaml").exists()


def test_too_few_places_cannot_determine_a_head(pole, tmp_path):
    path = tmp_path / "places.csv"
    path.write_text("ping,range_m,bearing_rad\n0,0.35,-0.611\n1,0.35,-0.436\n")
    assert read_places(path) == {0: (0.35, -0.611), 1: (0.35, -0.436)}
    line = refused("calibrate", pole[0] / "pole.wav", "--head", head_file(HEADS[0]), "--places",
                   path, "--out", tmp_path / "h.yaml")  # fmt: skip
    assert "pings with a clear echo at the stated place is 2; allowed: 8 or more" in line
