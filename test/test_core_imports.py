"""The core and the sources stand without ROS; each layer knows only those below it."""

import ast
import importlib
import subprocess
import sys
from pathlib import Path

import pytest

ROOT = Path(__file__).resolve().parents[1]
PACKAGE = ROOT / "ros_echo_perception"
ROS = {
    "rclpy", "rcl_interfaces", "rosidl_runtime_py", "ament_index_python", "launch", "launch_ros",
    "sensor_msgs", "std_msgs", "geometry_msgs", "nav_msgs", "visualization_msgs", "tf2_ros",
    "diagnostic_msgs", "builtin_interfaces", "std_srvs", "rosbag2_py", "rosbags",
}  # fmt: skip
CORE_ALLOWED = {"numpy", "numba", "scipy", "yaml"}


def short(path):
    return str(path.relative_to(PACKAGE))


def files(*folders):
    return sorted(path for folder in folders for path in (PACKAGE / folder).rglob("*.py"))


def imports(path):
    """Absolute names of all modules that a file imports, wherever in it."""
    package = ("ros_echo_perception", *path.relative_to(PACKAGE).parent.parts)
    for node in ast.walk(ast.parse(path.read_text(), str(path))):
        if isinstance(node, ast.Import):
            yield from (alias.name for alias in node.names)
        elif isinstance(node, ast.ImportFrom):
            base = package[: len(package) - node.level + 1] if node.level else ()
            module = ".".join((*base, *((node.module,) if node.module else ())))
            yield module
            yield from (f"{module}.{alias.name}" for alias in node.names)


@pytest.mark.parametrize("path", files("core", "sources"), ids=short)
def test_core_and_sources_import_neither_ros_nor_messages(path):
    for name in imports(path):
        parts = name.split(".")
        assert parts[0] not in ROS, name
        assert parts[:2] not in (["ros_echo_perception", m] for m in ("msg", "srv", "nodes")), name
        assert "import_module" not in path.read_text()


@pytest.mark.parametrize("path", files("core"), ids=short)
def test_core_imports_only_itself_and_four_libraries(path):
    for name in imports(path):
        top, *rest = name.split(".")
        if top == "ros_echo_perception":
            assert rest[0] == "core", name
        else:
            assert top in CORE_ALLOWED or top in sys.stdlib_module_names, name


def test_sources_know_the_core_only():
    for path in files("sources"):
        for name in imports(path):
            if name.startswith("ros_echo_perception."):
                assert name.split(".")[1] in ("core", "sources"), (path, name)


def test_perception_and_mapping_do_not_know_each_other():
    for one, other in (("perception", "mapping"), ("mapping", "calibration")):
        for path in files(f"core/{one}"):
            assert not [n for n in imports(path) if f".core.{other}" in n], path


def test_relative_imports_resolve():
    """The walk above would be blind if it misread relative imports."""
    seen = set(imports(PACKAGE / "core" / "perception" / "pipeline.py"))
    assert "ros_echo_perception.core.types" in seen
    assert "ros_echo_perception.core.perception.baseband" in seen
    for name in seen:
        if name.startswith("ros_echo_perception"):
            module, _, attribute = name.rpartition(".")
            try:
                importlib.import_module(name)
            except ModuleNotFoundError:
                assert hasattr(importlib.import_module(module), attribute), name


def test_the_chain_runs_where_ros_cannot_be_imported():
    code = (
        "import sys\n"
        f"for name in {sorted(ROS)!r}: sys.modules[name] = None\n"
        "import numpy as np\n"
        "from ros_echo_perception.core.head import load_head\n"
        "from ros_echo_perception.core.perception.pipeline import EchoPipeline\n"
        "from ros_echo_perception.core.mapping import pipeline, map_file\n"
        "from ros_echo_perception.core.calibration import calibrate_head\n"
        "from ros_echo_perception.sources.bench import bench_source, poles\n"
        "head = load_head('config/heads/sparrow_52.yaml')\n"
        "echo = bench_source(head, poles((1.0, 0.2))).echo(0)\n"
        "print(round(EchoPipeline(head).process(echo).detections[0].range_m, 2))\n"
    )
    result = subprocess.run(
        [sys.executable, "-c", code], cwd=ROOT, capture_output=True, text=True, check=False
    )
    assert result.returncode == 0, result.stderr
    assert result.stdout.strip() == "1.0"
