"""How strongly and on which way obstacles answer, against textbook laws and brute force."""

import math

import numpy as np
import pytest
from echo_data import ECHO_DATA, ROOT, needs_echo_data
from scipy.optimize import minimize, minimize_scalar

from ros_echo_perception.core.head import load_head
from ros_echo_perception.core.types import Pose2
from ros_echo_perception.sources.echo_paths import HeadMotion, trace
from ros_echo_perception.sources.scattering import (
    edge_amplitude,
    glancing_point,
    mirror_amplitude,
    mirrored,
)
from ros_echo_perception.sources.simulator_config import SimulatorConfig
from ros_echo_perception.sources.synthesis import Synthesis
from ros_echo_perception.sources.world import Round, Surface, World, world_from_mapping

HEAD = load_head(ROOT / "config" / "heads" / "heron_180.yaml")
SOUND_M_S = 343.0
FAR_M = np.array([50.0, 100.0])


def test_target_strengths():
    # R. J. Urick, Principles of Underwater Sound, table 9.1: plane r^2/4, sphere a^2/4 and convex
    # surface a1 a2 / 4 (with one radius growing to r: a pole gives a r / 4 in place of it).
    np.testing.assert_allclose(mirror_amplitude(FAR_M, FAR_M), 0.5 / FAR_M)
    a = 0.05
    np.testing.assert_allclose(mirror_amplitude(FAR_M, FAR_M, a, a), a / 2 / FAR_M**2, rtol=2e-3)
    pole = mirror_amplitude(FAR_M, FAR_M, a)
    np.testing.assert_allclose(pole, math.sqrt(a) / 2 / FAR_M**1.5, rtol=2e-3)


def test_mirror_is_reciprocal_and_keeps_energy():
    one = mirror_amplitude(np.array([0.7]), np.array([2.1]), 0.1, np.inf, 0.8)
    other = mirror_amplitude(np.array([2.1]), np.array([0.7]), 0.1, np.inf, 0.8)
    np.testing.assert_allclose(one, other)
    # Rays that leave within a small angle pass through an area that grows as 1/amplitude^2: the
    # exact spread of a narrow beam of rays on a circle, traced one by one.
    a, r = 0.1, 1.0
    angle = 1e-4
    hit = np.array([r + a - a * math.cos(b := angle * r / a), a * math.sin(b)])
    normal = np.array([-math.cos(b), math.sin(b)])
    ray = hit / np.hypot(*hit)
    back = ray - 2.0 * (ray @ normal) * normal
    spread = abs(hit[1] + back[1] / -back[0] * hit[0]) / angle  # m per rad, in the plane
    expected = 1.0 / math.sqrt(spread * 2.0 * r)
    assert float(mirror_amplitude(np.array(r), np.array(r), a)) == pytest.approx(expected, rel=1e-3)


def test_edge_against_half_plane_formula():
    # Keller's coefficient for a hard half plane, backscatter (Keller 1962; sec form in
    # textbooks): |D| = 1 / (2 sqrt(2 pi k)) |1 + 1 / cos(angle)|.
    k = 2.0 * math.pi * 40e3 / SOUND_M_S
    r = np.array([1.0, 2.0, 2.0])
    angle = np.radians([20.0, 50.0, 160.0])
    expected = np.abs(1.0 + 1.0 / np.cos(angle)) / (2.0 * np.sqrt(2.0 * math.pi * k))
    ours = np.abs(edge_amplitude(r, angle, np.full(3, 2.0 * math.pi), k))
    np.testing.assert_allclose(ours, expected / (r * np.sqrt(2.0 * r)), rtol=1e-9)


def test_edge_is_weaker_than_a_wall_and_never_more_than_half():
    angle = np.linspace(0.0, 1.5 * math.pi, 500)
    k = 2.0 * math.pi * 40e3 / SOUND_M_S
    amplitude = np.abs(edge_amplitude(np.full(500, 1.5), angle, np.full(500, 1.5 * math.pi), k))
    assert np.all(amplitude <= 0.5 * 0.5 / 1.5 + 1e-12)
    assert np.median(amplitude) < 0.1 * 0.5 / 1.5


def test_glancing_point_is_the_shortest_way():
    rng = np.random.default_rng(2)
    for _ in range(20):
        source, ear = rng.uniform(-0.1, 0.1, (2, 1, 2))
        centre = np.array([[rng.uniform(0.4, 3.0), rng.uniform(-1.0, 1.0)]])
        radius = np.array([rng.uniform(0.01, 0.2)])

        def way(angle, source=source, ear=ear, centre=centre, radius=radius):
            p = centre[0] + radius[0] * np.array([math.cos(angle), math.sin(angle)])
            return math.dist(source[0], p) + math.dist(p, ear[0])

        towards = math.atan2(-centre[0, 1], -centre[0, 0])
        best = minimize_scalar(
            way, bounds=(towards - 0.5, towards + 0.5), method="bounded", options={"xatol": 1e-9}
        )
        point = glancing_point(source, ear, centre, radius)[0]
        ours = math.dist(source[0], point) + math.dist(point, ear[0])
        assert ours == pytest.approx(best.fun, abs=1e-6)
        assert math.dist(point, centre[0]) == pytest.approx(radius[0])


def test_mirrored_twice_is_the_point():
    points, on = np.random.default_rng(3).uniform(-2, 2, (2, 9, 2))
    normals = np.column_stack([np.full(9, 0.6), np.full(9, 0.8)])
    image = mirrored(points, on, normals)
    np.testing.assert_allclose(mirrored(image, on, normals), points)
    np.testing.assert_allclose(mirrored(on, on, normals), on)


def paths_of(world, pose=Pose2(), velocity=(0.0, 0.0), turn=0.0):  # noqa: B008
    return trace(world, HEAD, HeadMotion(pose, velocity, turn), SOUND_M_S, 6.0)


def only(paths, kind):
    index = [i for i, k in enumerate(paths.kind) if k == kind]
    assert len(index) == 1, paths.kind
    return index[0]


def wall(distance_m, half_m=3.0):
    return World("w", (Surface("w", "wall", (distance_m, -half_m), (distance_m, half_m)),))


def test_wall_way_by_fermat():
    paths = paths_of(wall(1.2))
    i = only(paths, "wall")
    assert paths.range_m[i] == pytest.approx(1.2)
    assert paths.bearing_rad[i] == pytest.approx(0.0)
    for ear, receiver in enumerate(HEAD.receivers):

        def way(p, receiver=receiver):
            point = (1.2, p[0], p[1])
            return math.dist(HEAD.transmitter.position_m, point) + math.dist(
                point, receiver.position_m
            )

        best = minimize(way, [0.0, 0.0], tol=1e-14).fun
        assert paths.length_m[ear, i] == pytest.approx(best, abs=1e-9)
        assert paths.tof_s[ear, i] == pytest.approx(best / SOUND_M_S, abs=1e-11)


def test_all_but_multipath_keep_range_and_bearing_when_the_head_moves_along():
    world = World("p", (), (Round("p", "pole", (3.0, 2.0), 0.05),))
    pose = Pose2(1.0, 1.5, 0.4)
    paths = paths_of(world, pose)
    dx, dy = 2.0, 0.5
    assert paths.range_m[0] == pytest.approx(math.hypot(dx, dy) - 0.05)
    assert paths.bearing_rad[0] == pytest.approx(math.atan2(dy, dx) - 0.4)


def test_left_ear_is_nearer_to_what_is_on_the_left():
    paths = paths_of(World("p", (), (Round("p", "pole", (1.0, 0.5), 0.05),)))
    assert paths.tof_s[0, 0] < paths.tof_s[1, 0]
    assert paths.bearing_rad[0] > 0.0
    peaks = Synthesis(HEAD, SimulatorConfig()).peaks(paths)
    contrast = float((peaks[1] - peaks[0])[0] / peaks.sum())
    # Splayed ears, common practice: (R - L) / (R + L) runs from -1 to 1, 0 straight ahead.
    assert -0.9 < contrast < -0.3


def room():
    data = {"name": "r", "surfaces": [{"id": "r", "kind": "wall", "points_m": [
        [3.0, -3.0], [3.0, 2.0], [-1.0, 2.0]]}]}  # fmt: skip
    return world_from_mapping(data)


def test_inside_corner_answers_like_a_wall_at_its_distance():
    paths = paths_of(room(), Pose2(0.0, 0.0, math.atan2(2.0, 3.0)))
    i = only(paths, "corner")
    distance = math.hypot(3.0, 2.0)
    assert paths.range_m[i] == pytest.approx(distance)
    assert paths.bearing_rad[i] == pytest.approx(0.0, abs=1e-9)
    wall_paths = paths_of(wall(distance))
    j = only(wall_paths, "wall")
    np.testing.assert_allclose(
        np.abs(paths.amplitude[:, i]), np.abs(wall_paths.amplitude[:, j]), rtol=0.02
    )
    # Two bounces swap left and right, one does not: the ways agree up to the baseline.
    assert paths.length_m[0, i] == pytest.approx(2.0 * distance, abs=0.02)


def test_outside_corner_is_a_weak_edge():
    paths = paths_of(room(), Pose2(4.0, 3.0, math.pi + 0.8))
    i = int(np.argmin(paths.range_m))
    assert paths.kind[i] == "edge"
    assert paths.range_m[i] == pytest.approx(math.sqrt(2.0))
    assert abs(paths.amplitude[:, i]).max() < 0.1 * 0.5 / math.sqrt(2.0)


def test_hidden_obstacles_are_silent():
    world = World("h", wall(1.0, 0.5).surfaces, (Round("p", "pole", (2.0, 0.0), 0.05),))
    assert "pole" not in paths_of(world).kind
    assert "pole" in paths_of(world, Pose2(1.5, 0.0, 0.0)).kind


def test_wall_and_pole():
    world = World("m", wall(3.0).surfaces, (Round("p", "pole", (2.0, 1.0), 0.05),))
    paths = paths_of(world)
    multi = [i for i, kind in enumerate(paths.kind) if kind == "multipath"]
    assert len(multi) == 2

    def way(angle):  # from the mirror image at (6, 0) over the pole's surface to the head
        p = (2.0 + 0.05 * math.cos(angle), 1.0 + 0.05 * math.sin(angle))
        return math.dist((6.0, 0.0), p) + math.dist(p, (0.0, 0.0))

    expected = minimize_scalar(way, bounds=(-3.0, -0.5), method="bounded").fun
    for i in multi:
        assert paths.length_m[:, i].mean() == pytest.approx(expected, abs=0.01)
        assert paths.range_m[i] == pytest.approx(0.5 * expected, abs=0.01)
    assert paths.length_m[0, multi].sum() == pytest.approx(paths.length_m[1, multi].sum(), rel=0.01)


def test_nothing_beyond_the_range_and_nothing_in_an_empty_world():
    assert paths_of(wall(6.5)).kind == ()
    empty = paths_of(World("e"))
    assert empty.amplitude.shape == (2, 0)


@pytest.mark.parametrize("speed_m_s", [0.5, -1.0])
def test_doppler_of_a_head_that_drives_at_a_wall(speed_m_s):
    # Both source and receiver approach a resting mirror: (c + v) / (c - v), any textbook.
    paths = paths_of(wall(2.0), velocity=(speed_m_s, 0.0))
    i = only(paths, "wall")
    expected = (SOUND_M_S + speed_m_s) / (SOUND_M_S - speed_m_s)
    np.testing.assert_allclose(paths.doppler[:, i], expected, rtol=1e-5)
    assert paths.radial_velocity_m_s[i] == pytest.approx(-speed_m_s)
    # Emission and reception happen at different places: tof (c - v)... = 2 d + v-dependent part.
    still = paths_of(wall(2.0)).tof_s[0, 0]
    moving = paths.tof_s[0, i]
    assert moving * SOUND_M_S == pytest.approx(still * SOUND_M_S - speed_m_s * moving, abs=2e-5)
    assert paths.range_m[i] == pytest.approx(2.0 - speed_m_s * moving / 2.0, abs=1e-5)


def test_turning_head_sees_obstacles_move_across():
    world = World("p", (), (Round("p", "pole", (3.0, 0.0), 0.05),))
    paths = paths_of(world, turn=1.0)
    assert paths.bearing_rad[0] == pytest.approx(-0.5 * paths.tof_s[:, 0].mean(), rel=1e-3)
    assert paths.radial_velocity_m_s[0] == pytest.approx(0.0)
    assert paths.doppler[0, 0] != paths.doppler[1, 0]


@needs_echo_data
@pytest.mark.parametrize("name", ["drive_room", "drive_corridor"])
def test_geometry_and_strength_against_the_shared_drives(name):
    """Ranges, bearings and level differences of their truth, computed independently of ours."""
    import json

    from shared_units import unit_of

    from ros_echo_perception.sources.bench import bench_source
    from ros_echo_perception.sources.recording import load_recording

    recording = load_recording(ECHO_DATA / "drives" / name)
    data = json.loads((ECHO_DATA / "drives" / f"{name}_world.json").read_text())
    surfaces = [
        Surface(s["id"], s["kind"], tuple(s["p0"]), tuple(s["p1"])) for s in data["segments"]
    ]
    rounds = [Round(c["id"], c["kind"], tuple(c["centre"]), c["radius_m"]) for c in data["circles"]]
    world = World(name, tuple(surfaces), tuple(rounds))
    truth = recording.truth
    config = SimulatorConfig(
        temperature_c=truth["temperature_c"], relative_humidity=truth["relative_humidity"]
    )
    unit = unit_of(recording)
    synthesis = Synthesis(unit, config)
    assert bench_source(unit, world, config).speed_of_sound_m_s == synthesis.speed_of_sound_m_s
    levels = {}
    for ping in truth["pings"][::12]:
        motion = HeadMotion(Pose2(*ping["head_pose"]))
        paths = trace(world, unit, motion, synthesis.speed_of_sound_m_s, 5.3)
        peaks = 20.0 * np.log10(synthesis.peaks(paths) + 1e-12)
        for reflector in ping["reflectors"]:
            if not reflector["scored"] or max(reflector["snr_db"]) < 15.0:
                continue
            ear = int(np.argmax(reflector["snr_db"]))
            same = [
                i for i, kind in enumerate(paths.kind)
                if kind == reflector["kind"]
                and abs(paths.range_m[i] - reflector["range_m"]) < 0.02
                and abs(paths.bearing_rad[i] - reflector["bearing_rad"]) < 0.05
            ]  # fmt: skip
            assert len(same) == 1, reflector
            levels.setdefault(reflector["kind"], []).append(
                peaks[ear, same[0]] - reflector["snr_db"][ear]
            )
    assert {"wall", "pole", "edge", "corner"} <= set(levels)
    medians = {kind: float(np.median(values)) for kind, values in levels.items()}
    # One constant (their noise and level) fits walls, poles, edges and corners alike.
    assert max(medians.values()) - min(medians.values()) < 1.0, medians
