"""Which obstacles can answer a ping: near enough, facing the head, and in sight."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from ..core.types import FloatArray
from .scattering import mirrored
from .world import World

IndexArray = NDArray[np.intp]
_RIGHT_ANGLE_COSINE = 0.02


@dataclass(frozen=True)
class Candidates:
    """Obstacles in the order walls, rounds, edges, corners, then wall-and-pole twice."""

    kinds: tuple[str, ...]
    ids: tuple[str, ...]
    wall: IndexArray
    round: IndexArray
    edge_point: FloatArray
    edge_angle_rad: FloatArray
    edge_exterior_rad: FloatArray
    corner_point: FloatArray
    multi_wall: IndexArray
    multi_round: IndexArray


def find_candidates(world: World, eye: FloatArray, max_range_m: float) -> Candidates:
    """Everything that answers a head at ``eye``, shape (2,), within a range."""
    wall, foot = _walls(world, eye, max_range_m)
    rounds, near = _rounds(world, eye, max_range_m)
    vertex, is_corner, angle, exterior = _vertices(world, eye, max_range_m)
    vertex_point = _positions(world)[vertex]
    targets = np.concatenate([foot, near, vertex_point])
    seen = world.sight(np.broadcast_to(eye, targets.shape), targets)
    wall_seen, round_seen, vertex_seen = np.split(seen, [len(wall), len(wall) + len(rounds)])
    wall, rounds = wall[wall_seen], rounds[round_seen]
    edge, corner = vertex_seen & ~is_corner, vertex_seen & is_corner
    poles = np.array([i for i in rounds if world.rounds[i].kind == "pole"], np.intp)
    multi_wall, multi_round = _wall_and_pole(world, eye, poles, max_range_m)
    groups = [
        [(world.surfaces[i].kind, world.surfaces[i].id) for i in wall],
        [(world.rounds[i].kind, world.rounds[i].id) for i in rounds],
        [("edge", world.vertices[i].id) for i in vertex[edge]],
        [("corner", world.vertices[i].id) for i in vertex[corner]],
        2 * [
            ("multipath", f"{world.surfaces[w].id}+{world.rounds[r].id}")
            for w, r in zip(multi_wall, multi_round, strict=True)
        ],
    ]  # fmt: skip
    names = [name for group in groups for name in group]
    return Candidates(
        kinds=tuple(kind for kind, _ in names),
        ids=tuple(name for _, name in names),
        wall=wall,
        round=rounds,
        edge_point=vertex_point[edge],
        edge_angle_rad=angle[edge],
        edge_exterior_rad=exterior[edge],
        corner_point=vertex_point[corner],
        multi_wall=multi_wall,
        multi_round=multi_round,
    )


def _walls(world: World, eye: FloatArray, max_range_m: float) -> tuple[IndexArray, FloatArray]:
    """Surfaces with the foot of the perpendicular between their ends."""
    way = eye - world.starts
    along = np.sum(way * world.directions, axis=1)
    height = np.abs(np.sum(way * world.normals, axis=1))
    index = np.flatnonzero(
        (along > 0.0) & (along < world.lengths) & (height < max_range_m) & (height > 1e-3)
    )
    return index, world.starts[index] + along[index, None] * world.directions[index]


def _rounds(world: World, eye: FloatArray, max_range_m: float) -> tuple[IndexArray, FloatArray]:
    outward = eye - world.centres
    distance = np.hypot(outward[:, 0], outward[:, 1])
    index = np.flatnonzero((distance - world.radii < max_range_m) & (distance > world.radii + 1e-3))
    share = world.radii[index] / distance[index]
    return index, world.centres[index] + share[:, None] * outward[index]


def _positions(world: World) -> FloatArray:
    return np.array([v.position_m for v in world.vertices], float).reshape(-1, 2)


def _vertices(
    world: World, eye: FloatArray, max_range_m: float
) -> tuple[IndexArray, NDArray[np.bool_], FloatArray, FloatArray]:
    """Vertices that answer: index, whether it is a corner, angle from a face, open angle.

    Inside the angle of two surfaces a right angle is a corner (double bounce), any other angle
    is silent. Outside, and around a free end, it is an edge.
    """
    first, second, free = _directions(world)
    way = eye - _positions(world)
    distance = np.hypot(way[:, 0], way[:, 1])
    toward = way / np.maximum(distance, 1e-9)[:, None]
    turn = _cross(first, second)
    straight = ~free & (np.abs(turn) < 1e-3)
    safe = np.where(np.abs(turn) < 1e-3, 1.0, turn)
    inside = ~free & (_cross(toward, second) / safe > 0.0) & (_cross(first, toward) / safe > 0.0)
    cosine = np.sum(first * second, axis=1)
    right_angle = np.abs(cosine) < _RIGHT_ANGLE_COSINE
    from_first = np.arccos(np.clip(np.sum(toward * first, axis=1), -1.0, 1.0))
    beyond = ~free & (_cross(first, toward) * turn > 0.0)
    angle = np.where(beyond, 2.0 * np.pi - from_first, from_first)
    inner = np.where(free, 0.0, np.arccos(np.clip(cosine, -1.0, 1.0)))
    answers = ~straight & (~inside | right_angle) & (distance < max_range_m) & (distance > 1e-3)
    index = np.flatnonzero(answers)
    return index, inside[index], angle[index], 2.0 * np.pi - inner[index]


def _directions(world: World) -> tuple[FloatArray, FloatArray, NDArray[np.bool_]]:
    first = np.array([v.along_first for v in world.vertices], float).reshape(-1, 2)
    free = np.array([v.along_second is None for v in world.vertices], bool)
    second = np.array([v.along_second or v.along_first for v in world.vertices], float).reshape(
        -1, 2
    )
    return first, second, free


def _wall_and_pole(
    world: World, eye: FloatArray, poles: IndexArray, max_range_m: float
) -> tuple[IndexArray, IndexArray]:
    """Pairs of a wall and a pole in sight with a free way head, wall, pole."""
    n_walls = len(world.surfaces)
    if not n_walls or not len(poles):
        return np.zeros(0, np.intp), np.zeros(0, np.intp)
    wall = np.tile(np.arange(n_walls), len(poles))
    pole = np.repeat(poles, n_walls)
    image = mirrored(np.broadcast_to(eye, (len(wall), 2)), world.starts[wall], world.normals[wall])
    way = world.centres[pole] - image
    distance = np.hypot(way[:, 0], way[:, 1])
    point = world.centres[pole] - (world.radii[pole] / distance)[:, None] * way
    normal, start = world.normals[wall], world.starts[wall]
    before = np.sum((eye - start) * normal, axis=1)
    after = np.sum((point - start) * normal, axis=1)
    hit = image + (before / np.where(before + after == 0.0, 1.0, before + after))[:, None] * (
        point - image
    )
    along = np.sum((hit - start) * world.directions[wall], axis=1)
    direct = np.hypot(*(world.centres[pole] - eye).T)
    keep = (before * after > 0.0) & (along > 0.0) & (along < world.lengths[wall])
    keep &= 0.5 * (distance + direct) - world.radii[pole] < max_range_m
    index = np.flatnonzero(keep)
    eyes = np.broadcast_to(eye, (len(index), 2))
    hit, point = hit[index], point[index]
    free = world.sight(np.concatenate([eyes, hit]), np.concatenate([hit, point]))
    index = index[free[: len(index)] & free[len(index) :]]
    return wall[index], pole[index]


def _cross(a: FloatArray, b: FloatArray) -> FloatArray:
    return np.asarray(a[:, 0] * b[:, 1] - a[:, 1] * b[:, 0])
