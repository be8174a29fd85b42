"""ROS 2 nodes: parameters, topics and conversion around the core."""

from .. import one_thread  # noqa: F401  before NumPy is loaded
