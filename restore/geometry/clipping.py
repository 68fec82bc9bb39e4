"""Polygons cut by the edge of a map: the 180th meridian, or the frame of a gnomonic view.

Interiors lie to the left of rings. Where a ring leaves the map it is broken; each end is led along
the map's edge, anticlockwise, to where the next path begins. That is right for concave polygons, for
several rings, round poles and for more than a hemisphere, since the edge too has the map to its left.
"""

from __future__ import annotations

from collections.abc import Iterator, Sequence
from dataclasses import dataclass
from typing import Any

import numpy as np
from numpy.typing import NDArray

from restore.geometry.latitudes import Latitudes
from restore.geometry.polygons import Polygon, Ring, SortedPoints
from restore.geometry.sphere import Floats, cross, dot, lat_lon, length, unit_vectors, wrap_longitude

DECIMALS = 10
WIDEST_VIEW = 0.5
"""Cosine of 60 degrees: a polygon seen whole stays that near to the middle of its view."""

Rings = list[Floats]
"""One polygon in a plane: closed rings (k, 2), its outer one anticlockwise first, then its holes."""


@dataclass(frozen=True, eq=False)
class Box:
    """A map from `-half_width` to `half_width` and `-half_height` to `half_height`.

    `stations` (m, 2): places on its edge that a path along the edge goes through, corners among them.
    """

    half_width: float
    half_height: float
    stations: Floats

    @property
    def around(self) -> float:
        """Length of the edge."""
        return 4.0 * (self.half_width + self.half_height)

    def along(self, places: Floats) -> Floats:
        """How far along the edge, anticlockwise from the lower right corner, places (k, 2) on it are."""
        x, y = places[:, 0], places[:, 1]
        a, b = self.half_width, self.half_height
        upright = np.abs(x) * b >= np.abs(y) * a
        sides = np.where(x > 0.0, y + b, 3.0 * b + 2.0 * a - y)
        flat = np.where(y > 0.0, 2.0 * b + a - x, 4.0 * b + 3.0 * a + x)
        distance: Floats = np.where(upright, sides, flat)
        return distance

    def walk(self, start: float, gap: float) -> Floats:
        """The stations passed, in their order, on a way along the edge that begins somewhere on it."""
        ahead = np.mod(self.along(self.stations) - start, self.around)
        passed = np.flatnonzero((ahead > 0.0) & (ahead < gap))
        stations: Floats = self.stations[passed[np.argsort(ahead[passed])]]
        return stations

    def ring(self) -> Floats:
        """The whole edge as a closed ring."""
        order = np.argsort(self.along(self.stations))
        closed: Floats = self.stations[np.append(order, order[0])]
        return closed


GLOBE = Box(
    180.0,
    90.0,
    np.array(
        [[x, y] for x in (180.0, -180.0) for y in (-90.0, 0.0, 90.0)]
        + [[x, y] for x in (-90.0, 0.0, 90.0) for y in (-90.0, 90.0)]
    ),
)
"""The map in longitude and latitude; no step along its edge is as long as half a turn."""


def rejoined(paths: Sequence[Floats], loops: Sequence[Floats], box: Box, may_fill: bool) -> list[Rings]:
    """Polygons of a map from paths (k, 2) that begin and end on its edge, and closed loops within it.

    `may_fill`: where no outer ring is left the whole map is inside, with the loops as holes.
    """
    rings = [*_led_along(paths, box), *loops]
    areas = [signed_area(ring) for ring in rings]
    outer = [ring for ring, area in zip(rings, areas, strict=True) if area > 0.0]
    holes = [ring for ring, area in zip(rings, areas, strict=True) if area < 0.0]
    if not outer and may_fill:
        outer = [box.ring()]
    polygons: list[Rings] = [[ring] for ring in outer]
    for hole in holes if outer else ():
        held = [_held(ring, hole) for ring in outer] if len(outer) > 1 else [1]
        polygons[int(np.argmax(held))].append(hole)
    return polygons


def _led_along(paths: Sequence[Floats], box: Box) -> Iterator[Floats]:
    if not paths:
        return
    begins = box.along(np.array([path[0] for path in paths]))
    ends = box.along(np.array([path[-1] for path in paths]))
    free = np.ones(len(paths), dtype=bool)
    for first in range(len(paths)):
        if not free[first]:
            continue
        at, parts = first, []
        while True:
            free[at] = False
            gap = np.mod(begins - ends[at], box.around)
            # where two edges meet on the map's edge rounding must not send the path all round it
            gap[gap > box.around * (1.0 - 1e-13)] = 0.0
            gap[~free & (np.arange(len(paths)) != first)] = np.inf
            after = int(np.argmin(gap))
            parts += [paths[at], box.walk(float(ends[at]), float(gap[after]))]
            if after == first:
                break
            at = after
        yield _closed(np.concatenate(parts))


def _closed(points: Floats) -> Floats:
    """A closed ring without repeated neighbours."""
    return _thinned(np.concatenate([points, points[:1]]))


def _thinned(points: Floats) -> Floats:
    kept = np.append(True, np.any(points[1:] != points[:-1], axis=1))
    thinned: Floats = points[kept]
    return thinned


def signed_area(ring: Floats) -> float:
    """Twice the area of a closed planar ring (k, 2), above 0 if it runs anticlockwise."""
    x, y = ring[:, 0] - ring[0, 0], ring[:, 1] - ring[0, 1]
    return float(np.sum(x[:-1] * y[1:] - x[1:] * y[:-1]))


def _held(ring: Floats, points: Floats) -> int:
    """How many of some points (k, 2) of a plane are within a closed ring (m, 2)."""
    (x0, y0), (x1, y1) = ring[:-1].T, ring[1:].T
    total = 0
    for x, y in points:
        spans = (y0 <= y) != (y1 <= y)
        rise = (y1 - y0)[spans]
        total += int(np.sum(x0[spans] + (y - y0[spans]) / rise * (x1 - x0)[spans] > x)) % 2
    return total


# ---- the 180th meridian ----


def cut_rings(rings: Sequence[Floats], may_fill: bool, latitudes: Latitudes | None = None) -> list[Rings]:
    """The polygons of a map in longitude and latitude that one polygon of the sphere becomes.

    `rings`: positions (k, 2), longitude first, degrees, not closed, the interior to the left.
    `may_fill`: the polygon is large enough to hold the whole 180th meridian. Longitudes come in
    [-180, 180]; where a meridian ends at a pole the ring follows the map's edge.
    """
    paths: list[Floats] = []
    loops: list[Floats] = []
    for ring in rings:
        points = _over_poles(_rounded(ring), closed=True)
        pieces = _split(np.concatenate([points, points[:1]]), latitudes or Latitudes())
        if len(pieces) == 1:
            loops.append(_closed(points))
            continue
        pieces[0] = _thinned(np.concatenate([pieces.pop(), pieces[0]]))
        paths += pieces
    return rejoined(paths, loops, GLOBE, may_fill)


def cut_line(line: Floats, latitudes: Latitudes | None = None) -> list[Floats]:
    """The lines of a map in longitude and latitude that one line (k, 2) of the sphere becomes."""
    points = _over_poles(_rounded(line), closed=False)
    pieces = _split(points, latitudes or Latitudes())
    return [piece for piece in pieces if len(piece) > 1] or [points[[0, -1]]]


def _rounded(points: Floats) -> Floats:
    points = np.round(points, DECIMALS)
    points[:, 0] = wrap_longitude(points[:, 0])
    return points


def _over_poles(points: Floats, closed: bool) -> Floats:
    """Points with the poles in their way: reached along one longitude, left along another."""
    after = np.roll(points, -1, axis=0)
    straight_over = np.abs(after[:, 0] - points[:, 0]) == 180.0
    if not closed:
        straight_over[-1] = False
    on_pole = np.abs(points[:, 1]) == 90.0
    if not np.any(straight_over | on_pole):
        return points
    made: list[tuple[float, float]] = []
    last = len(points) - 1
    for i, (lon, lat) in enumerate(points.tolist()):
        if on_pole[i]:
            before = points[i - 1, 0] if closed or i else points[min(i + 1, last), 0]
            behind = after[i, 0] if closed or i < last else before
            made += [(before, lat), (behind, lat)]
            continue
        made.append((lon, lat))
        if straight_over[i] and not on_pole[(i + 1) % len(points)]:
            pole = 90.0 if lat + after[i, 1] >= 0.0 else -90.0
            made += [(lon, pole), (float(after[i, 0]), pole)]
    return np.array(made)


def _split(points: Floats, latitudes: Latitudes) -> list[Floats]:
    """Points (k, 2) broken where they cross the 180th meridian; a point on it counts as west of it."""
    step = np.diff(points[:, 0])
    crossing = np.flatnonzero(np.abs(step) > 180.0)
    if not len(crossing):
        return [points]
    p, q = points[crossing], points[crossing + 1]
    level = _crossing_latitudes(p, q, latitudes)
    leaves = np.where(step[crossing] < 0.0, 180.0, -180.0)
    pieces, at, entry = [], 0, np.empty((0, 2))
    for cut, lat, edge in zip(crossing.tolist(), level.tolist(), leaves.tolist(), strict=True):
        pieces.append(_thinned(np.concatenate([entry, points[at : cut + 1], [[edge, lat]]])))
        entry, at = np.array([[-edge, lat]]), cut + 1
    return [*pieces, _thinned(np.concatenate([entry, points[at:]]))]


def _crossing_latitudes(p: Floats, q: Floats, latitudes: Latitudes) -> Floats:
    normal = cross(*(unit_vectors(latitudes.inward(v[:, 1]), v[:, 0]) for v in (p, q)))
    x, z = normal[:, 0], normal[:, 2]
    level = np.rad2deg(np.arctan2(np.where(z < 0.0, -x, x), np.abs(z)))
    level = np.round(latitudes.outward(level), DECIMALS)
    level = np.where(p[:, 0] == -180.0, p[:, 1], np.where(q[:, 0] == -180.0, q[:, 1], level))
    return np.where(np.abs(p[:, 1]) == 90.0, p[:, 1], level)


# ---- cuts along the 180th meridian undone ----


def sewn(polygons: Sequence[Sequence[Floats]]) -> list[list[Floats]]:
    """Polygons joined where they, or the two ends of one, were cut along the 180th meridian.

    Rings (k, 2), longitude first, not closed, the interior to the left. Ways to a pole and back go
    too. Of a joined polygon any ring may be the first, since each has the interior to its left; it is
    that with the least area. Where cuts do not fit each other the polygons stay as they are.
    """
    rings = [(part, ring) for part, polygon in enumerate(polygons) for ring in polygon]
    cuts = [_seam(ring) for _, ring in rings]
    if not any(cut.any() for cut in cuts):
        return [list(polygon) for polygon in polygons]
    undone = _undone([(ring, cut) for (_, ring), cut in zip(rings, cuts, strict=True)])
    unchanged = [list(polygon) for polygon in polygons]
    if undone is None:
        return unchanged
    whole = [(part, ring) for (part, ring), cut in zip(rings, undone, strict=True) if not cut.any()]
    stretches = [
        (part, stretch)
        for (part, ring), cut in zip(rings, undone, strict=True)
        if cut.any()
        for stretch in _between(ring, cut)
    ]
    begins = {float(stretch[0, 1]): number for number, (_, stretch) in enumerate(stretches)}
    if len(begins) < len(stretches) or any(float(s[-1, 1]) not in begins for _, s in stretches):
        return unchanged
    group = list(range(len(polygons)))
    free = set(begins.values())
    while free:
        first = at = min(free)
        parts: list[Floats] = []
        while at in free:
            free.remove(at)
            part, stretch = stretches[at]
            joined, kept = group[part], group[stretches[first][0]]
            group = [kept if number == joined else number for number in group]
            parts.append(stretch[:-1])
            at = begins[float(stretch[-1, 1])]
        whole.append((stretches[first][0], np.concatenate(parts)))
    found: dict[int, list[Floats]] = {}
    for part, ring in whole:
        found.setdefault(group[part], []).append(ring)
    return [_least_first(found[number]) for number in sorted(found)]


def _seam(ring: Floats) -> NDArray[np.bool_]:
    """Which edges (k,) of a ring run along the 180th meridian."""
    on = np.abs(ring[:, 0]) == 180.0
    along: NDArray[np.bool_] = on & np.roll(on, -1)
    return along


def _undone(rings: Sequence[tuple[Floats, NDArray[np.bool_]]]) -> list[NDArray[np.bool_]] | None:
    """Which edges along the meridian have their like the other way; None if some have it in part."""
    levels = np.unique(np.concatenate([ring[np.abs(ring[:, 0]) == 180.0, 1] for ring, _ in rings]))
    up, down = np.zeros(len(levels), dtype=int), np.zeros(len(levels), dtype=int)
    spans = []
    for ring, cut in rings:
        start, end = (
            np.searchsorted(levels, values[cut, 1]) for values in (ring, np.roll(ring, -1, axis=0))
        )
        spans.append((np.minimum(start, end), np.maximum(start, end)))
        for one, other in zip(start.tolist(), end.tolist(), strict=True):
            (up if other > one else down)[min(one, other) : max(one, other)] += 1
    twice = (up == 1) & (down == 1)
    if np.any(up > 1) or np.any(down > 1):
        return None
    undone = []
    for (_, cut), (low, high) in zip(rings, spans, strict=True):
        shares = [float(twice[i:j].mean()) if j > i else 1.0 for i, j in zip(low, high, strict=True)]
        if any(0.0 < share < 1.0 for share in shares):
            return None
        mine = cut.copy()
        mine[cut] = np.array(shares) == 1.0
        undone.append(mine)
    return undone


def _between(ring: Floats, cut: NDArray[np.bool_]) -> Iterator[Floats]:
    """The stretches of a ring between edges that are taken out."""
    first = int(np.flatnonzero(cut)[0]) + 1
    points, cut = np.roll(ring, -first, axis=0), np.roll(cut, -first)
    at = 0
    for end in np.flatnonzero(cut).tolist():
        if end > at:
            yield points[at : end + 1]
        at = end + 1


def _least_first(rings: list[Floats]) -> list[Floats]:
    areas = [Ring.of(ring[:, 1], ring[:, 0]).area_sr() for ring in rings]
    least = int(np.argmin(areas))
    return [rings[least], *rings[:least], *rings[least + 1 :]]


# ---- gnomonic views, in which great circles are straight ----


@dataclass(frozen=True, eq=False)
class View:
    """A square window of the gnomonic map: `right`, `up`, `middle` (3,), unit vectors at right angles.

    It shows what lies within `half_width` of the middle along both axes (1: 45 degrees).
    """

    right: Floats
    up: Floats
    middle: Floats
    half_width: float

    @classmethod
    def of(cls, *polygons: Polygon) -> View | None:
        """A view that holds polygons whole; None if they are too large for one."""
        v = np.concatenate([polygon.rings[0].vectors() for polygon in polygons])
        total = v.sum(axis=0)
        size = float(np.linalg.norm(total))
        half = 2.0 * np.pi
        if size < 1e-6 * len(v) or any(polygon.rings[0].area_sr() > half for polygon in polygons):
            return None
        middle = total / size
        if float(dot(v, middle).min()) < WIDEST_VIEW:
            return None
        right = np.cross(middle, np.eye(3)[int(np.argmin(np.abs(middle)))])
        right /= np.linalg.norm(right)
        view = cls(right, np.cross(middle, right), middle, 1.0)
        reach = float(np.abs(view.plane(v)).max())
        return cls(view.right, view.up, view.middle, 1.01 * reach + 1e-9)

    def axes(self, vectors: Floats) -> Floats:
        """Vectors (k, 3) along the view's own axes, by the same sums wherever they stand."""
        return np.stack([dot(vectors, axis) for axis in (self.right, self.up, self.middle)], axis=-1)

    def plane(self, vectors: Floats) -> Floats:
        """Places (k, 2) on the map of unit vectors (k, 3) of the hemisphere round the middle."""
        own = self.axes(vectors)
        return own[:, :2] / own[:, 2:]

    def sphere(self, places: Floats) -> Floats:
        """Unit vectors (k, 3) of places (k, 2) on the map."""
        v = places[:, :1] * self.right + places[:, 1:] * self.up + self.middle
        return v / length(v)[:, np.newaxis]

    def clip(self, polygon: Polygon) -> list[Rings]:
        """What the window shows of a polygon."""
        paths: list[Floats] = []
        loops: list[Floats] = []
        for ring in polygon.rings:
            own = self.axes(ring.vectors())
            depth = self.half_width * own[:, 2:] + own[:, [0, 0, 1, 1]] * [1.0, -1.0, 1.0, -1.0]
            if np.all(depth >= 0.0):
                loops.append(_closed(own[:, :2] / own[:, 2:]))
            else:
                paths += _seen(own, depth)
        a = self.half_width
        box = Box(a, a, np.array([[a, -a], [a, a], [-a, a], [-a, -a]]))
        return rejoined(paths, loops, box, bool(loops) or self._middle_is_inside(polygon))

    def _middle_is_inside(self, polygon: Polygon) -> bool:
        lat, lon = lat_lon(self.middle[np.newaxis])
        return bool(SortedPoints(lat, lon).inside(polygon)[0])

    def region(self, polygons: Sequence[Polygon]) -> Any:
        """What the window shows of polygons, joined, as a valid shapely geometry of the plane."""
        import shapely

        shown = []
        for polygon in polygons:
            flat = [shapely.Polygon(rings[0], rings[1:]) for rings in self.clip(polygon)]
            one = shapely.MultiPolygon(flat)
            shown.append(one if shapely.is_valid(one) else areal(shapely.make_valid(one)))
        return shown[0] if len(shown) == 1 else areal(shapely.union_all(shown))


def areal(shape: Any) -> Any:
    """The polygons of a shapely geometry, without the lines and points that overlays leave."""
    import shapely

    if shape.geom_type in {"Polygon", "MultiPolygon"}:
        return shape
    members = shapely.get_parts(shape)
    flat = [part for member in members for part in shapely.get_parts(member)]
    return shapely.MultiPolygon([part for part in flat if part.geom_type == "Polygon"])


def _seen(own: Floats, depth: Floats) -> list[Floats]:
    """The stretches of a closed ring within a window, each from edge to edge, in the plane.

    `depth` (k, 4): how far inside each side the vertices are, linear along every edge's chord.
    """
    after, deep = np.roll(own, -1, axis=0), np.roll(depth, -1, axis=0)
    with np.errstate(divide="ignore", invalid="ignore"):
        fraction = depth / (depth - deep)
    enter = np.where((depth < 0.0) & (deep >= 0.0), fraction, 0.0).max(axis=1)
    leave = np.where((depth >= 0.0) & (deep < 0.0), fraction, 1.0).min(axis=1)
    seen = (enter < leave) & ~np.any((depth < 0.0) & (deep < 0.0), axis=1)
    goes_on = seen & (leave == 1.0) & np.roll(seen & (enter == 0.0), -1)
    begins = seen & ~np.roll(goes_on, 1)
    stretches = []
    count = len(own)
    for first in np.flatnonzero(begins).tolist():
        edge, points = first, [own[first] + enter[first] * (after[first] - own[first])]
        while goes_on[edge]:
            points.append(after[edge])
            edge = (edge + 1) % count
        # at a vertex on the side itself the vertex is the end, to the last bit
        end = own[edge] + leave[edge] * (after[edge] - own[edge])
        points.append(after[edge] if leave[edge] == 1.0 else end)
        stretch = np.array(points)
        stretches.append(_thinned(stretch[:, :2] / stretch[:, 2:]))
    return stretches


def cube() -> list[View]:
    """Six views that show the whole sphere, each place once; turned so as not to lie along anything."""
    from restore.geometry import so3

    turn = so3.matrices(so3.exponential(np.array([0.31, -0.57, 0.83])))
    views = []
    for i in range(3):
        for sign in (1.0, -1.0):
            middle, right = sign * turn[i], turn[(i + 1) % 3]
            views.append(View(right, np.cross(middle, right), middle, 1.0))
    return views
