"""Lines on the sphere made of great-circle arcs: nearest points, densified vertices, lengths."""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray

from restore.geometry.sphere import Floats, angular_distance, cross, dot, length

AT_ONCE = 2_000_000
Ints = NDArray[np.int64]


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


def near_pairs(a: Floats, b: Floats, c: Floats, d: Floats) -> tuple[Ints, Ints]:
    """Numbers of the arcs a-b (n, 3) and c-d (m, 3) that may touch: every pair that does is in it."""
    from scipy.spatial import cKDTree

    one, its_arc, one_reach = _middles(a, b)
    other, its_edge, other_reach = _middles(c, d)
    if not len(one) or not len(other):
        return np.empty(0, dtype=np.int64), np.empty(0, dtype=np.int64)
    reach = one_reach + other_reach + 1e-9
    near = cKDTree(one).sparse_distance_matrix(cKDTree(other), reach, output_type="ndarray")
    pairs = np.unique(np.stack([its_arc[near["i"]], its_edge[near["j"]]]), axis=1)
    return pairs[0], pairs[1]


def _middles(a: Floats, b: Floats) -> tuple[Floats, Ints, float]:
    """Middles of pieces of arcs, at most a degree long, whose arcs they are, and the longest's half."""
    pieces = np.maximum(np.ceil(angular_distance(a, b) / np.deg2rad(1.0)), 1).astype(np.int64)
    owner = np.repeat(np.arange(len(a)), pieces)
    within = np.arange(len(owner)) - np.repeat(np.cumsum(pieces) - pieces, pieces)
    count = pieces[owner]
    ends = [along_arcs(a[owner], b[owner], (within + half) / count) for half in (0.0, 0.5, 1.0)]
    reach = np.maximum(length(ends[1] - ends[0]), length(ends[2] - ends[1]))
    return ends[1], owner, float(reach.max(initial=0.0))


def along_arcs(a: Floats, b: Floats, fraction: Floats) -> Floats:
    """Unit vectors (n, 3) at fractions (n,) of the arcs a-b (n, 3), none of them half a turn."""
    angle = angular_distance(a, b)
    sine = np.sin(angle)
    short = sine < 1e-12
    safe = np.where(short, 1.0, sine)
    one = np.where(short, 1.0 - fraction, np.sin((1.0 - fraction) * angle) / safe)
    other = np.where(short, fraction, np.sin(fraction * angle) / safe)
    made = one[:, np.newaxis] * a + other[:, np.newaxis] * b
    return made / length(made)[:, np.newaxis]


def crossings(a: Floats, b: Floats, c: Floats, d: Floats) -> tuple[NDArray[np.bool_], Floats]:
    """Whether arcs a-b and c-d (n, 3 each) cross, and where: unit vectors (n, 3), NaN if they do not.

    A point exactly on an arc's great circle counts as left of it, so that a line through a vertex of
    another crosses it there once, or twice, or not at all where it only touches.
    """
    edge, arc = cross(c, d), cross(a, b)
    before, behind = dot(edge, a), dot(edge, b)
    start, end = dot(arc, c), dot(arc, d)
    parted = ((before >= 0.0) != (behind >= 0.0)) & ((start >= 0.0) != (end >= 0.0))
    weight = np.abs(before) + np.abs(behind)
    safe = np.where(parted, weight, 1.0)
    place = (np.abs(behind)[:, np.newaxis] * a + np.abs(before)[:, np.newaxis] * b) / safe[:, np.newaxis]
    size = length(place)
    parted &= (size > 0.0) & (dot(place, c + d) > 0.0)
    place = np.divide(
        place, size[:, np.newaxis], out=np.full_like(place, np.nan), where=parted[:, np.newaxis]
    )
    return parted, place
