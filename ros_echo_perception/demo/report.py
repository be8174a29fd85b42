"""After the run: comparison with the truth, picture, summary."""

from __future__ import annotations

import math

import numpy as np
from numpy.typing import NDArray
from rich.console import Console

from ..core.errors import OdometryGapError
from ..offline.plots import MapPicture, save_map_picture
from . import comparison, summary
from .comparison import DetectionScore
from .monitor import Monitor, SeenPing
from .session import Outcome, Plan
from .truth import TrueDrive, placed, pose_buffer


def finish(plan: Plan, outcome: Outcome, console: Console) -> list[summary.Figure]:
    """Write picture and summary, and print what came out."""
    truth = TrueDrive(plan, outcome.simulator())
    monitor = outcome.monitor
    pings = [monitor.pings[k] for k in sorted(monitor.pings)]
    outline = _outline(truth, monitor, pings)
    precision = (
        comparison.map_precision(monitor.latest_map, outline) if monitor.latest_map else math.nan
    )
    lines = summary.figures(monitor, score(truth, pings), precision, outcome.first_ping_s)
    summary.save(lines, plan.out)
    if monitor.latest_map is not None:
        save_map_picture(_picture(truth, monitor, pings, outline), plan.out / "map.png")
    console.print(summary.as_table(lines))
    console.print(
        f"In {plan.out}: map.png, bag ({sum(outcome.counts.values())} messages on "
        f"{len(outcome.counts)} topics), parameters.yaml, summary.txt, summary.json, log.",
        soft_wrap=True,
    )
    return lines


def score(truth: TrueDrive, pings: list[SeenPing]) -> DetectionScore | None:
    """Detections against all true echoes; None without any ping."""
    if not pings:
        return None
    return comparison.score_detections(
        (ping.detections, truth.echoes(ping.sequence)) for ping in pings
    )


def _outline(
    truth: TrueDrive, monitor: Monitor, pings: list[SeenPing]
) -> list[NDArray[np.float64]]:
    try:
        return truth.outline(truth.world_in_odometry(pings, pose_buffer(monitor)))
    except OdometryGapError:
        return []


def _picture(
    truth: TrueDrive, monitor: Monitor, pings: list[SeenPing], outline: list[NDArray[np.float64]]
) -> MapPicture:
    seen = monitor.latest_map
    assert seen is not None
    return MapPicture(
        data=seen.data,
        resolution_m=seen.resolution_m,
        origin_x_m=seen.origin_x_m,
        origin_y_m=seen.origin_y_m,
        path=[pose for _, pose in monitor.path],
        detections=placed(pings, pose_buffer(monitor), truth.mount),
        outline=outline,
        title="Simulated drive: what two ears made of the room "
        f"(frame {seen.frame}, {len(pings)} pings)",
    )
