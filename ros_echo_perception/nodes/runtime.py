"""Start and end of every node: clear words instead of tracebacks, exit code 0 after Ctrl-C."""

from __future__ import annotations

import sys
from collections.abc import Callable

import rclpy
from rclpy._rclpy_pybind11 import RCLError
from rclpy.executors import ExternalShutdownException
from rclpy.node import Node

from ..core.errors import EchoPerceptionError


def run(create_node: Callable[[], Node]) -> None:
    """Run a node until it is interrupted.

    A configuration that cannot be used ends the process with exit code 1 and the reason on
    stderr; SIGINT and SIGTERM end it with 0.
    """
    rclpy.init()
    node: Node | None = None
    try:
        node = create_node()
        rclpy.spin(node)
    except EchoPerceptionError as error:
        print(f"error: {error}", file=sys.stderr, flush=True)
        sys.exit(1)
    except (KeyboardInterrupt, ExternalShutdownException):
        pass
    except RCLError:
        if rclpy.ok():
            raise  # a callback was at work when the signal closed the context: no fault
    finally:
        _close(node)


def _close(node: Node | None) -> None:
    try:
        if node is not None:
            node.destroy_node()
        rclpy.try_shutdown()
    except KeyboardInterrupt:  # a second Ctrl-C while closing
        pass
