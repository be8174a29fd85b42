"""The Python side for pip; the messages and `ros2 run` need the ROS 2 build (CMakeLists.txt)."""

from pathlib import Path
from xml.etree import ElementTree

from setuptools import find_packages, setup

root = Path(__file__).resolve().parent
manifest = ElementTree.parse(root / "package.xml").getroot()
name = manifest.findtext("name")


def shared_files(*folders):
    """The folders' files for share/NAME below the prefix: where a ROS 2 build puts them too."""
    files = [path.relative_to(root) for f in folders for path in sorted((root / f).rglob("*.*"))]
    parents = sorted({path.parent for path in files})
    return [(f"share/{name}/{p}", [str(f) for f in files if f.parent == p]) for p in parents]


setup(
    name=name,
    version=manifest.findtext("version"),
    description=" ".join(manifest.findtext("description", "").split()),
    maintainer=manifest.findtext("maintainer"),
    maintainer_email=manifest.find("maintainer").get("email"),
    license=manifest.findtext("license"),
    packages=find_packages(include=["ros_echo_perception", "ros_echo_perception.*"]),
    package_data={name: ["py.typed"]},
    data_files=shared_files("config", "msg"),
    python_requires=">=3.10",
    # The oldest versions are those of Ubuntu 24.04, on which ROS 2 Jazzy runs (rosbags: pip only).
    install_requires=[
        "click>=8.1",
        "matplotlib>=3.6",
        "numba>=0.58",
        "numpy>=1.26",
        "PyYAML>=6.0",
        "rich>=13.7",
        "rosbags>=0.11",
        "scipy>=1.11",
    ],
    entry_points={
        "console_scripts": ["ros_echo_perception = ros_echo_perception.offline.cli:main"],
    },
)
