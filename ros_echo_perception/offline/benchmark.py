"""The command ``benchmark``: time per ping, whole and by step, beside a plain peak picker."""

from __future__ import annotations

import time
from collections.abc import Callable, Iterator, Sequence
from contextlib import ExitStack, contextmanager
from dataclasses import dataclass
from pathlib import Path
from typing import Any
from unittest.mock import patch

import click
import numpy as np
from scipy.ndimage import gaussian_filter1d
from scipy.signal import find_peaks, hilbert

from ..core.acoustics import pulse_metrics
from ..core.head import Head, load_head
from ..core.perception import pipeline as chain
from ..core.perception.config import ProcessingConfig
from ..core.perception.fit import ObjectFitter
from ..core.types import RawEcho
from ..sources.bench import bench_source, poles
from .console import output, quantile, table
from .inputs import open_input
from .options import config_option, head_option, need_something
from .settings_file import load_settings

ECHO_COUNTS = (0, 1, 4, 8)
STEPS = {
    "baseband": (chain, "to_baseband"),
    "noise, blanking, faults": (chain, "condition"),
    "matched filter": (chain, "matched_filter"),
    "candidates (mixture, pairing)": (chain, "find_candidates"),
    "joint fit of both ears": (ObjectFitter, "fit"),
    "bearing, sigmas, existence": (chain, "report_detections"),
}
"""The steps of the chain: where the function of each one is looked up."""
_BASELINE_THRESHOLD = 4.5  # times the noise: common practice for fixed thresholds
_NEAR_DIRECT_PULSE_S = 2e-3


@dataclass(frozen=True)
class Timing:
    """Seconds per ping of one kind of pings."""

    name: str
    whole_s: Sequence[float]
    baseline_s: Sequence[float]
    steps_s: dict[str, list[float]]
    n_detections: int


def simulated_pings(head: Head, n_echoes: int, n_pings: int) -> list[RawEcho]:
    """Pings with so many poles in the beam, 0.3 m apart in range, none behind another."""
    bearings = np.linspace(-0.35, 0.35, n_echoes) if n_echoes > 1 else [0.0]
    places = [(0.7 + 0.3 * i, float(b)) for i, b in enumerate(bearings[:n_echoes])]
    source = bench_source(head, poles(*places), n_pings=n_pings)
    return [source.echo(k) for k in range(n_pings)]


def peak_picker(echo: RawEcho, sigma_s: float) -> list[tuple[float, float]]:
    """The plain way, for comparison: peaks of the smoothed envelope, nearest ones paired.

    Returns
    -------
    (delay in seconds, level contrast) of each pair; contrast is (right - left) / (right + left).
    """
    found = []
    for ear in (0, 1):
        samples = np.asarray(echo.samples[ear], float) / echo.full_scale
        envelope = gaussian_filter1d(
            np.abs(hilbert(samples - samples.mean())), sigma_s * echo.sample_rate_hz / 2.0
        )
        start = int((_NEAR_DIRECT_PULSE_S - echo.first_sample_offset_s) * echo.sample_rate_hz)
        peaks, _ = find_peaks(
            envelope[start:],
            height=_BASELINE_THRESHOLD * float(np.median(envelope)) / 1.1774,  # Rayleigh median
            distance=max(1, int(sigma_s * echo.sample_rate_hz)),
        )
        found.append((peaks / echo.sample_rate_hz, envelope[start:][peaks]))
    pairs = []
    for delay, height in zip(*found[0], strict=True):
        if len(found[1][0]):
            j = int(np.argmin(np.abs(found[1][0] - delay)))
            other = float(found[1][1][j])
            pairs.append((float(delay), (other - float(height)) / (other + float(height))))
    return pairs


@contextmanager
def timed_steps() -> Iterator[dict[str, list[float]]]:
    """Within it, every step of the chain notes how long it took; seconds by step."""
    seconds: dict[str, list[float]] = {name: [] for name in STEPS}

    def timed(name: str, function: Callable[..., Any]) -> Callable[..., Any]:
        def call(*args: Any, **kwargs: Any) -> Any:
            started = time.perf_counter()
            result = function(*args, **kwargs)
            seconds[name].append(time.perf_counter() - started)
            return result

        return call

    with ExitStack() as stack:
        for name, (owner, attribute) in STEPS.items():
            function = getattr(owner, attribute)
            stack.enter_context(patch.object(owner, attribute, timed(name, function)))
        yield seconds


def measure(name: str, pings: Sequence[RawEcho], head: Head, config: ProcessingConfig) -> Timing:
    """Time chain and baseline on the same pings, in turn, so that both meet the same machine."""
    pipeline = chain.EchoPipeline(head, config)
    sigma_s = pulse_metrics(head, 0, pings[0].burst_cycles).envelope_sigma_s
    pipeline.process(pings[0])  # tables are made once; a node makes them before the first echo
    peak_picker(pings[0], sigma_s)
    whole, baseline, n_detections = [], [], 0
    for echo in pings:
        begun = time.perf_counter()
        n_detections += len(pipeline.process(echo).detections)
        done = time.perf_counter()
        peak_picker(echo, sigma_s)
        baseline.append(time.perf_counter() - done)
        whole.append(done - begun)
    with timed_steps() as steps:
        for echo in pings:
            pipeline.process(echo)
    return Timing(name, whole, baseline, steps, n_detections)


@click.command("benchmark")
@head_option(multiple=False)
@click.option("--pings", default=100, show_default=True, type=click.IntRange(5, 10000),
              help="Simulated pings of each kind.")  # fmt: skip
@click.option("--recording", type=click.Path(path_type=Path),
              help="Also time the pings of this recording.")  # fmt: skip
@config_option
def benchmark_command(head: Path, pings: int, recording: Path | None, config: Path | None) -> None:
    """Measure how long one ping takes, whole and by step.

    Pings are simulated with 0, 1, 4 and 8 poles in the beam. A plain peak picker (smoothed
    Hilbert envelope, scipy.signal.find_peaks) runs in turn with the chain on the same pings.
    Set OPENBLAS_NUM_THREADS=1 for figures that repeat.

    \b
    Example:
      OPENBLAS_NUM_THREADS=1 python -m ros_echo_perception benchmark --head head_a.yaml
    """
    used = load_head(head)
    settings = load_settings(config, "processing", ProcessingConfig)
    kinds = [(f"{n} echoes", simulated_pings(used, n, pings)) for n in ECHO_COUNTS]
    if recording is not None:
        source = open_input(recording)
        kinds.append((source.name, list(source.echoes())))
    need_something(min(len(echoes) for _, echoes in kinds), "ping")
    timings = [measure(name, echoes, used, settings) for name, echoes in kinds]
    output().print(whole_table(timings))
    output().print(step_table(timings))


def whole_table(timings: Sequence[Timing]) -> Any:
    """Whole pings, with the baseline and the ratio of the medians."""
    return table(
        "Time per ping, ms",
        ("pings with", "pings", "found per ping", "median", "95 %", "99 %",
         "peak picker, median", "ratio"),
        [
            (t.name, len(t.whole_s), t.n_detections / len(t.whole_s),
             *(1e3 * quantile(t.whole_s, share) for share in (0.5, 0.95, 0.99)),
             1e3 * quantile(t.baseline_s, 0.5),
             quantile(t.whole_s, 0.5) / quantile(t.baseline_s, 0.5))
            for t in timings
        ],
    )  # fmt: skip


def step_table(timings: Sequence[Timing]) -> Any:
    """Steps: median / 95 % in milliseconds."""
    return table(
        "By step, median / 95 %, ms",
        ("step", *(t.name for t in timings)),
        [(step, *(_median_and_high(t.steps_s[step]) for t in timings)) for step in STEPS],
    )


def _median_and_high(seconds: Sequence[float]) -> str:
    return f"{1e3 * quantile(seconds, 0.5):.2f} / {1e3 * quantile(seconds, 0.95):.2f}"
