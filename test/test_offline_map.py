"""The command ``map``: files, window, picture, and whether the map lies on what is there."""

import json
import math

import numpy as np
import pytest
import yaml
from offline_helpers import HEADS, head_file, make_folder, refused, run
from PIL import Image

from ros_echo_perception.core.mapping import MappingConfig, MapSnapshot
from ros_echo_perception.offline import plots
from ros_echo_perception.offline.inputs import open_input
from ros_echo_perception.offline.map import save_map, whole_drive
from ros_echo_perception.offline.settings_file import load_settings

WORLD = """
name: corner
surfaces:
  - {id: front, kind: wall, points_m: [[3.0, -1.5], [3.0, 1.5]]}
poles:
  - {id: left, centre_m: [2.0, 0.5], radius_m: 0.05}
path:
  start: [0.0, 0.0, 0.0]
  speed_m_s: 0.4
  waypoints:
    - {to_m: [1.6, 0.0]}
"""


@pytest.fixture(scope="module")
def folder(tmp_path_factory):
    """A scene at rest, and a drive of 1.6 m towards a wall, past a pole on the left."""
    folder = make_folder(tmp_path_factory)
    (folder / "world.yaml").write_text(WORLD)
    (folder / "simulator.yaml").write_text("ping_rate_hz: 10\n")
    run("simulate", "--head", head_file(HEADS[0]), "--world", folder / "world.yaml", "--config",
        folder / "simulator.yaml", "--out", folder / "drive.wav")  # fmt: skip
    return folder


@pytest.fixture(scope="module")
def mapped(folder):
    """The drive's map as arrays, with picture and summary."""
    out = folder / "map.npz"
    result = run("map", folder / "drive.wav", "--head", head_file(HEADS[0]), "--out", out,
                 "--picture", folder / "map.png")  # fmt: skip
    with np.load(out) as arrays:
        return result.stdout, dict(arrays)


def test_map_of_a_drive_as_arrays(folder, mapped):
    text, arrays = mapped
    assert "pings in the map" in text
    data, resolution = arrays["data"], float(arrays["resolution"])
    assert data.dtype == np.int8
    assert data.min() == -1
    assert 65 <= data.max() <= 100
    width, height = data.shape[1] * resolution, data.shape[0] * resolution
    assert float(arrays["origin_x"]) < 0.0 < float(arrays["origin_x"]) + width
    assert float(arrays["origin_y"]) < 0.0 < float(arrays["origin_y"]) + height
    assert load_settings(folder / "map.settings.yaml", "mapping", MappingConfig).width_m == (
        pytest.approx(width)
    )


def test_map_of_a_drive_lies_on_the_true_wall_and_pole(folder, mapped):
    _, arrays = mapped
    world = json.loads((folder / "drive_world.json").read_text())
    side = json.loads((folder / "drive.json").read_text())
    x, y, yaw = side["truth"]["pings"][0]["head_pose"]  # odometry drifts little in 1.6 m
    mount = side["mount_on_robot"]["x_m"]
    row, column = np.nonzero(arrays["data"] >= 65)
    cells = np.column_stack([column, row]) + 0.5
    places = cells * float(arrays["resolution"]) + (arrays["origin_x"], arrays["origin_y"])
    turn = np.array([[math.cos(yaw), math.sin(yaw)], [-math.sin(yaw), math.cos(yaw)]])
    places = places @ turn + (x - mount * math.cos(yaw), y - mount * math.sin(yaw))
    (wall,) = world["segments"]
    (pole,) = world["circles"]
    to_wall = _to_segment(places, wall["p0"], wall["p1"])
    to_pole = np.abs(np.hypot(*(places - pole["centre"]).T) - pole["radius_m"])
    assert np.count_nonzero(to_wall < 0.1) >= 3
    assert np.count_nonzero(to_pole < 0.1) >= 1
    assert np.mean(np.minimum(to_wall, to_pole) < 0.1) > 0.6


def _to_segment(points, start, end):
    """Distance of points, shape (n, 2), to a segment: plain vector geometry."""
    start, way = np.asarray(start), np.subtract(end, start)
    along = np.clip((points - start) @ way / (way @ way), 0.0, 1.0)
    return np.hypot(*(points - start - along[:, None] * way).T)


def test_map_image_is_read_back_by_an_independent_reader(mapped, tmp_path):
    _, arrays = mapped
    data = arrays["data"]
    snapshot = MapSnapshot(
        data, float(arrays["resolution"]), float(arrays["origin_x"]), float(arrays["origin_y"]),
        0.0, 1,
    )  # fmt: skip
    save_map(snapshot, tmp_path / "map.yaml")
    meta = yaml.safe_load((tmp_path / "map.yaml").read_text())
    with Image.open(tmp_path / meta["image"]) as image:  # row 0 on top
        grey = np.asarray(image)[::-1]
    np.testing.assert_array_equal(grey == 0, data >= 65)
    np.testing.assert_array_equal(grey == 254, (data >= 0) & (data <= 35))


def test_picture_of_a_map_has_cells_path_and_detections(folder, mapped):
    with Image.open(folder / "map.png") as image:
        pixels = np.asarray(image.convert("RGB")).reshape(-1, 3)
    assert len(pixels) > 300 * 300
    colours = {"#" + bytes(p).hex() for p in np.unique(pixels, axis=0).tolist()}
    assert {plots.OCCUPIED_CELL, plots.FREE_CELL, plots.UNKNOWN_CELL, plots.PATH} <= colours


def test_map_window_as_in_the_settings(folder, tmp_path):
    out = tmp_path / "map.npz"
    run("map", folder / "drive.wav", "--head", head_file(HEADS[0]), "--out", out,
        "--window", "settings")  # fmt: skip
    with np.load(out) as arrays:
        config = MappingConfig()
        assert arrays["data"].shape == (config.height_cells, config.width_cells)


def test_whole_drive_loses_nothing_from_anywhere(folder):
    odometry = open_input(folder / "drive.wav").odometry
    config = whole_drive(MappingConfig(), odometry)
    xs = [sample.pose.x_m for sample in odometry]
    # A cell seen from one end of the path has to be inside when the robot is at the other end.
    assert config.width_m / 2 >= max(xs) - min(xs) + config.max_range_m


def test_map_refuses_what_has_no_odometry_or_an_unknown_format(folder, tmp_path):
    head = head_file(HEADS[0])
    line = refused("map", folder / f"bench_{HEADS[0]}.wav", "--head", head, "--out",
                   tmp_path / "m.npz")  # fmt: skip
    assert "odometry is 'missing'" in line
    line = refused("map", folder / "drive.wav", "--head", head, "--out", tmp_path / "m.bmp")
    assert "m.bmp'; allowed: a name that ends with .npz or .yaml" in line
