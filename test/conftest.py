"""Fixtures that start real nodes as processes and talk to them over DDS."""

import os
import signal
import subprocess
import sys
import time
from pathlib import Path
from typing import ClassVar

import pytest

ROOT = Path(__file__).resolve().parent.parent
# A domain of this session's own (0 to 101 are safe on Linux), and this machine only.
os.environ["ROS_DOMAIN_ID"] = str(1 + os.getpid() % 100)
os.environ["ROS_AUTOMATIC_DISCOVERY_RANGE"] = "LOCALHOST"

START_S = 15.0
"""Time-out for anything a healthy node does within a second, on a loaded machine."""


class Peer:
    """A node of the test: subscribes, publishes, calls, and spins while it waits."""

    def __init__(self, node, executor):
        self.node, self._executor = node, executor
        self._clients = {}

    def collect(self, message, topic, qos=50):
        """A list that fills with the topic's messages while `wait_for` spins."""
        received = []
        self.node.create_subscription(message, topic, received.append, qos)
        return received

    def wait_for(self, condition, what, timeout_s=START_S):
        """Spin until the condition is truthy; returns its value."""
        end = time.monotonic() + timeout_s
        while not (value := condition()):
            for running in RunningNode.expected:
                assert running.process.poll() is None, f"a node ended:\n{running.text}"
            assert time.monotonic() < end, f"timed out after {timeout_s:g} s waiting for {what}"
            self._executor.spin_once(timeout_sec=0.05)
        return value

    def call(self, service, name, request):
        """The response of a service."""
        if name not in self._clients:
            self._clients[name] = self.node.create_client(service, name)
        client = self._clients[name]
        self.wait_for(client.service_is_ready, f"service {name}")
        future = client.call_async(request)
        self.wait_for(future.done, f"answer of {name}")
        return future.result()

    def parameters(self, node, names):
        """Values of parameters of another node."""
        from rcl_interfaces.srv import GetParameters
        from rclpy.parameter import parameter_value_to_python

        answer = self.call(
            GetParameters, f"{node}/get_parameters", GetParameters.Request(names=list(names))
        )
        return {n: parameter_value_to_python(v) for n, v in zip(names, answer.values, strict=True)}

    def set_parameters(self, node, **values):
        """Results of setting parameters of another node together."""
        from rcl_interfaces.srv import SetParametersAtomically
        from rclpy.parameter import Parameter

        request = SetParametersAtomically.Request(
            parameters=[Parameter(n, value=v).to_parameter_msg() for n, v in values.items()]
        )
        return self.call(
            SetParametersAtomically, f"{node}/set_parameters_atomically", request
        ).result

    def diagnostics(self, received, name):
        """Newest values of a node's diagnostics among received arrays, with level and message."""
        for array in reversed(received):
            for status in array.status:
                if status.name == name:
                    values = {item.key: item.value for item in status.values}
                    return values | {"level": status.level, "message": status.message}
        return None


class RunningNode:
    """A node of the package in a process of its own."""

    expected: ClassVar[list] = []
    """Nodes that should be running; a wait fails at once when one of them has ended."""

    def __init__(self, executable, log, arguments):
        self.log = log
        with log.open("wb") as file:
            self.process = subprocess.Popen(
                [sys.executable, "-m", f"ros_echo_perception.nodes.{executable}", *arguments],
                stdin=subprocess.DEVNULL,
                stdout=file,
                stderr=subprocess.STDOUT,
            )
        self.expected.append(self)

    @property
    def text(self):
        return self.log.read_text()

    def interrupt(self, sign=signal.SIGINT):
        """SIGINT as Ctrl-C sends it, or another signal; the exit code."""
        self.expected.remove(self)
        self.process.send_signal(sign)
        return self.process.wait(10.0)

    def exit_code(self, timeout_s=START_S):
        """Exit code of a node that ends by itself."""
        self.expected.remove(self)
        return self.process.wait(timeout_s)

    def close(self):
        if self in self.expected:
            self.expected.remove(self)
        if self.process.poll() is None:
            self.process.kill()
            self.process.wait(10.0)


def ros_arguments(parameters, files=(), namespace="", remap=()):
    """Command line of a node: parameters, parameter files, namespace, remapping."""
    arguments = ["--ros-args"]
    for file in files:
        arguments += ["--params-file", str(file)]
    for name, value in parameters.items():
        text = str(value).lower() if isinstance(value, bool) else str(value)
        arguments += ["-p", f"{name}:={text}"]
    for rule in (*remap, *([f"__ns:={namespace}"] if namespace else [])):
        arguments += ["-r", rule]
    return arguments


@pytest.fixture
def start_node(tmp_path):
    """Start a node of the package: ``start_node("driver", {"loop": True})``."""
    pytest.importorskip("rclpy")
    running = []

    def start(executable, parameters=None, **options):
        log = tmp_path / f"{executable}_{len(running)}.log"
        node = RunningNode(executable, log, ros_arguments(parameters or {}, **options))
        running.append(node)
        return node

    yield start
    for node in running:
        node.close()
        print(f"--- {node.log.name}\n{node.text}")


@pytest.fixture(scope="module")
def ros_context():
    rclpy = pytest.importorskip("rclpy")
    context = rclpy.Context()
    rclpy.init(context=context)
    yield context
    rclpy.shutdown(context=context)


@pytest.fixture
def peer(ros_context):
    """The test's own node."""
    from rclpy.executors import SingleThreadedExecutor
    from rclpy.node import Node

    node = Node("test_peer", context=ros_context)
    executor = SingleThreadedExecutor(context=ros_context)
    executor.add_node(node)
    yield Peer(node, executor)
    executor.shutdown()
    node.destroy_node()
