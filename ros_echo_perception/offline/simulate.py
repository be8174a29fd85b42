"""The commands ``simulate`` and ``simulate-calibration``: recordings with exact truth."""

from __future__ import annotations

import dataclasses
from pathlib import Path

import click
from rich.console import Console

from ..core.errors import SettingError, refuse
from ..core.head import load_head
from ..sources.robot_path import load_path
from ..sources.simulated_recording import write_calibration_recording, write_simulated_recording
from ..sources.simulator import SimulatorSource
from ..sources.simulator_config import SimulatorConfig
from ..sources.world import load_world
from .console import output, table
from .inputs import open_input
from .options import head_option
from .resources import shipped
from .settings_file import load_settings

_out_option = click.option(
    "--out",
    required=True,
    type=click.Path(path_type=Path),
    help="Recording: its .wav; the .json and the rest go beside it.",
)
_seed_option = click.option(
    "--seed",
    type=click.IntRange(0),
    help="Seed of noise and unit. Default: as in the settings.",
)


@click.command("simulate")
@head_option(multiple=False)
@click.option(
    "--world",
    type=click.Path(path_type=Path),
    help="World with the robot's path (YAML). Default: the room of the demo.",
)
@click.option("--seconds", type=float, help="Length. Default: the whole path.")
@_seed_option
@click.option("--config", type=click.Path(path_type=Path),
              help="Settings of the simulator (YAML): the driver's parameter file, or names and "
              "values.")  # fmt: skip
@_out_option
def simulate_command(
    head: Path,
    world: Path | None,
    seconds: float | None,
    seed: int | None,
    config: Path | None,
    out: Path,
) -> None:
    """Record a simulated drive, with odometry and the truth about everything.

    \b
    Example:
      python -m ros_echo_perception simulate --head config/heads/sparrow_52.yaml --seconds 20 \\
          --out drive.wav
    """
    settings = load_settings(config, "simulator", SimulatorConfig)
    if seed is not None:
        settings = dataclasses.replace(settings, seed=seed)
    world = world if world is not None else shipped("config/worlds/demo_room.yaml")
    path = load_path(world)
    shortest_s = 1.0 / settings.ping_rate_hz
    if seconds is not None and not shortest_s <= seconds <= path.duration_s:
        allowed = f"{shortest_s:g} to {path.duration_s:.1f} s, the length of the path"
        raise SettingError(refuse("--seconds", seconds, allowed, file=str(world)))
    source = SimulatorSource(load_head(head), load_world(world), path, settings)
    with Console(stderr=True).status("simulating"):
        written = write_simulated_recording(source, out, seconds)
    _report(written)


@click.command("simulate-calibration")
@head_option(multiple=False)
@click.option("--seed", default=1, show_default=True, type=click.IntRange(0),
              help="Which unit: another seed, other tolerances.")  # fmt: skip
@click.option(
    "--unit-errors",
    default=1.0,
    show_default=True,
    type=click.FloatRange(0.0, 3.0),
    help="How far the unit is from its data sheet: 0 not at all, 1 as usual.",
)
@_out_option
def simulate_calibration_command(head: Path, seed: int, unit_errors: float, out: Path) -> None:
    """Record a simulated unit in front of a thin pole at known places, for ``calibrate``.

    The unit differs from its data sheet as manufactured ones do; the sidecar says how.

    \b
    Example:
      python -m ros_echo_perception simulate-calibration --head config/heads/sparrow_52.yaml \\
          --out pole.wav
    """
    with Console(stderr=True).status("simulating"):
        written = write_calibration_recording(load_head(head), out, seed, unit_errors)
    _report(written)


def _report(path: Path) -> None:
    source = open_input(path)
    rows = [
        ("pings", source.n_pings, ""),
        ("true echoes", sum(len(p["reflectors"]) for p in (source.truth or {})["pings"]), ""),
        ("odometry samples", len(source.odometry), ""),
        ("head", source.head_name, ""),
        ("unit", source.unit, ""),
    ]
    output().print(table(f"SIMULATED recording {path.name}", ("what", "value", "unit"), rows))
    output().print(f"Wrote {path}.wav, its sidecar {path.name}.json, and what it names.",
                   soft_wrap=True)  # fmt: skip
