"""Offline commands on recordings and bags; no ROS running."""
