"""ROS parameters from settings dataclasses: declared, described, checked and swapped as one."""

from __future__ import annotations

import sys
from collections.abc import Callable, Mapping
from typing import Any, TypeVar

from rcl_interfaces.msg import (
    FloatingPointRange,
    IntegerRange,
    ParameterDescriptor,
    SetParametersResult,
)
from rclpy.exceptions import InvalidParameterTypeException, InvalidParameterValueException
from rclpy.node import Node
from rclpy.parameter import Parameter

from ..core.errors import SettingError
from ..core.settings import SettingInfo, Settings, describe
from .settings import FIXED

SettingsT = TypeVar("SettingsT", bound=Settings)
Sections = Mapping[type[Settings], str]
"""Prefix of the parameters of each settings class; "" for none."""


def parameter_name(prefix: str, info: SettingInfo) -> str:
    """Full name of a setting as a ROS parameter."""
    return f"{prefix}.{info.name}" if prefix else info.name


def descriptor(info: SettingInfo, fixed: bool = False) -> ParameterDescriptor:
    """What ROS tools show of a setting.

    Numbers and lists are typed dynamically, so that ``30`` in YAML serves where ``30.0`` is meant;
    `ParameterSet` converts and checks them. ``fixed`` makes any setting read-only.
    """
    unit = f" [{info.unit}]" if info.unit else ""
    result = ParameterDescriptor(
        name=info.name,
        description=info.description + unit,
        read_only=info.read_only or fixed,
        dynamic_typing=info.kind in (float, list),
        additional_constraints="" if info.kind is bool else f"allowed: {info.allowed()}",
    )
    if info.kind is list or (info.minimum is None and info.maximum is None):
        return result
    if info.kind is float:
        low = -sys.float_info.max if info.minimum is None else float(info.minimum)
        high = sys.float_info.max if info.maximum is None else float(info.maximum)
        result.floating_point_range = [FloatingPointRange(from_value=low, to_value=high)]
    elif info.kind is int:
        lowest = -(2**63) if info.minimum is None else int(info.minimum)
        highest = 2**63 - 1 if info.maximum is None else int(info.maximum)
        result.integer_range = [IntegerRange(from_value=lowest, to_value=highest)]
    return result


class ParameterSet:
    """The parameters of a node and the settings objects made of them.

    A change is accepted only if every settings object can be built with it; then all objects are
    replaced at once and ``on_change`` is called. A refused change alters nothing and its result
    says why.

    Parameters
    ----------
    node : the node that declares them.
    sections : the settings classes and their prefixes.
    on_change : called after an accepted change; what it raises is a refusal too late, so it must
        not raise.

    Raises
    ------
    SettingError
        When a value from YAML or the command line cannot be used.
    """

    def __init__(
        self, node: Node, sections: Sections, on_change: Callable[[], None] | None = None
    ) -> None:
        self._node, self._sections, self._on_change = node, dict(sections), on_change
        for cls, prefix in self._sections.items():
            for info in describe(cls):
                self._declare(parameter_name(prefix, info), info, cls in FIXED)
        self._current = self._built({})
        node.add_on_set_parameters_callback(self._check)
        node.add_post_set_parameters_callback(self._apply)

    def get(self, cls: type[SettingsT]) -> SettingsT:
        """The settings in force."""
        settings = self._current[cls]
        assert isinstance(settings, cls)
        return settings

    def _declare(self, name: str, info: SettingInfo, fixed: bool) -> None:
        default = list(info.default) if info.kind is list else info.default
        try:
            self._node.declare_parameter(name, default, descriptor(info, fixed))
        except (InvalidParameterTypeException, InvalidParameterValueException) as error:
            raise SettingError(
                f"parameter {name} cannot be used ({error}); allowed: {info.allowed()}."
            ) from None

    def _built(self, changes: Mapping[str, Any]) -> dict[type[Settings], Settings]:
        """Settings objects of all sections with some parameters changed."""
        built: dict[type[Settings], Settings] = {}
        for cls, prefix in self._sections.items():
            values = {}
            for info in describe(cls):
                name = parameter_name(prefix, info)
                values[info.name] = (
                    changes[name] if name in changes else self._node.get_parameter(name).value
                )
            try:
                built[cls] = cls(**values)
            except SettingError as error:
                raise SettingError(f"{prefix}.{error}" if prefix else str(error)) from None
        return built

    def _ours(self, parameters: list[Parameter]) -> dict[str, Any]:
        names = {
            parameter_name(prefix, info)
            for cls, prefix in self._sections.items()
            for info in describe(cls)
        }
        return {item.name: item.value for item in parameters if item.name in names}

    def _check(self, parameters: list[Parameter]) -> SetParametersResult:
        try:
            self._built(self._ours(parameters))
        except SettingError as error:
            return SetParametersResult(successful=False, reason=str(error))
        return SetParametersResult(successful=True, reason="accepted")

    def _apply(self, parameters: list[Parameter]) -> None:
        if not self._ours(parameters):
            return
        self._current = self._built({})
        if self._on_change is not None:
            self._on_change()
