"""Pictures: maps with path and detections, envelopes of one ping. Matplotlib without a screen."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass
from pathlib import Path
from typing import Any

import numpy as np
from matplotlib.backends.backend_agg import FigureCanvasAgg
from matplotlib.colors import ListedColormap
from matplotlib.figure import Figure
from matplotlib.lines import Line2D
from matplotlib.patches import Patch
from numpy.typing import NDArray

from ..core.types import Pose2

PAPER = "#fbf8f1"
UNKNOWN_CELL = "#ece8df"
FREE_CELL = "#ffffff"
DOUBTFUL_CELL = "#d8c7a6"
OCCUPIED_CELL = "#22333b"
TRUTH = "#d1495b"
PATH = "#00798c"
DETECTION = "#edae49"
LEFT_EAR = "#00798c"
RIGHT_EAR = "#d1495b"

OCCUPIED_FROM, FREE_TO = 65, 35  # per cent, as the saved map files have them
_MARGIN_M = 0.5


@dataclass(frozen=True)
class MapPicture:
    """What a map's picture shows, all in the frame of the map.

    Attributes
    ----------
    data
        Occupancy, shape (height, width), -1 unknown, 0 to 100; row 0 at the lowest y.
    path
        Driven poses.
    detections
        Places of detections, shape (n, 2).
    outline
        True surfaces as polylines, each of shape (n, 2); empty when not known.
    """

    data: NDArray[np.int8]
    resolution_m: float
    origin_x_m: float
    origin_y_m: float
    path: Sequence[Pose2] = ()
    detections: NDArray[np.float64] | None = None
    outline: Sequence[NDArray[np.float64]] = ()
    title: str = ""


def new_figure(width_in: float, height_in: float) -> Figure:
    """A figure that needs no display."""
    figure = Figure(figsize=(width_in, height_in), facecolor=PAPER, layout="constrained")
    FigureCanvasAgg(figure)
    return figure


def save_map_picture(picture: MapPicture, path: Path, dpi: int = 130) -> None:
    """Draw a map and write it as PNG."""
    x_low, x_high, y_low, y_high = _extent(picture)
    width_in = 9.0
    height_in = float(np.clip(width_in * (y_high - y_low) / (x_high - x_low), 3.0, 11.0)) + 1.2
    figure = new_figure(width_in, height_in)
    axes = figure.add_subplot()
    _draw_cells(axes, picture)
    for line in picture.outline:
        axes.plot(line[:, 0], line[:, 1], color=TRUTH, linewidth=1.4, alpha=0.85, zorder=3)
    if picture.detections is not None and len(picture.detections):
        axes.plot(
            picture.detections[:, 0], picture.detections[:, 1],
            ".", color=DETECTION, markersize=4.5, alpha=0.8, zorder=2, markeredgewidth=0,
        )  # fmt: skip
    _draw_path(axes, picture.path)
    axes.set_xlim(x_low, x_high)
    axes.set_ylim(y_low, y_high)
    axes.set_aspect("equal")
    axes.set_xlabel("x, m")
    axes.set_ylabel("y, m")
    axes.set_title(picture.title, loc="left", fontsize=11)
    axes.set_facecolor(UNKNOWN_CELL)
    figure.legend(
        handles=_legend(picture), loc="outside lower center", ncols=4, frameon=False, fontsize=9
    )
    figure.savefig(path, dpi=dpi)


def _draw_cells(axes: Any, picture: MapPicture) -> None:
    kinds = np.zeros(picture.data.shape, np.uint8)
    kinds[picture.data >= 0] = 2
    kinds[(picture.data >= 0) & (picture.data <= FREE_TO)] = 1
    kinds[picture.data >= OCCUPIED_FROM] = 3
    height, width = picture.data.shape
    left, bottom, cell = picture.origin_x_m, picture.origin_y_m, picture.resolution_m
    axes.imshow(
        kinds, origin="lower", interpolation="nearest", vmin=0, vmax=3, zorder=1,
        cmap=ListedColormap([UNKNOWN_CELL, FREE_CELL, DOUBTFUL_CELL, OCCUPIED_CELL]),
        extent=(left, left + width * cell, bottom, bottom + height * cell),
    )  # fmt: skip


def _draw_path(axes: Any, path: Sequence[Pose2]) -> None:
    if not path:
        return
    axes.plot([p.x_m for p in path], [p.y_m for p in path], color=PATH, linewidth=1.6, zorder=5)
    end = path[-1]
    axes.annotate(
        "",
        (end.x_m + 0.35 * np.cos(end.yaw_rad), end.y_m + 0.35 * np.sin(end.yaw_rad)),
        (end.x_m, end.y_m),
        arrowprops={"arrowstyle": "-|>", "color": PATH, "linewidth": 1.6},
        zorder=6,
    )
    axes.plot(path[0].x_m, path[0].y_m, "o", color=PATH, markersize=5, zorder=6)


def _legend(picture: MapPicture) -> list[Any]:
    handles: list[Any] = [
        Patch(facecolor=OCCUPIED_CELL, label="occupied"),
        Patch(facecolor=FREE_CELL, edgecolor=DOUBTFUL_CELL, label="free"),
        Patch(facecolor=DOUBTFUL_CELL, label="undecided"),
        Patch(facecolor=UNKNOWN_CELL, edgecolor=DOUBTFUL_CELL, label="unknown"),
    ]
    if picture.path:
        handles.append(Line2D([], [], color=PATH, label="driven path"))
    if picture.detections is not None and len(picture.detections):
        handles.append(
            Line2D([], [], color=DETECTION, marker=".", linestyle="", label="detections")
        )
    if len(picture.outline):
        handles.append(Line2D([], [], color=TRUTH, label="true room"))
    return handles


def _extent(picture: MapPicture) -> tuple[float, float, float, float]:
    """Limits x low, high, y low, high around everything that is known or true."""
    row, column = np.nonzero(picture.data >= 0)
    points = [
        np.column_stack((column, row)) * picture.resolution_m
        + (picture.origin_x_m, picture.origin_y_m),
        np.array([(p.x_m, p.y_m) for p in picture.path], float).reshape(-1, 2),
        *picture.outline,
    ]
    everything = np.vstack(points)
    if not len(everything):
        everything = np.array([[-1.0, -1.0], [1.0, 1.0]])
    low, high = everything.min(0) - _MARGIN_M, everything.max(0) + _MARGIN_M
    return float(low[0]), float(high[0]), float(low[1]), float(high[1])
