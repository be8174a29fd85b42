"""Shipped YAML: derived from the settings, effective in real nodes, readable by others."""

import math
from pathlib import Path

import pytest
import yaml

from ros_echo_perception.core.settings import describe
from ros_echo_perception.nodes.parameter_files import render
from ros_echo_perception.nodes.settings import FIXED, SECTIONS
from ros_echo_perception.nodes.topics import MAP, POINTS, PUBLISHES, QOS

CONFIG = Path(__file__).resolve().parent.parent / "config"
NODES = tuple(SECTIONS)


def flat(mapping, prefix=""):
    """Nested parameters by their full names."""
    result = {}
    for name, value in mapping.items():
        if isinstance(value, dict):
            result |= flat(value, f"{prefix}{name}.")
        else:
            result[prefix + name] = value
    return result


def shipped(node):
    return flat(yaml.safe_load((CONFIG / f"{node}.yaml").read_text())["/**"]["ros__parameters"])


def settings_of(node):
    """(class, setting) of a node by the full name of the parameter."""
    return {
        f"{prefix}.{info.name}" if prefix else info.name: (cls, info)
        for cls, prefix in SECTIONS[node].items()
        for info in describe(cls)
    }


@pytest.mark.parametrize("node", NODES)
def test_the_file_is_what_the_settings_give(node):
    assert (CONFIG / f"{node}.yaml").read_text() == render(node), (
        "run: python -m ros_echo_perception.nodes.parameter_files config"
    )


@pytest.mark.parametrize("node", NODES)
def test_every_setting_is_in_the_file_with_its_default(node):
    values, settings = shipped(node), settings_of(node)
    assert set(values) == set(settings)
    for name, (_, info) in settings.items():
        default = list(info.default) if info.kind is list else info.default
        assert values[name] == default, name
        assert type(values[name]) is type(default), name


@pytest.mark.parametrize("node", NODES)
def test_every_setting_has_a_comment_with_its_unit(node):
    for paragraph in (CONFIG / f"{node}.yaml").read_text().split("\n\n")[1:]:
        lines = paragraph.strip().splitlines()
        comment = " ".join(line.strip("# ") for line in lines if line.strip().startswith("#"))
        keys = [line.split(":")[0].strip() for line in lines if not line.strip().startswith("#")]
        if not comment:
            continue  # the head of a section
        (name,) = keys
        (info,) = {i for full, (_, i) in settings_of(node).items()
                   if full.rsplit(".", 1)[-1] == name and i.description in comment}  # fmt: skip
        assert info.unit in comment


def changed(info):
    """A value that differs from the default and is allowed."""
    if info.kind is bool:
        return not info.default
    if info.choices:
        return next((c for c in info.choices if c != info.default), info.default)
    if info.kind is str:
        return "other" if info.name.endswith(("_frame", "_path")) else info.default
    if info.kind is list:
        return list(info.default)
    low = info.default - 1 if info.minimum is None else info.minimum
    high = info.default + 1 if info.maximum is None else info.maximum
    middle = info.default + 0.01 * ((high if high > info.default else low) - info.default)
    return info.kind(math.ceil(middle)) if info.kind is int else middle


KEEP = {"source", "use_tf", "start_offset_s", "simulator.record_s"}
"""Not changed below: they need more than a value (a recording, tf2_ros, a slower rate)."""


@pytest.mark.ros
@pytest.mark.parametrize("node", NODES)
def test_the_file_takes_effect_in_a_real_node(node, tmp_path, start_node, peer):
    """The shipped file with (nearly) every value changed: a key that does not reach shows."""
    document = yaml.safe_load((CONFIG / f"{node}.yaml").read_text())
    expected = {}
    for name, (_, info) in settings_of(node).items():
        *sections, last = name.split(".")
        target = document["/**"]["ros__parameters"]
        for section in sections:
            target = target[section]
        if name not in KEEP:
            target[last] = changed(info)
        expected[name] = target[last]
    n_changed = sum(expected[name] != value for name, value in shipped(node).items())
    assert n_changed > 0.5 * len(expected)
    file = tmp_path / "changed.yaml"
    file.write_text(yaml.safe_dump(document))
    start_node(node, files=[file], namespace="/robot")
    values = peer.parameters(f"/robot/{node}", expected)
    for name, value in expected.items():
        if isinstance(value, float | list) and value != ["detections"]:
            value = pytest.approx(value)
        assert values[name] == value, name


@pytest.mark.ros
def test_a_launch_argument_wins_over_the_file(start_node, peer):
    start_node("processing", {"max_range_m": 3}, files=[CONFIG / "processing.yaml"])
    values = peer.parameters("/processing", ["max_range_m", "max_echoes"])
    assert values == {"max_range_m": 3, "max_echoes": shipped("processing")["max_echoes"]}


def test_fixed_settings_are_only_those_of_the_driver():
    assert set(FIXED) == set(SECTIONS["driver"])


def test_the_viewer_shows_all_topics_with_a_fitting_qos():
    document = yaml.safe_load((CONFIG / "echo_perception.rviz").read_text())
    displays = {d["Class"].split("/")[1]: d for d in document["Visualization Manager"]["Displays"]}
    published = {t.name: t for topics in PUBLISHES.values() for t in topics}
    for kind in ("LaserScan", "MarkerArray", "PointCloud2", "Map", "Odometry"):
        shown = displays[kind]["Topic"]
        topic = published[shown["Value"].lstrip("/")]
        assert topic.message.endswith(
            {"Map": "OccupancyGrid"}.get(kind, kind)
        )  # the display's class is the message's name, but for the map
        latched = QOS[topic.qos].latched
        assert shown["Durability Policy"] == ("Transient Local" if latched else "Volatile")
        assert shown["Reliability Policy"] == "Reliable"
        assert displays[kind]["Enabled"] is True
    assert document["Visualization Manager"]["Global Options"]["Fixed Frame"] == "odom"


def test_the_costmap_sample_names_our_topics_and_never_clears_by_silence():
    document = yaml.safe_load((CONFIG / "costmap_example.yaml").read_text())
    costmap = document["local_costmap"]["local_costmap"]["ros__parameters"]
    assert set(costmap["plugins"]) <= set(costmap)
    points = costmap["echo_points"]["points"]
    assert points["topic"] == "/" + POINTS.name
    assert points["clearing"] is False
    assert costmap["echo_map"]["map_topic"] == "/" + MAP.name
    assert costmap["echo_map"]["map_subscribe_transient_local"] is QOS[MAP.qos].latched
    half_diagonal_m = math.hypot(costmap["width"], costmap["height"]) / 2
    assert shipped("processing")["scan.range_max_m"] > half_diagonal_m
