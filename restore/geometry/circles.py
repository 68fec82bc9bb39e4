"""Small circles about a pole as lines, and lines cut where maps are cut."""

from __future__ import annotations

import math

import numpy as np

from restore.errors import InputError
from restore.geometry import so3
from restore.geometry.sphere import Floats, angular_distance, cross, dot, length


def small_circle(
    pole: Floats, through: Floats, from_deg: float = 0.0, to_deg: float = 360.0, step_deg: float = 1.0
) -> tuple[Floats, Floats]:
    """The points `(k, 3)` reached by turning a point about a pole (unit vectors), and their angles.

    Angles `(k,)` in degrees, anticlockwise positive, from `from_deg` to `to_deg` by at most `step_deg`;
    at angle 0 it is the point itself, to the last bit. A point on the pole stays there. Raises
    InputError for a step that is not above 0 or an end that is not above the start.
    """
    if not (step_deg > 0.0 and math.isfinite(step_deg)):
        raise InputError(f"step_deg = {step_deg:g}: must be above 0")
    if not 0.0 < to_deg - from_deg <= 360.0:
        raise InputError(
            f"arc {from_deg:g}..{to_deg:g} deg: the end must lie above the start, by at most 360"
        )
    count = math.ceil((to_deg - from_deg) / step_deg - 1e-9)
    angles = np.linspace(from_deg, to_deg, count + 1)
    turns = so3.exponential(np.deg2rad(angles)[:, np.newaxis] * pole)
    points = so3.rotate(turns, through)
    points[(angles == 0.0) | (angles == 360.0)] = through
    return points, angles


def circle_radius(pole: Floats, through: Floats) -> Floats:
    """Angular radius `(...)`, radians, [0, pi], of the small circles about a pole through points."""
    return angular_distance(pole, through)


def to_small_circle(points: Floats, pole: Floats, radius: float) -> Floats:
    """Signed angular distance (radians) of points `(n, 3)` from a small circle: positive outside it."""
    return angular_distance(points, pole) - radius


def cut_at_antimeridian(lat_deg: Floats, lon_deg: Floats) -> list[list[list[float]]]:
    """A line of places as GeoJSON coordinates, cut where it crosses 180 degrees (RFC 7946, 3.1.9).

    Where the line crosses, both parts end at the crossing of the great circle between the two places.
    """
    parts: list[list[list[float]]] = [[]]
    for k in range(len(lat_deg)):
        lat, lon = float(lat_deg[k]), float(lon_deg[k])
        if k and abs(lon - float(lon_deg[k - 1])) > 180.0:
            side = 180.0 if lon_deg[k - 1] > 0.0 else -180.0
            crossing = _crossing_lat(float(lat_deg[k - 1]), float(lon_deg[k - 1]), lat, lon)
            if abs(parts[-1][-1][0]) != 180.0:
                parts[-1].append([side, crossing])
            else:
                parts[-1][-1][0] = side
            parts.append([] if abs(lon) == 180.0 else [[-side, crossing]])
        parts[-1].append([lon, lat])
    return [part for part in parts if len(part) > 1]


def _crossing_lat(lat_a: float, lon_a: float, lat_b: float, lon_b: float) -> float:
    """Latitude in degrees at which the great circle between two places meets 180 degrees east."""
    a, b = math.tan(math.radians(lat_a)), math.tan(math.radians(lat_b))
    # tan(lat) is a combination of sin and cos of the longitude along a great circle
    one, other = math.radians(180.0 - lon_a % 360.0), math.radians(lon_b % 360.0 - 180.0)
    width = math.sin(one + other)
    if width == 0.0:
        return 0.5 * (lat_a + lat_b)
    return math.degrees(math.atan((a * math.sin(other) + b * math.sin(one)) / width))


def nearest_on_line(points: Floats, vertices: Floats) -> tuple[Floats, Floats]:
    """Where on a line of great-circle arcs (m, 3) each point (n, 3) is nearest, and how far it lies off.

    The first `(n,)` counts vertices, with the fraction of the edge; the second is the signed angular
    distance in radians, positive to the right of the line's direction. A line needs two places.
    """
    position, distance = np.empty(len(points)), np.empty(len(points))
    edges = np.flatnonzero(length(cross(vertices[:-1], vertices[1:])) > 0.0)
    if not len(edges):
        raise InputError("a line whose points all coincide has no direction; give two different ones")
    block = max(1, 1_000_000 // len(edges))
    for at in range(0, len(points), block):
        some = slice(at, at + block)
        feet = foot_on_arc(points[some, np.newaxis], vertices[edges], vertices[edges + 1])
        best = np.argmin(np.abs(feet[1]), axis=1)
        pick = np.arange(len(best)), best
        position[some] = edges[best] + feet[0][pick]
        distance[some] = feet[1][pick]
    return position, distance


def foot_on_arc(points: Floats, a: Floats, b: Floats) -> tuple[Floats, Floats]:
    """The fraction of the arc from a to b at which it is nearest to points, and how far they lie off.

    Unit vectors `(..., 3)`, a and b different; radians, positive to the right of the direction from a to b.
    """
    normal = cross(a, b)
    normal = normal / length(normal)[..., np.newaxis]
    side, arc = cross(normal, a), angular_distance(a, b)
    along = np.arctan2(dot(points, side), dot(points, a))
    within = np.clip(along, 0.0, arc)
    # past the antipode of the arc's middle its other end is the nearer one
    within = np.where(along < 0.5 * arc - np.pi, arc, within)
    foot = np.cos(within)[..., np.newaxis] * a + np.sin(within)[..., np.newaxis] * side
    off = angular_distance(points, foot)
    return within / arc, np.where(dot(points, normal) > 0.0, -off, off)
