"""From a raw two-eared echo to detections. Read pipeline.py first."""
