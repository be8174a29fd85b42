"""The demo's result: one table with units, as text and as JSON."""

from __future__ import annotations

import json
import math
from dataclasses import dataclass
from pathlib import Path
from typing import Any

import numpy as np
from numpy.typing import NDArray
from rich.console import Console

from ..offline.console import table
from .comparison import DetectionScore
from .monitor import Monitor


@dataclass(frozen=True)
class Figure:
    """One line of the summary: a key for programs, words and unit for people."""

    key: str
    what: str
    value: float | int | None
    unit: str = ""


def figures(
    monitor: Monitor, score: DetectionScore | None, precision: float, first_ping_s: float
) -> list[Figure]:
    """All figures of a run.

    Parameters
    ----------
    monitor
        What was seen.
    score
        Detections against the truth; None without any ping.
    precision
        Share of occupied cells near a true surface.
    first_ping_s
        From the start of the demo to its first ping.
    """
    return [
        *_traffic(monitor, first_ping_s),
        *_latency(monitor),
        *(_truth(score) if score is not None else []),
        *_map(monitor, precision),
    ]


def _traffic(monitor: Monitor, first_ping_s: float) -> list[Figure]:
    pings = len(monitor.pings)
    return [
        Figure("first_ping_s", "start to first ping", first_ping_s, "s"),
        Figure("pings_sent", "pings sent", monitor.pings_sent),
        Figure("pings_received", "pings received", len(monitor.raw_published_s)),
        Figure("pings_answered", "pings answered with detections", monitor.answered),
        Figure("messages_lost", "messages lost", monitor.raw_lost + monitor.unanswered),
        Figure("ping_rate_hz", "ping rate", monitor.mean_rate_hz(), "Hz"),
        Figure("detections", "detections", monitor.n_detections),
        Figure("detections_per_ping", "detections per ping",
               monitor.n_detections / pings if pings else None),
    ]  # fmt: skip


def _latency(monitor: Monitor) -> list[Figure]:
    whole = 1e3 * monitor.latencies_s()
    inside = 1e3 * np.array([ping.processing_time_s for ping in monitor.pings.values()], float)
    return [
        Figure("latency_median_ms", "raw echo to detections, median", _at(whole, 0.5), "ms"),
        Figure("latency_p95_ms", "raw echo to detections, 95 %", _at(whole, 0.95), "ms"),
        Figure("processing_median_ms", "of which processing, median", _at(inside, 0.5), "ms"),
        Figure("processing_p95_ms", "of which processing, 95 %", _at(inside, 0.95), "ms"),
    ]


def _truth(score: DetectionScore) -> list[Figure]:
    return [
        Figure("at_true_range", "detections at the range of a true echo",
               _share(score.n_at_range, score.n_detections), "%"),
        Figure("precision", "detections that also have its bearing within 15 deg",
               _share(score.n_matched, score.n_detections), "%"),
        Figure("recall", "findable echoes of 15 dB or more found",
               _share(score.found, score.must_find), "%"),
        Figure("range_error_median_mm", "range error, median",
               1e3 * _at(np.abs(score.range_errors_m), 0.5), "mm"),
        Figure("bearing_error_median_deg", "bearing error, median",
               math.degrees(_at(np.abs(score.bearing_errors_rad), 0.5)), "deg"),
    ]  # fmt: skip


def _map(monitor: Monitor, precision: float) -> list[Figure]:
    seen = monitor.latest_map
    return [
        Figure("maps", "maps received", monitor.n_maps),
        Figure("map_known_m2", "map: known area", seen.known_area_m2 if seen else None, "m²"),
        Figure("map_occupied_cells", "map: occupied cells", seen.occupied_cells if seen else None),
        Figure("map_precision", "map: occupied cells within 10 cm of a true surface",
               100.0 * precision, "%"),
    ]  # fmt: skip


def _at(values: NDArray[np.float64], share: float) -> float:
    return float(np.quantile(values, share)) if values.size else math.nan


def _share(part: int, whole: int) -> float | None:
    return 100.0 * part / whole if whole else None


def as_table(lines: list[Figure]) -> Any:
    """For people."""
    rows = [(line.what, line.value, line.unit) for line in lines]
    return table("Summary of the demo", ("what", "value", "unit"), rows)


def save(lines: list[Figure], folder: Path) -> None:
    """Write ``summary.txt`` and ``summary.json`` (null where there is no value)."""
    with (folder / "summary.txt").open("w") as file:
        Console(file=file, width=100).print(as_table(lines))
    values = {
        line.key: None if line.value is None or not math.isfinite(line.value) else line.value
        for line in lines
    }
    (folder / "summary.json").write_text(json.dumps(values, indent=1) + "\n")
