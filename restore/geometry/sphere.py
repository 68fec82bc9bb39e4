"""Points on the sphere: coordinates, distances, directions and tangent frames.

Every angle comes from an atan2 form, right from a millimetre to the antipode; never from the arc
cosine of a dot product nor the arc sine of a height (Kahan's advice on angles between vectors).
"""

from __future__ import annotations

import numpy as np
from numpy.typing import ArrayLike, NDArray

Floats = NDArray[np.float64]

EARTH_RADIUS_KM = 6371.0088
"""Mean radius R1 = (2a + b) / 3 of the GRS80 and WGS84 ellipsoids (IUGG; Moritz 2000), km."""


def empty_components(shape: tuple[int, ...], components: int) -> Floats:
    """An uninitialised `(..., components)` array whose components each lie together in memory.

    The arithmetic of this package runs component by component; laid out this way each of them is
    one contiguous run, about twice as fast as interleaved components.
    """
    return np.moveaxis(np.empty((components, *shape)), 0, -1)


def wrap_longitude(lon_deg: ArrayLike) -> Floats:
    """Longitude in degrees brought into [-180, 180); values already there keep every bit."""
    lon = np.asarray(lon_deg, dtype=np.float64)
    inside = (lon >= -180.0) & (lon < 180.0)
    wrapped = np.mod(lon + 180.0, 360.0) - 180.0
    return np.where(inside, lon, np.where(wrapped >= 180.0, -180.0, wrapped))


def unit_vectors(lat_deg: ArrayLike, lon_deg: ArrayLike) -> Floats:
    """Unit vectors `(..., 3)` of latitudes and longitudes in degrees (broadcast together)."""
    lat = np.deg2rad(np.asarray(lat_deg, dtype=np.float64))
    lon = np.deg2rad(np.asarray(lon_deg, dtype=np.float64))
    lat, lon = np.broadcast_arrays(lat, lon)
    vectors = empty_components(lat.shape, 3)
    cos_lat = np.cos(lat)
    np.multiply(cos_lat, np.cos(lon), out=vectors[..., 0])
    np.multiply(cos_lat, np.sin(lon), out=vectors[..., 1])
    np.sin(lat, out=vectors[..., 2])
    return vectors


def lat_lon(vectors: ArrayLike) -> tuple[Floats, Floats]:
    """Latitude and longitude in degrees, longitude in [-180, 180), of vectors `(..., 3)`.

    The vectors need not have unit length (any from 1e-150 to 1e150). At a pole the longitude is 0; a zero vector and NaN give
    NaN.
    """
    v = np.asarray(vectors, dtype=np.float64)
    x, y, z = v[..., 0], v[..., 1], v[..., 2]
    level = np.sqrt(x * x + y * y)
    lat = np.rad2deg(np.arctan2(z, level))
    lon = np.rad2deg(np.arctan2(y, x))
    lon = np.where(lon >= 180.0, -180.0, lon)
    on_axis = level == 0.0
    if np.any(on_axis):
        nowhere = on_axis & (z == 0.0)
        lat = np.where(nowhere, np.nan, lat)
        lon = np.where(on_axis, np.where(nowhere, np.nan, 0.0), lon)
    return lat, lon


def unit_vectors_from_colatitude(colat_deg: ArrayLike, east_lon_deg: ArrayLike) -> Floats:
    """Unit vectors `(..., 3)` of colatitudes (0 at the north pole) and east longitudes, degrees."""
    colat = np.deg2rad(np.asarray(colat_deg, dtype=np.float64))
    lon = np.deg2rad(np.asarray(east_lon_deg, dtype=np.float64))
    colat, lon = np.broadcast_arrays(colat, lon)
    vectors = empty_components(colat.shape, 3)
    vectors[..., 0] = np.sin(colat) * np.cos(lon)
    vectors[..., 1] = np.sin(colat) * np.sin(lon)
    vectors[..., 2] = np.cos(colat)
    return vectors


def colatitude_east_longitude(vectors: ArrayLike) -> tuple[Floats, Floats]:
    """Colatitude in [0, 180] and east longitude in [0, 360), degrees, of vectors `(..., 3)`."""
    v = np.asarray(vectors, dtype=np.float64)
    colat = np.rad2deg(np.arctan2(np.hypot(v[..., 0], v[..., 1]), v[..., 2]))
    lon = np.mod(np.rad2deg(np.arctan2(v[..., 1], v[..., 0])), 360.0)
    return colat, np.where(lon >= 360.0, 0.0, lon)


def dot(a: Floats, b: Floats) -> Floats:
    """Scalar product over the last axis, `(..., 3)` with `(..., 3)`, summed in a fixed order."""
    total: Floats = a[..., 0] * b[..., 0] + a[..., 1] * b[..., 1] + a[..., 2] * b[..., 2]
    return total


def cross(a: Floats, b: Floats) -> Floats:
    """Vector product over the last axis, `(..., 3)` with `(..., 3)`."""
    shape = np.broadcast_shapes(a.shape[:-1], b.shape[:-1])
    product = empty_components(shape, 3)
    for i, j, k in ((0, 1, 2), (1, 2, 0), (2, 0, 1)):
        product[..., i] = a[..., j] * b[..., k] - a[..., k] * b[..., j]
    return product


def length(a: Floats) -> Floats:
    """Length over the last axis of vectors `(..., 3)`, free of underflow for short ones."""
    norm: Floats = np.hypot(np.hypot(a[..., 0], a[..., 1]), a[..., 2])
    return norm


def angular_distance(a: ArrayLike, b: ArrayLike) -> Floats:
    """Angle in radians, [0, pi], between vectors `(..., 3)`: atan2(|a x b|, a . b)."""
    a, b = np.asarray(a, dtype=np.float64), np.asarray(b, dtype=np.float64)
    angle: Floats = np.arctan2(length(cross(a, b)), dot(a, b))
    return angle


def distance_km(a: ArrayLike, b: ArrayLike, radius_km: float = EARTH_RADIUS_KM) -> Floats:
    """Great-circle distance in km between unit vectors `(..., 3)` on a sphere of `radius_km`."""
    return angular_distance(a, b) * radius_km


def tangent_frame(vectors: ArrayLike) -> tuple[Floats, Floats]:
    """Unit vectors east and north, each `(..., 3)`, of the tangent plane at points `(..., 3)`.

    At a pole the longitude counts as 0: east is y there, and north is -x at the north pole.
    """
    v = np.asarray(vectors, dtype=np.float64)
    x, y, z = v[..., 0], v[..., 1], v[..., 2]
    level = np.sqrt(x * x + y * y)
    at_pole = level == 0.0
    safe = np.where(at_pole, 1.0, level)
    cos_lon, sin_lon = np.where(at_pole, 1.0, x / safe), y / safe
    size = np.sqrt(level * level + z * z)
    east = empty_components(x.shape, 3)
    north = empty_components(x.shape, 3)
    np.negative(sin_lon, out=east[..., 0])
    east[..., 1] = cos_lon
    east[..., 2] = 0.0
    sin_lat = z / size
    np.multiply(-sin_lat, cos_lon, out=north[..., 0])
    np.multiply(-sin_lat, sin_lon, out=north[..., 1])
    np.divide(level, size, out=north[..., 2])
    return east, north


def azimuth_deg(start: ArrayLike, end: ArrayLike) -> Floats:
    """Azimuth at `start` of the great circle to `end`, degrees clockwise from north, [0, 360).

    Unit vectors `(..., 3)`. Zero where the two coincide or are antipodes.
    """
    start, end = np.asarray(start, dtype=np.float64), np.asarray(end, dtype=np.float64)
    east, north = tangent_frame(start)
    # end - start has the same tangent components as end, without the cancellation of short lines;
    # near the antipode end + start has them
    step = np.where((dot(start, end) < 0.0)[..., np.newaxis], end + start, end - start)
    return compass_deg(dot(step, east), dot(step, north))


def compass_deg(east: ArrayLike, north: ArrayLike) -> Floats:
    """Direction of the vector (east, north): degrees clockwise from north in [0, 360)."""
    azimuth = np.rad2deg(np.arctan2(east, north))
    azimuth = np.where(azimuth < 0.0, azimuth + 360.0, azimuth)
    return np.where(azimuth >= 360.0, 0.0, azimuth) + 0.0


def destination(start: ArrayLike, azimuth_deg: ArrayLike, angle: ArrayLike) -> Floats:
    """The points `(..., 3)` reached from `start` along an azimuth (degrees) over an angle (radians)."""
    start = np.asarray(start, dtype=np.float64)
    east, north = tangent_frame(start)
    turn = np.deg2rad(np.asarray(azimuth_deg, dtype=np.float64))[..., np.newaxis]
    angle = np.asarray(angle, dtype=np.float64)[..., np.newaxis]
    heading = np.sin(turn) * east + np.cos(turn) * north
    reached: Floats = np.cos(angle) * start + np.sin(angle) * heading
    return reached
