"""Lines on the sphere made of great-circle arcs: nearest points, densified vertices, lengths."""

from __future__ import annotations

import numpy as np

from restore.geometry.sphere import Floats, angular_distance, cross, dot, length

AT_ONCE = 2_000_000


def nearest_on_edges(points: Floats, vertices: Floats, closed: bool = False) -> Floats:
    """Angular distance (n,), radians, of points (n, 3) from a line of vertices (m, 3).

    `closed`: the last vertex is joined to the first. To an edge the distance is that to its great
    circle where the foot lies on the edge, else that to the nearer end.
    """
    if closed:
        vertices = np.concatenate([vertices, vertices[:1]])
    a, b = vertices[:-1], vertices[1:]
    normal = cross(a, b)
    size = length(normal)
    normal, a, b = normal[size > 0.0], a[size > 0.0], b[size > 0.0]
    normal = normal / length(normal)[:, np.newaxis]
    least = np.empty(len(points))
    block = max(1, AT_ONCE // max(len(a), 1))
    for at in range(0, len(points), block):
        p = points[at : at + block, np.newaxis, :]
        ends = np.minimum(angular_distance(p, vertices[np.newaxis]).min(axis=1), np.pi)
        if len(a):
            off = np.arcsin(np.clip(np.abs(dot(p, normal)), 0.0, 1.0))
            inside = (dot(cross(normal, a), p) >= 0.0) & (dot(cross(b, normal), p) >= 0.0)
            foot = np.where(inside, off, np.pi).min(axis=1)
            ends = np.minimum(ends, foot)
        least[at : at + block] = ends
    return least


def densified_arcs(vertices: Floats, longest: float) -> tuple[Floats, Floats]:
    """Vertices (k, 3) along a line (m, 3) so that no arc is longer than `longest` (radians).

    Also the number of the original vertex each new one is at or after, as floats with the fraction
    of the arc, `(k,)`: whole numbers are the original vertices.
    """
    a, b = vertices[:-1], vertices[1:]
    angle = angular_distance(a, b)
    pieces = np.maximum(np.ceil(angle / longest), 1).astype(int)
    owner = np.repeat(np.arange(len(a)), pieces)
    within = np.arange(len(owner)) - np.repeat(np.cumsum(pieces) - pieces, pieces)
    fraction = within / pieces[owner]
    w = angle[owner]
    sine = np.sin(w)
    small = sine == 0.0
    safe = np.where(small, 1.0, sine)
    one = np.where(small, 1.0 - fraction, np.sin((1.0 - fraction) * w) / safe)
    other = np.where(small, fraction, np.sin(fraction * w) / safe)
    made = one[:, np.newaxis] * a[owner] + other[:, np.newaxis] * b[owner]
    made[fraction == 0.0] = a[owner[fraction == 0.0]]
    total = np.concatenate([made, vertices[-1:]])
    return total, np.append(owner + fraction, len(vertices) - 1.0)


def line_length(vertices: Floats) -> float:
    """Length in radians of a line of vertices (m, 3)."""
    return float(angular_distance(vertices[:-1], vertices[1:]).sum()) if len(vertices) > 1 else 0.0
