"""``python -m ros_echo_perception.demo``: the main job, simulated, with the real nodes."""

from __future__ import annotations

import os
import shutil
import signal
import sys
import time
from pathlib import Path
from types import FrameType

import click
from rich.console import Console

from ..core.errors import EchoPerceptionError
from ..nodes.settings import DriverSettings
from ..offline.resources import shipped
from ..sources.simulator_config import SimulatorConfig

_DRIVER, _SIMULATOR = DriverSettings(), SimulatorConfig()
_CALIBRATED_UNIT = "sparrow_52_unit1.yaml"
_OUR_FILES = ("map.png", "parameters.yaml", "summary.txt", "summary.json")
_OUR_FOLDERS = ("bag", "log")


@click.command(context_settings={"help_option_names": ["-h", "--help"]})
@click.option("--out", default="echo_demo", show_default=True,
              type=click.Path(path_type=Path, file_okay=False),
              help="Folder for picture, bag, parameters and summary.")  # fmt: skip
@click.option("--seconds", default=60.0, show_default=True, type=click.FloatRange(2.0, 3600.0),
              help="Length of the run; it ends earlier when the drive does.")  # fmt: skip
@click.option("--head", default="",
              help="Simulate this head file, without tolerances, uncalibrated. Default: a unit of "
              "sparrow_52.yaml and its own calibration.")  # fmt: skip
@click.option("--world", default="config/worlds/demo_room.yaml", show_default=True,
              help="World with the robot's path: a path, or one that ships.")  # fmt: skip
@click.option("--rate", "rate_hz", default=_SIMULATOR.ping_rate_hz, show_default=True,
              type=click.FloatRange(0.5, 27.0), help="Pings per second.")  # fmt: skip
def main(out: Path, seconds: float, head: str, world: str, rate_hz: float) -> None:
    """A simulated robot drives through a room; driver, processing and mapping run over DDS.

    While it runs a table shows rate, detections, latency and map; at the end there are a summary
    with units and, in the output folder, a picture of the map with detections, path and the true
    room, a rosbag2 recording of all topics (MCAP), and the nodes' parameters.

    \b
    Example:
      ./dev demo --seconds 30 --out my_run
    """
    started_s = time.monotonic()
    # A Ctrl-C, a closed terminal and a plain kill all end the nodes through the same door.
    signal.signal(signal.SIGTERM, _interrupt)
    signal.signal(signal.SIGHUP, _interrupt)
    _keep_to_ourselves()
    try:
        _run(out, started_s, seconds, head, world, rate_hz)
    except EchoPerceptionError as error:
        click.echo(f"error: {error}", err=True)
        sys.exit(2)
    except KeyboardInterrupt:
        click.echo("interrupted; all nodes are stopped.", err=True)
        sys.exit(130)


def _run(
    out: Path, started_s: float, seconds: float, head: str, world: str, rate_hz: float
) -> None:
    # ROS is loaded here, after the environment is set and after --help is answered.
    from . import session

    console = Console(highlight=False)
    calibrated = "" if head else _CALIBRATED_UNIT
    plan = session.Plan(seconds, out, head or _DRIVER.head_file, calibrated, world, rate_hz)
    console.print(
        f"Demo: SIMULATED echoes of {plan.world_path().name}, {seconds:g} s, ROS_DOMAIN_ID "
        f"{os.environ['ROS_DOMAIN_ID']}.\nNot a protective device: nobody's safety may depend "
        "on it.", soft_wrap=True,
    )  # fmt: skip
    shipped("config")
    _make_room(out)
    outcome = session.run(plan, console, started_s)
    from .report import finish  # plots and statistics: not before the nodes have run

    finish(plan, outcome, console)


def _interrupt(number: int, frame: FrameType | None) -> None:
    raise KeyboardInterrupt


def _keep_to_ourselves() -> None:
    """A domain of our own on this machine, unless the caller has chosen one."""
    os.environ.setdefault("ROS_DOMAIN_ID", str(1 + os.getpid() % 100))
    os.environ.setdefault("ROS_AUTOMATIC_DISCOVERY_RANGE", "LOCALHOST")


def _make_room(out: Path) -> None:
    """Remove what an earlier demo left; nothing else in the folder is touched."""
    out.mkdir(parents=True, exist_ok=True)
    for name in _OUR_FILES:
        (out / name).unlink(missing_ok=True)
    for name in _OUR_FOLDERS:
        shutil.rmtree(out / name, ignore_errors=True)


if __name__ == "__main__":
    main()
