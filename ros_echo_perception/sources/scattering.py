"""How strongly smooth, hard obstacles return sound, relative to the pressure at 1 m.

All laws are high-frequency (ray) laws: the wavelength, 9 mm, is short against radii and distances.

References
----------
.. [1] A. D. Pierce, Acoustics, 1981, chapter 8: reflection of rays from curved surfaces, the
   amplitude follows from the principal radii of the reflected wavefront.
.. [2] J. B. Keller, "Geometrical theory of diffraction", J. Opt. Soc. Am. 52, 1962, 116-130.
.. [3] R. G. Kouyoumjian and P. H. Pathak, "A uniform geometrical theory of diffraction for an
   edge in a perfectly conducting surface", Proc. IEEE 62, 1974, 1448-1461: the wedge
   coefficient; the polarisation with the plus sign is the acoustically hard wedge.
.. [4] R. J. Urick, Principles of Underwater Sound, 1983, table 9.1: target strength of a sphere
   a^2/4 and of an endless plane r^2/4, which [1] contains as limits.
"""

from __future__ import annotations

import numpy as np

from ..core.types import ComplexArray, FloatArray


def mirror_amplitude(
    way_in_m: FloatArray,
    way_out_m: FloatArray,
    radius_m: FloatArray | float = np.inf,
    upright_radius_m: FloatArray | float = np.inf,
    cos_incidence: FloatArray | float = 1.0,
) -> FloatArray:
    """Amplitude of a spherical wave after reflection from a convex mirror [1]_, 1/m.

    A plane has two infinite radii: 1 / (2 r) at normal incidence. A pole has one finite radius:
    sqrt(a) / (2 r^1.5) far away. A sphere has two: a / (2 r^2) [4]_.

    Parameters
    ----------
    way_in_m, way_out_m
        From the source to the mirror and on to the receiver.
    radius_m, upright_radius_m
        Radii of curvature in the plane of incidence and across it.
    cos_incidence
        Cosine of the angle between the ray and the normal.

    Examples
    --------
    >>> float(mirror_amplitude(np.array(2.0), np.array(2.0)))
    0.25
    """
    curvature = 1.0 / way_in_m + 2.0 / (np.asarray(radius_m) * cos_incidence)
    upright = 1.0 / way_in_m + 2.0 * np.asarray(cos_incidence) / upright_radius_m
    spread = (1.0 + way_out_m * curvature) * (1.0 + way_out_m * upright)
    return np.asarray(1.0 / (way_in_m * np.sqrt(spread)))


def edge_amplitude(
    distance_m: FloatArray,
    angle_rad: FloatArray,
    exterior_rad: FloatArray,
    wave_number: float,
) -> ComplexArray:
    """Back-scattered amplitude of a hard edge or wedge [2]_ [3]_, 1/m, for time factor e^(jwt).

    At the edge of a mirror image the plain coefficient is infinite; there the true field is half
    of the mirror's, which is used as the upper limit.

    Parameters
    ----------
    distance_m
        From the head to the edge.
    angle_rad
        Between one face and the head, through the open side.
    exterior_rad
        Angle of the open side: 2 pi for the end of a thin wall, 1.5 pi for a box.
    wave_number
        2 pi f / c.
    """
    n = exterior_rad / np.pi
    pole = np.cos(np.pi / n) - np.cos(2.0 * angle_rad / n)
    pole = np.where(np.abs(pole) < 1e-9, 1e-9, pole)
    bracket = 1.0 / (np.cos(np.pi / n) - 1.0) + 1.0 / pole
    size = np.sin(np.pi / n) / (n * np.sqrt(2.0 * np.pi * wave_number)) * bracket
    amplitude = size / (distance_m * np.sqrt(2.0 * distance_m))
    limit = 0.25 / distance_m
    return np.asarray(np.clip(amplitude, -limit, limit) * np.exp(-0.25j * np.pi))


def mirrored(points: FloatArray, on_mirror: FloatArray, normals: FloatArray) -> FloatArray:
    """Mirror images of points in straight walls, all arrays of shape (n, 2)."""
    height = np.sum((points - on_mirror) * normals, axis=1)
    return np.asarray(points - 2.0 * height[:, None] * normals)


def glancing_point(
    source: FloatArray, receiver: FloatArray, centre: FloatArray, radius_m: FloatArray
) -> FloatArray:
    """Point of a circle where the shortest way from source to receiver touches it, (n, 2).

    By Fermat's principle the normal there halves the angle between both ways; two rounds of
    fixed-point iteration leave less than a micrometre of path.
    """
    point = centre
    for _ in range(2):
        normal = _unit(source - point) + _unit(receiver - point)
        point = centre + radius_m[:, None] * _unit(normal)
    return point


def _unit(vectors: FloatArray) -> FloatArray:
    length = np.hypot(vectors[:, 0], vectors[:, 1])
    return np.asarray(vectors / np.maximum(length, 1e-12)[:, None])
