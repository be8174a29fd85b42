"""The results of ``score`` as Markdown."""

from __future__ import annotations

import math
from collections.abc import Mapping, Sequence
from typing import Any

from .console import quantile

BEGIN, END = "<!-- results:begin -->", "<!-- results:end -->"


def markdown(report: Mapping[str, Any]) -> str:
    """All tables of a report."""
    parts = [
        _categories(report["detections"]),
        _by_snr(report["detections"]),
        _bearings(report["detections"]),
        _separation(report["detections"]),
        _maps(report["maps"]),
        _notes(report),
    ]
    return "\n\n".join(part for part in parts if part)


def grid(columns: Sequence[str], rows: Sequence[Sequence[str]]) -> str:
    """A Markdown table, first column left-aligned, the others right-aligned.

    Examples
    --------
    >>> print(grid(["a", "b"], [["x", "1"]]))
    | a | b |
    |:--|--:|
    | x | 1 |
    """
    lines = ["| " + " | ".join(columns) + " |", "|:--|" + "--:|" * (len(columns) - 1)]
    lines += ["| " + " | ".join(row) + " |" for row in rows]
    return "\n".join(lines)


def _number(value: float | None, digits: int = 2, factor: float = 1.0) -> str:
    return "-" if value is None else f"{value * factor:.{digits}f}"


def _categories(report: Mapping[str, Any]) -> str:
    lines = [*report["categories"].items(), ("**all**", report["overall"])]
    columns = (
        "scenes", "pings", "echoes to find", "precision", "recall", "F1", "false per ping",
        "range error rms, mm", "bearing error rms, deg",
    )  # fmt: skip
    return grid(
        columns,
        [
            [
                name.replace("_", " "), str(v["pings"]), str(v["targets"]),
                _number(v["precision"]), _number(v["recall"]), _number(v["f1"]),
                _number(v["false_per_ping"]), _number(v["range_rmse_m"], 1, 1e3),
                _number(v["bearing_rmse_rad"], 2, math.degrees(1)),
            ]
            for name, v in lines
        ],
    )  # fmt: skip


def _by_snr(report: Mapping[str, Any]) -> str:
    found = report["recall_by_snr_db"]
    ratios = report.get("single_error_over_envelope_bound_by_snr_db", {})
    return grid(
        ["SNR of the better ear, dB", *found],
        [
            ["found", *(_number(v.get("share")) for v in found.values())],
            ["range error over the Cramér-Rao bound (single echoes)",
             *(_number(ratios.get(b, {}).get("ratio")) for b in found)],
        ],
    )  # fmt: skip


def _bearings(report: Mapping[str, Any]) -> str:
    heads = report["bearing_range_match_by_head_and_snr_db"].get("single", {})
    bins = sorted({b for v in heads.values() for b in v}, key=_leading_number)
    rows = [
        [f"{head}: rms / median, deg"]
        + [
            f"{math.degrees(v[b]['rmse_rad']):.2f} / {math.degrees(v[b]['median_abs_rad']):.2f}"
            if b in v
            else "-"
            for b in bins
        ]
        for head, v in sorted(heads.items())
    ]
    return grid(["bearing error of single echoes by SNR, dB", *bins], rows) if rows else ""


def _leading_number(name: str) -> float:
    digits = "".join(c if c.isdigit() else " " for c in name).split()
    return float(digits[0]) if digits else math.inf


def _separation(report: Mapping[str, Any]) -> str:
    pairs = report.get("pair_close_both_found_by_spacing_sigma", {})
    equal = report.get("equal_range")
    rows = [[f"{b} pulse sigmas apart", _number(v["share"])] for b, v in pairs.items()]
    if equal:
        rows.append(["at one range, two bearings", _number(equal["both_found"])])
        rows.append(
            ["at one range: a phantom in the middle", _number(equal["phantom_in_the_middle"])]
        )
    return grid(["two objects", "share of pings with both found"], rows) if rows else ""


def _maps(maps: Sequence[Mapping[str, Any]]) -> str:
    columns = (
        "drive", "occupied cells", "precision", "recall of echoing surface",
        "recall of surface in the beam", "F1 (echoing)", "wrongly free (echoing)",
        "phantom cells per m²", "drift at the end, m",
    )  # fmt: skip
    rows = [
        [
            m["drive"], str(m["occupied_cells"]), _number(m["precision"]),
            _number(m["recall_echoing"]), _number(m["recall_in_beam"]), _number(m["f1_echoing"]),
            _number(m["wrongly_free_echoing"], 3), _number(m["phantom_cells_per_m2"]),
            _number(m["drift_end_m"]),
        ]
        for m in maps
    ]  # fmt: skip
    return grid(columns, rows) if rows else ""


def _notes(report: Mapping[str, Any]) -> str:
    overall, times = report["detections"]["overall"], report["ms_per_ping"]
    parts = []
    for what in ("range", "bearing"):
        if f"{what}_within_1_sigma" in overall:
            parts.append(
                f"{what} within 1 / 2 sigma: {overall[f'{what}_within_1_sigma']:.2f} / "
                f"{overall[f'{what}_within_2_sigma']:.2f} (ideal 0.68 / 0.95)"
            )
    parts.append(
        f"time per ping, median / 95 %: {quantile(times, 0.5):.1f} / "
        f"{quantile(times, 0.95):.1f} ms (two processes at once)"
    )
    heads = "calibrated from each unit's own recording" if report["calibrated"] else "nominal"
    return f"Heads: {heads}. " + "; ".join(parts) + "."
