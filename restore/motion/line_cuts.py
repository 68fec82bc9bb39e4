"""Lines and polygons on their way to plates: read from features, and cut along outlines.

Lines are split where they cross an outline's edge, polygons in gnomonic views, where great circles
are straight and planar overlays are exact. A vertex that no cut made keeps its digits.
"""

from __future__ import annotations

from collections.abc import Iterator, Mapping, Sequence
from dataclasses import dataclass
from functools import cached_property
from typing import Any

import numpy as np
from numpy.typing import NDArray

from restore.errors import InputError
from restore.files.vectors import DEPTH, Feature
from restore.geometry.arcs import crossings, near_pairs
from restore.geometry.clipping import View, areal, cube, sewn
from restore.geometry.latitudes import Latitudes
from restore.geometry.polygons import Polygon, Ring, SortedPoints
from restore.geometry.sphere import Floats, cross, lat_lon, length, unit_vectors, wrap_longitude
from restore.outlines import Outlines

SAME_PLACE = 1e-13
"""Radians (a micrometre): neighbouring vertices as near as this are one."""
BESIDE = 1e-10
"""Radians (0.6 mm): a line along an outline's edge is on the plate that far to its left."""
SLIVER_SR = 1e-13
"""Steradians (4 m2): smaller overlaps are rounding."""


@dataclass(frozen=True, eq=False)
class Path:
    """Vertices in order, degrees `(n,)`, as the user has them; a ring's last is joined to its first."""

    lat_deg: Floats
    lon_deg: Floats

    def __len__(self) -> int:
        return len(self.lat_deg)

    def vectors(self, latitudes: Latitudes) -> Floats:
        """Unit vectors (n, 3)."""
        return unit_vectors(latitudes.inward(self.lat_deg), self.lon_deg)

    def ring(self, latitudes: Latitudes) -> Ring:
        """The path as a ring of the sphere."""
        return Ring(latitudes.inward(self.lat_deg), wrap_longitude(self.lon_deg))

    def reversed(self) -> Path:
        """The other way round."""
        return Path(self.lat_deg[::-1], self.lon_deg[::-1])


@dataclass(frozen=True, eq=False)
class Shape:
    """The geometry of a feature or of a piece of one.

    `dimension`: 0 for points, 1 for lines, 2 for polygons. `parts`: one path with all points, or one
    per line, or for each polygon its rings, the outer one first. `many`: written as Multi... even if
    there is one.
    """

    dimension: int
    parts: tuple[tuple[Path, ...], ...]
    many: bool

    def paths(self) -> Iterator[Path]:
        """All paths, in order."""
        for part in self.parts:
            yield from part


# ---- features to shapes ----


def shape_of(feature: Feature, latitudes: Latitudes, edges: str, longest_deg: float) -> Shape | None:
    """The shape of a feature, None if it has no geometry.

    Straight edges are densified here, in longitude and latitude. Heights are left out. Raises
    InputError naming the feature if a line has no two positions or a ring is not closed or too short.
    """
    geometry = feature.geometry
    if geometry is None or not geometry["coordinates"]:
        return None
    kind, coordinates = geometry["type"], geometry["coordinates"]
    many = kind.startswith("Multi")
    dimension = DEPTH[kind] - many
    members = coordinates if many else [coordinates]
    straight = longest_deg if edges == "straight" else 0.0
    if dimension == 0:
        return Shape(0, ((_path(members),),), many)
    if dimension == 1:
        lines = (_line(feature, member, straight) for member in members)
        shape = Shape(1, tuple((line,) for line in lines), many)
    else:
        rings = sewn([_rings(feature, member) for member in members])
        polygons = (_polygon(feature, member, latitudes, straight) for member in rings)
        shape = Shape(2, tuple(polygons), many)
    for path in shape.paths():
        _refuse_half_turns(feature, path, latitudes, closed=dimension == 2)
    return shape


def _refuse_half_turns(feature: Feature, path: Path, latitudes: Latitudes, closed: bool) -> None:
    """Raise InputError if two neighbours are antipodes: any great circle joins them."""
    places = path.vectors(latitudes)
    sums = length(places + np.roll(places, -1, axis=0))
    opposite = np.flatnonzero((sums if closed else sums[:-1]) < 1e-9)
    if len(opposite):
        at = int(opposite[0])
        raise InputError(
            f"{feature}: the edge from {path.lon_deg[at]:g}, {path.lat_deg[at]:g} is half a great circle;"
            " put a vertex on it"
        )


def _path(positions: Sequence[Sequence[float]]) -> Path:
    where = np.array([position[:2] for position in positions], dtype=np.float64).reshape(-1, 2)
    return Path(where[:, 1], where[:, 0])


def _line(feature: Feature, positions: Sequence[Sequence[float]], straight: float) -> Path:
    if len(positions) < 2:
        raise InputError(f"{feature}: a line of {len(positions)} positions; it needs two")
    path = _path(positions)
    return _stepped(path, straight) if straight else path


def _stepped(path: Path, longest_deg: float) -> Path:
    """Vertices along edges that are straight in longitude and latitude, each step short enough."""
    lat, lon = path.lat_deg, path.lon_deg
    pieces = np.ceil(np.maximum(np.abs(np.diff(lat)), np.abs(np.diff(lon))) / longest_deg)
    pieces = np.append(np.maximum(pieces, 1), 1).astype(np.int64)
    owner = np.repeat(np.arange(len(lat)), pieces)
    fraction = (np.arange(len(owner)) - np.repeat(np.cumsum(pieces) - pieces, pieces)) / pieces[owner]
    steps = (np.append(np.diff(values), 0.0)[owner] * fraction for values in (lat, lon))
    return Path(*(values[owner] + step for values, step in zip((lat, lon), steps, strict=True)))


def _rings(feature: Feature, rings: Sequence[Any]) -> list[Floats]:
    """A polygon's rings, longitude first, without the last positions, which repeat the first ones."""
    if not rings:
        raise InputError(f"{feature}: a polygon without a ring")
    made = []
    for number, positions in enumerate(rings, start=1):
        places = np.array([position[:2] for position in positions], dtype=np.float64).reshape(-1, 2)
        if len(places) and not np.array_equal(places[0], places[-1]):
            raise InputError(f"{feature}: ring {number} is not closed; its last position repeats its first")
        made.append(places[:-1])
    return made


def _polygon(
    feature: Feature, rings: Sequence[Floats], latitudes: Latitudes, straight: float
) -> tuple[Path, ...]:
    paths = []
    for number, places in enumerate(rings, start=1):
        path = Path(places[:, 1], places[:, 0])
        if straight and len(path):
            path = _stepped(Path(*(np.append(v, v[0]) for v in (path.lat_deg, path.lon_deg))), straight)
            path = Path(path.lat_deg[:-1], path.lon_deg[:-1])
        thinned = _thinned(path, latitudes)
        if len(thinned) < 3:
            raise InputError(
                f"{feature}: ring {number} has {len(thinned)} different vertices; it needs three"
            )
        paths.append(thinned)
    return (paths[0], *_holes(paths, latitudes))


def _holes(paths: list[Path], latitudes: Latitudes) -> Iterator[Path]:
    """Holes turned so that the polygon is to their left: none is larger than the polygon itself."""
    if len(paths) == 1:
        return
    area = paths[0].ring(latitudes).area_sr()
    for path in paths[1:]:
        too_large = path.reversed().ring(latitudes).area_sr() > area
        yield path.reversed() if too_large else path


def _thinned(path: Path, latitudes: Latitudes) -> Path:
    """A ring without repeated neighbours."""
    places = path.vectors(latitudes)
    apart = length(places - np.roll(places, 1, axis=0)) > SAME_PLACE
    return path if np.all(apart) else Path(path.lat_deg[apart], path.lon_deg[apart])


# ---- shapes cut along outlines ----

Cut = list[tuple[int, Shape | None]]
"""Numbers of outlines and what of a shape is on each; -1: on none."""


class Cutter:
    """Outlines made ready to cut shapes along them."""

    def __init__(self, outlines: Outlines, latitudes: Latitudes) -> None:
        self.outlines = outlines
        self.latitudes = latitudes
        self.polygons = [_uncut(outline.polygons) for outline in outlines.outlines]
        rings = [
            (number, ring)
            for number, polygons in enumerate(self.polygons)
            for polygon in polygons
            for ring in polygon.rings
        ]
        starts = [ring.vectors() for _, ring in rings]
        self.start = np.concatenate(starts)
        self.end = np.concatenate([np.roll(v, -1, axis=0) for v in starts])
        self.owner = np.repeat([number for number, _ in rings], [len(v) for v in starts])
        self.ring_owner = np.array([number for number, _ in rings])
        self.firsts = SortedPoints(
            np.array([ring.lat_deg[0] for _, ring in rings]),
            np.array([ring.lon_deg[0] for _, ring in rings]),
        )

    def cut(self, shapes: Sequence[Shape]) -> list[Cut]:
        """Each shape's pieces: along a line in its order, of points and polygons by outline."""
        lines = iter(self._lines([path for s in shapes if s.dimension == 1 for path in s.paths()]))
        rings = [part for s in shapes if s.dimension == 2 for part in s.parts]
        polygons = iter(self._polygons(rings))
        cuts: list[Cut] = []
        for shape in shapes:
            if shape.dimension == 0:
                cuts.append(self._points(shape))
            elif shape.dimension == 1:
                pieces = [piece for _ in shape.parts for piece in next(lines)]
                cuts.append([(number, Shape(1, ((path,),), False)) for number, path in pieces])
            else:
                cuts.append(_by_outline([next(polygons) for _ in shape.parts], shape.many))
        return cuts

    def _outlines_at(self, vectors: Floats) -> NDArray[np.int64]:
        lat, lon = lat_lon(vectors)
        return self.outlines.plate_at(self.outlines.latitudes.outward(lat), lon).outline

    def _points(self, shape: Shape) -> Cut:
        path = shape.parts[0][0]
        found = self._outlines_at(path.vectors(self.latitudes))
        cut: Cut = []
        for number in dict.fromkeys(found.tolist()):
            here = found == number
            some = Path(path.lat_deg[here], path.lon_deg[here])
            cut.append((number, Shape(0, ((some,),), shape.many)))
        return cut

    def _lines(self, paths: Sequence[Path]) -> list[list[tuple[int, Path]]]:
        """Each line's stretches, in its order, with the outline that each is on."""
        if not paths:
            return []
        line = _Cuts.of(paths, self.latitudes).with_crossings(self.start, self.end)
        arcs = np.flatnonzero(line.path[:-1] == line.path[1:])
        a, b = line.places[arcs], line.places[arcs + 1]
        left = cross(a, b)
        size = length(left)[:, np.newaxis]
        left = np.divide(left, size, out=np.zeros_like(left), where=size > 0.0)
        found = np.full(len(line.path), -2)
        found[arcs] = self._outlines_at(a + b + 2.0 * BESIDE * left)
        still = arcs[size[:, 0] <= SAME_PLACE]
        for arc in still.tolist():
            if arc and line.path[arc - 1] == line.path[arc]:
                found[arc] = found[arc - 1]
        return line.stretches(found, len(paths))

    def _polygons(self, parts: Sequence[tuple[Path, ...]]) -> list[list[tuple[int, tuple[Path, ...]]]]:
        """For each polygon the outlines and the polygons on them; -1 with no path for what is on none."""
        if not parts:
            return []
        near = self._near(parts)
        first = np.concatenate([rings[0].vectors(self.latitudes)[:1] for rings in parts])
        on = self._outlines_at(first).tolist()
        holding = self._holding(first)
        pieces = []
        for number, rings in enumerate(parts):
            polygon = Polygon.of(tuple(path.ring(self.latitudes) for path in rings))
            within = self.ring_owner[self.firsts.unsorted(self.firsts.inside(polygon)).astype(bool)]
            crossed = near[number] | set(within.tolist())
            if not crossed:
                pieces.append([(on[number], rings)])
                continue
            candidates = crossed | set(np.flatnonzero(holding[number]).tolist())
            pieces.append(_PolygonCut(polygon, rings, self).along(candidates))
        return pieces

    def _near(self, parts: Sequence[tuple[Path, ...]]) -> list[set[int]]:
        starts = [path.vectors(self.latitudes) for rings in parts for path in rings]
        counts = [sum(len(path) for path in rings) for rings in parts]
        a, b = np.concatenate(starts), np.concatenate([np.roll(v, -1, axis=0) for v in starts])
        arcs, edges = near_pairs(a, b, self.start, self.end)
        part_of = np.repeat(np.arange(len(parts)), counts)
        near: list[set[int]] = [set() for _ in parts]
        pairs = np.unique(np.stack([part_of[arcs], self.owner[edges]]), axis=1)
        for part, outline in pairs.T.tolist():
            near[part].add(outline)
        return near

    def _holding(self, places: Floats) -> NDArray[np.bool_]:
        """Which outlines hold each of some places, whatever their ranks: (places, outlines)."""
        points = SortedPoints(*lat_lon(places))
        held = np.zeros((len(points), len(self.polygons)), dtype=bool)
        for number, polygons in enumerate(self.polygons):
            for polygon in polygons:
                held[:, number] |= points.unsorted(points.inside(polygon)).astype(bool)
        return held


def _uncut(polygons: Sequence[Polygon]) -> tuple[Polygon, ...]:
    """An outline's polygons without the edges along which they were cut for a map."""
    parts = [[np.stack([r.lon_deg, r.lat_deg], axis=-1) for r in polygon.rings] for polygon in polygons]
    joined = sewn(parts)
    return tuple(Polygon.of(tuple(Ring.of(r[:, 1], r[:, 0]) for r in rings)) for rings in joined)


def _by_outline(parts: Sequence[list[tuple[int, tuple[Path, ...]]]], many: bool) -> Cut:
    found: dict[int, list[tuple[Path, ...]]] = {}
    for part in parts:
        for number, rings in part:
            found.setdefault(number, []).append(rings)
    order = sorted(found, key=lambda number: (number < 0, number))
    return [(n, Shape(2, tuple(found[n]), many) if all(found[n]) else None) for n in order]


@dataclass(frozen=True, eq=False)
class _Cuts:
    """The vertices of several lines in one run: degrees, unit vectors, the line that each is of.

    `made` (n,): vertices that are crossings with an outline.
    """

    lat_deg: Floats
    lon_deg: Floats
    places: Floats
    path: NDArray[np.int64]
    made: NDArray[np.bool_]
    latitudes: Latitudes

    @classmethod
    def of(cls, paths: Sequence[Path], latitudes: Latitudes) -> _Cuts:
        lat = np.concatenate([path.lat_deg for path in paths])
        lon = np.concatenate([path.lon_deg for path in paths])
        number = np.repeat(np.arange(len(paths)), [len(path) for path in paths])
        places = unit_vectors(latitudes.inward(lat), lon)
        return cls(lat, lon, places, number, np.zeros(len(lat), dtype=bool), latitudes)

    def with_crossings(self, start: Floats, end: Floats) -> _Cuts:
        """The same with a vertex wherever a line crosses one of the edges start-end (m, 3)."""
        arcs = np.flatnonzero(self.path[:-1] == self.path[1:])
        a, b = self.places[arcs], self.places[arcs + 1]
        one, edge = near_pairs(a, b, start, end)
        parted, place = crossings(a[one], b[one], start[edge], end[edge])
        vertex, place = arcs[one[parted]], place[parted]
        along = length(place - self.places[vertex])
        owner = np.concatenate([np.arange(len(self.path)), vertex])
        order = np.lexsort((np.concatenate([np.full(len(self.path), -1.0), along]), owner))
        lat, lon = lat_lon(place)
        places = np.concatenate([self.places, place])[order]
        made = order >= len(self.path)
        step = length(np.diff(places, axis=0)) > 1e-12
        # a crossing at a vertex, or at another crossing, is no further vertex
        kept = ~made | np.append(True, step)
        kept &= ~(made & np.append(~step & ~made[1:], False))
        order = order[kept]
        return _Cuts(
            np.concatenate([self.lat_deg, self.latitudes.outward(lat)])[order],
            np.concatenate([self.lon_deg, lon])[order],
            places[kept],
            self.path[owner[order]],
            made[kept],
            self.latitudes,
        )

    def stretches(self, found: NDArray[np.int64], paths: int) -> list[list[tuple[int, Path]]]:
        """Each line's stretches of arcs of one number; `found` (n,): of the arc that begins there."""
        result: list[list[tuple[int, Path]]] = [[] for _ in range(paths)]
        new = np.append(True, (found[1:] != found[:-1]) | (self.path[1:] != self.path[:-1]))
        begins = np.flatnonzero(new)
        for begin, after in zip(begins.tolist(), np.append(begins[1:], len(found)).tolist(), strict=True):
            if found[begin] > -2:
                run = np.arange(begin, after + 1)
                # a crossing after which the plate is the same is none that shows
                run = run[~self.made[run] | (run == begin) | (run == after)]
                number = int(self.path[begin])
                result[number].append((int(found[begin]), Path(self.lat_deg[run], self.lon_deg[run])))
        return result


class _PolygonCut:
    """One polygon on its way to pieces."""

    def __init__(self, polygon: Polygon, rings: tuple[Path, ...], cutter: Cutter) -> None:
        self.polygon = polygon
        self.rings = rings
        self.ranks = [outline.rank for outline in cutter.outlines.outlines]
        self.outlines = cutter.polygons
        self.latitudes = cutter.latitudes
        self.whole = View.of(polygon)
        self.places = np.concatenate([path.vectors(cutter.latitudes) for path in rings])
        self.lat = np.concatenate([path.lat_deg for path in rings])
        self.lon = np.concatenate([path.lon_deg for path in rings])
        self.regions: dict[tuple[int, tuple[int, ...]], Any] = {}

    def along(self, candidates: set[int]) -> list[tuple[int, tuple[Path, ...]]]:
        """The outlines and the polygons on them, and -1 without a path if something is on none."""
        ranked = sorted(candidates, key=lambda number: (self.ranks[number], number))
        pieces: list[tuple[int, tuple[Path, ...]]] = []
        for at, number in enumerate(ranked):
            for polygons, views in self._views(self.outlines[number]):
                for view in views:
                    pieces += [(number, p) for p in self._within(view, polygons, ranked[:at])]
        area = self.polygon.area_sr()
        lost = area - sum(
            Polygon.of(tuple(path.ring(self.latitudes) for path in piece)).area_sr() for _, piece in pieces
        )
        rounding = 1e-15 * (len(self.places) + sum(len(piece[0]) for _, piece in pieces))
        return [*pieces, (-1, ())] if lost > 1e-9 * area + rounding else pieces

    def _views(self, polygons: tuple[Polygon, ...]) -> Iterator[tuple[tuple[Polygon, ...], list[View]]]:
        """Polygons of an outline, as many together as can be, and views that show each shared place once."""
        together = self.whole or View.of(*polygons)
        if together is not None:
            yield polygons, [together]
            return
        for polygon in polygons:
            one = View.of(polygon)
            yield (polygon,), self._six if one is None else [one]

    @cached_property
    def _six(self) -> list[View]:
        return cube()

    def _region(self, view: View, polygons: tuple[Polygon, ...]) -> Any:
        key = (id(view), tuple(map(id, polygons)))
        if key not in self.regions:
            # the view stands beside its region, so that its id is not given to another
            self.regions[key] = (view, view.region(polygons))
        return self.regions[key][1]

    def _within(
        self, view: View, polygons: tuple[Polygon, ...], better: Sequence[int]
    ) -> Iterator[tuple[Path, ...]]:
        import shapely

        own = self._region(view, (self.polygon,))
        least = min(SLIVER_SR, 1e-9 * own.area)
        shared = areal(shapely.intersection(own, self._region(view, polygons)))
        for number in better:
            if shared.area > least:
                taken = self._region(view, self.outlines[number])
                if shapely.intersection(shared, taken).area > least:
                    shared = areal(shapely.difference(shared, taken))
        if shared.area <= least:
            return
        digits = self._digits(view)
        for one in shapely.get_parts(shared):
            if one.area > least:
                facing = shapely.geometry.polygon.orient(one)
                rings = (facing.exterior, *facing.interiors)
                yield tuple(self._path(view, shapely.get_coordinates(r)[:-1], digits) for r in rings)

    def _digits(self, view: View) -> Mapping[tuple[float, float], int]:
        """The polygon's own vertices by their place in a view."""
        ahead = np.flatnonzero(view.axes(self.places)[:, 2] > 0.0)
        return dict(zip(map(tuple, view.plane(self.places[ahead]).tolist()), ahead.tolist(), strict=True))

    def _path(self, view: View, places: Floats, digits: Mapping[tuple[float, float], int]) -> Path:
        lat, lon = lat_lon(view.sphere(places))
        lat = np.array(self.latitudes.outward(lat))
        own = np.array([digits.get((x, y), -1) for x, y in places.tolist()])
        kept = own >= 0
        lat[kept], lon[kept] = self.lat[own[kept]], self.lon[own[kept]]
        return Path(lat, lon)
