"""Processing node: raw echoes to detections, scan, points and markers of one head."""

from __future__ import annotations

from collections.abc import Callable
from typing import Any

from rclpy.node import Node

from ..core.errors import EchoPerceptionError, InvalidEchoError, refuse
from ..core.head import load_head
from ..core.perception.config import ProcessingConfig
from ..core.perception.pipeline import EchoPipeline, warm_up
from ..core.perception.scan import ScanConfig, scan_from_result
from ..core.types import PingFlag, PingResult, RawEcho
from . import conversion, topics, views
from .diagnostics import ERROR, OK, STALE, WARN, Activity, Reporter, Status
from .parameters import ParameterSet
from .qos import create_publisher, create_subscription
from .runtime import run
from .settings import SECTIONS, ProcessingNodeSettings
from .source import find_head_file

_WARN_PERIOD_S = 5.0
_BACKWARDS_S = 1e-6  # a stamp earlier than the last by more: time has jumped


class ProcessingNode(Node):
    """Runs the chain on every raw echo in the order of arrival."""

    def __init__(self) -> None:
        super().__init__("processing")
        self.parameters = ParameterSet(self, SECTIONS["processing"], self._on_change)
        self.settings = self.parameters.get(ProcessingNodeSettings)
        self.head = load_head(find_head_file(self.settings.head_file))
        self.pipeline = EchoPipeline(self.head, self.parameters.get(ProcessingConfig))
        self.activity = Activity()
        self._last: PingResult | None = None
        self._last_sequence: int | None = None
        self._time_jumps = self._lost = 0
        self._detections = create_publisher(self, topics.DETECTIONS)
        self._views: list[tuple[Any, Callable[[PingResult, Any], Any]]] = [
            (create_publisher(self, topics.SCAN), self._scan),
            (create_publisher(self, topics.POINTS), views.points_to_msg),
            (create_publisher(self, topics.MARKERS), views.markers_to_msg),
        ]
        self._envelope = create_publisher(self, topics.ENVELOPE)
        self._reporter = Reporter(self, self.settings.diagnostics_period_s, self._status)
        ready_s = warm_up(self.head, self.pipeline.config)
        create_subscription(self, topics.RAW_ECHO, self._on_raw_echo)
        kind = "calibrated" if self.head.calibrated else "nominal"
        self.get_logger().info(
            f"head {self.head.name} ({kind} values), warmed up in {ready_s:.1f} s"
        )

    def _on_change(self) -> None:
        config = self.parameters.get(ProcessingConfig)
        if config != self.pipeline.config:
            self.pipeline = EchoPipeline(self.head, config)

    def _on_raw_echo(self, msg: Any) -> None:
        arrived_s = self.activity.arrived()
        self._count_gap(msg.sequence)
        try:
            self._check_frame(msg.header.frame_id)
            echo = conversion.raw_echo_from_msg(msg)
        except (InvalidEchoError, ValueError) as error:
            self._drop("invalid message", error)
            return
        self._follow_time(echo)
        try:
            result = self.pipeline.process(echo)
        except EchoPerceptionError as error:
            self._drop("refused by processing", error)
            return
        except Exception as error:  # one ping must not end the node
            self._drop("fault in processing", f"{type(error).__name__}: {error}")
            return
        self._publish(result, msg.header, arrived_s)

    def _publish(self, result: PingResult, header: Any, arrived_s: float) -> None:
        latency_s = self.activity.done(arrived_s)
        self._detections.publish(conversion.result_to_msg(result, header, latency_s))
        for publisher, convert in self._views:
            if publisher.get_subscription_count():
                publisher.publish(convert(result, header))
        if result.envelope is not None and self._envelope.get_subscription_count():
            self._envelope.publish(
                conversion.envelope_to_msg(result.envelope, result.sequence, header)
            )
        self._last = result

    def _scan(self, result: PingResult, header: Any) -> Any:
        return views.scan_to_msg(scan_from_result(result, self.parameters.get(ScanConfig)), header)

    def _check_frame(self, frame_id: str) -> None:
        expected = self.settings.head_frame
        if expected and frame_id != expected:
            raise InvalidEchoError(refuse("header.frame_id", frame_id, repr(expected)))

    def _follow_time(self, echo: RawEcho) -> None:
        """Start afresh when time has jumped back, as a bag in a loop does."""
        last = self._last
        if last is None or echo.emission_time_s >= last.emission_time_s - _BACKWARDS_S:
            return
        self._time_jumps += 1
        self.get_logger().warning("time has jumped back: processing starts afresh")
        self.pipeline.reset()

    def _count_gap(self, sequence: int) -> None:
        """Count pings that never arrived; a smaller number is a new start of the driver."""
        if self._last_sequence is not None and sequence > self._last_sequence:
            self._lost += sequence - self._last_sequence - 1
        self._last_sequence = sequence

    def _drop(self, reason: str, error: object) -> None:
        self.activity.drop(reason, error)
        self.get_logger().warning(
            f"dropped a raw echo, {reason}: {error}", throttle_duration_sec=_WARN_PERIOD_S
        )

    def _status(self) -> Status:
        values = self.activity.values()
        values |= {"missing sequence numbers": self._lost, "time jumps": self._time_jumps}
        values["head"] = self.head.name
        values["head values"] = "calibrated" if self.head.calibrated else "nominal"
        flags = PingFlag.NONE
        if self._last is not None:
            flags = self._last.flags
            values["noise left"], values["noise right"] = self._last.noise
            values["flags"] = flag_names(flags)
            now_s = conversion.seconds(self.get_clock().now().to_msg())
            values["age of last processed [s]"] = f"{now_s - self._last.emission_time_s:.3f}"
            values["detections in last ping"] = len(self._last.detections)
        level, text = judge(self.activity, flags, self._lost)
        return Status(level, text, values, self.head.name)


_DEAD = (PingFlag.LEFT_DEAD, PingFlag.RIGHT_DEAD)


def judge(activity: Activity, flags: PingFlag, lost: int = 0) -> tuple[bytes, str]:
    """Level and text of the diagnostics from what came and what the last ping said."""
    dead = [name for name, flag in zip(("left", "right"), _DEAD, strict=True) if flags & flag]
    if len(dead) == 2:
        return ERROR, "both ears are dead"
    if activity.silence_s() > 2.0:
        return STALE, "no raw echo" + (" yet" if not activity.received else " for over 2 s")
    if dead:
        return WARN, f"the {dead[0]} ear is dead"
    if activity.dropped:
        return WARN, f"{sum(activity.dropped.values())} raw echoes dropped"
    if lost:
        return WARN, f"{lost} raw echoes lost on the way, or processing cannot keep up"
    if flags & PingFlag.SIMULATED:
        return WARN, "processing SIMULATED echoes"
    if flags & PingFlag.REPLAYED:
        return WARN, "processing REPLAYED echoes"
    return OK, "processing"


def flag_names(flags: PingFlag) -> str:
    """Names of the flags that are set, or "none"."""
    return ", ".join(str(flag.name).lower() for flag in PingFlag if flag & flags) or "none"


def main() -> None:
    """Run the node."""
    run(ProcessingNode)


if __name__ == "__main__":
    main()
