"""The running table in the terminal; plain lines where the output is no terminal."""

from __future__ import annotations

import time
from types import TracebackType

import numpy as np
from rich.console import Console, Group
from rich.live import Live
from rich.progress_bar import ProgressBar
from rich.table import Table

from .monitor import Monitor

_LINE_PERIOD_S = 5.0


class LiveView:
    """Shows what the monitor has seen, for a run of ``total_s`` seconds."""

    def __init__(self, console: Console, total_s: float) -> None:
        self._console, self._total_s = console, total_s
        self._live = (
            Live(console=console, refresh_per_second=4, transient=True)
            if console.is_terminal
            else None
        )
        self._next_line_s = 0.0

    def __enter__(self) -> LiveView:
        if self._live:
            self._live.__enter__()
        return self

    def __exit__(
        self,
        kind: type[BaseException] | None,
        error: BaseException | None,
        trace: TracebackType | None,
    ) -> None:
        if self._live:
            self._live.__exit__(kind, error, trace)

    def update(self, monitor: Monitor, elapsed_s: float) -> None:
        """Show the present state; the caller holds the monitor's lock."""
        if self._live:
            self._live.update(self._table(monitor, elapsed_s))
        elif elapsed_s >= self._next_line_s:
            self._next_line_s = elapsed_s + _LINE_PERIOD_S
            figures = ", ".join(f"{what} {value}" for what, value in figures_of(monitor))
            self._console.print(
                f"{elapsed_s:5.1f} of {self._total_s:g} s: {figures}", soft_wrap=True
            )

    def _table(self, monitor: Monitor, elapsed_s: float) -> Group:
        table = Table.grid(padding=(0, 2))
        table.add_column(justify="left")
        table.add_column(justify="right")
        for what, value in figures_of(monitor):
            table.add_row(what, value)
        bar = ProgressBar(total=self._total_s, completed=min(elapsed_s, self._total_s), width=48)
        progress = Table.grid(padding=(0, 2))
        progress.add_row(bar, f"{elapsed_s:.0f} of {self._total_s:g} s")
        return Group(progress, table)


def figures_of(monitor: Monitor) -> list[tuple[str, str]]:
    """The figures of the running table, with their units."""
    pings = len(monitor.pings)
    rows = [
        ("ping rate", f"{monitor.recent_rate_hz(time.time()):.1f} Hz"),
        ("pings", str(len(monitor.raw_published_s))),
        ("lost", str(monitor.raw_lost + monitor.unanswered)),
        ("detections per ping", f"{monitor.n_detections / pings:.2f}" if pings else "-"),
        ("echo to detections", _latency(monitor)),
    ]
    seen = monitor.latest_map
    if seen is None:
        return [*rows, ("map", "-")]
    return [
        *rows,
        ("map known", f"{seen.known_area_m2:.1f} m²"),
        ("map occupied", f"{seen.occupied_cells} cells"),
    ]


def _latency(monitor: Monitor) -> str:
    latencies = monitor.latencies_s()
    if not latencies.size:
        return "-"
    median, high = 1e3 * np.quantile(latencies, (0.5, 0.95))
    return f"{median:.1f} ms median, {high:.1f} ms at 95 %"
