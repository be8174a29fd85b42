"""package.xml, setup.py, CMakeLists.txt, pinned requirements and ./dev agree with the sources."""

import ast
import os
import re
import stat
import subprocess
import sys
from pathlib import Path
from xml.etree import ElementTree

import pytest

ROOT = Path(__file__).resolve().parents[1]
PACKAGE = ROOT / "ros_echo_perception"
MANIFEST = ElementTree.parse(ROOT / "package.xml").getroot()
CMAKE = (ROOT / "CMakeLists.txt").read_text()
EXECUTABLES = dict(
    re.findall(r"^install_executable\((\w+) \$\{PROJECT_NAME\}\.([\w.]+)\)", CMAKE, re.M)
)

# Import name -> rosdep key in package.xml, where they differ (keys as in the rosdistro index).
ROSDEP_KEYS = {
    "click": "python3-click",
    "matplotlib": "python3-matplotlib",
    "numba": "python3-numba",
    "numpy": "python3-numpy",
    "rich": "python3-rich",
    "rosbags": "python3-rosbags-pip",
    "scipy": "python3-scipy",
    "yaml": "python3-yaml",
    "tf2_ros": "tf2_ros_py",
}
# Part of another listed package: rclpy itself depends on these.
COMES_ALONG = {"rcl_interfaces": "rclpy", "ament_index_python": "rclpy", "rosgraph_msgs": "rclpy"}
PIP_NAMES = {"yaml": "PyYAML"}


def manifest_names(*tags):
    return {element.text for tag in tags for element in MANIFEST.findall(tag)}


def imported_modules():
    """Top-level names of all that the sources import, without the standard library."""
    names = set()
    for path in PACKAGE.rglob("*.py"):
        for node in ast.walk(ast.parse(path.read_text(), str(path))):
            if isinstance(node, ast.Import):
                names |= {alias.name.split(".")[0] for alias in node.names}
            elif isinstance(node, ast.ImportFrom) and node.level == 0 and node.module:
                names.add(node.module.split(".")[0])
    return names - set(sys.stdlib_module_names) - {"ros_echo_perception"}


def requirement_lines(name):
    text = (ROOT / ".ci" / name).read_text()
    return [line.strip() for line in text.splitlines() if line.strip() and not line.startswith("#")]


def setup_field(*fields):
    command = [sys.executable, "setup.py", "--quiet", *(f"--{field}" for field in fields)]
    result = subprocess.run(command, cwd=ROOT, capture_output=True, text=True, check=True)
    return result.stdout.strip().splitlines()[-len(fields) :]


def setup_requirements():
    tree = ast.parse((ROOT / "setup.py").read_text())
    [values] = [
        k.value
        for k in ast.walk(tree)
        if isinstance(k, ast.keyword) and k.arg == "install_requires"
    ]
    return {re.match(r"[\w-]+", text).group(): text for text in ast.literal_eval(values)}


def test_every_import_of_the_sources_has_a_key_in_package_xml():
    listed = manifest_names("depend", "exec_depend")
    missing = {
        name
        for name in imported_modules()
        if COMES_ALONG.get(name, ROSDEP_KEYS.get(name, name)) not in listed
    }
    assert missing == set()


def test_setup_py_asks_for_the_python_packages_that_the_sources_import():
    python_side = {
        name for name in imported_modules() if ROSDEP_KEYS.get(name, "").startswith("python3-")
    }
    assert set(setup_requirements()) == {PIP_NAMES.get(name, name) for name in python_side}


def test_pinned_versions_satisfy_setup_py():
    packaging_requirements = pytest.importorskip("packaging.requirements")
    pins = dict(line.split(" ;")[0].split("==") for line in requirement_lines("requirements.txt"))
    for name, text in setup_requirements().items():
        assert packaging_requirements.Requirement(text).specifier.contains(pins[name]), text


@pytest.mark.parametrize(
    "path", sorted((ROOT / ".ci").glob("requirements*.txt")), ids=lambda p: p.stem
)
def test_every_requirement_is_pinned_once(path):
    lines = requirement_lines(path.name)
    names = [line.split("==")[0] for line in lines]
    assert all(re.fullmatch(r"[\w.-]+==[\w.]+( ; python_version .*)?", line) for line in lines)
    assert len(set(names)) == len(names) > 10


def test_version_is_the_same_everywhere():
    import ros_echo_perception

    version = MANIFEST.findtext("version")
    assert setup_field("name", "version") == ["ros_echo_perception", version]
    assert ros_echo_perception.__version__ == version
    assert re.search(rf"^{re.escape(version)} \(", (ROOT / "CHANGELOG.rst").read_text(), re.M)


def test_names_and_licence_agree():
    assert MANIFEST.findtext("name") == PACKAGE.name
    assert f"project({PACKAGE.name})" in CMAKE
    assert MANIFEST.find("license").get("file") == "LICENSE"
    assert MANIFEST.findtext("license") == "Apache-2.0"
    assert (
        "Apache License\n                           Version 2.0" in (ROOT / "LICENSE").read_text()
    )


def test_interface_package_declarations():
    # What REP 149 (package format 3) and rosidl ask of a package with messages.
    assert MANIFEST.get("format") == "3"
    assert manifest_names("member_of_group") == {"rosidl_interface_packages"}
    assert "rosidl_default_generators" in manifest_names("buildtool_depend")
    assert "rosidl_default_runtime" in manifest_names("exec_depend")
    found = set(re.findall(r"find_package\((\w+) REQUIRED\)", CMAKE))
    assert found <= manifest_names("buildtool_depend", "depend")


def test_message_fields_use_only_declared_packages():
    used = set()
    for path in (ROOT / "msg").glob("*.msg"):
        used |= set(re.findall(r"^(\w+)/\w+ ", path.read_text(), re.M))
    declared = set(
        re.findall(r"rosidl_generate_interfaces\(.*DEPENDENCIES ([\w ]+)\)", CMAKE)[0].split()
    )
    assert used == declared


def test_executables_call_a_main_that_exists():
    assert set(EXECUTABLES) == {"driver", "processing", "mapping", "offline"}
    for module in EXECUTABLES.values():
        tree = ast.parse((PACKAGE / (module.replace(".", "/") + ".py")).read_text())
        assert "main" in {node.name for node in tree.body if isinstance(node, ast.FunctionDef)}, (
            module
        )


def installed_prefix():
    # ament_index_python is the independent reader of the installed tree.
    packages = pytest.importorskip("ament_index_python.packages")
    return Path(packages.get_package_prefix(PACKAGE.name))


def test_installed_workspace_has_executables_and_shared_files():
    prefix = installed_prefix()
    for name in EXECUTABLES:
        path = prefix / "lib" / PACKAGE.name / name
        assert path.stat().st_mode & stat.S_IXUSR
        assert path.read_text().startswith("#!/usr/bin/env python3\n")
    share = prefix / "share" / PACKAGE.name
    for folder in ("launch", "config", "msg"):
        assert {path.name for path in (ROOT / folder).iterdir()} <= {
            path.name for path in (share / folder).iterdir()
        }


def test_installed_workspace_serves_cpp_users():
    include = installed_prefix() / "include" / PACKAGE.name / PACKAGE.name / "msg"
    assert (include / "raw_echo.hpp").is_file()
    assert (include / "echo_detection_array.hpp").is_file()


def test_installed_copy_works_without_the_checkout():
    prefix = installed_prefix()
    [site] = prefix.glob("lib/python3*/site-packages")
    others = [
        p for p in os.environ["PYTHONPATH"].split(os.pathsep) if p and Path(p) not in (ROOT, site)
    ]
    environment = {**os.environ, "PYTHONPATH": os.pathsep.join([str(site), *others])}
    program = (
        "import ros_echo_perception as p, ros_echo_perception.core.air\n"
        "from ros_echo_perception.msg import RawEcho\n"
        "RawEcho(sequence=3); print(p.__file__)"
    )
    result = subprocess.run(
        [sys.executable, "-c", program], cwd="/", env=environment, capture_output=True, text=True
    )
    assert result.returncode == 0, result.stderr
    assert result.stdout.strip() == str(site / PACKAGE.name / "__init__.py")


@pytest.mark.smoke
def test_messages_and_sources_share_one_import_name():
    import ros_echo_perception
    from ros_echo_perception.msg import EchoDetection, RawEcho

    assert Path(ros_echo_perception.__file__).parent == PACKAGE
    assert RawEcho().get_fields_and_field_types()["left"] == "sequence<int16>"
    assert EchoDetection.EARS_RIGHT_ONLY == 2


def run_dev(*arguments, **environment):
    return subprocess.run(
        [ROOT / "dev", *arguments],
        cwd="/",
        env={**os.environ, **environment},
        capture_output=True,
        text=True,
        check=False,
    )


def test_dev_keeps_the_exit_code_and_the_arguments():
    result = run_dev(
        "run", sys.executable, "-c", "import sys; print(sys.argv[1:]); sys.exit(7)", "a b"
    )
    assert (result.returncode, result.stdout) == (7, "['a b']\n")


@pytest.mark.parametrize(
    ("arguments", "environment", "complaint"),
    [
        (["nonsense"], {}, "unknown command 'nonsense'"),
        (["run"], {}, "which command?"),
        (
            ["setup"],
            {"ROS_RELEASE": "foxy", "DEV_KIND": "wheels"},
            "ROS_RELEASE is 'foxy'; allowed: jazzy, kilted",
        ),
        (["setup"], {"PYTHON": "/bin/false", "DEV_KIND": "wheels"}, "needs Python 3.10 to 3.13"),
    ],
)
def test_dev_says_what_is_wrong(arguments, environment, complaint):
    result = run_dev(*arguments, **environment)
    assert result.returncode == 1
    assert complaint in result.stderr


def test_ci_runs_what_contributors_run():
    assert "exec ./dev test\n" in (ROOT / ".ci" / "run").read_text()
