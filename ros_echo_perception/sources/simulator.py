"""The simulator: a robot drives through a world and pings, and everything about it is known.

Reading order: `world`, `robot_path`, `candidates`, `echo_paths` (which ways the sound takes),
`scattering` (how strong), `path_filter` (beams and air over the band), `synthesis` (the sound at
the ears), `front_end` (the converter), `truth` (what an ideal observer would report). It
computes, it does not measure: real rooms have floors, furniture, wind and rough walls.
"""

from __future__ import annotations

import math
from collections.abc import Iterator, Sequence

import numpy as np

from ..core.errors import SourceError, refuse
from ..core.head import Head
from ..core.types import FloatArray, Pose2, RawEcho
from .base import Event, SourceInfo
from .echo_paths import EchoPaths, HeadMotion, trace
from .front_end import FULL_SCALE, FrontEnd
from .head_unit import individual_unit
from .robot_path import RobotPath, drifting_odometry
from .simulator_config import SimulatorConfig
from .synthesis import Synthesis
from .truth import PingTruth, TruthMaker
from .world import World


class SimulatorSource:
    """Raw echoes and odometry of a simulated robot; deterministic for given arguments.

    Parameters
    ----------
    head
        Nominal (or calibrated) head. With ``config.unit_error_scale`` the simulated unit, `unit`,
        differs from it.
    world
        What reflects. A sequence means a bench: ping k meets world k modulo their number.
    path
        Where the robot is.
    config
        Everything else.
    start_offset_s
        `events` leaves out this much of the beginning.
    """

    def __init__(
        self,
        head: Head,
        world: World | Sequence[World],
        path: RobotPath,
        config: SimulatorConfig | None = None,
        start_offset_s: float = 0.0,
    ) -> None:
        if not 0.0 <= start_offset_s < path.duration_s:
            allowed = f"0 to less than {path.duration_s:.3f} s, the length of the path"
            raise SourceError(refuse("start_offset_s", start_offset_s, allowed))
        self._start_s = start_offset_s
        self.config = config or SimulatorConfig()
        self.head = head
        self.unit = individual_unit(head, self.config.seed, self.config.unit_error_scale)
        self.worlds = (world,) if isinstance(world, World) else tuple(world)
        self.path = path
        self._synthesis = Synthesis(self.unit, self.config)
        self._front_end = FrontEnd(self.unit, self.config, self._synthesis.n_samples)
        self._truth = TruthMaker(self._synthesis, self._front_end)
        self.n_pings = max(1, math.floor((path.duration_s - self.config.record_s) * self._rate))
        self.odometry = drifting_odometry(
            path, self.config.seed, self.config.odometry_error_scale, self.config.odometry_rate_hz
        )
        self._jitter = np.random.default_rng([self.config.seed, 3]).uniform(-0.5, 0.5, self.n_pings)
        self._air_errors = _wandering(self.config.seed, self.n_pings, self._rate)

    @property
    def _rate(self) -> float:
        return self.config.ping_rate_hz

    @property
    def world(self) -> World:
        """The world of the first ping: the only one, unless this is a bench."""
        return self.worlds[0]

    @property
    def speed_of_sound_m_s(self) -> float:
        """The true one."""
        return self._synthesis.speed_of_sound_m_s

    @property
    def info(self) -> SourceInfo:
        """What is simulated."""
        return SourceInfo(
            kind="simulator",
            description=f"SIMULATED head {self.head.name} in world {self.world.name}, "
            f"seed {self.config.seed}",
            duration_s=self.path.duration_s - self._start_s,
            n_pings=self.n_pings - self._first_ping(),
            has_odometry=True,
            mount=self.config.mount,
        )

    def emission_time_s(self, k: int) -> float:
        """When ping k is emitted."""
        shift = 0.5 + self.config.interval_jitter * float(self._jitter[k])
        return (k + shift) / self._rate

    def true_pose(self, time_s: float) -> Pose2:
        """True pose of base_link in the world."""
        return self.path.pose(time_s)

    def head_motion(self, time_s: float) -> HeadMotion:
        """True pose and velocity of the head in the world."""
        base, mount = self.path.pose(time_s), self.config.mount
        forward, turn = self.path.velocity(time_s)
        c, s = math.cos(base.yaw_rad), math.sin(base.yaw_rad)
        ahead, aside = forward - turn * mount.y_m, turn * mount.x_m
        velocity = (c * ahead - s * aside, s * ahead + c * aside)
        return HeadMotion(base.compose(mount), velocity, turn)

    def echo(self, k: int) -> RawEcho:
        """Ping k as the head reports it."""
        rng = np.random.default_rng([self.config.seed, 5, k])
        volts = self._synthesis.echoes(self._paths(k)) + self._synthesis.crosstalk
        samples, flags = self._front_end.convert(volts, rng)
        temperature_c, humidity = self._readings(k)
        return RawEcho(
            samples=samples,
            sample_rate_hz=self.unit.sample_rate_hz,
            carrier_hz=self.unit.carrier_hz,
            burst_cycles=self.config.burst_cycles,
            emission_time_s=self.emission_time_s(k),
            first_sample_offset_s=-self._synthesis.emission_sample / self.unit.sample_rate_hz,
            full_scale=FULL_SCALE,
            temperature_c=temperature_c,
            relative_humidity=humidity,
            sequence=k,
            flags=flags,
            gain=self._front_end.gain,
        )

    def truth(self, k: int) -> PingTruth:
        """All that reflected ping k."""
        pose = self.head_motion(self.emission_time_s(k)).pose
        return self._truth.make(self._paths(k), pose)

    def events(self) -> Iterator[Event]:
        """Pings and odometry in the order of time."""
        odometry = (sample for sample in self.odometry if sample.time_s >= self._start_s)
        waiting = next(odometry, None)
        for k in range(self._first_ping(), self.n_pings):
            while waiting is not None and waiting.time_s <= self.emission_time_s(k):
                yield waiting
                waiting = next(odometry, None)
            yield self.echo(k)
        while waiting is not None:
            yield waiting
            waiting = next(odometry, None)

    def close(self) -> None:
        """Nothing to release."""

    def _first_ping(self) -> int:
        late = (k for k in range(self.n_pings) if self.emission_time_s(k) >= self._start_s)
        return next(late, self.n_pings)

    def _paths(self, k: int) -> EchoPaths:
        motion = self.head_motion(self.emission_time_s(k))
        reach_m = 0.5 * self.speed_of_sound_m_s * (self.config.record_s - self.config.lead_s)
        world = self.worlds[k % len(self.worlds)]
        return trace(world, self.unit, motion, self.speed_of_sound_m_s, reach_m)

    def _readings(self, k: int) -> tuple[float, float]:
        """Temperature and humidity as the robot's sensors show them."""
        c = self.config
        temperature_c = c.temperature_c + c.temperature_error_c * self._air_errors[k, 0]
        humidity = c.relative_humidity + c.humidity_error * self._air_errors[k, 1]
        return round(float(temperature_c), 2), round(min(max(float(humidity), 0.0), 1.0), 3)


def _wandering(seed: int, n: int, rate_hz: float) -> FloatArray:
    """Two slow random errors of standard deviation 1, a new value every 0.2 s, shape (n, 2)."""
    rng = np.random.default_rng([seed, 9])
    values = np.empty((n, 2))
    keep = math.exp(-0.2 / 20.0)
    state = rng.standard_normal(2)
    step = -1
    for k in range(n):
        if int(5.0 * k / rate_hz) != step:
            step = int(5.0 * k / rate_hz)
            state = keep * state + math.sqrt(1.0 - keep**2) * rng.standard_normal(2)
        values[k] = state
    return values
