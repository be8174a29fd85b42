"""The Python side for pip; the messages and `ros2 run` need the ROS 2 build (CMakeLists.txt)."""

from pathlib import Path
from xml.etree import ElementTree

from setuptools import find_packages, setup

manifest = ElementTree.parse(Path(__file__).with_name("package.xml")).getroot()

setup(
    name=manifest.findtext("name"),
    version=manifest.findtext("version"),
    description=" ".join(manifest.findtext("description", "").split()),
    maintainer=manifest.findtext("maintainer"),
    maintainer_email=manifest.find("maintainer").get("email"),
    license=manifest.findtext("license"),
    packages=find_packages(include=["ros_echo_perception", "ros_echo_perception.*"]),
    package_data={"ros_echo_perception": ["py.typed"]},
    python_requires=">=3.10",
    # The oldest versions are those of Ubuntu 24.04, on which ROS 2 Jazzy runs.
    install_requires=[
        "click>=8.1",
        "matplotlib>=3.6",
        "numpy>=1.26",
        "PyYAML>=6.0",
        "rich>=13.7",
        "rosbags>=0.10",
        "scipy>=1.11",
    ],
    entry_points={
        "console_scripts": ["ros_echo_perception = ros_echo_perception.offline.cli:main"],
    },
)
