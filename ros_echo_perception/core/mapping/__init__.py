"""From detections and odometry to a local occupancy grid. Read pipeline.py first."""
