"""The command ``inspect``: what is in a bag."""

from __future__ import annotations

from pathlib import Path
from typing import Any

import click
import numpy as np
from rosbags.highlevel import AnyReader

from . import bag_reader
from .console import output, quantile, table
from .options import need_something


@click.command("inspect")
@click.argument("bag", type=click.Path(path_type=Path))
def inspect_command(bag: Path) -> None:
    """Summarize a rosbag2 recording: topics, rates, gaps, echoes, detections, latency.

    \b
    Example:
      python -m ros_echo_perception inspect echo_demo/bag
    """
    with bag_reader.open_bag(bag) as reader:
        topics = bag_reader.summarize(reader)
        need_something(sum(topic.count for topic in topics), "message")
        output().print(
            table(
                f"Topics of {bag}",
                ("topic", "type", "messages", "rate Hz", "longest gap s"),
                [(t.topic, t.type_name, t.count, t.rate_hz, t.longest_gap_s) for t in topics],
            )
        )
        rows = echo_rows(reader)
    if rows:
        output().print(table("Echoes", ("what", "value", "unit"), rows))


def echo_rows(reader: AnyReader) -> list[tuple[str, Any, str]]:
    """Pings and detections of a bag as (what, value, unit); empty without either."""
    raw = {m.sequence: t for t, m in bag_reader.messages(reader, bag_reader.RAW_ECHO)}
    arrays = list(bag_reader.messages(reader, bag_reader.DETECTIONS))
    rows: list[tuple[str, Any, str]] = []
    if raw:
        numbered = max(raw) - min(raw) + 1
        rows += [("pings", len(raw), ""), ("pings lost before recording", numbered - len(raw), "")]
    if not arrays:
        return rows
    counts = [len(message.detections) for _, message in arrays]
    minutes = (arrays[-1][0] - arrays[0][0]) * 1e-9 / 60.0
    latencies = [1e-6 * (t - raw[m.sequence]) for t, m in arrays if m.sequence in raw]
    processing = [1e3 * float(m.processing_time_s) for _, m in arrays]
    rows += [
        ("pings with detections", int(np.count_nonzero(counts)), ""),
        ("detections", sum(counts), ""),
        ("detections", sum(counts) / minutes if minutes else None, "1/min"),
        ("raw echo to detections, median", quantile(latencies, 0.5), "ms"),
        ("raw echo to detections, 95 %", quantile(latencies, 0.95), "ms"),
        ("of which processing, median", quantile(processing, 0.5), "ms"),
    ]
    return rows
