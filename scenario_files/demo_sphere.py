"""Small tools for points, rotations and rings on the unit sphere.

Conventions: latitudes and longitudes in degrees, longitudes east in
[-180, 180); points are unit vectors with x to (0 N, 0 E), y to (0 N, 90 E)
and z to the north pole; a rotation is active and right-handed.
"""

from __future__ import annotations

from itertools import pairwise

import numpy as np
from numpy.typing import ArrayLike, NDArray
from scipy.spatial.transform import Rotation

Array = NDArray[np.float64]

EARTH_RADIUS_KM = 6371.0


def to_xyz(lat_deg: ArrayLike, lon_deg: ArrayLike) -> Array:
    """Return unit vectors, shape (..., 3), of places in degrees."""
    lat, lon = np.radians(lat_deg), np.radians(lon_deg)
    return np.stack(
        np.broadcast_arrays(np.cos(lat) * np.cos(lon), np.cos(lat) * np.sin(lon), np.sin(lat)),
        axis=-1,
    )


def to_latlon(xyz: ArrayLike) -> tuple[Array, Array]:
    """Return latitudes and longitudes in degrees of vectors of shape (..., 3)."""
    x, y, z = np.moveaxis(np.asarray(xyz, dtype=float), -1, 0)
    return np.degrees(np.arctan2(z, np.hypot(x, y))), np.degrees(np.arctan2(y, x))


def rounded(xyz: ArrayLike, digits: int = 4) -> Array:
    """Move vectors to the nearest place whose degrees have ``digits`` decimals."""
    lat, lon = to_latlon(xyz)
    return to_xyz(np.round(lat, digits), np.round(lon, digits))


def turn(pole_lat_deg: float, pole_lon_deg: float, angle_deg: float) -> Rotation:
    """Return the rotation by ``angle_deg`` about a pole, anticlockwise from outside."""
    return Rotation.from_rotvec(np.radians(angle_deg) * to_xyz(pole_lat_deg, pole_lon_deg))


def pole_of(rotation: Rotation) -> tuple[float, float, float]:
    """Return (pole latitude, pole longitude, angle) in degrees, the pole in the north."""
    vector = rotation.as_rotvec()
    sign = 1.0 if vector[2] >= 0.0 else -1.0
    lat, lon = to_latlon(sign * vector)
    return float(lat), float(lon), sign * float(np.degrees(np.linalg.norm(vector)))


def arc_deg(first: Array, second: Array) -> Array:
    """Return the great-circle distance in degrees between unit vectors."""
    cross = np.linalg.norm(np.cross(first, second), axis=-1)
    return np.asarray(np.degrees(np.arctan2(cross, np.sum(first * second, axis=-1))))


def densify(path: Array, step_deg: float) -> Array:
    """Put points on the great circles of ``path`` so that no piece exceeds ``step_deg``.

    The cut of a piece does not depend on the direction in which it is walked,
    because two neighbouring outlines walk it in opposite directions.
    """
    pieces = []
    for start, end in pairwise(path):
        count = int(np.ceil(arc_deg(start, end) / step_deg - 1e-9))
        share = np.arange(max(count, 1)) / max(count, 1)
        angle = np.radians(arc_deg(start, end))
        weights = np.sin(np.stack([(1 - share) * angle, share * angle])) / np.sin(angle)
        pieces.append(weights[0][:, None] * start + weights[1][:, None] * end)
    return np.vstack([*pieces, path[-1:]])


def ring_area(lat_deg: Array, lon_deg: Array) -> float:
    """Return the signed area in steradian of a closed ring that lies inside one map.

    Positive anticlockwise. Each edge adds the area between itself and the
    equator; an edge that stays on a pole is the whole turn of the map there.
    """
    half = np.tan(np.radians(lat_deg) / 2)
    step = np.radians(np.diff(lon_deg))
    polar = (np.abs(lat_deg[:-1]) == 90.0) & (np.abs(lat_deg[1:]) == 90.0)
    slope = np.tan(np.where(polar, 0.0, step) / 2)
    edge = 2 * np.arctan2(slope * (half[:-1] + half[1:]), 1 + half[:-1] * half[1:])
    return -float(np.sum(np.where(polar, step * np.sign(lat_deg[:-1]), edge)))


def inside_ring(ring_lonlat: Array, lat_deg: Array, lon_deg: Array) -> NDArray[np.bool_]:
    """Tell which places lie in a closed (lon, lat) ring of short edges (even-odd rule)."""
    inside = np.zeros(np.shape(lat_deg), dtype=bool)
    for (x0, y0), (x1, y1) in pairwise(ring_lonlat):
        if y0 == y1:
            continue
        crosses = (lat_deg >= min(y0, y1)) & (lat_deg < max(y0, y1))
        inside ^= crosses & (lon_deg < x0 + (lat_deg - y0) * (x1 - x0) / (y1 - y0))
    return inside
