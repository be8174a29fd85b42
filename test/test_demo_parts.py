"""The demo's parts without ROS: monitor, comparison with the truth, child processes, views."""

import io
import json
import math
import os
import signal
import subprocess
import sys
import time
from pathlib import Path

import numpy as np
import pytest
from rich.console import Console

from ros_echo_perception.core.types import Pose2
from ros_echo_perception.demo import summary
from ros_echo_perception.demo.comparison import (
    TrueEcho,
    alignment,
    map_precision,
    match,
    moved,
    score_detections,
)
from ros_echo_perception.demo.live import LiveView
from ros_echo_perception.demo.monitor import Monitor, SeenDetection, SeenMap
from ros_echo_perception.demo.processes import NodeDiedError, NodeGroup
from ros_echo_perception.demo.truth import outline_of
from ros_echo_perception.sources.world import Round, Surface, World


def seen(range_m, bearing_rad=0.0):
    return SeenDetection(range_m, bearing_rad, 0.01, 0.02, 0.9, True)


def filled_monitor():
    """Pings 10 to 14 without 12; 10 and 13 answered after 4 and 8 ms."""
    monitor = Monitor()
    for sequence in (10, 11, 13, 14):
        monitor.on_raw(sequence, 16, 100.0 + 0.04 * sequence)
    monitor.on_detections(10, 0.0, 0.002, [seen(1.0), seen(2.0)], 100.404)
    monitor.on_detections(13, 0.1, 0.003, [seen(1.0)], 100.528)
    return monitor


def test_monitor_counts_gaps_and_unanswered_pings():
    monitor = filled_monitor()
    assert (monitor.pings_sent, monitor.raw_lost) == (5, 1)
    assert monitor.answered == 2
    assert monitor.unanswered == 1  # number 11; 14 may still be under way
    assert monitor.n_detections == 3
    assert monitor.raw_flags == 16
    np.testing.assert_allclose(sorted(monitor.latencies_s()), [0.004, 0.008], atol=1e-9)
    assert monitor.mean_rate_hz() == pytest.approx(3 / 0.16)
    assert monitor.recent_rate_hz(100.56) == 2.0  # four in the last two seconds


def test_empty_monitor_has_no_figures_but_no_errors():
    monitor = Monitor()
    assert (monitor.pings_sent, monitor.raw_lost, monitor.unanswered) == (0, 0, 0)
    assert math.isnan(monitor.mean_rate_hz())
    lines = {f.key: f.value for f in summary.figures(monitor, None, math.nan, 1.5)}
    assert lines["pings_sent"] == 0
    assert lines["detections_per_ping"] is None
    assert math.isnan(lines["latency_p95_ms"])


def test_summary_has_units_and_valid_json(tmp_path):
    truth = [[TrueEcho(1.003, 0.01, 30.0), TrueEcho(3.0, 0.0, 30.0)], [TrueEcho(1.0, 0.0, 30.0)]]
    monitor = filled_monitor()
    score = score_detections(
        (ping.detections, echoes)
        for ping, echoes in zip(monitor.pings.values(), truth, strict=True)
    )
    lines = summary.figures(monitor, score, math.nan, 1.5)
    summary.save(lines, tmp_path)
    values = json.loads((tmp_path / "summary.json").read_text())
    assert values["messages_lost"] == 2
    assert values["latency_median_ms"] == pytest.approx(6.0, abs=1e-6)
    assert values["precision"] == pytest.approx(200.0 / 3.0)  # two of three detections are true
    assert values["recall"] == pytest.approx(200.0 / 3.0)  # two of three true echoes found
    assert values["range_error_median_mm"] == pytest.approx(1.5)
    assert values["map_precision"] is None
    text = (tmp_path / "summary.txt").read_text()
    row = next(line for line in text.splitlines() if "range error, median" in line)
    assert [cell.strip() for cell in row.split("│")[1:4]] == ["range error, median", "1.5", "mm"]


def test_matching_is_one_to_one_and_gated():
    truth = [TrueEcho(1.0, 0.0, 30.0), TrueEcho(1.05, 0.0, 30.0)]
    # Greedy nearest-first would take (0, 1) and leave the other without a partner.
    assert match([seen(1.04), seen(1.12)], truth) == [(0, 0), (1, 1)]
    assert match([seen(1.08)], truth[:1]) == []  # 8 cm; allowed are 5 cm + 2 %
    assert match([seen(1.0, math.radians(16.0))], truth[:1]) == []
    assert match([], truth) == []


def test_unfindable_and_weak_echoes_need_not_be_found_but_are_no_errors():
    truth = [TrueEcho(1.0, 0.0, 30.0, findable=False), TrueEcho(2.0, 0.0, 12.0)]
    score = score_detections([([seen(1.0)], truth)])
    assert (score.n_matched, score.must_find, score.found) == (1, 0, 0)


def test_alignment_puts_the_robot_where_odometry_says():
    odometry, true = Pose2(1.0, -2.0, 0.3), Pose2(4.0, 3.0, -2.0)
    world = alignment(odometry, true)
    place = moved(np.array([[true.x_m, true.y_m]]), world)
    np.testing.assert_allclose(place, [[odometry.x_m, odometry.y_m]], atol=1e-12)
    ahead = moved(np.array([[4.0 + math.cos(-2.0), 3.0 + math.sin(-2.0)]]), world)
    np.testing.assert_allclose(ahead, [[1.0 + math.cos(0.3), -2.0 + math.sin(0.3)]], atol=1e-12)


def test_map_precision_counts_cells_near_surfaces():
    data = np.full((40, 40), -1, np.int8)
    data[20, 5] = 90  # centre at x 0.275, y 1.025
    data[5, 5] = 65  # 0.75 m below the wall
    data[20, 6] = 64  # not occupied
    grid = SeenMap(data, 0.05, 0.0, 0.0, "odom")
    wall = np.array([[0.0, 1.0], [2.0, 1.0]])
    assert map_precision(grid, [wall]) == 0.5
    assert math.isnan(map_precision(SeenMap(data * 0, 0.05, 0.0, 0.0, "odom"), [wall]))
    assert (grid.occupied_cells, grid.known_area_m2) == (2, pytest.approx(3 * 0.0025))


def test_outline_has_every_surface_and_circle():
    world = World(
        "w",
        (Surface("a", "wall", (0.0, 0.0), (2.0, 0.0)),),
        (Round("p", "pole", (1.0, 1.0), 0.1),),
    )
    wall, circle = outline_of(world)
    np.testing.assert_array_equal(wall, [[0.0, 0.0], [2.0, 0.0]])
    np.testing.assert_allclose(np.hypot(*(circle - 1.0).T), 0.1)


def test_plain_lines_where_there_is_no_terminal():
    out = io.StringIO()
    with LiveView(Console(file=out, width=80), 60.0) as view:
        for elapsed in (0.0, 1.0, 6.0):
            view.update(filled_monitor(), elapsed)
    lines = out.getvalue().splitlines()
    assert len(lines) == 2  # one in five seconds, each whole
    assert lines[1].startswith("  6.0 of 60 s: ping rate ")
    assert "lost 2" in lines[1]
    assert "detections per ping 1.50" in lines[1]


def test_a_terminal_gets_a_table_with_progress():
    out = io.StringIO()
    with LiveView(Console(file=out, force_terminal=True, width=100, highlight=False), 60.0) as view:
        view.update(filled_monitor(), 30.0)
    assert "echo to detections" in out.getvalue()
    assert "30 of 60 s" in out.getvalue()


@pytest.fixture
def scripts(tmp_path, monkeypatch):
    """Modules that can be started as nodes."""
    (tmp_path / "sleeper.py").write_text("import time\nprint('up', flush=True)\ntime.sleep(60)\n")
    (tmp_path / "stubborn.py").write_text(
        "import signal, time\nsignal.signal(signal.SIGINT, signal.SIG_IGN)\n"
        "signal.signal(signal.SIGTERM, signal.SIG_IGN)\nprint('up', flush=True)\ntime.sleep(60)\n"
    )
    (tmp_path / "faulty.py").write_text(
        "print('about to fail')\nraise SystemExit('no such head')\n"
    )
    return {**os.environ, "PYTHONPATH": str(tmp_path)}


def wait_until(condition, timeout_s=10.0):
    end = time.monotonic() + timeout_s
    while not condition():
        assert time.monotonic() < end, "timed out"
        time.sleep(0.02)


def test_a_dead_node_is_named_with_the_end_of_its_log(tmp_path, scripts):
    with NodeGroup(tmp_path, scripts) as nodes:
        nodes.start("sleeper", "sleeper", [])
        faulty = nodes.start("faulty", "faulty", [])
        wait_until(lambda: faulty.process.poll() is not None)
        with pytest.raises(NodeDiedError) as caught:
            nodes.check()
    text = str(caught.value)
    assert "the faulty node ended by itself (exit code 1)" in text
    assert "about to fail" in text
    assert "no such head" in text


def test_all_nodes_end_even_stubborn_ones(tmp_path, scripts, monkeypatch):
    monkeypatch.setattr("ros_echo_perception.demo.processes._INTERRUPT_GRACE_S", 0.3)
    monkeypatch.setattr("ros_echo_perception.demo.processes._TERMINATE_GRACE_S", 0.3)
    with NodeGroup(tmp_path, scripts) as nodes:
        started = [nodes.start(name, name, []) for name in ("sleeper", "stubborn")]
        wait_until(lambda: all("up" in node.log.read_text() for node in started))
        nodes.check()
    codes = [node.process.poll() for node in started]
    assert codes == [-signal.SIGINT, -signal.SIGKILL]


def test_nodes_do_not_outlive_a_killed_demo(tmp_path, scripts):
    root = Path(__file__).resolve().parent.parent
    parent = subprocess.Popen(
        [
            sys.executable,
            "-c",
            "import os, time\nfrom pathlib import Path\n"
            "from ros_echo_perception.demo.processes import NodeGroup\n"
            f"group = NodeGroup(Path({str(tmp_path)!r}), dict(os.environ))\n"
            "print(group.start('sleeper', 'sleeper', []).process.pid, flush=True)\ntime.sleep(60)",
        ],
        env={**scripts, "PYTHONPATH": f"{scripts['PYTHONPATH']}{os.pathsep}{root}"},
        stdout=subprocess.PIPE,
        text=True,
    )
    child = int(parent.stdout.readline())
    wait_until(lambda: "up" in (tmp_path / "sleeper.log").read_text())
    parent.kill()
    parent.wait(10.0)
    wait_until(lambda: not _alive(child))


def _alive(pid):
    try:
        state = Path(f"/proc/{pid}/stat").read_text().rsplit(")", 1)[1].split()[0]
    except OSError:
        return False
    return state != "Z"  # ended; whoever inherited it has not collected it yet
