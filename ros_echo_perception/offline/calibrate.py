"""The command ``calibrate``: from a pole at known places to a head file of this unit."""

from __future__ import annotations

import csv
import math
from collections.abc import Mapping, Sequence
from pathlib import Path
from typing import Any

import click

from ..core.calibration import CalibrationReport, calibrate_head
from ..core.errors import FileFormatError, refuse
from ..core.fields import read_text
from ..core.head import Head, load_head, save_head
from ..core.types import RawEcho
from .console import output, table
from .heads import head_for
from .inputs import EchoInput, open_input
from .options import head_option, need_something, out_option

Place = tuple[float, float]
"""Range (m) and bearing (rad) of the pole from the head's reference point."""
_HOLDBACK = (
    ("range, mean", "mm", "range_bias_m", 1e3),
    ("range, rms", "mm", "range_rms_m", 1e3),
    ("bearing, mean", "deg", "bearing_bias_rad", math.degrees(1.0)),
    ("bearing, rms", "deg", "bearing_rms_rad", math.degrees(1.0)),
)
"""What the report says of the pings held back: words, unit, key, factor to the unit."""
_COLUMNS = ("ping", "range_m", "bearing_rad")


def calibrate_inputs(
    paths: Sequence[Path], nominal: Head, places: Path | None
) -> CalibrationReport:
    """Calibrate a head from recordings.

    Parameters
    ----------
    paths
        Recordings of one unit.
    nominal
        The maker's head.
    places
        Table with the columns ping, range_m, bearing_rad, for one recording; None: the places
        stand in the recordings' sidecars (``truth``).

    Raises
    ------
    FileFormatError
        When a place is missing or impossible.
    CalibrationError
        When the data cannot determine the values.
    """
    sources = [open_input(path) for path in paths]
    if places is not None and len(sources) > 1:
        raise FileFormatError(
            refuse("recordings", len(sources), "1 with --places", "calibrate them together only "
                   "when the places stand in their sidecars", str(places))
        )  # fmt: skip
    echoes: list[RawEcho] = []
    at: list[Place] = []
    for source in sources:
        head_for({nominal.name: nominal}, source.head_name, str(source.path))
        known = read_places(places) if places is not None else places_of(source)
        for k in sorted(known):
            if not 0 <= k < source.n_pings:
                raise FileFormatError(
                    refuse("ping", k, f"0 to {source.n_pings - 1}",
                           file=str(places or source.path))
                )  # fmt: skip
            echoes.append(source.echo(k))
            at.append(known[k])
    need_something(len(echoes), "ping with a known place of the pole")
    return calibrate_head(echoes, at, nominal)


def places_of(source: EchoInput) -> dict[int, Place]:
    """Place of the pole by ping, from the sidecar; pings with another number of objects are left.

    Raises
    ------
    FileFormatError
        When the sidecar has no truth at all.
    """
    pings = (source.truth or {}).get("pings")
    if not pings:
        raise FileFormatError(
            refuse("truth.pings", "missing", "the place of the pole in each ping",
                   "give the places with --places", f"{source.path}.json")
        )  # fmt: skip
    found: dict[int, Place] = {}
    for k, ping in enumerate(pings):
        reflectors = ping.get("reflectors", ())
        if len(reflectors) == 1:
            found[k] = (float(reflectors[0]["range_m"]), float(reflectors[0]["bearing_rad"]))
    return found


def read_places(path: Path) -> dict[int, Place]:
    """Place of the pole by ping, from a CSV with the columns ping, range_m, bearing_rad.

    Raises
    ------
    FileFormatError
        Naming the line, the column and the value.
    """
    reader = csv.DictReader(read_text(path).splitlines())
    missing = [name for name in _COLUMNS if name not in (reader.fieldnames or ())]
    if missing:
        raise FileFormatError(
            refuse("columns", reader.fieldnames, ", ".join(_COLUMNS), file=str(path))
        )
    found: dict[int, Place] = {}
    for line, row in enumerate(reader, start=2):
        ping, range_m, bearing_rad = (_value(path, line, name, row[name]) for name in _COLUMNS)
        if ping != int(ping) or int(ping) in found:
            raise _refused(path, line, "ping", row["ping"], "a whole number, used once")
        if not range_m > 0.0:
            raise _refused(path, line, "range_m", row["range_m"], "more than 0 m")
        if not abs(bearing_rad) <= math.pi / 2:
            raise _refused(path, line, "bearing_rad", row["bearing_rad"], "-pi/2 to pi/2")
        found[int(ping)] = (range_m, bearing_rad)
    return found


def _value(path: Path, line: int, name: str, text: str | None) -> float:
    try:
        value = float(text or "")
    except ValueError:
        value = math.nan
    if not math.isfinite(value):
        raise _refused(path, line, name, text, "a finite number")
    return value


def _refused(path: Path, line: int, name: str, value: Any, allowed: str) -> FileFormatError:
    return FileFormatError(refuse(f"line {line}, {name}", value, allowed, file=str(path)))


@click.command("calibrate")
@click.argument("recordings", nargs=-1, required=True, type=click.Path(path_type=Path))
@head_option(multiple=False)
@out_option("Head file of this unit (YAML).")
@click.option(
    "--places",
    type=click.Path(path_type=Path),
    help="Where the pole stood (CSV: ping, range_m, bearing_rad). Default: the sidecar.",
)
def calibrate_command(
    recordings: tuple[Path, ...], head: Path, out: Path, places: Path | None
) -> None:
    """Measure what a unit's maker could not print: latency, gains, directions, resonances.

    RECORDING shows a thin pole that stands alone at a known place in each ping. Places should
    cover at least two ranges and bearings to both sides.

    \b
    Example:
      python -m ros_echo_perception calibrate pole.wav --head nominal.yaml --places places.csv \\
          --out my_head.yaml

    Ranges are metres from the point midway between the receivers; bearings are radians, positive
    to the left.
    """
    report = calibrate_inputs(recordings, load_head(head), places)
    out.parent.mkdir(parents=True, exist_ok=True)
    save_head(report.head, out)
    output().print(parameter_table(report))
    output().print(holdback_table(report.holdback))
    output().print(f"Wrote {out}.", soft_wrap=True)


def parameter_table(report: CalibrationReport) -> Any:
    """Nominal and calibrated values for people."""
    rows = [
        (row.name, row.unit, f"{row.nominal:.6g}", f"{row.value:.6g}", f"{row.sigma:.2g}")
        for row in report.rows
    ]
    columns = ("what", "unit", "nominal", "calibrated", "± 1 sigma")
    return table(f"Calibration of {report.head.name}", columns, rows)


def holdback_table(holdback: Mapping[str, float]) -> Any:
    """Errors on pings that took no part in the fit, nominal beside calibrated."""
    rows = []
    for quantity, unit, key, factor in _HOLDBACK:
        values = (holdback[f"{head}_{key}"] * factor for head in ("nominal", "calibrated"))
        rows.append((quantity, unit, *values))
    title = f"Checked on {holdback['pings']:.0f} pings held back"
    return table(title, ("error", "unit", "nominal head", "calibrated head"), rows)
