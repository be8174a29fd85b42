"""The command ``detect``: recordings in, table of detections out."""

from __future__ import annotations

import time
from collections.abc import Iterator, Mapping, Sequence
from dataclasses import dataclass, field
from pathlib import Path
from typing import Any

import click
from rich.progress import Progress

from ..core.head import Head
from ..core.perception.config import ProcessingConfig
from ..core.perception.pipeline import EchoPipeline
from ..core.types import PingResult
from . import detections_csv
from .console import output, progress_bar, quantile, table
from .heads import head_for, load_heads
from .inputs import EchoInput, open_input
from .options import config_option, head_option, need_something, out_option, topic_option
from .settings_file import load_settings, save_used, settings_path


@dataclass
class DetectOutcome:
    """What the processing of one input gave."""

    name: str
    head: str
    results: list[PingResult] = field(default_factory=list)
    seconds: list[float] = field(default_factory=list)
    refused: int = 0

    @property
    def n_detections(self) -> int:
        """Detections of all pings."""
        return sum(len(result.detections) for result in self.results)

    def rows(self) -> Iterator[dict[str, Any]]:
        """The rows of the table of detections."""
        for ping, result in enumerate(self.results):
            yield from detections_csv.rows(self.name, ping, result)


def process(
    source: EchoInput, head: Head, config: ProcessingConfig, progress: Progress | None = None
) -> DetectOutcome:
    """Run the processing chain over every ping of an input, in order."""
    pipeline = EchoPipeline(head, config)
    outcome = DetectOutcome(source.name, head.name, refused=source.n_refused)
    task = progress.add_task(source.name, total=source.n_pings) if progress else None
    for echo in source.echoes():
        started = time.perf_counter()
        outcome.results.append(pipeline.process(echo))
        outcome.seconds.append(time.perf_counter() - started)
        if progress and task is not None:
            progress.advance(task)
    return outcome


def detect_all(
    paths: Sequence[Path], heads: Mapping[str, Head], config: ProcessingConfig,
    progress: Progress | None = None, topic: str = "",
) -> list[DetectOutcome]:  # fmt: skip
    """Process several inputs; all of them are checked before the first is processed."""
    sources = [open_input(path, topic) for path in paths]
    matched = [head_for(heads, source.head_name, str(source.path)) for source in sources]
    return [
        process(source, head, config, progress)
        for source, head in zip(sources, matched, strict=True)
    ]


@click.command("detect")
@click.argument("recordings", nargs=-1, required=True, type=click.Path(path_type=Path))
@head_option(multiple=True)
@out_option("Table of detections (CSV).")
@topic_option
@config_option
def detect_command(
    recordings: tuple[Path, ...], heads: tuple[Path, ...], out: Path, topic: str,
    config: Path | None,
) -> None:  # fmt: skip
    """Find the echoes in recordings.

    RECORDING is a .wav with its .json beside it, or a rosbag2 folder with raw echoes. Recordings
    of several heads may be mixed: give --head once for each, they are matched by name.

    \b
    Example:
      python -m ros_echo_perception detect scenes/*.wav --head head_a.yaml --head head_b.yaml \\
          --out detections.csv

    Bearings are radians, positive to the left; sigmas are one standard deviation; `confidence` is
    the probability that something is there. The settings used go beside the table.
    """
    settings = load_settings(config, "processing", ProcessingConfig)
    with progress_bar() as progress:
        outcomes = detect_all(recordings, load_heads(heads), settings, progress, topic)
    need_something(sum(len(outcome.results) for outcome in outcomes), "ping")
    out.parent.mkdir(parents=True, exist_ok=True)
    detections_csv.write(out, (row for outcome in outcomes for row in outcome.rows()))
    save_used(
        settings_path(out), "detect", {"processing": settings},
        {"recordings": [str(p) for p in recordings], "heads": [str(p) for p in heads]},
    )  # fmt: skip
    output().print(summary(outcomes))
    output().print(f"Wrote {out} and {settings_path(out).name} beside it.", soft_wrap=True)


def summary(outcomes: Sequence[DetectOutcome]) -> Any:
    """One line for each input and one for all."""
    everything = DetectOutcome("all", "")
    for outcome in outcomes:
        everything.results += outcome.results
        everything.seconds += outcome.seconds
        everything.refused += outcome.refused
    lines = [*outcomes, everything] if len(outcomes) > 1 else list(outcomes)
    return table(
        "Detections",
        ("recording", "head", "pings", "refused", "detections", "per ping",
         "median ms/ping", "95 % ms/ping"),
        [
            (o.name, o.head, len(o.results), o.refused, o.n_detections,
             o.n_detections / max(len(o.results), 1),
             1e3 * quantile(o.seconds, 0.5), 1e3 * quantile(o.seconds, 0.95))
            for o in lines
        ],
    )  # fmt: skip
