"""``python -m ros_echo_perception``: the offline commands, no ROS running."""

from __future__ import annotations

import click

from .. import __version__
from .benchmark import benchmark_command
from .calibrate import calibrate_command
from .detect import detect_command
from .inspect import inspect_command
from .map import map_command
from .options import EchoGroup
from .score import score_command
from .show import show_command
from .simulate import simulate_calibration_command, simulate_command


@click.group(cls=EchoGroup, context_settings={"help_option_names": ["-h", "--help"]})
@click.version_option(__version__)
def main() -> None:
    """Perception by echo with two ears, on recordings.

    The same processing as in the ROS nodes. Not a protective device: never let people's safety
    depend on its output.

    Exit codes: 0 done, 1 nothing to process, 2 wrong use or unusable input.
    """


for _command in (
    detect_command,
    map_command,
    calibrate_command,
    show_command,
    inspect_command,
    simulate_command,
    simulate_calibration_command,
    score_command,
    benchmark_command,
):
    main.add_command(_command)
