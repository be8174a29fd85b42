"""The simulated world: surfaces, poles and spheres in a plane, endless upwards.

A world file is YAML; ``config/worlds/demo_room.yaml`` shows every key. All in metres and radians.
"""

from __future__ import annotations

import math
from dataclasses import dataclass
from functools import cached_property
from pathlib import Path
from typing import Any

import numpy as np

from ..core.errors import FileFormatError, refuse
from ..core.fields import Fields, read_yaml
from ..core.types import FloatArray

SURFACE_KINDS = ("wall", "glass", "box")
LIMIT_M = 1000.0
Point = tuple[float, float]


@dataclass(frozen=True)
class Surface:
    """A straight, smooth, hard surface from ``start_m`` to ``end_m``."""

    id: str
    kind: str
    start_m: Point
    end_m: Point


@dataclass(frozen=True)
class Round:
    """A pole (vertical cylinder) or a sphere at the height of the head."""

    id: str
    kind: str
    centre_m: Point
    radius_m: float


@dataclass(frozen=True)
class Vertex:
    """Where one surface ends or two meet; the directions point away along the surfaces."""

    id: str
    position_m: Point
    along_first: Point
    along_second: Point | None


class World:
    """Everything that reflects, with its geometry as arrays for the simulator.

    Parameters
    ----------
    name
        For messages and files.
    surfaces, rounds
        In the order in which they are listed in truth data.

    Examples
    --------
    >>> wall = Surface("w", "wall", (2.0, -1.0), (2.0, 1.0))
    >>> world = World("demo", (wall,), ())
    >>> bool(world.sight(np.zeros((1, 2)), np.array([[3.0, 0.0]]))[0])
    False
    """

    def __init__(
        self, name: str, surfaces: tuple[Surface, ...] = (), rounds: tuple[Round, ...] = ()
    ) -> None:
        self.name = name
        self.surfaces = surfaces
        self.rounds = rounds
        self.vertices = _vertices(surfaces)
        self.starts = np.array([s.start_m for s in surfaces], float).reshape(-1, 2)
        self.ends = np.array([s.end_m for s in surfaces], float).reshape(-1, 2)
        span = self.ends - self.starts
        self.lengths = np.hypot(span[:, 0], span[:, 1])
        self.directions = span / self.lengths[:, None]
        self.normals = np.column_stack([-self.directions[:, 1], self.directions[:, 0]])
        self.centres = np.array([r.centre_m for r in rounds], float).reshape(-1, 2)
        self.radii = np.array([r.radius_m for r in rounds], float)

    @cached_property
    def bounds_m(self) -> tuple[float, float, float, float]:
        """Smallest x and y, largest x and y; zeros for an empty world."""
        low, high = self.centres - self.radii[:, None], self.centres + self.radii[:, None]
        points = np.vstack([self.starts, self.ends, low, high])
        if not len(points):
            return 0.0, 0.0, 0.0, 0.0
        (x0, y0), (x1, y1) = points.min(axis=0), points.max(axis=0)
        return float(x0), float(y0), float(x1), float(y1)

    def sight(self, eye: FloatArray, target: FloatArray) -> Any:
        """Whether the straight way from each eye to its target is free.

        The last and the first centimetre do not count, so that a point on a surface is seen.

        Parameters
        ----------
        eye, target : shape (n, 2).

        Returns
        -------
        Booleans, shape (n,).
        """
        way = target - eye
        length = np.maximum(np.hypot(way[:, 0], way[:, 1]), 1e-9)
        margin = 0.01 / length
        free = np.ones(len(way), bool)
        if len(self.starts):
            free &= ~self._crosses(eye, way, margin)
        if len(self.centres):
            free &= ~self._meets_round(eye, way, length, margin)
        return free

    def _crosses(self, eye: FloatArray, way: FloatArray, margin: FloatArray) -> Any:
        wx, wy = way[:, 0:1], way[:, 1:2]
        sx, sy = (self.ends - self.starts).T
        dx, dy = self.starts[:, 0] - eye[:, 0:1], self.starts[:, 1] - eye[:, 1:2]
        cross = wx * sy - wy * sx
        cross = np.where(np.abs(cross) < 1e-12, 1e-12, cross)
        along_way = (dx * sy - dy * sx) / cross
        along_surface = (dx * wy - dy * wx) / cross
        low, high = margin[:, None], 1.0 - margin[:, None]
        inside = (along_surface > 0.0) & (along_surface < 1.0)
        return np.any(inside & (along_way > low) & (along_way < high), axis=1)

    def _meets_round(
        self, eye: FloatArray, way: FloatArray, length: FloatArray, margin: FloatArray
    ) -> Any:
        dx = self.centres[:, 0] - eye[:, 0:1]
        dy = self.centres[:, 1] - eye[:, 1:2]
        unit = way / length[:, None] ** 2
        nearest = dx * unit[:, 0:1] + dy * unit[:, 1:2]
        nearest = np.clip(nearest, margin[:, None], 1.0 - margin[:, None])
        distance = np.hypot(dx - nearest * way[:, 0:1], dy - nearest * way[:, 1:2])
        return np.any(distance < self.radii, axis=1)


def _vertices(surfaces: tuple[Surface, ...]) -> tuple[Vertex, ...]:
    """The ends of all surfaces; ends that coincide are one vertex of two surfaces."""
    found: dict[Point, list[tuple[str, Point]]] = {}
    for surface in surfaces:
        (x0, y0), (x1, y1) = surface.start_m, surface.end_m
        length = math.hypot(x1 - x0, y1 - y0)
        along = ((x1 - x0) / length, (y1 - y0) / length)
        for n, point, direction in (
            (0, surface.start_m, along),
            (1, surface.end_m, (-along[0], -along[1])),
        ):
            key = (round(point[0], 4), round(point[1], 4))
            found.setdefault(key, []).append((f"{surface.id}/end{n}", direction))
    return tuple(
        Vertex(ends[0][0], point, ends[0][1], ends[1][1] if len(ends) == 2 else None)
        for point, ends in found.items()
        if len(ends) <= 2  # where three surfaces meet there is neither an edge nor a corner
    )


def load_world(path: str | Path) -> World:
    """Read a world file.

    Raises
    ------
    FileFormatError
        Naming the file, the field, the value and what is allowed.
    """
    return world_from_mapping(read_yaml(path), str(path))


def world_from_mapping(data: Any, file: str = "world") -> World:
    """A world from the contents of a world file; errors as in `load_world`."""
    fields = Fields(data, file)
    fields.only("name", "surfaces", "boxes", "poles", "spheres", "path")
    surfaces: list[Surface] = []
    for item in fields.sections("surfaces"):
        surfaces += _polyline(item)
    for item in fields.sections("boxes"):
        surfaces += _box(item)
    rounds = [_round(item, "pole") for item in fields.sections("poles")]
    rounds += [_round(item, "sphere") for item in fields.sections("spheres")]
    names = [s.id for s in surfaces] + [r.id for r in rounds]
    for name in names:
        if names.count(name) > 1:
            raise FileFormatError(refuse("id", name, "an id used only once", file=file))
    return World(fields.text("name"), tuple(surfaces), tuple(rounds))


def _polyline(fields: Fields) -> list[Surface]:
    fields.only("id", "kind", "points_m")
    allowed = "a list of at least two [x, y] points"
    points = fields.get("points_m", allowed)
    if not isinstance(points, list) or len(points) < 2:
        raise fields.refuse("points_m", points, allowed)
    corners = [_point(fields, "points_m", point) for point in points]
    kind = fields.text("kind", SURFACE_KINDS)
    return _surfaces(fields, fields.text("id"), kind, corners)


def _surfaces(fields: Fields, name: str, kind: str, corners: list[Point]) -> list[Surface]:
    surfaces = []
    for n in range(len(corners) - 1):
        if math.dist(corners[n], corners[n + 1]) < 0.01:
            raise fields.refuse("points_m", corners[n], "points at least 0.01 m apart")
        surfaces.append(Surface(f"{name}/{n}", kind, corners[n], corners[n + 1]))
    return surfaces


def _point(fields: Fields, name: str, value: Any) -> Point:
    x, y = Fields({name: value}, fields.file, fields.prefix).numbers(name, 2, -LIMIT_M, LIMIT_M)
    return x, y


def _box(fields: Fields) -> list[Surface]:
    fields.only("id", "centre_m", "size_m", "yaw_rad")
    cx, cy = fields.numbers("centre_m", 2, -LIMIT_M, LIMIT_M)
    width, depth = fields.numbers("size_m", 2, 0.02, 100.0)
    yaw = fields.number("yaw_rad", -math.pi, math.pi, 0.0)
    c, s = math.cos(yaw), math.sin(yaw)
    corners = []
    for u, v in ((-1, -1), (1, -1), (1, 1), (-1, 1), (-1, -1)):
        dx, dy = u * width / 2, v * depth / 2
        corners.append((round(cx + c * dx - s * dy, 6), round(cy + s * dx + c * dy, 6)))
    return _surfaces(fields, fields.text("id"), "box", corners)


def _round(fields: Fields, kind: str) -> Round:
    fields.only("id", "centre_m", "radius_m")
    x, y = fields.numbers("centre_m", 2, -LIMIT_M, LIMIT_M)
    return Round(fields.text("id"), kind, (x, y), fields.number("radius_m", 0.002, 5.0))
