"""Polygons on the sphere: which points they hold, exactly, and their area.

A point is inside if the meridian from it to the north pole crosses the polygon's edges an even or
odd number of times, according to whether the pole itself is inside. Edges are great circles; each
holds the longitudes from its western end up to, not including, its eastern end, and a point on an
edge counts as south of it. Two polygons that share an edge decide by the same numbers with the
sign changed, so that in a tiling every point, those on edges and vertices too, is in exactly one.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from restore.geometry.sphere import Floats, cross, dot, length, unit_vectors, wrap_longitude

MOST_PAIRS = 2_000_000
STEP_INSIDE = 1e-6
"""Radians (6 m): how far to the left of an edge the point lies that is inside by definition."""


@dataclass(frozen=True, eq=False)
class Ring:
    """A closed ring, its last vertex joined to the first: degrees `(n,)`, the interior to the left."""

    lat_deg: Floats
    lon_deg: Floats

    @classmethod
    def of(cls, lat_deg: Floats, lon_deg: Floats) -> Ring:
        """A ring without a repeated last vertex and without repeated neighbours.

        At a pole the longitude has no meaning; it is set to that of the vertex before, so that the
        edges there are meridians.
        """
        lat = np.asarray(lat_deg, dtype=np.float64)
        lon = wrap_longitude(lon_deg)
        place = unit_vectors(lat, lon)
        # vertices a micrometre apart are one: 180 and -180 degrees, or a pole at two longitudes
        apart = length(place - np.roll(place, 1, axis=0)) > 1e-13
        lat, lon = lat[apart], lon[apart]
        return cls(lat, lon)

    def __len__(self) -> int:
        return len(self.lat_deg)

    def vectors(self) -> Floats:
        """Unit vectors (n, 3) of the vertices."""
        return unit_vectors(self.lat_deg, self.lon_deg)

    def reversed(self) -> Ring:
        """The same ring the other way round: its interior is the other side."""
        return Ring(self.lat_deg[::-1], self.lon_deg[::-1])

    def area_sr(self) -> float:
        """Area to the left of the ring, steradians in [0, 4 pi).

        The sum of the signed excesses of the triangles from one vertex (Van Oosterom & Strackee
        1983, IEEE Trans. Biomed. Eng. 30, 125-126), modulo the sphere.
        """
        v = self.vectors()
        if len(v) < 3:
            return 0.0
        a, b, c = np.broadcast_to(v[0], v[2:].shape), v[1:-1], v[2:]
        determinant = dot(a, cross(b, c))
        total = 2.0 * np.arctan2(determinant, 1.0 + dot(a, b) + dot(b, c) + dot(c, a)).sum()
        return float(np.mod(total, 4.0 * np.pi))


@dataclass(frozen=True, eq=False)
class Edges:
    """Edges as a sweep over longitude wants them, those along meridians left out.

    `west_deg`, `east_deg` (m,): longitudes in [-180, 180]; an edge across the 180th meridian stands
    twice. `normal` (3, m): pointing north, so that a point p is south of or on the edge where
    `normal . p <= 0`.
    """

    west_deg: Floats
    east_deg: Floats
    normal: Floats


def edges_of(rings: tuple[Ring, ...]) -> Edges:
    """The edges of some rings."""
    west, east, normals = [], [], []
    for ring in rings:
        v = ring.vectors()
        start, end = ring.lon_deg, np.roll(ring.lon_deg, -1)
        on_axis = np.abs(ring.lat_deg) == 90.0
        through_pole = on_axis | np.roll(on_axis, -1)
        span = end - start
        span = np.where(span > 180.0, span - 360.0, np.where(span < -180.0, span + 360.0, span))
        used = ~through_pole & (span != 0.0) & (np.abs(span) != 180.0)
        eastward = span > 0.0
        a = np.where(eastward[:, None], v, np.roll(v, -1, axis=0))[used]
        b = np.where(eastward[:, None], np.roll(v, -1, axis=0), v)[used]
        west.append(np.where(eastward, start, end)[used])
        east.append(np.where(eastward, end, start)[used])
        normals.append(cross(a, b))
    west_, east_ = np.concatenate(west), np.concatenate(east)
    normal = np.concatenate(normals)
    over = east_ < west_
    return Edges(
        np.concatenate([west_, np.full(int(over.sum()), -180.0)]),
        np.concatenate([np.where(over, 180.0, east_), east_[over]]),
        np.ascontiguousarray(np.concatenate([normal, normal[over]]).T),
    )


@dataclass(frozen=True, eq=False)
class Polygon:
    """An outer ring and its holes: the outer one anticlockwise, holes clockwise (RFC 7946)."""

    rings: tuple[Ring, ...]
    edges: Edges
    pole_inside: bool

    @classmethod
    def of(cls, rings: tuple[Ring, ...]) -> Polygon:
        """From rings of at least three vertices each, the first of them the outer one."""
        edges = edges_of(rings)
        outer = rings[0]
        v = outer.vectors()
        after = np.roll(v, -1, axis=0)
        longest = int(np.argmax(length(after - v)))
        a, b = v[longest], after[longest]
        left = np.cross(a, b)
        middle = a + b
        inside = middle / np.linalg.norm(middle) + STEP_INSIDE * left / np.linalg.norm(left)
        inside /= np.linalg.norm(inside)
        lon = np.rad2deg(np.arctan2(inside[1], inside[0]))
        here = (edges.west_deg <= lon) & (lon < edges.east_deg)
        south = edges.normal.T[here] @ inside <= 0.0
        return cls(rings, edges, int(south.sum()) % 2 == 0)

    def area_sr(self) -> float:
        """Area in steradians: the outer ring's less that of the holes."""
        holes = sum(ring.reversed().area_sr() for ring in self.rings[1:])
        return self.rings[0].area_sr() - holes


class SortedPoints:
    """Points sorted by longitude once, to be held against many polygons.

    `lat_deg`, `lon_deg` (n,): degrees. Answers come in the order in which the points were given.
    """

    def __init__(self, lat_deg: Floats, lon_deg: Floats) -> None:
        lat, lon = np.asarray(lat_deg, dtype=np.float64), wrap_longitude(lon_deg)
        lon = np.where(np.abs(lat) == 90.0, 0.0, lon)
        self.order = np.argsort(lon, kind="stable")
        self.lon = lon[self.order]
        self.xyz = np.ascontiguousarray(unit_vectors(lat[self.order], self.lon).T)

    def __len__(self) -> int:
        return len(self.lon)

    def inside(self, polygon: Polygon) -> NDArray[np.bool_]:
        """Whether each point (n,) is inside, in sorted order; see `unsorted`."""
        edges = polygon.edges
        first = np.searchsorted(self.lon, edges.west_deg, side="left")
        last = np.searchsorted(self.lon, edges.east_deg, side="left")
        counts = last - first
        odd = np.full(len(self.lon), polygon.pole_inside)
        busy = np.flatnonzero(counts > 0)
        if len(busy) and counts[busy].mean() > 300.0:
            self._by_edge(edges, first, last, busy, odd)
        elif len(busy):
            self._by_pairs(edges, first, counts, busy, odd)
        return odd

    def _by_edge(
        self,
        edges: Edges,
        first: NDArray[np.int64],
        last: NDArray[np.int64],
        busy: NDArray[np.int64],
        odd: NDArray[np.bool_],
    ) -> None:
        x, y, z = self.xyz
        for edge in busy.tolist():
            some = slice(int(first[edge]), int(last[edge]))
            nx, ny, nz = edges.normal[:, edge]
            odd[some] ^= nx * x[some] + ny * y[some] + nz * z[some] <= 0.0

    def _by_pairs(
        self,
        edges: Edges,
        first: NDArray[np.int64],
        counts: NDArray[np.int64],
        busy: NDArray[np.int64],
        odd: NDArray[np.bool_],
    ) -> None:
        """The same, for many edges with few points each: all (edge, point) pairs in long runs."""
        ends = np.cumsum(counts[busy])
        start = 0
        while start < len(busy):
            done = ends[start - 1] if start else 0
            stop = max(int(np.searchsorted(ends, done + MOST_PAIRS, side="right")), start + 1)
            some = busy[start:stop]
            owner = np.repeat(some, counts[some])
            offset = np.arange(len(owner)) - np.repeat(ends[start:stop] - counts[some] - done, counts[some])
            point = first[owner] + offset
            n, p = edges.normal[:, owner], self.xyz[:, point]
            south = n[0] * p[0] + n[1] * p[1] + n[2] * p[2] <= 0.0
            crossings = np.bincount(point[south], minlength=len(odd))
            odd ^= (crossings & 1).astype(bool)
            start = stop

    def unsorted(self, values: NDArray[np.generic]) -> NDArray[np.generic]:
        """Values (n,) in sorted order brought back into the order given."""
        back = np.empty_like(values)
        back[self.order] = values
        return back


def densified(
    lat_deg: Floats, lon_deg: Floats, within_km: float, radius_km: float
) -> tuple[Floats, Floats]:
    """Vertices along edges that are straight in longitude and latitude (RFC 7946), close enough that
    great circles between them stay within `within_km`.

    A step of d degrees leaves about `R d^2 sin(2 lat) / 16` between the two lines (d in radians of
    longitude). Edges cut at the 180th meridian are taken the short way.
    """
    lat, lon = np.asarray(lat_deg, dtype=np.float64), np.asarray(lon_deg, dtype=np.float64)
    after_lat, after_lon = np.roll(lat, -1), np.roll(lon, -1)
    span = after_lon - lon
    steepest = np.maximum(np.abs(np.sin(2 * np.deg2rad(lat))), np.abs(np.sin(2 * np.deg2rad(after_lat))))
    across = (np.abs(lat) < 45.0) != (np.abs(after_lat) < 45.0)
    steepest = np.where(across, 1.0, steepest)
    step = np.sqrt(16.0 * within_km / radius_km / np.maximum(steepest, 1e-9))
    pieces = np.maximum(np.ceil(np.abs(np.deg2rad(span)) / step), 1).astype(int)
    owner = np.repeat(np.arange(len(lat)), pieces)
    within = np.arange(len(owner)) - np.repeat(np.cumsum(pieces) - pieces, pieces)
    fraction = within / pieces[owner]
    return (
        lat[owner] + fraction * (after_lat - lat)[owner],
        lon[owner] + fraction * span[owner],
    )
