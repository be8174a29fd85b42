"""Settings from YAML files: the nodes' own parameter files, or plain names and values."""

from __future__ import annotations

import dataclasses
from collections.abc import Mapping, Sequence
from pathlib import Path
from typing import Any, TypeVar

import yaml

from ..core.errors import FileFormatError, refuse
from ..core.fields import read_yaml
from ..core.settings import Settings, describe, from_mapping
from ..nodes.settings import SECTIONS

SettingsT = TypeVar("SettingsT", bound=Settings)
_OF_EVERY_NODE = {"use_sim_time", "qos_overrides"}


def load_settings(path: str | Path | None, section: str, cls: type[SettingsT]) -> SettingsT:
    """Settings of one stage; the defaults when no file is given.

    Parameters
    ----------
    path
        One of: a mapping of names to values; a mapping with a key ``section``; a ROS 2 parameter
        file with a node of that name (its parameters that are not settings of the stage, such as
        frames and topics, are left alone).
    section
        ``processing``, ``mapping`` or ``simulator``.

    Raises
    ------
    FileFormatError, SettingError
        Naming the file, the setting, the value and what is allowed.
    """
    if path is None:
        return cls()
    data = load_yaml(path)
    node, prefix = _home(cls)
    ros = _ros_parameters(data, node)
    if ros is not None:
        values = ros.get(prefix) or {} if prefix else _own(ros, node, cls)
        return from_mapping(cls, values, str(path))
    if isinstance(data.get(section), Mapping):
        data = data[section]
    return from_mapping(cls, data, str(path))


def _home(cls: type[Settings]) -> tuple[str, str]:
    """The node that has these settings, and the prefix of their names there."""
    return next((node, classes[cls]) for node, classes in SECTIONS.items() if cls in classes)


def _own(ros: Mapping[str, Any], node: str, cls: type[Settings]) -> dict[str, Any]:
    """The stage's own settings; a misspelt name stays in and is refused later."""
    others = set(_OF_EVERY_NODE)
    for settings, prefix in SECTIONS[node].items():
        if settings is not cls:
            others |= {prefix} if prefix else {info.name for info in describe(settings)}
    return {name: value for name, value in ros.items() if name not in others}


def load_yaml(path: str | Path) -> dict[str, Any]:
    """The mapping in a YAML file; an empty file is an empty mapping."""
    data = read_yaml(path)
    if data is None:
        return {}
    if not isinstance(data, Mapping):
        raise FileFormatError(
            refuse("content", data, "a mapping of names to values", file=str(path))
        )
    return dict(data)


def _ros_parameters(data: Mapping[str, Any], node: str) -> Mapping[str, Any] | None:
    """The parameters of a node; None when this is no parameter file at all."""
    nodes = {k: v for k, v in data.items() if isinstance(v, Mapping) and "ros__parameters" in v}
    if not nodes:
        return None
    merged: dict[str, Any] = {}
    for name, value in nodes.items():
        if name == "/**" or name.rsplit("/", 1)[-1] == node:
            merged.update(value["ros__parameters"] or {})
    return merged


def save_used(path: Path, command: str, sections: Mapping[str, Settings],
              inputs: Mapping[str, Sequence[str]]) -> None:  # fmt: skip
    """Write the settings that made a result beside it; `load_settings` reads them back."""
    data: dict[str, Any] = {"command": command}
    data.update({name: list(values) for name, values in inputs.items()})
    for name, settings in sections.items():
        data[name] = {
            key: list(value) if isinstance(value, tuple) else value
            for key, value in dataclasses.asdict(settings).items()
        }
    header = "# Settings that made the file beside this one.\n"
    path.write_text(header + yaml.safe_dump(data, sort_keys=False))


def settings_path(out: Path) -> Path:
    """Where the settings beside a result go.

    Examples
    --------
    >>> settings_path(Path("run/detections.csv")).name
    'detections.settings.yaml'
    """
    return out.with_name(out.stem + ".settings.yaml")
