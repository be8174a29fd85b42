"""Where raw echoes come from: simulator, recordings, hardware, behind one interface. No ROS."""
