"""Reads the parameters of running nodes and writes them as a ROS 2 parameter file."""

from __future__ import annotations

import time
from collections.abc import Sequence
from pathlib import Path
from typing import Any

import yaml
from rclpy.node import Node
from rclpy.parameter import parameter_value_to_python
from rclpy.parameter_client import AsyncParameterClient
from rclpy.task import Future

from ..core.errors import SourceError

Parameters = dict[str, dict[str, Any]]
"""Values by node and parameter."""
_TIMEOUT_S = 20.0


class ParameterReader:
    """Asks nodes for all their parameters, once their services have been discovered.

    Parameters
    ----------
    node
        Asks; it is spun by another thread.
    names
        Of the nodes.
    """

    def __init__(self, node: Node, names: Sequence[str]) -> None:
        self._clients = {name: AsyncParameterClient(node, name) for name in names}

    def ready(self) -> bool:
        """Whether all nodes can be asked."""
        return all(client.services_are_ready() for client in self._clients.values())

    def read(self) -> Parameters:
        """All parameters of all nodes.

        Raises
        ------
        SourceError
            When a node does not answer.
        """
        return {name: _read(client, name) for name, client in self._clients.items()}


def _read(client: AsyncParameterClient, name: str) -> dict[str, Any]:
    if not client.wait_for_services(_TIMEOUT_S):
        raise SourceError(f"the parameter services of {name} are not there; see its log.")
    listed = _result(client.list_parameters(), name).result.names
    values = _result(client.get_parameters(listed), name).values
    return {
        key: _plain(parameter_value_to_python(value))
        for key, value in zip(listed, values, strict=True)
    }


def _result(future: Future, name: str) -> Any:
    """The answer, waited for without spinning: another thread spins."""
    end = time.monotonic() + _TIMEOUT_S
    while not future.done():
        if time.monotonic() > end:
            raise SourceError(f"{name} does not answer about its parameters; see its log.")
        time.sleep(0.01)
    return future.result()


def _plain(value: Any) -> Any:
    return list(value) if value is not None and hasattr(value, "typecode") else value


def write_parameters(parameters: Parameters, path: Path) -> None:
    """Write a file that ``--ros-args --params-file`` takes; unset parameters are left out."""
    data = {
        name: {
            "ros__parameters": {
                key: value
                for key, value in sorted(values.items())
                if value is not None and value != [] and not key.startswith("qos_overrides.")
            }
        }
        for name, values in parameters.items()
    }
    header = "# Parameters of the demo's nodes as they ran.\n"
    path.write_text(header + yaml.safe_dump(data, sort_keys=False))
