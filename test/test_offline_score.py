"""The command ``score`` and its tables; the open recordings too, where they are at hand."""

import json
import os
from pathlib import Path

import pytest
from offline_helpers import HEADS, head_file, refused, run

from ros_echo_perception.core.errors import FileFormatError
from ros_echo_perception.core.head import load_head
from ros_echo_perception.offline.marked_block import replace_block
from ros_echo_perception.offline.results_table import BEGIN, END, grid, markdown
from ros_echo_perception.offline.score import _module

ROOT = Path(__file__).resolve().parent.parent
DATA = Path(os.environ.get("ECHO_DATA_DIR", ROOT.parent / "shared" / "echo_data"))
TALLY = {
    "pings": 12,
    "targets": 10,
    "precision": 0.9,
    "recall": 0.8,
    "f1": 0.847,
    "false_per_ping": 0.25,
    "range_rmse_m": 0.0021,
    "bearing_rmse_rad": 0.0349,
}
REPORT = {
    "calibrated": True,
    "ms_per_ping": [4.0, 5.0, 6.0],
    "detections": {
        "categories": {"pair_close": TALLY, "empty": {**TALLY, "precision": None}},
        "overall": {**TALLY, "range_within_1_sigma": 0.66, "range_within_2_sigma": 0.93},
        "recall_by_snr_db": {"10-15": {"share": None, "n": 0}, "15-20": {"share": 0.5, "n": 4}},
        "single_error_over_envelope_bound_by_snr_db": {"15-20": {"ratio": 1.234, "n": 3}},
        "bearing_range_match_by_head_and_snr_db": {
            "single": {"head_a": {"15-20": {"rmse_rad": 0.1, "median_abs_rad": 0.01, "n": 3}}}
        },
        "pair_close_both_found_by_spacing_sigma": {"0-1": {"share": 0.75, "n": 4}},
        "equal_range": {"both_found": 0.5, "phantom_in_the_middle": 0.125, "pings": 8},
    },
    "maps": [
        {
            "drive": "room",
            "occupied_cells": 321,
            "precision": 0.7,
            "recall_echoing": 0.6,
            "recall_in_beam": 0.4,
            "f1_echoing": 0.65,
            "wrongly_free_echoing": 0.004,
            "phantom_cells_per_m2": 1.5,
            "drift_end_m": 0.07,
        }
    ],
}
SCORER = """
import csv, json, pathlib
def read_detections(path):
    return list(csv.DictReader(open(path)))
def score(data, rows, only=None):
    pathlib.Path(data, "seen.json").write_text(json.dumps([len(rows), only]))
    return json.loads({report!r})
"""
MAP_SCORER = """
import json, numpy
def load_map(path):
    return path, numpy.load(path)["data"]
def score(drive, path, data):
    return {{**json.loads({report!r}), "drive": drive, "occupied_cells": int((data >= 65).sum())}}
"""


def rows_of(text):
    return {
        cells[1].strip(): [c.strip() for c in cells[2:-1]]
        for cells in (line.split("|") for line in text.splitlines() if line.startswith("|"))
    }


def test_tables_have_the_values_of_the_report():
    rows = rows_of(markdown(REPORT))
    assert rows["pair close"] == ["12", "10", "0.90", "0.80", "0.85", "0.25", "2.1", "2.00"]
    assert rows["empty"][2] == "-"
    assert rows["found"] == ["-", "0.50"]
    assert rows["range error over the Cramér-Rao bound (single echoes)"] == ["-", "1.23"]
    assert rows["head_a: rms / median, deg"] == ["5.73 / 0.57"]
    assert rows["0-1 pulse sigmas apart"] == ["0.75"]
    assert rows["at one range: a phantom in the middle"] == ["0.12"]
    assert rows["room"] == ["321", "0.70", "0.60", "0.40", "0.65", "0.004", "1.50", "0.07"]
    last = markdown(REPORT).splitlines()[-1]
    assert "range within 1 / 2 sigma: 0.66 / 0.93" in last
    assert "median / 95 %: 5.0 / 5.9 ms" in last


def test_every_row_is_as_wide_as_its_header():
    for block in markdown(REPORT).split("\n\n")[:-1]:
        assert len({line.count("|") for line in block.splitlines()}) == 1
    assert grid(["a", "b"], []).splitlines()[1] == "|:--|--:|"


def test_only_the_block_between_the_markers_is_replaced(tmp_path):
    path = tmp_path / "README.md"
    path.write_text(f"above\n{BEGIN}\nold\n{END}\nbelow\n")
    replace_block(path, BEGIN, END, "new")
    replace_block(path, BEGIN, END, "newer")
    assert path.read_text() == f"above\n{BEGIN}\nnewer\n{END}\nbelow\n"
    path.write_text(f"{END} {BEGIN}")
    with pytest.raises(FileFormatError, match="README.md: lacks"):
        replace_block(path, BEGIN, END, "new")
    assert path.read_text() == f"{END} {BEGIN}"


@pytest.fixture(scope="module")
def data(tmp_path_factory):
    """A small data set of our own: one unit, its calibration, a scene and a drive."""
    folder = tmp_path_factory.mktemp("data")
    for part in ("heads", "scenes", "drives"):
        (folder / part).mkdir()
    head = head_file(HEADS[0])
    (folder / "heads" / head.name).write_bytes(head.read_bytes())
    run("simulate-calibration", "--head", head, "--out", folder / "scenes" / "pole.wav")
    for kind, name in (("scenes", "scene"), ("drives", "room")):
        run("simulate", "--head", head, "--seconds", 0.52, "--out", folder / kind / f"{name}.wav")
    report = json.dumps(REPORT["detections"])
    (folder / "score_detections.py").write_text(SCORER.format(report=report))
    (folder / "score_map.py").write_text(MAP_SCORER.format(report=json.dumps(REPORT["maps"][0])))
    return folder


def test_score_runs_the_whole_job_and_updates_the_readme(data, tmp_path):
    readme = tmp_path / "README.md"
    readme.write_text(f"{BEGIN}\n{END}\n")
    work = tmp_path / "work"
    result = run("score", "--data", data, "--work", work, "--update", readme)
    n_rows, judged = json.loads((data / "scenes" / "seen.json").read_text())
    assert judged == ["scene"]  # the calibration recording is processed but not judged
    assert n_rows == len((work / "detections.csv").read_text().splitlines()) - 1 > 13 + 32 - 5
    unit = f"{HEADS[0]}_simulated_1"
    assert load_head(work / f"{unit}.yaml").calibrated
    report = json.loads((work / "report.json").read_text())
    assert report["maps"][0]["drive"] == str(data / "drives" / "room")
    assert len(report["ms_per_ping"]) == 13 + 32
    assert rows_of(result.stdout)["pair close"][0] == "12"
    assert rows_of(readme.read_text()) == rows_of(result.stdout)


def test_an_incomplete_data_set_is_refused(tmp_path):
    (tmp_path / "heads").mkdir()
    line = refused("score", "--data", tmp_path, "--work", tmp_path / "work")
    assert f"{tmp_path}: data folder is 'incomplete'; allowed: a folder with scenes" in line


@pytest.mark.skipif(not (DATA / "scenes").exists(), reason="the open recordings are not here")
def test_open_recordings_of_single_echoes(tmp_path):
    """Judged by the scorer that comes with the data, heads as their maker printed them."""
    scenes = ("single_a_wall", "single_b_near")
    out = tmp_path / "detections.csv"
    run("detect", *(DATA / "scenes" / f"{name}.wav" for name in scenes),
        "--head", DATA / "heads" / "head_a.yaml", "--head", DATA / "heads" / "head_b.yaml",
        "--out", out)  # fmt: skip
    scorer = _module(DATA / "score_detections.py")
    report = scorer.score(str(DATA / "scenes"), scorer.read_detections(str(out)), list(scenes))
    assert report["overall"]["targets"] >= 20
    assert report["overall"]["recall"] >= 0.95
    assert report["overall"]["false_per_ping"] <= 0.5
