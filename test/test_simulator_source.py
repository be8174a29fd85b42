"""The simulator as a source: order, determinism, settings, truth."""

import dataclasses
import math
import time

import numpy as np
import pytest
from echo_data import ROOT

from ros_echo_perception.core.errors import SettingError, SourceError
from ros_echo_perception.core.head import load_head
from ros_echo_perception.core.settings import describe
from ros_echo_perception.core.types import Pose2, RawEcho
from ros_echo_perception.sources.bench import bench_source, calibration_grid, poles, round_at
from ros_echo_perception.sources.head_unit import individual_unit
from ros_echo_perception.sources.robot_path import RobotPath, Waypoint, load_path
from ros_echo_perception.sources.simulator import SimulatorSource
from ros_echo_perception.sources.simulator_config import SimulatorConfig
from ros_echo_perception.sources.world import World, load_world

HEADS = {n: load_head(ROOT / "config" / "heads" / f"{n}.yaml") for n in ("sparrow_52", "heron_180")}
HEAD = HEADS["sparrow_52"]
DEMO = ROOT / "config" / "worlds" / "demo_room.yaml"
CLEAN = SimulatorConfig(noise_rms=1e-7, adc_bits=16, crosstalk_level=0.0)


def test_same_settings_same_samples():
    world, path = load_world(DEMO), load_path(DEMO)
    config = SimulatorConfig(seed=5, unit_error_scale=1.0)
    one, two = (SimulatorSource(HEAD, world, path, config) for _ in range(2))
    other = SimulatorSource(HEAD, world, path, dataclasses.replace(config, seed=6))
    order = [200, 3, 200]
    for k in order:  # and independent of what was asked before
        np.testing.assert_array_equal(one.echo(k).samples, two.echo(k).samples)
    assert one.echo(3).temperature_c == two.echo(3).temperature_c
    assert one.odometry == two.odometry
    assert one.unit == two.unit != other.unit
    assert not np.array_equal(one.echo(3).samples, other.echo(3).samples)


def test_inputs_are_not_modified():
    world, path = load_world(DEMO), load_path(DEMO)
    before = world.starts.copy(), path.poses.copy(), dataclasses.astuple(HEAD)
    SimulatorSource(HEAD, world, path, SimulatorConfig(unit_error_scale=1.0)).echo(30)
    np.testing.assert_array_equal(world.starts, before[0])
    np.testing.assert_array_equal(path.poses, before[1])
    assert dataclasses.astuple(HEAD) == before[2]


def short_drive(**settings):
    path = RobotPath.along(Pose2(1.0, 1.3, 0.0), (Waypoint(1.8, 1.3),), 0.5, 1.0)
    start_s = settings.pop("start_offset_s", 0.0)
    config = SimulatorConfig(**{"interval_jitter": 0.09, **settings})
    return SimulatorSource(HEAD, load_world(DEMO), path, config, start_s)


def test_events_come_in_order_of_time_and_can_start_over():
    source = short_drive()
    events = list(source.events())
    times = [e.emission_time_s if isinstance(e, RawEcho) else e.time_s for e in events]
    assert times == sorted(times)
    echoes = [e for e in events if isinstance(e, RawEcho)]
    assert [e.sequence for e in echoes] == list(range(source.n_pings))
    assert len(events) - len(echoes) == len(source.odometry)
    gaps = np.diff([e.emission_time_s for e in echoes])
    assert gaps.mean() == pytest.approx(0.04, rel=0.01)
    assert 0.0 < np.std(gaps) < 0.09 * 0.04
    assert np.all(gaps > source.config.record_s)
    first = next(e for e in source.events() if isinstance(e, RawEcho))
    np.testing.assert_array_equal(first.samples, echoes[0].samples)


def test_start_offset_only_leaves_out():
    whole, late = short_drive(), short_drive(start_offset_s=0.5)
    events = [e for e in late.events() if isinstance(e, RawEcho)]
    assert events[0].emission_time_s >= 0.5
    assert len(events) == late.info.n_pings
    k = events[0].sequence
    np.testing.assert_array_equal(events[0].samples, whole.echo(k).samples)
    with pytest.raises(SourceError, match="start_offset_s is 1000"):
        short_drive(start_offset_s=1000.0)


def test_head_rides_on_the_robot():
    source = short_drive(mount_x_m=0.2, mount_y_m=0.1, mount_yaw_rad=0.5)
    for time_s in (0.1, 0.8, 1.5):
        motion = source.head_motion(time_s)
        later = source.head_motion(time_s + 1e-4).pose
        expected = source.true_pose(time_s).compose(Pose2(0.2, 0.1, 0.5))
        assert motion.pose == expected
        velocity = ((later.x_m - expected.x_m) / 1e-4, (later.y_m - expected.y_m) / 1e-4)
        assert motion.velocity_m_s == pytest.approx(velocity, abs=5e-3)


def test_truth_of_a_drive_is_where_the_obstacles_are():
    source = short_drive()
    columns = {r.id: r for r in source.world.rounds}
    seen = 0
    for k in range(0, source.n_pings, 7):
        truth = source.truth(k)
        for reflector in truth.reflectors:
            if reflector.kind != "pole":
                continue
            pole = columns[reflector.id]
            distance = reflector.range_m + pole.radius_m
            direction = Pose2(0.0, 0.0, reflector.bearing_rad)
            place = truth.head_pose.compose(direction).compose(Pose2(distance))
            # The pose is that at emission, the reflection up to 18 ms later at 0.5 m/s.
            assert math.dist((place.x_m, place.y_m), pole.centre_m) < 0.012
            seen += 1
    assert seen > 5


def test_individual_units_stay_within_tolerance():
    assert individual_unit(HEAD, 1, 0.0) is HEAD
    units = [individual_unit(HEAD, seed) for seed in range(40)]
    baseline = np.array([u.baseline_m for u in units])
    assert 0.0 < np.max(np.abs(baseline - HEAD.baseline_m)) <= 1e-3
    yaw = np.array([u.left.yaw_rad - HEAD.left.yaw_rad for u in units])
    assert math.radians(1.0) < np.max(np.abs(yaw)) <= math.radians(1.5)
    resonance = np.array([u.right.resonance_hz - 40e3 for u in units])
    assert np.max(np.abs(resonance)) <= 150.0
    assert all(5e-6 <= u.latency_s <= 60e-6 for u in units)
    assert all(abs(u.gain_mismatch_db) <= 1.5 for u in units)


@pytest.mark.parametrize(
    ("settings", "message"),
    [
        ({"record_s": 0.05}, "record_s is 0.05; allowed: at most 0.0380"),
        ({"ping_rate_hz": 0.0}, "ping_rate_hz is 0.0"),
        ({"lead_s": 0.002, "record_s": 0.003}, "lead_s is 0.002; allowed: at most half"),
        ({"seed": -1}, "seed is -1"),
        ({"adc_bits": 12.5}, "adc_bits is 12.5"),
        ({"noise_rms": math.nan}, "noise_rms is nan"),
        ({"relative_humidity": 45}, "relative_humidity is 45"),
    ],
)
def test_impossible_settings(settings, message):
    with pytest.raises(SettingError) as error:
        SimulatorConfig(**settings)
    assert message in str(error.value)


@pytest.mark.parametrize("info", describe(SimulatorConfig), ids=lambda info: info.name)
def test_every_setting_does_something(info):
    """Each setting, changed, changes what the source yields."""
    changed = {
        "ping_rate_hz": 20.0, "interval_jitter": 0.01, "record_s": 0.03, "lead_s": 0.001,
        "burst_cycles": 5.0, "seed": 9, "temperature_c": 25.0, "relative_humidity": 0.6,
        "temperature_error_c": 0.0, "humidity_error": 0.0, "source_level": 0.8,
        "crosstalk_level": 0.1, "noise_rms": 0.005, "clicks_per_ping": 30.0, "adc_bits": 9,
        "gain_slope_db_per_s": 900.0, "gain_limit_db": 3.0, "unit_error_scale": 1.0,
        "odometry_rate_hz": 30.0, "odometry_error_scale": 0.0, "mount_x_m": 0.3,
        "mount_y_m": 0.1, "mount_yaw_rad": 0.3,
    }  # fmt: skip
    base = {"gain_slope_db_per_s": 400.0} if info.name == "gain_limit_db" else {}

    def digest(**settings):
        source = short_drive(**base, **settings)
        echo = source.echo(10)
        return (
            echo.samples.tobytes(), echo.emission_time_s, echo.temperature_c,
            echo.relative_humidity, [(s.time_s, s.pose) for s in source.odometry],
        )  # fmt: skip

    assert digest(**{info.name: changed[info.name]}) != digest()


def test_calibration_grid_and_spheres():
    source = bench_source(HEAD, calibration_grid())
    assert source.n_pings == 32
    sphere = World("s", (), (round_at(1.0, 0.3, 0.05, "sphere"),))
    truth = bench_source(HEAD, sphere).truth(0).reflectors[0]
    pole = bench_source(HEAD, poles((1.0, 0.3), radius_m=0.05)).truth(0).reflectors[0]
    assert (truth.range_m, truth.bearing_rad) == pytest.approx((1.0, 0.3))
    # Both curvatures spread the wave: once more the factor sqrt(a / (a + r)) of the pole.
    assert truth.peak[0] / pole.peak[0] == pytest.approx(math.sqrt(0.05 / 1.05), rel=0.01)


def test_fast_enough_to_run_live():
    source = SimulatorSource(HEAD, load_world(DEMO), load_path(DEMO))
    source.echo(0)
    times = []
    for k in range(100, 1000, 30):
        start = time.thread_time()
        source.echo(k)
        times.append(time.thread_time() - start)
    # 3.3 ms of one core in this room; at 25 Hz all nodes together have 40 ms of each core.
    assert np.median(times) < 0.012
