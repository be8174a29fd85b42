"""One run of the demo: nodes started, recorded, watched, stopped, and compared with the truth."""

from __future__ import annotations

import threading
import time
from dataclasses import dataclass
from pathlib import Path

import rclpy
from rclpy.executors import ExternalShutdownException, SingleThreadedExecutor
from rich.console import Console

from ..core.errors import SourceError
from ..core.settings import from_mapping
from ..nodes import topics
from ..nodes.settings import DriverSettings
from ..offline.bag_writer import BagWriter
from ..offline.resources import shipped
from ..sources.simulator_config import SimulatorConfig
from .live import LiveView
from .monitor import Monitor
from .parameters import ParameterReader, Parameters, write_parameters
from .processes import NodeGroup, NodeProcess
from .recorder import Recorder

NODES = ("processing", "mapping", "driver")
_START_TIMEOUT_S = 30.0
_SILENCE_S = 3.0
_POLL_S = 0.25
_CONSUMERS = 2  # processing, once it is warm, and the recorder
_WINDOW_M = 16.0  # the whole room stays in the picture
_LAST_MAP_S = 1.2  # two publishing periods of the mapping node


@dataclass(frozen=True)
class Plan:
    """What to run: all of it is told to the nodes as parameters.

    ``head`` is the maker's file of the simulated head. With ``calibrated`` the driver simulates a
    manufactured unit of it, which differs from its data sheet, and processing works with that
    file, which `calibrate` made for this unit. Without, the unit is as on its data sheet.
    """

    seconds: float
    out: Path
    head: str = DriverSettings().head_file
    calibrated: str = ""
    world: str = "config/worlds/demo_room.yaml"
    rate_hz: float = SimulatorConfig().ping_rate_hz
    seed: int = SimulatorConfig().seed

    def world_path(self) -> Path:
        """The world file: as given, or as shipped."""
        return Path(self.world) if Path(self.world).exists() else shipped(self.world)

    def arguments(self, node: str) -> list[str]:
        """Command line of a node."""
        given: dict[str, object] = {"head_file": self.head} if node != "mapping" else {}
        if node == "processing" and self.calibrated:
            given["head_file"] = self.calibrated
        if node == "driver":
            given |= {
                "simulator.unit_error_scale": 1.0 if self.calibrated else 0.0,
                "source": "simulator",
                "world_file": str(self.world_path()),
                "simulator.ping_rate_hz": self.rate_hz,
                "simulator.seed": self.seed,
                "wait_for_consumer_s": _START_TIMEOUT_S,
                "consumers": _CONSUMERS,
            }
        if node == "mapping":
            mount = SimulatorConfig().mount
            given = {
                "mount_x_m": [mount.x_m], "mount_y_m": [mount.y_m],
                "mount_yaw_rad": [mount.yaw_rad], "width_m": _WINDOW_M, "height_m": _WINDOW_M,
            }  # fmt: skip
        words = ["--ros-args"]
        config = shipped("config") / f"{node}.yaml"
        if config.exists():
            words += ["--params-file", str(config)]
        for name, value in given.items():
            words += ["-p", f"{name}:={value}"]
        return words


@dataclass
class Outcome:
    """What a run gave."""

    monitor: Monitor
    first_ping_s: float
    counts: dict[str, int]
    parameters: Parameters

    def simulator(self) -> SimulatorConfig:
        """The settings with which the driver simulated."""
        prefix = "simulator."
        values = {
            name.removeprefix(prefix): value
            for name, value in self.parameters["driver"].items()
            if name.startswith(prefix)
        }
        return from_mapping(SimulatorConfig, values)


class _Spinner:
    """Spins a recorder in a thread of its own until closed."""

    def __init__(self, recorder: Recorder) -> None:
        self._executor = SingleThreadedExecutor()
        self._executor.add_node(recorder)
        self._error: BaseException | None = None
        self._thread = threading.Thread(target=self._spin, name="recorder", daemon=True)
        self._thread.start()

    def _spin(self) -> None:
        try:
            self._executor.spin()
        except ExternalShutdownException:
            pass
        except BaseException as error:  # reported by the main thread
            self._error = error

    def check(self) -> None:
        """Raise what ended the thread."""
        if self._error is not None:
            raise SourceError(f"recording failed: {self._error!r}") from self._error

    def close(self) -> None:
        """Stop spinning and wait for the thread."""
        self._executor.shutdown(timeout_sec=2.0)
        self._thread.join(timeout=5.0)


def run(plan: Plan, console: Console, started_s: float) -> Outcome:
    """Run the nodes for a while and record everything.

    Parameters
    ----------
    plan
        What to run.
    console
        For the running table.
    started_s
        ``time.monotonic()`` at the start of the command.

    Raises
    ------
    NodeDiedError
        When a node ends by itself.
    SourceError
        When the nodes do not come up or stop talking.
    """
    logs = plan.out / "log"
    logs.mkdir(parents=True, exist_ok=True)
    monitor = Monitor()
    with NodeGroup(logs) as nodes, BagWriter(plan.out / "bag") as bag:
        started = {name: _start(nodes, name, plan) for name in NODES}
        rclpy.init()
        recorder = Recorder(bag, monitor)
        spinner = _Spinner(recorder)
        try:
            _wait_for_processing(recorder, nodes, spinner)
            first_s = _wait_for_first_ping(monitor, nodes, spinner) - started_s
            parameters = _watch(plan, console, recorder, monitor, nodes, spinner)
            started["driver"].stop()
            nodes.forget(started["driver"])
            _linger(nodes, spinner)
        finally:
            spinner.close()
            recorder.destroy_node()
            rclpy.try_shutdown()
    return Outcome(monitor, first_s, dict(bag.counts), parameters)


def _start(nodes: NodeGroup, name: str, plan: Plan) -> NodeProcess:
    return nodes.start(name, f"ros_echo_perception.nodes.{name}", plan.arguments(name))


def _wait_for_processing(recorder: Recorder, nodes: NodeGroup, spinner: _Spinner) -> None:
    """Until processing listens to raw echoes; only then the recorder does.

    The driver starts to ping for its first listener, and that must be the processing node.
    """
    end = time.monotonic() + _START_TIMEOUT_S
    while not recorder.count_subscribers(f"/{topics.RAW_ECHO.name}"):
        nodes.check()
        spinner.check()
        if time.monotonic() > end:
            raise SourceError(
                f"processing did not come up in {_START_TIMEOUT_S:g} s; its log is in "
                f"{nodes.log_folder}."
            )
        time.sleep(0.02)
    for topic in (topics.RAW_ECHO, topics.DETECTIONS, topics.ODOMETRY):
        recorder.expect(f"/{topic.name}", topic.message, depth=topics.QOS[topic.qos].depth)


def _wait_for_first_ping(monitor: Monitor, nodes: NodeGroup, spinner: _Spinner) -> float:
    """Monotonic time at which the first raw echo was there."""
    end = time.monotonic() + _START_TIMEOUT_S
    while not monitor.raw_published_s:
        nodes.check()
        spinner.check()
        if time.monotonic() > end:
            raise SourceError(
                f"no ping in {_START_TIMEOUT_S:g} s; the driver's log is in {nodes.log_folder}."
            )
        time.sleep(0.02)
    return time.monotonic()


def _watch(
    plan: Plan, console: Console, recorder: Recorder, monitor: Monitor, nodes: NodeGroup,
    spinner: _Spinner,
) -> Parameters:  # fmt: skip
    """Show the running table until the time is up or the simulated drive has ended.

    Returns
    -------
    The parameters of all nodes, written to the output folder as soon as they could be had.
    """
    reader = ParameterReader(recorder, NODES)
    parameters: Parameters = {}

    def note_parameters() -> None:
        parameters.update(reader.read())
        write_parameters(parameters, plan.out / "parameters.yaml")

    begin = min(monitor.raw_published_s.values())
    with LiveView(console, plan.seconds) as view:
        while (elapsed := time.time() - begin) < plan.seconds:
            nodes.check()
            spinner.check()
            if not parameters and reader.ready():
                note_parameters()
            with recorder.lock:
                view.update(monitor, elapsed)
                silent_s = time.time() - max(monitor.raw_published_s.values())
            if silent_s > _SILENCE_S:
                console.print(f"The drive has ended after {elapsed - silent_s:.1f} s.")
                break
            time.sleep(_POLL_S)
    if not parameters:
        note_parameters()
    return parameters


def _linger(nodes: NodeGroup, spinner: _Spinner) -> None:
    """The driver is gone: let the others finish what is under way."""
    end = time.monotonic() + _LAST_MAP_S
    while time.monotonic() < end:
        nodes.check()
        spinner.check()
        time.sleep(0.05)
