"""Calibration finds a simulated unit's errors and says when it cannot."""

import dataclasses
import importlib.util
import math
from itertools import product

import numpy as np
import pytest
from echo_data import ECHO_DATA, ROOT, needs_echo_data
from perception_helpers import HEADS, STILL, fit

from ros_echo_perception.core.calibration import calibrate_head
from ros_echo_perception.core.calibration.observation import level_mismatch, observe
from ros_echo_perception.core.errors import CalibrationError
from ros_echo_perception.core.head import load_head, save_head
from ros_echo_perception.core.perception.objects import one_object
from ros_echo_perception.core.perception.pipeline import EchoPipeline, prepare
from ros_echo_perception.offline import detections_csv
from ros_echo_perception.sources.bench import (
    CALIBRATION_BEARINGS_RAD,
    CALIBRATION_RANGES_M,
    bench_source,
    calibration_grid,
    poles,
)
from ros_echo_perception.sources.recording import load_recording
from ros_echo_perception.sources.simulator_config import SimulatorConfig

HEAD_NAMES = sorted(HEADS)
PLACES = list(product(CALIBRATION_RANGES_M, CALIBRATION_BEARINGS_RAD))
CONFIG = SimulatorConfig(unit_error_scale=1.0, seed=3, temperature_error_c=0.0, humidity_error=0.0)


@pytest.fixture(scope="module", params=HEAD_NAMES)
def calibrated(request):
    """(nominal, true unit, report) of one simulated unit."""
    nominal = HEADS[request.param]
    source = bench_source(nominal, calibration_grid(), CONFIG)
    echoes = [source.echo(k) for k in range(source.n_pings)]
    return nominal, source.unit, calibrate_head(echoes, PLACES, nominal)


def errors_on_unseen_places(head, nominal):
    """Range and bearing errors of the fit at places of no calibration ping."""
    places = [(r, b) for r in (0.55, 0.9, 1.6) for b in np.radians((-30.0, -10.0, 0.0, 20.0, 33.0))]
    worlds = [poles((r, float(b)), radius_m=0.01) for r, b in places]
    source = bench_source(nominal, worlds, CONFIG)
    errors = []
    for k, (range_m, bearing_rad) in enumerate(places):
        model, ping = prepare(head, source.echo(k))
        found = fit(model, ping, one_object(range_m, float(bearing_rad), 1.0), STILL).objects
        errors.append((found.range_m[0] - range_m, found.bearing_rad[0] - bearing_rad))
    return np.array(errors).T


def test_latency_and_gain_are_those_of_the_unit(calibrated):
    nominal, unit, report = calibrated
    assert abs(unit.latency_s - nominal.latency_s) > 5e-6
    assert report.head.latency_s == pytest.approx(unit.latency_s, abs=5e-6)
    assert report.head.gain_mismatch_db == pytest.approx(unit.gain_mismatch_db, abs=0.5)


def test_level_differences_of_unseen_places_are_predicted(calibrated):
    """As the matched signals of both ears show it: 0.3 dB in the beam, 0.7 at its edges."""
    nominal, _, report = calibrated
    bearings = np.radians(np.arange(-32.5, 33.0, 5.0))
    worlds = [poles((1.0, float(b)), radius_m=0.01) for b in bearings]
    source = bench_source(nominal, worlds, dataclasses.replace(CONFIG, noise_rms=2e-4))
    seen = [observe(source.echo(k), 1.0, float(b), nominal) for k, b in enumerate(bearings)]
    error_db = {
        name: 20.0 / math.log(10.0) * np.array([level_mismatch(o, head, 0.0) for o in seen])
        for name, head in (("nominal", nominal), ("calibrated", report.head))
    }
    inner = np.abs(bearings) < math.radians(23.0)
    assert np.abs(error_db["calibrated"][inner]).max() < 0.3
    assert np.abs(error_db["calibrated"]).max() < 0.7
    rms = {name: float(np.sqrt(np.mean(e[inner] ** 2))) for name, e in error_db.items()}
    assert rms["calibrated"] < 0.5 * rms["nominal"]
    stated = np.array(report.head.calibration["bearing_curve"])
    assert np.all(np.diff(stated[:, 1]) > 0.0)  # louder on the left towards the left


def test_unseen_places_are_measured_better_than_by_the_data_sheet(calibrated):
    nominal, _, report = calibrated
    range_error, bearing_error = errors_on_unseen_places(report.head, nominal)
    nominal_range_error, nominal_bearing_error = errors_on_unseen_places(nominal, nominal)
    assert abs(range_error.mean()) < 0.5e-3
    assert abs(bearing_error.mean()) < math.radians(0.3)
    assert np.sqrt(np.mean(range_error**2)) < 0.5 * np.sqrt(np.mean(nominal_range_error**2))
    assert np.abs(bearing_error).max() < 0.02
    assert np.sqrt(np.mean(bearing_error**2)) < np.sqrt(np.mean(nominal_bearing_error**2))


def test_report_states_values_with_sigmas_that_cover_the_truth(calibrated):
    _, unit, report = calibrated
    rows = {row.name: row for row in report.rows}
    latency = rows["latency"]
    assert latency.unit == "us"
    assert latency.value == pytest.approx(report.head.latency_s * 1e6)
    assert 0.0 < latency.sigma < 20.0
    assert abs(latency.value - unit.latency_s * 1e6) < 4.0 * latency.sigma + 1.0
    assert all(row.sigma > 0.0 for row in report.rows)
    held = report.holdback
    assert held["pings"] == 8.0
    assert held["calibrated_range_rms_m"] < held["nominal_range_rms_m"]
    assert abs(held["calibrated_range_bias_m"]) < 1e-3


def test_saved_head_reads_back_the_same(calibrated, tmp_path):
    nominal, _, report = calibrated
    path = tmp_path / "unit.yaml"
    save_head(report.head, path)
    again = load_head(path)
    assert again == report.head
    assert again.calibrated
    assert not nominal.calibrated
    assert again.name == nominal.name


def test_calibration_leaves_its_input(calibrated):
    nominal, _, _ = calibrated
    assert nominal == load_head(ROOT / "config" / "heads" / f"{nominal.name}.yaml")


# -------------------------------------------------------------------------- refusals


@pytest.fixture(scope="module")
def pings():
    source = bench_source(HEADS["sparrow_52"], calibration_grid(), CONFIG)
    return [source.echo(k) for k in range(source.n_pings)]


def refused(echoes, places):
    with pytest.raises(CalibrationError) as caught:
        calibrate_head(echoes, places, HEADS["sparrow_52"])
    return str(caught.value)


def test_too_few_pings_are_refused(pings):
    assert "8 or more" in refused(pings[8:12], PLACES[8:12])
    assert "8 or more" in refused([], [])


def test_places_of_another_number_are_refused(pings):
    assert "places is 31; allowed: one for each of the 32 pings" in refused(pings, PLACES[:31])


def test_one_bearing_or_one_range_tells_too_little(pings):
    one_range = [k for k, (r, _) in enumerate(PLACES) if r == 1.2]
    text = refused([pings[k] for k in one_range], [PLACES[k] for k in one_range])
    assert "spread of the pole's ranges" in text
    ahead = [k for k, (_, b) in enumerate(PLACES) if abs(b) < 0.1]
    text = refused([pings[k] for k in ahead * 2], [PLACES[k] for k in ahead * 2])
    assert "spread of the pole's bearings" in text


def test_wrong_places_are_refused(pings):
    shifted = [(r + 0.9, b) for r, b in PLACES]
    text = refused(pings, shifted)
    assert "clear echo at the stated place" in text
    assert "check the places" in text.lower()


@pytest.mark.parametrize(
    "place", [(math.nan, 0.0), (-1.0, 0.0), (1.0, 2.0), (1.0, math.nan), (100.0, 0.0)]
)
def test_impossible_places_are_named(pings, place):
    text = refused(pings, [*PLACES[:5], place, *PLACES[6:]])
    assert text.startswith("place of ping 5 is ")


def test_silent_pings_are_refused(pings):
    silent = [dataclasses.replace(p, samples=p.samples * 0) for p in pings]
    assert "clear echo" in refused(silent, PLACES)


# ------------------------------------------------------------------ open recordings


@pytest.fixture(scope="module")
def open_heads():
    """Heads of the open recordings, each calibrated once from its own recording."""
    known = {}

    def head(name):
        if name not in known:
            recording = load_recording(ECHO_DATA / "scenes" / f"calibration_{name}.wav")
            poles_seen = [ping["reflectors"][0] for ping in recording.truth["pings"]]
            places = [(pole["range_m"], pole["bearing_rad"]) for pole in poles_seen]
            nominal = load_head(ECHO_DATA / "heads" / f"{name}.yaml")
            known[name] = calibrate_head(list(recording.echoes()), places, nominal).head
        return known[name]

    return head


@pytest.fixture(scope="module")
def scorer():
    """The script that comes with the open recordings."""
    path = ECHO_DATA / "score_detections.py"
    spec = importlib.util.spec_from_file_location("score_detections", path)
    module = importlib.util.module_from_spec(spec)
    spec.loader.exec_module(module)
    return module


@needs_echo_data
@pytest.mark.parametrize(
    ("name", "scene", "floor"),
    [("head_a", "single_a_wall", 0.95), ("head_b", "single_b_sphere", 0.95),
     ("head_a", "long_a_16", 0.95), ("head_a", "clutter_a_poles", 0.95)],
)  # fmt: skip
def test_calibrated_scores_on_the_open_recordings(name, scene, floor, open_heads, scorer, tmp_path):
    """A floor against regressions; single ears, long bursts and clutter are the easy part."""
    recording = load_recording(ECHO_DATA / "scenes" / f"{scene}.wav")
    pipeline = EchoPipeline(open_heads(name))
    results = [pipeline.process(recording.echo(k)) for k in range(recording.n_pings)]
    table = [row for k, r in enumerate(results) for row in detections_csv.rows(scene, k, r)]
    path = tmp_path / "detections.csv"
    detections_csv.write(path, table)
    found = scorer.read_detections(str(path))
    report = scorer.score(str(ECHO_DATA / "scenes"), found, [scene])["overall"]
    assert report["f1"] >= floor
