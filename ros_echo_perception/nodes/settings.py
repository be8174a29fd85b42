"""Settings of the nodes themselves; those of the algorithms live in the core. No ROS here."""

from __future__ import annotations

import math
from dataclasses import dataclass

from ..core.errors import SettingError, refuse
from ..core.mapping.config import MappingConfig
from ..core.perception.config import ProcessingConfig
from ..core.perception.scan import ScanConfig
from ..core.settings import Settings, setting
from ..core.types import Pose2
from ..sources.factory import KINDS
from ..sources.simulator_config import SimulatorConfig


@dataclass(frozen=True)
class DriverSettings(Settings):
    """Which source the driver plays and how."""

    source: str = setting(
        "simulator",
        "Where raw echoes come from",
        choices=KINDS,
    )
    head_file: str = setting(
        "sparrow_52.yaml",
        "Head file: a path, or the name of a file in the package's config/heads",
    )
    world_file: str = setting("", "World for the simulator (YAML); empty: the room of the demo")
    recording: str = setting("", "Recording to play: a .wav with its .json beside it")
    loop: bool = setting(False, "Start again at the end of the source; stamps go on increasing")
    start_offset_s: float = setting(0.0, "Begin this far into the source", "s", 0.0, 1e6)
    pacing: str = setting(
        "real_time",
        "real_time: as the source's clock says; consumer: as fast as the processing node answers, "
        "once there is one",
        choices=("real_time", "consumer"),
    )
    real_time_factor: float = setting(
        1.0, "With pacing = real_time: seconds of the source per second", "", 0.01, 100.0,
    )  # fmt: skip
    wait_for_consumer_s: float = setting(
        0.0,
        "With pacing = real_time: wait at most this long for subscribers before the first ping",
        "s", 0.0, 600.0,
    )  # fmt: skip
    consumers: int = setting(
        1, "With wait_for_consumer_s: subscribers of raw_echo to wait for", "", 1, 100
    )
    head_frame: str = setting("echo_head", "Frame of the head")
    base_frame: str = setting("base_link", "Frame of the robot")
    odom_frame: str = setting("odom", "Frame of the odometry")
    publish_tf: bool = setting(
        True,
        "Publish odom to base and base to head as TF where the source knows them and tf2_msgs is "
        "installed",
    )
    publish_clock: bool = setting(False, "Publish the stamps as /clock for nodes with use_sim_time")
    diagnostics_period_s: float = setting(1.0, "Time between two diagnostics", "s", 0.1, 60.0)

    def check_together(self) -> None:
        """A recording needs a path."""
        if self.source == "recording" and not self.recording:
            raise SettingError(
                refuse("recording", "", "the path of a .wav with its .json beside it",
                       "set it, or set source to simulator")
            )  # fmt: skip


@dataclass(frozen=True)
class ProcessingNodeSettings(Settings):
    """What the processing node needs beside the chain's own settings."""

    head_file: str = setting(
        "sparrow_52.yaml",
        "Head file: a path, or the name of a file in the package's config/heads",
        read_only=True,
    )
    head_frame: str = setting("", "Only accept echoes of this frame; empty: of any", read_only=True)
    diagnostics_period_s: float = setting(
        1.0, "Time between two diagnostics", "s", 0.1, 60.0, read_only=True
    )


@dataclass(frozen=True)
class MappingNodeSettings(Settings):
    """What the mapping node needs beside the map's own settings."""

    detection_topics: tuple[str, ...] = setting(
        ("detections",), "Topics with the detections of the heads, one each", read_only=True
    )
    mount_x_m: tuple[float, ...] = setting(
        (0.12,), "Forward position of each head in base_link", "m", -10.0, 10.0, read_only=True
    )
    mount_y_m: tuple[float, ...] = setting(
        (0.0,), "Position of each head to the left", "m", -10.0, 10.0, read_only=True
    )
    mount_yaw_rad: tuple[float, ...] = setting(
        (0.0,), "Direction of each head, left positive", "rad", -3.1416, 3.1416, read_only=True
    )
    use_tf: bool = setting(
        False,
        "Take the mounts from TF (base_link to the frame of the detections) instead; needs tf2_ros",
        read_only=True,
    )
    base_frame: str = setting("base_link", "Frame of the robot", read_only=True)
    odom_frame: str = setting("odom", "Frame of the map and the odometry", read_only=True)
    publish_period_s: float = setting(
        0.5, "Time between two maps, where anything changed", "s", 0.05, 60.0, read_only=True
    )
    save_path: str = setting(
        "echo_map", "Where the service ~/save writes: this name with .pgm and .yaml"
    )
    diagnostics_period_s: float = setting(
        1.0, "Time between two diagnostics", "s", 0.1, 60.0, read_only=True
    )

    def check_together(self) -> None:
        """Every head needs a topic of its own and a mount."""
        n = len(self.detection_topics)
        if not n or len(set(self.detection_topics)) != n:
            raise SettingError(
                refuse("detection_topics", self.detection_topics, "one or more different topics")
            )
        if not all(isinstance(topic, str) and topic for topic in self.detection_topics):
            raise SettingError(refuse("detection_topics", self.detection_topics, "names of topics"))
        if not self.use_tf:
            for name in ("mount_x_m", "mount_y_m", "mount_yaw_rad"):
                self._check_mount(name, n)

    def _check_mount(self, name: str, n: int) -> None:
        values = getattr(self, name)
        numbers = all(isinstance(v, int | float) and math.isfinite(v) for v in values)
        if len(values) != n or not numbers:
            raise SettingError(
                refuse(name, values, f"{n} numbers, one for each entry of detection_topics")
            )

    def mounts(self) -> dict[str, Pose2]:
        """Pose of each head in base_link, by its topic."""
        poses = zip(self.mount_x_m, self.mount_y_m, self.mount_yaw_rad, strict=False)
        return {
            topic: Pose2(float(x), float(y), float(yaw))
            for topic, (x, y, yaw) in zip(self.detection_topics, poses, strict=False)
        }


SECTIONS: dict[str, dict[type[Settings], str]] = {
    "driver": {DriverSettings: "", SimulatorConfig: "simulator"},
    "processing": {ProcessingNodeSettings: "", ProcessingConfig: "", ScanConfig: "scan"},
    "mapping": {MappingNodeSettings: "", MappingConfig: ""},
}
"""All parameters of every node: settings classes and the prefix of their parameters' names."""

FIXED: tuple[type[Settings], ...] = (DriverSettings, SimulatorConfig)
"""Settings that are only read when the node starts: all their parameters are read-only."""
