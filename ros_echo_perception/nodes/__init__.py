"""ROS 2 nodes: parameters, topics and conversion around the core."""
