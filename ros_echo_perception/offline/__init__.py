"""Offline commands on recordings and bags; no ROS running."""

from .. import one_thread  # noqa: F401  before NumPy is loaded
