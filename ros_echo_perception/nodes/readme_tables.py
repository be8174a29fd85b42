"""Writes the README's tables of topics, services and parameters from what the nodes declare.

``python -m ros_echo_perception.nodes.readme_tables --update README.md`` after a change of any topic
or setting; without ``--update`` the tables are printed. No ROS here.
"""

from __future__ import annotations

from collections.abc import Iterable, Sequence
from pathlib import Path
from typing import get_type_hints

import click

from ..core.errors import EchoPerceptionError
from ..core.settings import SettingInfo, Settings, describe
from ..offline.marked_block import replace_block
from . import topics
from .settings import FIXED, SECTIONS

BEGIN, END = "<!-- parameters:begin -->", "<!-- parameters:end -->"
_SCALARS = {float: "double", int: "integer", bool: "bool", str: "string"}
_ARRAYS = {tuple[float, ...]: "double[]", tuple[str, ...]: "string[]"}


def tables() -> str:
    """Sections of all nodes, in the order in which data passes them."""
    return "\n\n".join(_node(name) for name in SECTIONS)


def grid(columns: Sequence[str], rows: Iterable[Sequence[str]]) -> str:
    """A Markdown table.

    Examples
    --------
    >>> print(grid(("a", "b"), [("x", "1 | 2")]))
    | a | b |
    |---|---|
    | x | 1 \\| 2 |
    """
    cells = [[cell.replace("|", "\\|") for cell in row] for row in rows]
    lines = ["| " + " | ".join(row) + " |" for row in (list(columns), *cells)]
    return "\n".join([lines[0], "|" + "---|" * len(columns), *lines[1:]])


def _node(name: str) -> str:
    parts = [f"### Node `{name}`"]
    for title, listed in (("Publishes", topics.PUBLISHES), ("Subscribes to", topics.SUBSCRIBES)):
        if listed[name]:
            parts += [f"{title}:", _topics(listed[name])]
    if topics.SERVICES[name]:
        parts += ["Services:", _services(topics.SERVICES[name])]
    count = sum(len(describe(cls)) for cls in SECTIONS[name])
    summary = f"<summary>Parameters of <code>{name}</code> ({count})</summary>"
    return "\n\n".join([*parts, f"<details>{summary}", _parameters(name), "</details>"])


def _topics(listed: Sequence[topics.Topic]) -> str:
    columns = ("topic", "type", "QoS", "what")
    return grid(
        columns,
        [(f"`{t.name}`", f"`{t.message}`", str(topics.QOS[t.qos]), t.description) for t in listed],
    )


def _services(listed: Sequence[topics.Service]) -> str:
    rows = [(f"`{s.name}`", f"`{s.type}`", s.description) for s in listed]
    return grid(("service", "type", "what"), rows)


def _parameters(node: str) -> str:
    rows = [
        _parameter(info, cls, prefix)
        for cls, prefix in SECTIONS[node].items()
        for info in describe(cls)
    ]
    return grid(("parameter", "type", "default", "unit", "allowed", "changes", "what"), rows)


def _parameter(info: SettingInfo, cls: type[Settings], prefix: str) -> tuple[str, ...]:
    name = f"{prefix}.{info.name}" if prefix else info.name
    fixed = info.read_only or cls in FIXED
    return (
        f"`{name}`",
        _type(info, cls),
        f"`{_value(info.default)}`",
        info.unit,
        _allowed(info),
        "at start" if fixed else "any time",
        info.description,
    )


def _type(info: SettingInfo, cls: type[Settings]) -> str:
    hint = get_type_hints(cls)[info.name]
    return _ARRAYS[hint] if info.kind is list else _SCALARS[info.kind]


def _value(value: object) -> str:
    if isinstance(value, bool):
        return str(value).lower()
    if isinstance(value, tuple):
        return "[" + ", ".join(_value(item) for item in value) + "]"
    return f'"{value}"' if isinstance(value, str) else str(value)


def _allowed(info: SettingInfo) -> str:
    if info.choices:
        return ", ".join(f"`{choice}`" for choice in info.choices)
    if info.minimum is None and info.maximum is None:
        return "any"
    low = "" if info.minimum is None else f"{info.minimum:.10g}"
    high = "" if info.maximum is None else f"{info.maximum:.10g}"
    if low and high:
        return f"{low} to {high}"
    return f"{low} or more" if low else f"{high} or less"


@click.command(context_settings={"help_option_names": ["-h", "--help"]})
@click.option("--update", type=click.Path(path_type=Path),
              help="File whose block between the parameters markers is replaced.")  # fmt: skip
def main(update: Path | None) -> None:
    """Tables of topics, services and parameters of all nodes, as Markdown."""
    if update is None:
        click.echo(tables())
        return
    try:
        replace_block(update, BEGIN, END, tables())
    except EchoPerceptionError as error:
        raise click.ClickException(str(error)) from None


if __name__ == "__main__":
    main()
