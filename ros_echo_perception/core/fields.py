"""Checked access to what YAML and JSON files contain.

Every refusal is a FileFormatError that names the file, the field, the value and what is allowed.
"""

from __future__ import annotations

import json
import math
from collections.abc import Iterator, Mapping
from pathlib import Path
from typing import Any

import yaml

from .errors import FileFormatError, refuse


def read_yaml(path: str | Path) -> Any:
    """The contents of a YAML file; a FileFormatError when it cannot be read."""
    text = read_text(path)
    try:
        return yaml.safe_load(text)
    except yaml.YAMLError as error:
        raise FileFormatError(f"{path}: is not YAML ({error}).") from None


def read_json(path: str | Path) -> Any:
    """The contents of a JSON file; a FileFormatError when it cannot be read."""
    text = read_text(path)
    try:
        return json.loads(text)
    except (json.JSONDecodeError, RecursionError) as error:
        raise FileFormatError(f"{path}: is not JSON ({error}).") from None


def read_text(path: str | Path) -> str:
    """The contents of a text file; a FileFormatError when it cannot be read."""
    try:
        return Path(path).read_text(encoding="utf-8")
    except OSError as error:
        raise FileFormatError(
            f"{path}: cannot be read ({error.strerror or error}). Check the path."
        ) from None
    except UnicodeDecodeError as error:
        raise FileFormatError(f"{path}: is not text in UTF-8 ({error}).") from None


class Fields:
    """Checked access to a mapping of names to values and to its sections.

    Examples
    --------
    >>> Fields({"carrier_hz": -1}, "head.yaml").number("carrier_hz", 1e3, 1e6)
    Traceback (most recent call last):
    ...
    ros_echo_perception.core.errors.FileFormatError: head.yaml: carrier_hz is -1; \
allowed: a number from 1000 to 1e+06.
    """

    def __init__(self, data: Any, file: str, prefix: str = "") -> None:
        self.file, self.prefix = file, prefix
        if not isinstance(data, Mapping):
            name = prefix.rstrip(".") or "content"
            raise FileFormatError(refuse(name, data, "a mapping of names to values", file=file))
        self.data = data

    def refuse(self, name: str, value: Any, allowed: str, remedy: str = "") -> FileFormatError:
        """The error for a value of a field; raise it."""
        shown = value if len(repr(value)) < 200 else repr(value)[:200] + "..."
        return FileFormatError(refuse(self.prefix + name, shown, allowed, remedy, self.file))

    def get(self, name: str, allowed: str) -> Any:
        """Any value that must be there."""
        if name not in self.data:
            raise self.refuse(name, "missing", allowed)
        return self.data[name]

    def has(self, name: str) -> bool:
        """Whether a field is there and not null."""
        return self.data.get(name) is not None

    def number(self, name: str, low: float, high: float, default: float | None = None) -> float:
        """A number from low to high."""
        if default is not None and name not in self.data:
            return default
        allowed = f"a number from {low:g} to {high:g}"
        return self._number(name, self.get(name, allowed), low, high, allowed)

    def integer(self, name: str, low: int, high: int) -> int:
        """A whole number from low to high."""
        allowed = f"a whole number from {low} to {high}"
        value = self.get(name, allowed)
        if self._number(name, value, low, high, allowed) != int(value):
            raise self.refuse(name, value, allowed)
        return int(value)

    def numbers(self, name: str, count: int | None, low: float, high: float) -> tuple[float, ...]:
        """A list of numbers from low to high; any length when count is None."""
        allowed = f"{count or 'a list of'} numbers from {low:g} to {high:g}"
        value = self.get(name, allowed)
        if not isinstance(value, list | tuple) or count not in (None, len(value)):
            raise self.refuse(name, value, allowed)
        for item in value:
            self._number(name, item, low, high, allowed, value)
        return tuple(float(item) for item in value)

    def text(self, name: str, choices: tuple[str, ...] = ()) -> str:
        """A text, one of the choices if there are any."""
        allowed = "one of " + ", ".join(choices) if choices else "a text"
        value = self.get(name, allowed)
        if not isinstance(value, str) or (choices and value not in choices):
            raise self.refuse(name, value, allowed)
        return value

    def section(self, name: str) -> Fields:
        """A mapping below this one."""
        return Fields(self.get(name, "a section"), self.file, f"{self.prefix}{name}.")

    def sections(self, name: str, minimum: int = 0) -> Iterator[Fields]:
        """The mappings in a list below this one; none when the list is absent."""
        if name not in self.data and minimum == 0:
            return
        allowed = f"a list of at least {minimum} sections"
        value = self.get(name, allowed)
        if not isinstance(value, list) or len(value) < minimum:
            raise self.refuse(name, value, allowed)
        for index, item in enumerate(value):
            yield Fields(item, self.file, f"{self.prefix}{name}[{index}].")

    def only(self, *names: str) -> None:
        """Refuse names that nothing would read: most are spelling mistakes."""
        for name in self.data:
            if name not in names:
                raise self.refuse(str(name), self.data[name], "only " + ", ".join(names))

    def _number(
        self, name: str, value: Any, low: float, high: float, allowed: str, shown: Any = None
    ) -> float:
        shown = value if shown is None else shown
        if isinstance(value, bool) or not isinstance(value, int | float):
            raise self.refuse(name, shown, allowed)
        if not (math.isfinite(value) and low <= value <= high):
            raise self.refuse(name, shown, allowed)
        return float(value)
