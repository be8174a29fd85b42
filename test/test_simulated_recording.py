"""Recordings of the simulator: complete, flagged, and accepted by independent scorers."""

import csv
import json
import math
import os
import subprocess
import sys

import numpy as np
import pytest
from echo_data import ECHO_DATA, ROOT, needs_echo_data

from ros_echo_perception.core.head import load_head
from ros_echo_perception.core.types import FrontEndFlag, Pose2
from ros_echo_perception.sources.recording import load_recording
from ros_echo_perception.sources.recording_files import POSE_COLUMNS, read_table
from ros_echo_perception.sources.robot_path import RobotPath, Waypoint
from ros_echo_perception.sources.simulated_recording import write_simulated_recording
from ros_echo_perception.sources.simulator import SimulatorSource
from ros_echo_perception.sources.simulator_config import SimulatorConfig
from ros_echo_perception.sources.world import load_world

HEAD = load_head(ROOT / "config" / "heads" / "sparrow_52.yaml")


@pytest.fixture(scope="module")
def drive(tmp_path_factory):
    path = RobotPath.along(Pose2(1.0, 1.3, 0.0), (Waypoint(2.0, 1.0), Waypoint(4.2, 0.7)), 0.5)
    world = load_world(ROOT / "config" / "worlds" / "demo_room.yaml")
    source = SimulatorSource(HEAD, world, path, SimulatorConfig(unit_error_scale=1.0))
    base = tmp_path_factory.mktemp("drives") / "short"
    return source, write_simulated_recording(source, base, seconds=4.0)


def test_what_is_read_is_what_was_simulated(drive):
    source, base = drive
    recording = load_recording(base)
    assert recording.n_pings == pytest.approx(100, abs=1)
    assert recording.simulated
    assert recording.category == "drive"
    assert recording.mount == source.config.mount
    for k in (0, 57):
        read, made = recording.echo(k), source.echo(k)
        np.testing.assert_array_equal(read.samples, made.samples)
        assert read.emission_time_s == pytest.approx(made.emission_time_s, abs=1e-6)
        assert read.first_sample_offset_s == pytest.approx(made.first_sample_offset_s)
        assert read.flags == made.flags | FrontEndFlag.REPLAYED
        assert read.temperature_c == made.temperature_c


def test_truth_goes_with_it(drive):
    source, base = drive
    truth = load_recording(base).truth
    assert truth["unit"]["drive_latency_s"] == source.unit.latency_s
    assert truth["speed_of_sound_m_s"] == pytest.approx(source.speed_of_sound_m_s, abs=1e-4)
    assert "3" in truth["pulse_by_burst_cycles"]
    poses = read_table(base.parent / truth["pose_file"], POSE_COLUMNS)
    for time_s, x, y, yaw in poses[::37]:
        true = source.true_pose(time_s)
        assert (x, y, yaw) == pytest.approx((true.x_m, true.y_m, true.yaw_rad), abs=1e-6)
    world = json.loads((base.parent / truth["world_file"]).read_text())
    assert len(world["segments"]) == len(source.world.surfaces)
    assert len(world["circles"]) == len(source.world.rounds)
    for k, ping in enumerate(truth["pings"]):
        ranges = [r["range_m"] for r in ping["reflectors"]]
        assert ranges == sorted(ranges)
        assert [r.id for r in source.truth(k).reflectors] == [r["id"] for r in ping["reflectors"]]
    scored = [r for ping in truth["pings"] for r in ping["reflectors"] if r["scored"]]
    assert len(scored) > 100
    assert all(abs(r["bearing_rad"]) <= math.radians(45.0) for r in scored)
    assert not any(r["kind"] == "multipath" for r in scored)


def run_scorer(name, *arguments):
    command = [sys.executable, str(ECHO_DATA / name), *map(str, arguments), "--json", "-"]
    env = os.environ | {"PYTHONDONTWRITEBYTECODE": "1"}
    done = subprocess.run(command, capture_output=True, text=True, timeout=100, env=env)
    assert done.returncode == 0, done.stderr
    return json.loads(done.stdout)


@needs_echo_data
def test_scorer_of_detections_accepts_it(drive, tmp_path):
    """Detections taken from the truth are perfect, shifted ones are all wrong."""
    _, base = drive
    truth = load_recording(base).truth
    reports = []
    for shift_m in (0.0, 0.5):
        with (tmp_path / "d.csv").open("w", newline="") as file:
            writer = csv.writer(file)
            writer.writerow(["scene", "ping", "range_m", "bearing_rad"])
            for k, ping in enumerate(truth["pings"]):
                for r in ping["reflectors"][:1] if shift_m else ping["reflectors"]:
                    writer.writerow([base.name, k, r["range_m"] + shift_m, r["bearing_rad"]])
        report = run_scorer(
            "score_detections.py", "--data", base.parent, "--detections", tmp_path / "d.csv"
        )
        reports.append(report["overall"])
    assert (reports[0]["precision"], reports[0]["recall"]) == (1.0, 1.0)
    assert reports[0]["targets"] > 100
    assert reports[1]["recall"] < 0.2


@needs_echo_data
def test_scorer_of_maps_accepts_it(drive, tmp_path):
    """The true walls, moved into the odometry's frame, are a perfect map."""
    source, base = drive
    last = load_recording(base).odometry[-1]
    move = last.pose.compose(source.true_pose(last.time_s).inverse())
    resolution, origin = 0.05, -9.0
    grid = np.full((400, 400), -1)
    for surface in source.world.surfaces:
        for part in np.linspace(0.0, 1.0, 400):
            x, y = (1 - part) * np.array(surface.start_m) + part * np.array(surface.end_m)
            place = move.compose(Pose2(float(x), float(y)))
            grid[int((place.y_m - origin) / resolution), int((place.x_m - origin) / resolution)] = (
                100
            )
    np.savez(tmp_path / "m.npz", data=grid, resolution=resolution, origin_x=origin, origin_y=origin)
    report = run_scorer("score_map.py", "--drive", base, "--map", tmp_path / "m.npz")
    assert report["precision"] == 1.0
    assert report["recall_echoing"] > 0.9
    assert report["surface_points_echoing"] > 50
    assert report["drift_end_m"] < 0.2
