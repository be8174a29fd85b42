"""The command ``show``: one ping as a picture."""

from __future__ import annotations

import math
from pathlib import Path
from typing import Any

import click
import numpy as np
from matplotlib.figure import Figure
from scipy.signal import hilbert

from ..core.errors import SettingError, refuse
from ..core.perception.config import ProcessingConfig
from ..core.perception.pipeline import EchoPipeline
from ..core.types import LEFT, RIGHT, Detection, PingResult, RawEcho
from . import plots
from .console import output, table
from .detections_csv import flag_names
from .heads import head_for, load_heads
from .inputs import EchoInput, open_input
from .options import config_option, head_option, out_option
from .settings_file import load_settings

_EARS = ((LEFT, "left ear", plots.LEFT_EAR), (RIGHT, "right ear", plots.RIGHT_EAR))
_TRUTH_FROM_DB = 10.0  # weaker true echoes cannot be seen in the picture either


@click.command("show")
@click.argument("recording", type=click.Path(path_type=Path))
@head_option(multiple=False)
@click.option("--ping", default=0, show_default=True, help="Number of the ping, from 0.")
@out_option("Picture (PNG).")
@config_option
def show_command(recording: Path, head: Path, ping: int, out: Path, config: Path | None) -> None:
    """Draw one ping: both ears' envelopes, what was fitted, and where the echoes are.

    \b
    Example:
      python -m ros_echo_perception show scenes/clutter.wav --head head_a.yaml --ping 3 --out p.png
    """
    source = open_input(recording)
    if not 0 <= ping < source.n_pings:
        raise SettingError(refuse("--ping", ping, f"0 to {source.n_pings - 1}",
                                  file=str(recording)))  # fmt: skip
    used = head_for(load_heads([head]), source.head_name, str(recording))
    settings = load_settings(config, "processing", ProcessingConfig)
    echo = source.echo(ping)
    result = EchoPipeline(used, settings).process(echo)
    figure = draw_ping(echo, result, f"{source.name}, ping {ping}", true_places(source, ping))
    out.parent.mkdir(parents=True, exist_ok=True)
    figure.savefig(out, dpi=120)
    output().print(detection_table(result))
    output().print(f"Wrote {out}.", soft_wrap=True)


def true_places(source: EchoInput, ping: int) -> list[tuple[float, float]]:
    """(range, bearing) of the true reflectors of a ping, where the recording has the truth."""
    pings = (source.truth or {}).get("pings") or []
    if ping >= len(pings):
        return []
    return [
        (r["range_m"], r["bearing_rad"])
        for r in pings[ping].get("reflectors", ())
        if max((s for s in r["snr_db"] if s is not None), default=-math.inf) >= _TRUTH_FROM_DB
    ]


def detection_table(result: PingResult) -> Any:
    """The detections of one ping for people."""
    return table(
        "Detections",
        ("#", "range m", "± m", "bearing deg", "± deg", "SNR dB", "exists", "ears", "remarks"),
        [
            (i, d.range_m, d.range_sigma_m, math.degrees(d.bearing_rad),
             math.degrees(d.bearing_sigma_rad), d.snr_db, d.existence_probability,
             d.ears.name.lower().replace("_", " "), flag_names(d.flags) or None)
            for i, d in enumerate(result.detections)
        ],
    )  # fmt: skip


def draw_ping(
    echo: RawEcho, result: PingResult, title: str, truth: list[tuple[float, float]]
) -> Figure:
    """Envelopes over range on the left, the plane seen from above on the right."""
    figure = plots.new_figure(13.0, 6.0)
    grid = figure.add_gridspec(2, 2, width_ratios=(1.7, 1.0))
    for ear, name, colour in _EARS:
        axes = figure.add_subplot(grid[ear, 0])
        _draw_envelope(axes, echo, result, ear, colour)
        axes.set_ylabel(f"{name}\nenvelope, fraction of full scale")
    axes.set_xlabel(
        "half the sound's way since emission, m; an echo begins at its line and peaks later"
    )
    _draw_plane(figure.add_subplot(grid[:, 1]), result, truth)
    figure.suptitle(title, x=0.01, ha="left", fontsize=12)
    return figure


def _draw_envelope(axes: Any, echo: RawEcho, result: PingResult, ear: int, colour: str) -> None:
    samples = np.asarray(echo.samples[ear], float) / echo.full_scale
    time_s = echo.first_sample_offset_s + np.arange(samples.size) / echo.sample_rate_hz
    half_c = result.speed_of_sound_m_s / 2.0
    envelope = np.abs(hilbert(samples - np.median(samples)))
    axes.plot(half_c * time_s, envelope, color=colour, linewidth=0.6, alpha=0.35, label="samples")
    fit = result.envelope
    if fit is not None:
        way = half_c * (fit.first_time_s + fit.step_s * np.arange(fit.measured.shape[1]))
        axes.plot(way, fit.measured[ear], color=colour, linewidth=1.3, label="filtered")
        axes.plot(way, fit.fitted[ear], color=plots.OCCUPIED_CELL, linewidth=1.2, linestyle="--",
                  label="fitted")  # fmt: skip
        axes.axhline(fit.threshold[ear], color=plots.DOUBTFUL_CELL, linewidth=1.0,
                     label="threshold")  # fmt: skip
        axes.axvspan(axes.get_xlim()[0], half_c * fit.blanking_end_s, color=plots.UNKNOWN_CELL,
                     label="direct pulse")  # fmt: skip
    for number, d in enumerate(result.detections):
        axes.axvline(d.range_m, color=plots.DETECTION, linewidth=1.0)
        axes.annotate(str(number), (d.range_m, 1.0), xycoords=("data", "axes fraction"),
                      ha="center", va="bottom", fontsize=8)  # fmt: skip
    axes.set_xlim(0.0, half_c * time_s[-1])
    axes.set_yscale("log")
    axes.set_ylim(max(1e-6, float(np.median(envelope)) / 5), 1.5 * float(envelope.max()) + 1e-9)
    axes.legend(loc="upper right", fontsize=7, ncols=3, frameon=False)


def _draw_plane(axes: Any, result: PingResult, truth: list[tuple[float, float]]) -> None:
    """Seen from above, x up, y to the left; bearing bars show one sigma."""
    far = 1.05 * max([1.0, *(d.range_m for d in result.detections), *(r for r, _ in truth)])
    for sign in (-1.0, 1.0):
        edge = sign * result.beam_half_width_rad
        axes.plot([0.0, -far * math.sin(edge)], [0.0, far * math.cos(edge)],
                  color=plots.DOUBTFUL_CELL, linewidth=1.0)  # fmt: skip
    for number, d in enumerate(result.detections):
        _draw_detection(axes, d, number)
    if truth:
        r, b = np.array(truth).T
        axes.plot(-r * np.sin(b), r * np.cos(b), "x", color=plots.TRUTH, label="truth")
        axes.legend(loc="lower right", fontsize=8, frameon=False)
    axes.set_aspect("equal", adjustable="datalim")
    axes.set_ylim(-0.05 * far, far)
    axes.set_xlabel("right of the head, m (negative: left)")
    axes.set_ylabel("ahead of the head, m")


def _draw_detection(axes: Any, d: Detection, number: int) -> None:
    half = d.bearing_sigma_rad
    arc = np.linspace(d.bearing_rad - half, d.bearing_rad + half, 25)
    axes.plot(-d.range_m * np.sin(arc), d.range_m * np.cos(arc), color=plots.DETECTION,
              linewidth=3.0, solid_capstyle="butt", alpha=0.8)  # fmt: skip
    x, y = -d.range_m * math.sin(d.bearing_rad), d.range_m * math.cos(d.bearing_rad)
    axes.plot(x, y, "o", color=plots.OCCUPIED_CELL, markersize=3.5)
    axes.annotate(str(number), (x, y), xytext=(4, 4), textcoords="offset points", fontsize=8)
