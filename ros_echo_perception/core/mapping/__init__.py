"""From detections and odometry to a local occupancy grid. Read pipeline.py first."""

from .config import MappingConfig
from .grid import MapSnapshot
from .map_file import save_map_image, save_map_npz
from .pipeline import LocalMapper, MapOutcome, run_mapper
from .plain_arcs import plain_arcs_map
from .poses import PoseBuffer

__all__ = [
    "LocalMapper",
    "MapOutcome",
    "MapSnapshot",
    "MappingConfig",
    "PoseBuffer",
    "plain_arcs_map",
    "run_mapper",
    "save_map_image",
    "save_map_npz",
]
