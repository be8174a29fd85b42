"""Writes config/<node>.yaml from the settings: every parameter with its default, meaning and unit.

``python -m ros_echo_perception.nodes.parameter_files config`` after a change of any setting. No ROS
here.
"""

from __future__ import annotations

import sys
import textwrap
from collections.abc import Iterator
from pathlib import Path

import yaml

from ..core.settings import SettingInfo, Settings, describe
from .settings import FIXED, SECTIONS

_WIDTH = 100
_HEADER = """\
# Parameters of the {node} node, all at their defaults. "/**" reaches the node whatever its name and
# namespace: give this file to this node only. Numbers with a unit are floats, 30 and 30.0 are both
# accepted; in a list write all items alike (0.0, 0.5). "fixed": read only when the node starts.
/**:
  ros__parameters:
"""


def render(node: str) -> str:
    """The text of a node's parameter file."""
    text = _HEADER.format(node=node)
    for cls, prefix in SECTIONS[node].items():
        indent = "    "
        if prefix:
            text += f"\n{indent}{prefix}:\n"
            indent += "  "
        for info in describe(cls):
            text += "\n" + "".join(_entry(info, cls, indent))
    return text


def _entry(info: SettingInfo, cls: type[Settings], indent: str) -> Iterator[str]:
    free = not info.choices and info.minimum is None and info.maximum is None
    notes = [] if free else [f"allowed: {info.allowed()}"]
    if info.unit and info.unit not in " ".join(notes):
        notes.append(f"unit: {info.unit}")
    if info.read_only or cls in FIXED:
        notes.append("fixed")
    comment = info.description + (f" ({'; '.join(notes)})" if notes else "")
    for line in textwrap.wrap(comment, _WIDTH - len(indent) - 2):
        yield f"{indent}# {line}\n"
    is_list = info.kind is list
    value = {info.name: list(info.default) if is_list else info.default}
    # None: the list inside the mapping in one line, [a, b].
    dumped = yaml.safe_dump(value, default_flow_style=None if is_list else False, width=_WIDTH)
    yield f"{indent}{dumped}"


def main(folder: str) -> None:
    """Write the parameter files of all nodes into a folder."""
    for node in SECTIONS:
        (Path(folder) / f"{node}.yaml").write_text(render(node))


if __name__ == "__main__":
    main(*sys.argv[1:])
