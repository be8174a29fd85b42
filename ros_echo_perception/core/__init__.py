"""Echo perception without ROS: NumPy and SciPy, float seconds, radians and metres."""
