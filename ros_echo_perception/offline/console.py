"""What all commands print: progress on standard error, tables on standard output."""

from __future__ import annotations

from collections.abc import Sequence

import numpy as np
from rich.console import Console
from rich.progress import (
    BarColumn,
    MofNCompleteColumn,
    Progress,
    TextColumn,
    TimeElapsedColumn,
    TimeRemainingColumn,
)
from rich.table import Table

_WIDTH_OF_FILES = 140
"""Wide enough that no table has to fold where there is no terminal."""


def output() -> Console:
    """The console of results; made anew so that it follows a redirected standard output."""
    console = Console(highlight=False)
    if not console.is_terminal:
        console.width = _WIDTH_OF_FILES
    return console


def progress_bar() -> Progress:
    """A progress bar on standard error, gone when done."""
    return Progress(
        TextColumn("{task.description}"),
        BarColumn(),
        MofNCompleteColumn(),
        TimeElapsedColumn(),
        TimeRemainingColumn(),
        console=Console(stderr=True),
        transient=True,
    )


def table(title: str, columns: Sequence[str], rows: Sequence[Sequence[object]]) -> Table:
    """A table whose first column is text and whose others are right-aligned values."""
    result = Table(title=title, title_justify="left")
    for index, column in enumerate(columns):
        result.add_column(column, justify="left" if index == 0 else "right")
    for row in rows:
        result.add_row(*(text(value) for value in row))
    return result


def text(value: object) -> str:
    """A value for people: four significant digits, a dash for nothing or not-a-number.

    Examples
    --------
    >>> text(0.0123456), text(float("nan")), text(12), text("m")
    ('0.01235', '-', '12', 'm')
    """
    if value is None or (isinstance(value, float | np.floating) and not np.isfinite(value)):
        return "-"
    if isinstance(value, float | np.floating):
        return f"{value:.4g}"
    return str(value)


def quantile(values: Sequence[float], share: float) -> float:
    """A quantile, NaN of nothing.

    Examples
    --------
    >>> quantile([1.0, 2.0, 3.0], 0.5)
    2.0
    """
    return float(np.quantile(values, share)) if len(values) else float("nan")
