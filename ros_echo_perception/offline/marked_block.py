"""A block of a document that a command writes, between two marker lines."""

from __future__ import annotations

from pathlib import Path

from ..core.errors import FileFormatError
from ..core.fields import read_text


def replace_block(path: Path, begin: str, end: str, text: str) -> None:
    """Replace what stands between the markers ``begin`` and ``end`` of a file.

    Raises
    ------
    FileFormatError
        When the file cannot be read or lacks a marker.
    """
    before, found_begin, rest = read_text(path).partition(begin)
    _, found_end, after = rest.partition(end)
    if not found_begin or not found_end:
        raise FileFormatError(f"{path}: lacks {begin} or, after it, {end}; add both lines.")
    path.write_text(f"{before}{begin}\n{text}\n{end}{after}")
