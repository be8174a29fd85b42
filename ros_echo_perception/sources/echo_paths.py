"""All ways on which sound gets from the transmitter over an obstacle to the ears.

Everything is in one horizontal plane, obstacles are endless upwards, and an obstacle is either
in sight of the head or not. The transmitter is where it is at the emission, the receiver where
it is when the sound arrives, so echoes of a moving head have the right delay and Doppler shift.
"""

from __future__ import annotations

import math
from dataclasses import dataclass
from typing import NamedTuple

import numpy as np

from ..core.head import Head, Transducer
from ..core.types import ComplexArray, FloatArray, Pose2
from .candidates import Candidates, IndexArray, find_candidates
from .scattering import edge_amplitude, glancing_point, mirror_amplitude, mirrored
from .world import World


@dataclass(frozen=True)
class HeadMotion:
    """Pose and velocity of the head's reference point in the world at the emission."""

    pose: Pose2
    velocity_m_s: tuple[float, float] = (0.0, 0.0)
    turn_rad_s: float = 0.0

    @property
    def moving(self) -> bool:
        """Whether the head moves or turns at all."""
        return any(self.velocity_m_s) or self.turn_rad_s != 0.0

    def position(self, offset_m: tuple[float, ...], after_s: FloatArray) -> FloatArray:
        """Where a point of the head is some time after the emission, shape (n, 2)."""
        yaw = self.pose.yaw_rad + self.turn_rad_s * after_s
        c, s = np.cos(yaw), np.sin(yaw)
        x = self.pose.x_m + self.velocity_m_s[0] * after_s + c * offset_m[0] - s * offset_m[1]
        y = self.pose.y_m + self.velocity_m_s[1] * after_s + s * offset_m[0] + c * offset_m[1]
        return np.column_stack([x, y])

    def velocity(self, offset_m: tuple[float, ...]) -> FloatArray:
        """Velocity of a point of the head, shape (2,)."""
        c, s = math.cos(self.pose.yaw_rad), math.sin(self.pose.yaw_rad)
        rx, ry = c * offset_m[0] - s * offset_m[1], s * offset_m[0] + c * offset_m[1]
        vx, vy = self.velocity_m_s
        return np.array([vx - self.turn_rad_s * ry, vy + self.turn_rad_s * rx])


@dataclass(frozen=True)
class EchoPaths:
    """All echoes of one ping; n paths, per-ear arrays have shape (2, n).

    Attributes
    ----------
    kind, id
        Of the obstacle; both ways over a wall and a pole share one id.
    range_m, bearing_rad, radial_velocity_m_s
        Of the point that reflects, seen from the reference point when the sound reaches it.
    length_m, tof_s
        Length of the way and time of flight to each ear.
    departure_rad, arrival_rad
        Where the way leaves the transmitter to and comes to each ear from, in the head's frame.
    amplitude
        Complex, of spreading and scattering; beams and absorption are not in it (`path_filter`).
    doppler
        Received over emitted frequency.
    """

    kind: tuple[str, ...]
    id: tuple[str, ...]
    range_m: FloatArray
    bearing_rad: FloatArray
    radial_velocity_m_s: FloatArray
    length_m: FloatArray
    tof_s: FloatArray
    departure_rad: FloatArray
    arrival_rad: FloatArray
    amplitude: ComplexArray
    doppler: FloatArray


class _Rays(NamedTuple):
    """Ways of one ear: horizontal lengths, amplitudes, and where they leave and come from."""

    length: FloatArray
    amplitude: ComplexArray
    departure: FloatArray
    arrival: FloatArray


def trace(
    world: World, head: Head, motion: HeadMotion, speed_of_sound_m_s: float, max_range_m: float
) -> EchoPaths:
    """All echoes up to a range.

    Parameters
    ----------
    head
        The individual unit: true positions and directions.
    """
    c = speed_of_sound_m_s
    eye = np.array([motion.pose.x_m, motion.pose.y_m])
    found = find_candidates(world, eye, max_range_m)
    ears = [_ear(world, head, ear, motion, c, found) for ear in head.receivers]
    reflect_s = 0.5 * (ears[0].tof + ears[1].tof) * 0.5
    at = motion.position((0.0, 0.0), reflect_s)
    way = _points(world, found, at) - at
    distance = np.hypot(way[:, 0], way[:, 1])
    yaw = motion.pose.yaw_rad + motion.turn_rad_s * reflect_s
    bearing = np.arctan2(way[:, 1], way[:, 0]) - yaw
    n_multi = 2 * len(found.multi_round)
    if n_multi:  # the second-order way is reported at the range it seems to have
        distance[-n_multi:] = 0.25 * c * (ears[0].tof + ears[1].tof)[-n_multi:]
    return EchoPaths(
        kind=found.kinds,
        id=found.ids,
        range_m=distance,
        bearing_rad=np.remainder(bearing + np.pi, 2.0 * np.pi) - np.pi,
        radial_velocity_m_s=-(way @ np.array(motion.velocity_m_s))
        / np.maximum(np.hypot(way[:, 0], way[:, 1]), 1e-9),
        length_m=np.array([ear.length for ear in ears]),
        tof_s=np.array([ear.tof for ear in ears]),
        departure_rad=np.array([ear.departure for ear in ears]),
        arrival_rad=np.array([ear.arrival for ear in ears]),
        amplitude=np.array([ear.amplitude for ear in ears]),
        doppler=np.array([ear.doppler for ear in ears]),
    )


class _Ear(NamedTuple):
    length: FloatArray
    tof: FloatArray
    departure: FloatArray
    arrival: FloatArray
    amplitude: ComplexArray
    doppler: FloatArray


def _ear(
    world: World, head: Head, ear: Transducer, motion: HeadMotion, c: float, found: Candidates
) -> _Ear:
    n = len(found.ids)
    sender = head.transmitter
    source = motion.position(sender.position_m, np.zeros(n))
    wave_number = 2.0 * math.pi * head.carrier_hz / c
    height = sender.position_m[2] - ear.position_m[2]
    tof: FloatArray = np.zeros(n)
    before: FloatArray = tof
    # The receiver's place depends on the time of flight and the other way round.
    for _ in range(2 if motion.moving else 1):
        rays = _rays(world, found, source, motion.position(ear.position_m, tof), wave_number)
        before, tof = tof, np.hypot(rays.length, height) / c
    towards = (rays.arrival @ motion.velocity(ear.position_m)) / _length(rays.arrival)
    if motion.moving:  # one Newton step; the receiver shortens the way while it drives at it
        tof = (c * tof + towards * before) / (c + towards)
    leaving = np.arctan2(rays.departure[:, 1], rays.departure[:, 0]) - motion.pose.yaw_rad
    coming = np.arctan2(rays.arrival[:, 1], rays.arrival[:, 0]) - motion.pose.yaw_rad
    coming = coming - motion.turn_rad_s * tof
    ahead = (rays.departure @ motion.velocity(sender.position_m)) / _length(rays.departure)
    doppler = np.asarray((c + towards) / (c - ahead))
    return _Ear(c * tof, tof, leaving, coming, rays.amplitude, doppler)


def _rays(
    world: World, found: Candidates, source: FloatArray, ear: FloatArray, wave_number: float
) -> _Rays:
    """Rays in the order walls, rounds, edges, corners, both ways of each wall and pole."""
    parts: list[_Rays] = []
    first = 0

    def take(count: int) -> tuple[FloatArray, FloatArray]:
        nonlocal first
        first += count
        return source[first - count : first], ear[first - count : first]

    if len(found.wall):
        parts.append(_wall_rays(world, found, *take(len(found.wall))))
    if len(found.round):
        parts.append(_round_rays(world, found.round, *take(len(found.round))))
    if len(found.edge_point):
        parts.append(_edge_rays(found, *take(len(found.edge_point)), wave_number))
    if len(found.corner_point):
        parts.append(_corner_rays(found.corner_point, *take(len(found.corner_point))))
    if len(found.multi_round):
        s, e = take(len(found.multi_round))
        parts.append(_multi_rays(world, found, s, e))
        back = _multi_rays(world, found, *reversed(take(len(found.multi_round))))
        parts.append(_Rays(back.length, back.amplitude, back.arrival, back.departure))
    if not parts:
        nothing = np.zeros((0, 2))
        return _Rays(np.zeros(0), np.zeros(0, complex), nothing, nothing)
    return _Rays(*(np.concatenate(group) for group in zip(*parts, strict=True)))


def _wall_rays(world: World, found: Candidates, source: FloatArray, ear: FloatArray) -> _Rays:
    on_wall, normals = world.starts[found.wall], world.normals[found.wall]
    arrival = mirrored(source, on_wall, normals) - ear
    length = _length(arrival)
    departure = mirrored(ear, on_wall, normals) - source
    return _Rays(length, (1.0 / length).astype(complex), departure, arrival)


def _round_rays(world: World, index: IndexArray, source: FloatArray, ear: FloatArray) -> _Rays:
    radius = world.radii[index]
    point = glancing_point(source, ear, world.centres[index], radius)
    departure, arrival = point - source, point - ear
    way_in, way_out = _length(departure), _length(arrival)
    cos_twice = np.sum(departure * arrival, axis=1) / (way_in * way_out)
    cos_incidence = np.sqrt(np.clip(0.5 + 0.5 * cos_twice, 1e-6, 1.0))
    upright = np.where([world.rounds[i].kind == "sphere" for i in index], radius, np.inf)
    amplitude = mirror_amplitude(way_in, way_out, radius, upright, cos_incidence)
    return _Rays(way_in + way_out, amplitude.astype(complex), departure, arrival)


def _edge_rays(found: Candidates, source: FloatArray, ear: FloatArray, wave_number: float) -> _Rays:
    departure, arrival = found.edge_point - source, found.edge_point - ear
    length = _length(departure) + _length(arrival)
    amplitude = edge_amplitude(
        0.5 * length, found.edge_angle_rad, found.edge_exterior_rad, wave_number
    )
    return _Rays(length, amplitude, departure, arrival)


def _corner_rays(point: FloatArray, source: FloatArray, ear: FloatArray) -> _Rays:
    """Both walls of a right angle together mirror every point through the corner."""
    departure, arrival = 2.0 * point - ear - source, 2.0 * point - source - ear
    length = _length(arrival)
    return _Rays(length, (1.0 / length).astype(complex), departure, arrival)


def _multi_rays(world: World, found: Candidates, source: FloatArray, ear: FloatArray) -> _Rays:
    """Transmitter, wall, pole, ear: the pole is hit by the transmitter's mirror image."""
    on_wall, normals = world.starts[found.multi_wall], world.normals[found.multi_wall]
    rays = _round_rays(world, found.multi_round, mirrored(source, on_wall, normals), ear)
    point = ear + rays.arrival
    return rays._replace(departure=mirrored(point, on_wall, normals) - source)


def _points(world: World, found: Candidates, eye: FloatArray) -> FloatArray:
    """The nearest point of each obstacle from each place of the head, shape (n, 2)."""
    multi = np.concatenate([found.multi_round, found.multi_round])
    rounds = np.concatenate([found.round, multi])
    n_wall, n_round = len(found.wall), len(found.round)
    eye_wall = eye[:n_wall]
    foot = 0.5 * (
        eye_wall + mirrored(eye_wall, world.starts[found.wall], world.normals[found.wall])
    )
    eye_round = np.concatenate([eye[n_wall : n_wall + n_round], eye[len(eye) - len(multi) :]])
    outward = eye_round - world.centres[rounds]
    near = world.centres[rounds] + outward * (world.radii[rounds] / _length(outward))[:, None]
    return np.concatenate(
        [foot, near[:n_round], found.edge_point, found.corner_point, near[n_round:]]
    )


def _length(vectors: FloatArray) -> FloatArray:
    return np.asarray(np.maximum(np.hypot(vectors[:, 0], vectors[:, 1]), 1e-9))
