"""Saved maps, read back by independent readers."""

import numpy as np
import pytest
import yaml
from PIL import Image

from ros_echo_perception.core.errors import FileFormatError
from ros_echo_perception.core.mapping import MapSnapshot, save_map_image, save_map_npz


@pytest.fixture
def snapshot():
    data = np.array([[-1, 0, 35, 36], [64, 65, 100, -1], [50, 20, 80, 0]], np.int8)
    return MapSnapshot(data, 0.05, -1.25, 2.5, 3.0, 7)


def test_image_and_yaml_as_pillow_and_pyyaml_read_them(snapshot, tmp_path):
    """Meaning of the keys: map file format of the ROS map servers (trinary mode)."""
    image, text = save_map_image(snapshot, tmp_path / "room.yaml")
    meta = yaml.safe_load(text.read_text())
    assert meta == {
        "image": "room.pgm",
        "mode": "trinary",
        "resolution": 0.05,
        "origin": [-1.25, 2.5, 0.0],
        "negate": 0,
        "occupied_thresh": 0.65,
        "free_thresh": 0.196,
    }
    with Image.open(image) as picture:
        assert picture.format == "PPM"
        grey = np.asarray(picture.convert("L"), float)[::-1]
    occupied_probability = (255.0 - grey) / 255.0
    data = snapshot.data
    np.testing.assert_array_equal(occupied_probability > meta["occupied_thresh"], data >= 65)
    np.testing.assert_array_equal(
        occupied_probability < meta["free_thresh"], (data >= 0) & (data <= 35)
    )


def test_largest_y_is_the_top_row(snapshot, tmp_path):
    image, _ = save_map_image(snapshot, tmp_path / "a.b")
    assert image.name == "a.b.pgm"
    with Image.open(image) as picture:
        assert np.asarray(picture)[0, 2] == 0


def test_npz_holds_the_values_themselves(snapshot, tmp_path):
    with np.load(save_map_npz(snapshot, tmp_path / "map.npz")) as file:
        assert sorted(file) == ["data", "origin_x", "origin_y", "origin_yaw", "resolution"]
        np.testing.assert_array_equal(file["data"], snapshot.data)
        assert [float(file[k]) for k in ("resolution", "origin_x", "origin_y", "origin_yaw")] == [
            0.05, -1.25, 2.5, 0.0,
        ]  # fmt: skip


def test_saving_replaces_and_leaves_nothing_else(snapshot, tmp_path):
    for _ in range(2):
        save_map_image(snapshot, tmp_path / "room")
        save_map_npz(snapshot, tmp_path / "room.npz")
    assert sorted(p.name for p in tmp_path.iterdir()) == ["room.npz", "room.pgm", "room.yaml"]


@pytest.mark.parametrize("save", [save_map_image, save_map_npz])
def test_a_missing_folder_is_named(save, snapshot, tmp_path):
    with pytest.raises(FileFormatError, match=r"nowhere.*cannot be written"):
        save(snapshot, tmp_path / "nowhere" / "map")


def test_a_failed_write_keeps_the_old_file(snapshot, tmp_path, monkeypatch):
    image, _ = save_map_image(snapshot, tmp_path / "room")
    before = image.read_bytes()

    def full(path, data):
        raise OSError(28, "No space left on device")

    monkeypatch.setattr("pathlib.Path.write_bytes", full)
    with pytest.raises(FileFormatError, match="No space left"):
        save_map_image(snapshot, tmp_path / "room")
    assert image.read_bytes() == before
