"""The command ``score``: the whole main job on a data set, and its results as a table."""

from __future__ import annotations

import importlib.util
import json
import sys
from collections.abc import Sequence
from concurrent.futures import Future, ProcessPoolExecutor
from dataclasses import dataclass
from pathlib import Path
from types import ModuleType
from typing import Any

import click

from ..core.errors import FileFormatError, refuse
from ..core.head import load_head, save_head
from ..core.mapping import MappingConfig
from ..core.perception.config import ProcessingConfig
from . import detections_csv
from .calibrate import calibrate_inputs
from .console import output, progress_bar
from .detect import DetectOutcome, process
from .inputs import open_input
from .map import map_drive, save_map
from .marked_block import replace_block
from .options import need_something
from .results_table import BEGIN, END, markdown

WORKERS = 2


@dataclass(frozen=True)
class DataSet:
    """A folder with ``heads``, ``scenes``, ``drives`` and two scorers."""

    folder: Path

    def check(self) -> None:
        """Raise when parts are missing.

        Raises
        ------
        FileFormatError
            Naming the first missing part.
        """
        for part in ("heads", "scenes", "drives", "score_detections.py", "score_map.py"):
            if not (self.folder / part).exists():
                raise FileFormatError(
                    refuse("data folder", "incomplete", f"a folder with {part}",
                           file=str(self.folder))
                )  # fmt: skip

    def recordings(self, kind: str) -> list[Path]:
        """The WAV files of ``scenes`` or ``drives``, by name."""
        return sorted((self.folder / kind).glob("*.wav"))


@dataclass(frozen=True)
class Recorded:
    """One recording of the set and which unit made it."""

    path: Path
    head: str
    unit: str
    category: str


def survey(paths: Sequence[Path]) -> list[Recorded]:
    """Which head and unit made each recording, from the sidecars."""
    found = []
    for path in paths:
        source = open_input(path)
        found.append(Recorded(path, source.head_name, source.unit, source.category))
    return found


def score_all(data: DataSet, work: Path, use_nominal: bool = False) -> dict[str, Any]:
    """Calibrate each unit, detect on all scenes, map all drives, and score it all.

    Parameters
    ----------
    data
        The data set.
    work
        Folder for heads, table of detections, maps and reports.
    use_nominal
        Skip the calibration and use the makers' head files.
    """
    data.check()
    work.mkdir(parents=True, exist_ok=True)
    scenes = survey(data.recordings("scenes"))
    drives = survey(data.recordings("drives"))
    with ProcessPoolExecutor(WORKERS) as pool, progress_bar() as progress:
        task = progress.add_task("score", total=None)
        heads = _calibrated(data, scenes, work, pool, use_nominal)
        # The long jobs first: so both processes are busy to the end.
        maps = [pool.submit(_map_job, r.path, heads[r.unit], work) for r in drives]
        jobs = [pool.submit(_detect_job, r.path, heads[r.unit]) for r in scenes]
        progress.update(task, total=len(jobs) + len(maps))
        waiting: list[Future[Any]] = [*jobs, *maps]
        for job in waiting:
            job.add_done_callback(lambda _: progress.advance(task))
        outcomes = [job.result() for job in jobs]
        grids = [job.result() for job in maps]
    need_something(sum(len(o.results) for o in outcomes), "ping")
    table = work / "detections.csv"
    detections_csv.write(table, (row for outcome in outcomes for row in outcome.rows()))
    report = {
        "calibrated": not use_nominal,
        "detections": _score_detections(data, table, scenes),
        "maps": [_score_map(data, drive.path, grid) for drive, grid in
                 zip(drives, grids, strict=True)],
        "ms_per_ping": [1e3 * s for outcome in outcomes for s in outcome.seconds],
    }  # fmt: skip
    (work / "report.json").write_text(json.dumps(report, indent=1))
    return report


def _calibrated(
    data: DataSet, scenes: Sequence[Recorded], work: Path, pool: ProcessPoolExecutor,
    use_nominal: bool,
) -> dict[str, Path]:  # fmt: skip
    """Head file by unit; the maker's where there is no calibration recording."""
    heads = {r.unit: data.folder / "heads" / f"{r.head}.yaml" for r in scenes}
    if use_nominal:
        return heads
    jobs = {}
    for r in scenes:
        if r.category == "calibration":
            out = work / f"{r.unit}.yaml"
            jobs[r.unit] = pool.submit(_calibrate_job, r.path, heads[r.unit], out)
    return {**heads, **{unit: job.result() for unit, job in jobs.items()}}


def _calibrate_job(recording: Path, nominal: Path, out: Path) -> Path:
    save_head(calibrate_inputs([recording], load_head(nominal), None).head, out)
    return out


def _detect_job(recording: Path, head: Path) -> DetectOutcome:
    return process(open_input(recording), load_head(head), ProcessingConfig())


def _map_job(recording: Path, head: Path, work: Path) -> Path:
    out = work / f"{recording.stem}.npz"
    outcome = map_drive(
        open_input(recording), load_head(head), ProcessingConfig(), MappingConfig(), fit=True
    )
    save_map(outcome.snapshot, out)
    return out


def _score_detections(
    data: DataSet, table: Path, scenes: Sequence[Recorded]
) -> dict[str, Any]:  # fmt: skip
    scorer = _module(data.folder / "score_detections.py")
    judged = [r.path.stem for r in scenes if r.category != "calibration"]
    report: dict[str, Any] = scorer.score(
        str(data.folder / "scenes"), scorer.read_detections(str(table)), judged
    )
    return report


def _score_map(data: DataSet, drive: Path, grid: Path) -> dict[str, Any]:
    scorer = _module(data.folder / "score_map.py")
    report: dict[str, Any] = scorer.score(str(drive.with_suffix("")), *scorer.load_map(str(grid)))
    return report


def _module(path: Path) -> ModuleType:
    """A scorer of the data set, which finds its own helpers beside it."""
    sys.path.insert(0, str(path.parent))
    try:
        spec = importlib.util.spec_from_file_location(path.stem, path)
        if spec is None or spec.loader is None:
            raise FileFormatError(f"{path}: is not a Python file.")
        module = importlib.util.module_from_spec(spec)
        spec.loader.exec_module(module)
    finally:
        sys.path.remove(str(path.parent))
    return module


@click.command("score")
@click.option("--data", required=True, type=click.Path(path_type=Path),
              help="Folder with heads, scenes, drives and the two scorers.")  # fmt: skip
@click.option("--work", default="score", show_default=True, type=click.Path(path_type=Path),
              help="Folder for head files, detections, maps and report.json.")  # fmt: skip
@click.option("--nominal", is_flag=True, help="Use the makers' head files uncalibrated.")
@click.option("--update", type=click.Path(path_type=Path),
              help="File whose block between the results markers is replaced.")  # fmt: skip
def score_command(data: Path, work: Path, nominal: bool, update: Path | None) -> None:
    """Run the main job on a whole data set and score it against the truth.

    Calibrates every unit that has a calibration recording, detects on all scenes (those of the
    calibration are left out of the scores), maps all drives and calls the set's own scorers.

    \b
    Example:
      python -m ros_echo_perception score --data echo_data --update README.md
    """
    text = markdown(score_all(DataSet(data), work, nominal))
    output().print(text, soft_wrap=True, markup=False)
    if update is not None:
        replace_block(update, BEGIN, END, text)
