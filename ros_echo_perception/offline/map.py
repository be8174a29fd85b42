"""The command ``map``: a drive in, a grid of the whole drive out."""

from __future__ import annotations

import dataclasses
import math
from collections.abc import Sequence
from dataclasses import dataclass
from pathlib import Path
from typing import Any

import click
import numpy as np
from numpy.typing import NDArray
from rich.progress import Progress

from ..core.errors import FileFormatError, OdometryGapError, refuse
from ..core.head import Head
from ..core.mapping import (
    LocalMapper,
    MapOutcome,
    MappingConfig,
    MapSnapshot,
    PoseBuffer,
    run_mapper,
    save_map_image,
    save_map_npz,
)
from ..core.perception.config import ProcessingConfig
from ..core.types import OdometrySample, PingResult, Pose2
from .console import output, progress_bar, table
from .detect import DetectOutcome, process
from .heads import head_for, load_heads
from .inputs import EchoInput, open_input
from .options import config_option, head_option, need_something, out_option, topic_option
from .plots import OCCUPIED_FROM, MapPicture, save_map_picture
from .settings_file import load_settings, save_used, settings_path

_HEAD = "head"


@dataclass(frozen=True)
class DriveMap:
    """The map of a drive and what went into it."""

    snapshot: MapSnapshot
    detected: DetectOutcome
    counts: dict[str, int]
    config: MappingConfig


def whole_drive(config: MappingConfig, odometry: Sequence[OdometrySample]) -> MappingConfig:
    """The settings with a window that holds the whole drive from wherever the robot is.

    The window rolls with the robot in its middle, so nothing leaves it when it is twice as wide
    as the extent of the path plus the range.
    """
    x = [sample.pose.x_m for sample in odometry]
    y = [sample.pose.y_m for sample in odometry]
    cell = config.resolution_m

    def side(values: list[float]) -> float:
        return 2.0 * math.ceil((max(values) - min(values) + config.max_range_m) / cell + 1) * cell

    return dataclasses.replace(config, width_m=side(x), height_m=side(y))


def map_drive(
    source: EchoInput, head: Head, processing: ProcessingConfig, mapping: MappingConfig,
    fit: bool, mount: Pose2 | None = None, progress: Progress | None = None,
) -> DriveMap:  # fmt: skip
    """Detect on every ping of a drive and map it.

    Parameters
    ----------
    source
        A recording or bag with odometry.
    fit
        Widen the window to the whole drive.
    mount
        Pose of the head in base_link; None: as the recording says.

    Raises
    ------
    FileFormatError
        When the input has no odometry, or nobody knows where the head is mounted.
    """
    mount = mount if mount is not None else source.mount
    if not source.odometry:
        raise FileFormatError(
            refuse("odometry", "missing", "a drive with odometry", "a scene at rest has no map: "
                   "use detect", str(source.path))
        )  # fmt: skip
    if mount is None:
        raise FileFormatError(
            refuse("mount_on_robot", "missing", "the pose of the head in base_link",
                   "give it with --mount X Y YAW", str(source.path))
        )  # fmt: skip
    config = whole_drive(mapping, source.odometry) if fit else mapping
    detected = process(source, head, processing, progress)
    mapper = LocalMapper(config, {_HEAD: mount})
    snapshot = run_mapper(mapper, _merged(source.odometry, detected.results))
    return DriveMap(snapshot, detected, dict(mapper.counts), config)


def _merged(
    odometry: Sequence[OdometrySample], results: Sequence[PingResult]
) -> list[OdometrySample | tuple[str, PingResult]]:
    events: list[tuple[float, int, OdometrySample | tuple[str, PingResult]]] = []
    events += [(sample.time_s, 0, sample) for sample in odometry]
    events += [(result.emission_time_s, 1, (_HEAD, result)) for result in results]
    return [event for _, _, event in sorted(events, key=lambda item: item[:2])]


def save_map(snapshot: MapSnapshot, out: Path) -> None:
    """Write NPZ, or PGM and YAML, as the ending says.

    Raises
    ------
    FileFormatError
        For another ending, or when the file cannot be written.
    """
    _check_ending(out)
    if out.suffix == ".npz":
        save_map_npz(snapshot, out)
    else:
        save_map_image(snapshot, out)


def _check_ending(out: Path) -> None:
    if out.suffix not in (".npz", ".yaml", ".yml", ".pgm"):
        raise FileFormatError(refuse("--out", str(out), "a name that ends with .npz or .yaml"))


def placed_detections(
    odometry: Sequence[OdometrySample], mount: Pose2, results: Sequence[PingResult]
) -> NDArray[np.float64]:
    """Places of all two-eared detections in the odometry frame, shape (n, 2)."""
    poses = PoseBuffer(max_samples=len(odometry) + 1)
    for sample in odometry:
        poses.add(sample)
    points = []
    for result in results:
        try:
            head = poses.pose_at(result.emission_time_s).compose(mount)
        except OdometryGapError:
            continue
        for d in result.detections:
            if math.isfinite(d.bearing_rad):
                angle = head.yaw_rad + d.bearing_rad
                points.append(
                    (head.x_m + d.range_m * math.cos(angle), head.y_m + d.range_m * math.sin(angle))
                )
    return np.array(points, float).reshape(-1, 2)


@click.command("map")
@click.argument("recording", type=click.Path(path_type=Path))
@head_option(multiple=False)
@out_option("Map: .npz (arrays), or .yaml (PGM and YAML as map servers read them).")
@click.option("--picture", type=click.Path(path_type=Path), help="Also draw it (PNG).")
@click.option(
    "--mount",
    nargs=3,
    type=float,
    metavar="X Y YAW",
    help="Pose of the head in base_link (m, m, rad). Default: the recording's.",
)
@click.option(
    "--window",
    type=click.Choice(["drive", "settings"]),
    default="drive",
    show_default=True,
    help="Size of the map: the whole drive, or as in the settings.",
)
@topic_option
@config_option
def map_command(
    recording: Path, head: Path, out: Path, picture: Path | None,
    mount: tuple[float, float, float] | None, window: str, topic: str, config: Path | None,
) -> None:  # fmt: skip
    """Map a drive: echoes and odometry in, an occupancy grid in the odometry frame out.

    RECORDING is a .wav with its .json and odometry beside it, or a rosbag2 folder with raw echoes
    and odometry. The grid is large enough for the whole drive unless --window settings is given;
    then it rolls with the robot as in the node, and what has left it is gone.

    \b
    Example:
      python -m ros_echo_perception map drives/room.wav --head head_a.yaml --out map.npz \\
          --picture map.png
    """
    _check_ending(out)
    processing = load_settings(config, "processing", ProcessingConfig)
    mapping = load_settings(config, "mapping", MappingConfig)
    source = open_input(recording, topic)
    used = head_for(load_heads([head]), source.head_name, str(recording))
    given = Pose2(*mount) if mount else source.mount
    with progress_bar() as progress:
        drive = map_drive(source, used, processing, mapping, window == "drive", given, progress)
    fused = drive.counts.get(MapOutcome.FUSED.value, 0)
    need_something(fused, "ping with odometry around it")
    out.parent.mkdir(parents=True, exist_ok=True)
    save_map(drive.snapshot, out)
    save_used(
        settings_path(out), "map", {"processing": processing, "mapping": drive.config},
        {"recordings": [str(recording)], "heads": [str(head)]},
    )  # fmt: skip
    if picture is not None and given is not None:
        _save_picture(drive, source, given, picture)
    output().print(summary(drive))
    output().print(f"Wrote {out} and {settings_path(out).name} beside it.", soft_wrap=True)


def _save_picture(drive: DriveMap, source: EchoInput, mount: Pose2, path: Path) -> None:
    snapshot = drive.snapshot
    save_map_picture(
        MapPicture(
            snapshot.data, snapshot.resolution_m, snapshot.origin_x_m, snapshot.origin_y_m,
            path=[sample.pose for sample in source.odometry],
            detections=placed_detections(source.odometry, mount, drive.detected.results),
            title=f"Map of {source.name} in the odometry frame",
        ),
        path,
    )  # fmt: skip


def summary(drive: DriveMap) -> Any:
    """What went into the map and how large it is."""
    data, cell = drive.snapshot.data, drive.snapshot.resolution_m
    rows: list[tuple[str, object, str]] = [
        ("pings", len(drive.detected.results), ""),
        ("detections", drive.detected.n_detections, ""),
        ("pings in the map", drive.counts.get(MapOutcome.FUSED.value, 0), ""),
        ("detections in the map", drive.counts.get("detections_used", 0), ""),
        ("pings without odometry around them",
         drive.counts.get(MapOutcome.SKIPPED_NO_ODOMETRY.value, 0), ""),
        ("window", f"{data.shape[1] * cell:.1f} x {data.shape[0] * cell:.1f}", "m"),
        ("occupied cells", int(np.count_nonzero(data >= OCCUPIED_FROM)), ""),
        ("known area", float(np.count_nonzero(data >= 0)) * cell**2, "m²"),
    ]  # fmt: skip
    return table(f"Map of {drive.detected.name}", ("what", "value", "unit"), rows)
