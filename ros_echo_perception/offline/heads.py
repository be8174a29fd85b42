"""Which head file belongs to which recording."""

from __future__ import annotations

from collections.abc import Iterable, Mapping
from pathlib import Path

from ..core.errors import FileFormatError, refuse
from ..core.head import Head, load_head


def load_heads(paths: Iterable[str | Path]) -> dict[str, Head]:
    """Heads by their names.

    Raises
    ------
    FileFormatError
        For a bad head file, or two of one name.
    """
    heads: dict[str, Head] = {}
    for path in paths:
        head = load_head(path)
        if head.name in heads:
            raise FileFormatError(
                refuse("name", head.name, "one head file for each name", "leave one out",
                       str(path))
            )  # fmt: skip
        heads[head.name] = head
    return heads


def head_for(heads: Mapping[str, Head], name: str, file: str) -> Head:
    """The head that made a recording; the only one given, for an input that names none.

    Raises
    ------
    FileFormatError
        When none of the heads has that name.
    """
    if not name and len(heads) == 1:
        return next(iter(heads.values()))
    if name not in heads:
        raise FileFormatError(
            refuse("head", name or "not named (a bag)", ", ".join(sorted(heads)) or "none given",
                   "give the head file of that name, once, with --head", file)
        )  # fmt: skip
    return heads[name]
