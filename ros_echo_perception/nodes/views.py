"""What viewers and navigation read: scan, point cloud, markers, grid, from core types."""

from __future__ import annotations

import math
from array import array
from collections.abc import Iterable, Iterator
from typing import Any

import numpy as np
from builtin_interfaces.msg import Duration
from geometry_msgs.msg import Point
from nav_msgs.msg import OccupancyGrid
from sensor_msgs.msg import LaserScan, PointCloud2, PointField
from std_msgs.msg import ColorRGBA
from visualization_msgs.msg import Marker, MarkerArray

from ..core.perception.scan import ScanArrays
from ..core.types import Detection, Ears, PingResult

POINT = np.dtype(
    [
        ("x", np.float32),
        ("y", np.float32),
        ("z", np.float32),
        ("intensity", np.float32),
        ("range", np.float32),
        ("range_sigma", np.float32),
        ("bearing", np.float32),
        ("bearing_sigma", np.float32),
        ("bearing_min", np.float32),
        ("bearing_max", np.float32),
        ("existence", np.float32),
        ("ears", np.uint32),
        ("flags", np.uint32),
    ]
)
"""One point of the cloud, SI units; intensity is SNR in dB, ears and flags as in the messages."""

_DATATYPE = {np.dtype(np.float32): PointField.FLOAT32, np.dtype(np.uint32): PointField.UINT32}

TWO_EARS = (0.05, 0.62, 0.56)
ONE_EAR = (0.93, 0.55, 0.14)
DOUBTFUL = (0.66, 0.35, 0.75)
"""Colours (RGB): a position, an arc heard by one ear, a position whose bearing is ambiguous."""

_SIGMAS_DRAWN = 2.0
_THINNEST_M = 0.01  # a sector thinner than this cannot be seen
_STEP_RAD = math.radians(5.0)
_ALTERNATIVE_SIGMA_RAD = 0.03  # one of several bearings: a stroke, not the scatter of all
_LIFETIME = Duration(sec=1)
_DOT_M = 0.05


def scan_to_msg(scan: ScanArrays, header: Any) -> LaserScan:
    """A scan whose beams are all of one moment, the emission."""
    msg = LaserScan(header=header)
    msg.angle_min, msg.angle_max = scan.angle_min_rad, scan.angle_max_rad
    msg.angle_increment = scan.angle_increment_rad
    msg.range_min, msg.range_max = scan.range_min_m, scan.range_max_m
    msg.ranges = array("f", scan.ranges_m.astype(np.float32).tobytes())
    msg.intensities = array("f", scan.intensities_db.astype(np.float32).tobytes())
    return msg


def points_to_msg(result: PingResult, header: Any) -> PointCloud2:
    """One point for each echo, in the frame of the head; one-sided ones at mid-interval."""
    points = np.zeros(len(result.detections), POINT)
    for point, echo in zip(points, result.detections, strict=True):
        point["x"] = echo.range_m * math.cos(echo.bearing_rad)
        point["y"] = echo.range_m * math.sin(echo.bearing_rad)
        point["intensity"], point["existence"] = echo.snr_db, echo.existence_probability
        point["range"], point["range_sigma"] = echo.range_m, echo.range_sigma_m
        point["bearing"], point["bearing_sigma"] = echo.bearing_rad, echo.bearing_sigma_rad
        point["bearing_min"], point["bearing_max"] = echo.bearing_min_rad, echo.bearing_max_rad
        point["ears"], point["flags"] = int(echo.ears), int(echo.flags)
    fields = [
        PointField(name=name, offset=offset, datatype=_DATATYPE[kind], count=1)
        for name, (kind, offset, *_) in (POINT.fields or {}).items()
    ]
    return PointCloud2(
        header=header,
        height=1,
        width=points.size,
        fields=fields,
        is_bigendian=False,
        point_step=POINT.itemsize,
        row_step=POINT.itemsize * points.size,
        data=array("B", points.tobytes()),
        is_dense=True,
    )


def markers_to_msg(result: PingResult, header: Any) -> MarkerArray:
    """Dots, sectors of two sigmas, and arcs for what one ear heard; replaces the last ping's."""
    both = [echo for echo in result.detections if echo.ears is Ears.BOTH]
    single = [echo for echo in result.detections if echo.ears is not Ears.BOTH]
    dots = _marker(header, "position", Marker.SPHERE_LIST, _DOT_M)
    sectors = _marker(header, "uncertainty", Marker.TRIANGLE_LIST, 1.0)
    arcs = _marker(header, "one_ear", Marker.LINE_LIST, 0.015)
    for echo in both:
        _add(dots, [_point(echo.range_m, echo.bearing_rad)], _colour(echo, 1.0))
        for bearing, sigma, weight in _bearings(echo):
            _add(sectors, _sector(echo, bearing, sigma), _colour(echo, 0.4 * weight))
    for echo in single:
        _add(arcs, _arc(echo), _colour(echo, 0.9))
    for marker in (dots, sectors, arcs):
        marker.action = Marker.ADD if marker.points else Marker.DELETE
    return MarkerArray(markers=[dots, sectors, arcs])


def _marker(header: Any, namespace: str, kind: int, scale: float) -> Marker:
    marker = Marker(header=header, ns=namespace, id=0, type=kind, lifetime=_LIFETIME)
    marker.pose.orientation.w = 1.0
    marker.scale.x = marker.scale.y = marker.scale.z = scale
    return marker


def _add(marker: Marker, points: Iterable[Point], colour: ColorRGBA) -> None:
    for point in points:
        marker.points.append(point)
        marker.colors.append(colour)


def _colour(echo: Detection, alpha: float) -> ColorRGBA:
    base = ONE_EAR if echo.ears is not Ears.BOTH else DOUBTFUL if echo.alternatives else TWO_EARS
    r, g, b = base
    return ColorRGBA(r=r, g=g, b=b, a=max(0.1, alpha * echo.existence_probability))


def _bearings(echo: Detection) -> Iterator[tuple[float, float, float]]:
    """What to draw: bearing, its sigma, weight; each of the bearings that remain possible."""
    if not echo.alternatives:
        yield echo.bearing_rad, echo.bearing_sigma_rad, 1.0
    for bearing, weight in echo.alternatives:
        yield bearing, min(echo.bearing_sigma_rad, _ALTERNATIVE_SIGMA_RAD), weight


def _sector(echo: Detection, bearing_rad: float, sigma_rad: float) -> list[Point]:
    """Triangles of the region within two sigmas of range and bearing."""
    depth = max(_SIGMAS_DRAWN * echo.range_sigma_m, _THINNEST_M / 2)
    width = _SIGMAS_DRAWN * sigma_rad
    near, far = max(echo.range_m - depth, 0.0), echo.range_m + depth
    points = []
    for start, end in _pieces(bearing_rad - width, bearing_rad + width):
        corners = [_point(r, a) for r, a in ((near, start), (far, start), (far, end), (near, end))]
        points += [corners[i] for i in (0, 1, 2, 0, 2, 3)]
    return points


def _arc(echo: Detection) -> list[Point]:
    """Line pieces along the range over the whole interval of bearings."""
    return [
        _point(echo.range_m, angle)
        for piece in _pieces(echo.bearing_min_rad, echo.bearing_max_rad)
        for angle in piece
    ]


def _pieces(low: float, high: float) -> list[tuple[float, float]]:
    n = max(1, math.ceil((high - low) / _STEP_RAD))
    angles = np.linspace(low, high, n + 1).tolist()
    return list(zip(angles[:-1], angles[1:], strict=True))


def _point(range_m: float, bearing_rad: float) -> Point:
    return Point(x=range_m * math.cos(bearing_rad), y=range_m * math.sin(bearing_rad), z=0.0)


def grid_to_msg(
    cells: np.ndarray, resolution_m: float, origin: tuple[float, float], header: Any
) -> OccupancyGrid:
    """An occupancy grid from int8 cells (rows along y, columns along x): -1, or 0 to 100."""
    msg = OccupancyGrid(header=header)
    msg.info.map_load_time = header.stamp
    msg.info.resolution = float(resolution_m)
    msg.info.height, msg.info.width = cells.shape
    msg.info.origin.position.x, msg.info.origin.position.y = (float(v) for v in origin)
    msg.info.origin.orientation.w = 1.0
    msg.data = array("b", np.ascontiguousarray(cells, np.int8).tobytes())
    return msg
