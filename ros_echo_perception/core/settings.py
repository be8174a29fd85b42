"""Settings: frozen dataclasses whose fields know their unit, range and meaning.

A default lives here and nowhere else. ROS parameters, YAML files, the command line and the
tables of the README are derived from these fields or are checked against them by tests.
"""

from __future__ import annotations

import dataclasses
import math
from collections.abc import Mapping
from dataclasses import dataclass
from typing import Any, TypeVar, get_type_hints

from .errors import SettingError, refuse

SettingsT = TypeVar("SettingsT", bound="Settings")


@dataclass(frozen=True)
class SettingInfo:
    """What is known of one setting.

    ``kind`` is the Python type (float, int, bool, str, or list for ``tuple[...]`` fields).
    """

    name: str
    kind: type
    default: Any
    description: str
    unit: str
    minimum: float | None
    maximum: float | None
    choices: tuple[str, ...]
    read_only: bool

    def allowed(self) -> str:
        """The allowed values in words."""
        if self.choices:
            return "one of " + ", ".join(self.choices)
        if self.minimum is None and self.maximum is None:
            return f"any {self.kind.__name__}"
        if self.maximum is None:
            return f"{self.minimum:g} or more{self._unit()}"
        if self.minimum is None:
            return f"{self.maximum:g} or less{self._unit()}"
        return f"{self.minimum:g} to {self.maximum:g}{self._unit()}"

    def _unit(self) -> str:
        return f" {self.unit}" if self.unit else ""


def setting(
    default: Any,
    description: str,
    unit: str = "",
    minimum: float | None = None,
    maximum: float | None = None,
    choices: tuple[str, ...] = (),
    read_only: bool = False,
) -> Any:
    """A dataclass field with everything a parameter descriptor needs."""
    return dataclasses.field(
        default=default,
        metadata={
            "description": description,
            "unit": unit,
            "minimum": minimum,
            "maximum": maximum,
            "choices": choices,
            "read_only": read_only,
        },
    )


@dataclass(frozen=True)
class Settings:
    """Base of all configuration dataclasses: every field is declared by `setting`.

    Raises
    ------
    SettingError
        On construction, when a value has the wrong type or lies outside its range.

    Examples
    --------
    >>> @dataclass(frozen=True)
    ... class Filter(Settings):
    ...     cutoff_hz: float = setting(100.0, "Corner frequency", "Hz", 1.0, 1000.0)
    >>> Filter(cutoff_hz=0.0)
    Traceback (most recent call last):
    ...
    ros_echo_perception.core.errors.SettingError: cutoff_hz is 0.0; allowed: 1 to 1000 Hz.
    """

    def __post_init__(self) -> None:
        for info in describe(type(self)):
            object.__setattr__(self, info.name, _checked(info, getattr(self, info.name)))
        self.check_together()

    def check_together(self) -> None:
        """Checks that span several settings; overridden where there are any."""


def describe(cls: type[Settings]) -> tuple[SettingInfo, ...]:
    """All settings of a class in the order of their declaration."""
    hints = get_type_hints(cls)
    return tuple(
        SettingInfo(
            field.name, _kind(hints[field.name]), field.default, **_metadata(field.metadata)
        )
        for field in dataclasses.fields(cls)
    )


def from_mapping(cls: type[SettingsT], values: Mapping[str, Any], file: str = "") -> SettingsT:
    """Settings from names and values (for instance a YAML section).

    Raises
    ------
    SettingError
        For an unknown name (with the known ones), a wrong type or a value out of range.
    """
    known = {info.name for info in describe(cls)}
    for name in values:
        if name not in known:
            raise SettingError(refuse("setting", name, ", ".join(sorted(known)), file=file))
    try:
        return cls(**dict(values))
    except SettingError as error:
        raise SettingError(f"{file}: {error}" if file else str(error)) from None


def _metadata(metadata: Mapping[str, Any]) -> dict[str, Any]:
    if "description" not in metadata:
        raise TypeError("every field of a Settings class must be declared by setting(...)")
    return dict(metadata)


def _kind(hint: Any) -> type:
    return hint if isinstance(hint, type) and hint in (float, int, bool, str) else list


def _checked(info: SettingInfo, value: Any) -> Any:
    if info.kind is list:
        return _checked_list(info, value)
    if info.kind is float and isinstance(value, int) and not isinstance(value, bool):
        value = float(value)
    if type(value) is not info.kind:
        raise SettingError(refuse(info.name, value, f"a value of type {info.kind.__name__}"))
    if info.choices and value not in info.choices:
        raise SettingError(refuse(info.name, value, info.allowed()))
    if isinstance(value, float) and math.isnan(value):
        raise SettingError(refuse(info.name, value, info.allowed()))
    if isinstance(value, int | float) and not _inside(info, value):
        raise SettingError(refuse(info.name, value, info.allowed()))
    return value


def _checked_list(info: SettingInfo, value: Any) -> tuple[Any, ...]:
    if isinstance(value, str) or not hasattr(value, "__iter__"):
        raise SettingError(refuse(info.name, value, "a list"))
    items = tuple(value)
    for item in items:
        if isinstance(item, int | float) and not (math.isfinite(item) and _inside(info, item)):
            raise SettingError(refuse(info.name, items, f"items of {info.allowed()}"))
    return items


def _inside(info: SettingInfo, value: float) -> bool:
    return (info.minimum is None or value >= info.minimum) and (
        info.maximum is None or value <= info.maximum
    )
