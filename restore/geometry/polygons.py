"""Polygons on the sphere: which points they hold, exactly, and their area.

A point is inside if the meridian from it to the north pole crosses the polygon's edges an even or
odd number of times, according to whether the pole itself is inside. Edges are great circles; each
holds the longitudes from its western end up to, not including, its eastern end, and a point on an
edge, within 6 nm, counts as south of it. Two polygons that share an edge decide by the same numbers,
so that in a tiling every point, those on edges and vertices too, is in exactly one (10 nm beside a
vertex the last bits may make it three). A pole counts as the point there on the meridian 0; a ring
that passes over the north pole runs along it, north of every point, from the longitude on which it
comes to the one on which it leaves.
"""

from __future__ import annotations

import math
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from restore.geometry.sphere import Floats, cross, length, unit_vectors, wrap_longitude

MOST_PAIRS = 2_000_000
ON_EDGE = 1e-15
"""Radians: a point this near to an edge is on it; the distance is computed to 5e-16."""


@dataclass(frozen=True, eq=False)
class Ring:
    """A closed ring, its last vertex joined to the first: degrees `(n,)`, the interior to the left."""

    lat_deg: Floats
    lon_deg: Floats

    @classmethod
    def of(cls, lat_deg: Floats, lon_deg: Floats) -> Ring:
        """A ring without a repeated last vertex and without repeated neighbours."""
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

    def spans_deg(self) -> Floats:
        """Longitude (n,) from each vertex to the next the short way, degrees in [-180, 180]."""
        span = np.roll(self.lon_deg, -1) - self.lon_deg
        return np.where(span > 180.0, span - 360.0, np.where(span < -180.0, span + 360.0, span))

    def area_sr(self) -> float:
        """Area to the left of the ring, steradians in [0, 4 pi).

        The integral of (1 - sin lat) d lon along the ring, modulo the sphere: an edge's share is its
        span less the area between it and the equator (a right-angled pair of spherical triangles).
        What an edge adds to one polygon it takes from its neighbour.
        """
        if len(self) < 3:
            return 0.0
        half_span = 0.5 * np.deg2rad(self.spans_deg())
        lat, after = np.deg2rad(self.lat_deg), np.deg2rad(np.roll(self.lat_deg, -1))
        rise = np.sin(half_span) * np.sin(0.5 * (lat + after))
        run = np.cos(half_span) * np.cos(0.5 * (lat - after))
        total = math.fsum(2.0 * (half_span - np.arctan2(rise, run)))
        return float(np.mod(total, 4.0 * np.pi))


@dataclass(frozen=True, eq=False)
class Edges:
    """Edges as a sweep over longitude wants them, those along meridians left out.

    `west_deg`, `east_deg` (m,): longitudes in [-180, 180]; an edge across the 180th meridian stands
    twice. `normal` (3, m): of unit length and pointing north, so that a point p is south of or on
    the edge where `normal . p <= ON_EDGE`; zero where the ring passes over the north pole.
    """

    west_deg: Floats
    east_deg: Floats
    normal: Floats


def edges_of(rings: tuple[Ring, ...]) -> Edges:
    """The edges of some rings."""
    parts = [part for ring in rings for part in (_arcs(ring), _over_north_pole(ring))]
    west, east = (np.concatenate([part[i] for part in parts]) for i in (0, 1))
    normal = np.concatenate([part[2] for part in parts])
    over = east < west
    return Edges(
        np.concatenate([west, np.full(int(over.sum()), -180.0)]),
        np.concatenate([np.where(over, 180.0, east), east[over]]),
        np.ascontiguousarray(np.concatenate([normal, normal[over]]).T),
    )


def _swept(ring: Ring) -> NDArray[np.bool_]:
    """Which edges (n,) of a ring do not run along a meridian."""
    on_axis, span = np.abs(ring.lat_deg) == 90.0, ring.spans_deg()
    swept: NDArray[np.bool_] = ~(on_axis | np.roll(on_axis, -1)) & (span != 0.0) & (np.abs(span) != 180.0)
    return swept


def _arcs(ring: Ring) -> tuple[Floats, Floats, Floats]:
    """Western and eastern longitudes (m,) and northward unit normals (m, 3) of a ring's edges."""
    used = _swept(ring)
    v, start = ring.vectors(), ring.lon_deg
    after, end = np.roll(v, -1, axis=0), np.roll(start, -1)
    eastward = (ring.spans_deg() > 0.0)[used]
    start, end, v, after = start[used], end[used], v[used], after[used]
    a = np.where(eastward[:, None], v, after)
    b = np.where(eastward[:, None], after, v)
    # a x (b - a) keeps the digits that a x b loses where an edge is short
    normal = cross(a, b - a)
    normal /= length(normal)[:, None]
    return np.where(eastward, start, end), np.where(eastward, end, start), normal


def _over_north_pole(ring: Ring) -> tuple[Floats, Floats, Floats]:
    """The same where a ring passes over the north pole: all points are south of it there."""
    lat, lon, span = ring.lat_deg, ring.lon_deg, ring.spans_deg()
    after = np.roll(lat, -1)
    across = (np.abs(span) == 180.0) & (lat + after > 0.0) & (lat != 90.0) & (after != 90.0)
    at = lat == 90.0
    come = np.concatenate([lon[across], np.roll(lon, 1)[at]])
    leave = np.concatenate([np.roll(lon, -1)[across], np.roll(lon, -1)[at]])
    span = wrap_longitude(leave - come)
    come, leave, span = come[span != 0.0], leave[span != 0.0], span[span != 0.0]
    west, east = np.where(span > 0.0, come, leave), np.where(span > 0.0, leave, come)
    return west, east, np.zeros((len(west), 3))


def _holds_pole(outer: Ring, edges: Edges) -> bool:
    """Whether the parity of crossings begins odd at the north pole.

    It is what makes the place just to the left of the outer ring's longest edge an inside one.
    """
    v, span = outer.vectors(), outer.spans_deg()
    after = np.roll(v, -1, axis=0)
    swept = _swept(outer)
    along = ~swept & (np.abs(span) != 180.0) | (np.abs(outer.lat_deg) == 90.0)
    longest = int(np.argmax(np.where(swept if swept.any() else along, length(after - v), -1.0)))
    middle = v[longest] + after[longest]
    middle /= np.linalg.norm(middle)
    if swept.any():
        lon = float(wrap_longitude(np.rad2deg(np.arctan2(middle[1], middle[0]))))
        here = (edges.west_deg <= lon) & (lon < edges.east_deg)
        height = edges.normal.T[here] @ middle
        on_ring = (np.abs(height) <= ON_EDGE) & edges.normal.T[here].any(axis=1)
        # the ring's own edge lies to the north of the place if it runs westwards
        south = np.where(on_ring, span[longest] < 0.0, height <= ON_EDGE)
    else:
        ends = (longest, (longest + 1) % len(outer))
        one = ends[0] if abs(outer.lat_deg[ends[0]]) != 90.0 else ends[1]
        lon = float(outer.lon_deg[one])
        if outer.lat_deg[ends[1]] > outer.lat_deg[ends[0]]:  # northwards: the place is in the west
            lon = 180.0 if lon == -180.0 else lon
            here = (edges.west_deg < lon) & (lon <= edges.east_deg)
        else:
            here = (edges.west_deg <= lon) & (lon < edges.east_deg)
        south = edges.normal.T[here] @ middle <= ON_EDGE
    return int(south.sum()) % 2 == 0


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
        return cls(rings, edges, _holds_pole(rings[0], edges))

    def area_sr(self) -> float:
        """Area in steradians: the outer ring's less that of the holes."""
        holes = sum(ring.reversed().area_sr() for ring in self.rings[1:])
        return self.rings[0].area_sr() - holes


class SortedPoints:
    """Points sorted by longitude once, to be held against many polygons.

    `lat_deg`, `lon_deg` (n,): degrees; a point of which one is NaN or infinite is inside nothing.
    Answers come in the order in which the points were given.
    """

    def __init__(self, lat_deg: Floats, lon_deg: Floats) -> None:
        lat, lon = np.asarray(lat_deg, dtype=np.float64), np.asarray(lon_deg, dtype=np.float64)
        known = np.isfinite(lat) & np.isfinite(lon)
        # NaN is sorted to the end
        lat, lon = np.where(known, lat, np.nan), wrap_longitude(np.where(known, lon, np.nan))
        lon = np.where(np.abs(lat) == 90.0, 0.0, lon)
        self.known = int(known.sum())
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
        odd[self.known :] = False
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
            odd[some] ^= nx * x[some] + ny * y[some] + nz * z[some] <= ON_EDGE

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
            south = n[0] * p[0] + n[1] * p[1] + n[2] * p[2] <= ON_EDGE
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

    A piece of d in longitude and e in latitude (radians) leaves at most `R |d| (|d sin 2 lat| / 2 +
    2 |e sin lat|) / 8` between the two lines. An edge of more than 180 degrees of longitude is taken
    the short way, save one of 360 (from -180 to 180), which runs round its parallel. The vertices are
    the same whichever way an edge is run.
    """
    lat, lon = np.asarray(lat_deg, dtype=np.float64), np.asarray(lon_deg, dtype=np.float64)
    after_lat, span = np.roll(lat, -1), short_way(np.roll(lon, -1) - lon)
    back = (span < 0.0) | ((span == 0.0) & (after_lat < lat))
    south, north = np.minimum(lat, after_lat), np.maximum(lat, after_lat)
    steepest = np.maximum(np.abs(np.sin(2 * np.deg2rad(lat))), np.abs(np.sin(2 * np.deg2rad(after_lat))))
    across = ((south < 45.0) & (north > 45.0)) | ((south < -45.0) & (north > -45.0))
    steepest = np.where(across, 1.0, steepest)
    highest = np.sin(np.deg2rad(np.maximum(np.abs(lat), np.abs(after_lat))))
    d, e = np.abs(np.deg2rad(span)), np.deg2rad(north - south)
    off = radius_km * d * (d * steepest / 2.0 + 2.0 * e * highest) / 8.0
    pieces = np.maximum(np.ceil(np.sqrt(off / within_km)), 1).astype(int)
    pieces = np.where(d > np.pi, np.maximum(pieces, 4), pieces)
    owner = np.repeat(np.arange(len(lat)), pieces)
    within = np.arange(len(owner)) - np.repeat(np.cumsum(pieces) - pieces, pieces)
    first = within == 0
    within = np.where(back[owner], pieces[owner] - within, within)
    fraction = within / pieces[owner]
    west = wrap_longitude(np.where(back, np.roll(lon, -1), lon))
    start, end = np.where(back, after_lat, lat), np.where(back, lat, after_lat)
    made_lat = start[owner] + fraction * (end - start)[owner]
    made_lon = west[owner] + fraction * np.abs(span)[owner]
    return np.where(first, lat[owner], made_lat), np.where(first, lon[owner], made_lon)


def short_way(span_deg: Floats) -> Floats:
    """Spans of longitude, degrees, of more than 180 and less than 360 taken the other way round."""
    size = np.abs(span_deg)
    return np.where((size > 180.0) & (size < 360.0), span_deg - np.sign(span_deg) * 360.0, span_deg)
