"""Launch files, read without the launch library: what they name exists and is used."""

import re
import xml.etree.ElementTree as ET
from pathlib import Path

import pytest

from ros_echo_perception.core.settings import describe
from ros_echo_perception.nodes.settings import SECTIONS

ROOT = Path(__file__).resolve().parent.parent
FILES = sorted((ROOT / "launch").glob("*.launch.xml"))
OURS = "ros_echo_perception"
VARIABLE = re.compile(r"\$\(var (\w+)\)")
SHARE = re.compile(rf"\$\(find-pkg-share {OURS}\)/([\w./]+)")


@pytest.fixture(params=FILES, ids=lambda path: path.name)
def launch(request):
    return ET.parse(request.param).getroot()


def texts(root):
    """All attribute values of a file."""
    return [value for element in root.iter() for value in element.attrib.values()]


def our_nodes(root):
    return [node for node in root.iter("node") if node.get("pkg") == OURS]


def parameter_names(node):
    return {
        f"{prefix}.{info.name}" if prefix else info.name
        for cls, prefix in SECTIONS[node].items()
        for info in describe(cls)
    }


def test_the_three_launch_files_are_there():
    assert [path.name for path in FILES] == [
        "demo.launch.xml", "live.launch.xml", "replay.launch.xml",
    ]  # fmt: skip


def test_every_argument_says_what_it_is(launch):
    for argument in launch.iter("arg"):
        assert len(argument.get("description", "")) > 5, argument.get("name")


def test_every_argument_is_used_and_every_used_one_declared(launch):
    declared = {argument.get("name") for argument in launch.iter("arg")}
    used = {name for text in texts(launch) for name in VARIABLE.findall(text)}
    assert used == declared


def test_executables_are_those_that_the_package_installs(launch):
    cmake = (ROOT / "CMakeLists.txt").read_text()
    installed = dict(re.findall(r"install_executable\((\w+) \S*?\.(nodes\.\w+)\)", cmake))
    assert our_nodes(launch)
    for node in our_nodes(launch):
        module = installed[node.get("exec")]
        assert (ROOT / OURS / (module.replace(".", "/") + ".py")).is_file()
        assert node.get("name") == node.get("exec")


def test_shipped_files_exist_and_are_installed(launch):
    cmake = (ROOT / "CMakeLists.txt").read_text()
    assert re.search(r"install\(DIRECTORY launch config DESTINATION share/", cmake)
    for path in (path for text in texts(launch) for path in SHARE.findall(text)):
        assert (ROOT / path).is_file(), path


def test_every_node_gets_its_own_parameter_file_first(launch):
    """Later parameters win in ROS 2, so single values have to come after the file."""
    for node in our_nodes(launch):
        first = node.find("param")
        (name,) = VARIABLE.findall(first.get("from"))
        (argument,) = (a for a in launch.iter("arg") if a.get("name") == name)
        assert argument.get("default").endswith(f"/config/{node.get('exec')}.yaml")


def test_single_parameters_exist_in_their_nodes(launch):
    for node in our_nodes(launch):
        names = [p.get("name") for p in node.findall("param") if p.get("name")]
        assert set(names) <= parameter_names(node.get("exec")) | {"use_sim_time"}


def test_the_live_launch_never_simulates_by_default():
    live = ET.parse(ROOT / "launch" / "live.launch.xml").getroot()
    (source,) = (a for a in live.iter("arg") if a.get("name") == "source")
    assert source.get("default") != "simulator"
    assert not [p for p in live.iter("param") if p.get("value") == "simulator"]


def test_the_replay_runs_on_the_time_of_the_bag():
    replay = ET.parse(ROOT / "launch" / "replay.launch.xml").getroot()
    (play,) = replay.iter("executable")
    assert play.get("cmd").startswith("ros2 bag play $(var bag) --clock ")
    for node in replay.iter("node"):
        values = {p.get("name"): p.get("value") for p in node.findall("param")}
        assert values["use_sim_time"] == "true"
