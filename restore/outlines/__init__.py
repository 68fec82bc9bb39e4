"""Outlines: the plates' polygons on today's sphere, and which of them a point is on."""

from __future__ import annotations

import math
import os
from collections.abc import Mapping, Sequence
from dataclasses import dataclass, field
from itertools import pairwise
from typing import Any

import numpy as np
from numpy.typing import NDArray

from restore.errors import InputError
from restore.files.vectors import Feature, read_features
from restore.findings import did_you_mean
from restore.geometry.latitudes import Latitudes
from restore.geometry.polygons import Polygon, Ring, SortedPoints, densified
from restore.geometry.sphere import EARTH_RADIUS_KM, Floats, angular_distance, cross, length

EDGES = ("great-circle", "straight")
STRAIGHT_WITHIN_KM = 0.01
ANTIPODES = 1e-10
ON_ONE_CIRCLE = 1e-14


@dataclass(frozen=True, eq=False)
class Outline:
    """A plate's outline: its polygons and the ages, Ma, between which the plate is there.

    `rank`: where outlines overlap the lowest is taken, among equals the first in the file.
    `number`: of the feature in the file, from 1; `repeated`: neighbouring vertices there that are one.
    """

    plate: str
    polygons: tuple[Polygon, ...]
    oldest_ma: float = math.inf
    youngest_ma: float = 0.0
    rank: int = 0
    number: int = 0
    repeated: int = 0

    def area_sr(self) -> float:
        """Area in steradians."""
        return sum(polygon.area_sr() for polygon in self.polygons)


@dataclass(frozen=True, eq=False)
class Assigned:
    """Which outline each point `(n,)` is on: its number in `outlines`, -1 for none.

    `overlaps` (n,): how many outlines of the same rank hold the point besides. `distance_km` (n,): 0
    inside, else the distance to the outline that was taken because it is near.
    """

    outline: NDArray[np.int64]
    overlaps: NDArray[np.int64]
    distance_km: Floats


@dataclass(frozen=True, eq=False)
class Outlines:
    """Outlines of plates, with how their edges and latitudes were understood."""

    outlines: tuple[Outline, ...]
    file: str = ""
    edges: str = "great-circle"
    latitudes: Latitudes = field(default_factory=Latitudes)

    @classmethod
    def read(
        cls,
        path: str | os.PathLike[str],
        plate_property: str = "plate",
        edges: str = "great-circle",
        latitudes: str = "as-given",
    ) -> Outlines:
        """Read outlines from GeoJSON, or with the extra `gis` from other vector files.

        `plate_property`: the property that holds the label; `oldest_ma`, `youngest_ma` and `rank` are
        read if they are there. `edges`: `great-circle`, or `straight` in longitude and latitude (RFC
        7946; they are densified to within 10 m). Rings have their interior on the left, as RFC 7946
        asks of outer rings. Raises InputError naming the feature at fault.
        """
        if edges not in EDGES:
            raise InputError(f"edges = {edges!r}: must be one of {', '.join(EDGES)}")
        kind = Latitudes(latitudes)
        features = read_features(path)
        outlines = [_outline(feature, plate_property, edges, kind) for feature in features]
        if not outlines:
            raise InputError(f"{os.fspath(path)}: holds no feature; outlines need at least one polygon")
        return cls(tuple(outlines), os.fspath(path), edges, kind)

    def plates(self) -> list[str]:
        """The labels, each once, in the order of the file."""
        return list(dict.fromkeys(outline.plate for outline in self.outlines))

    def plate_at(self, lat_deg: Floats, lon_deg: Floats, within_km: float = 0.0) -> Assigned:
        """The outline on which each of today's points (degrees, `(n,)`) lies.

        Exact on the sphere; a point on an edge or vertex that outlines share is on exactly one. Points
        on none go to the nearest outline within `within_km`. A point of which a coordinate is NaN, or
        a latitude beyond the poles, is on none.
        """
        given = np.asarray(lat_deg, dtype=np.float64)
        lat = self.latitudes.inward(np.where(np.abs(given) <= 90.0, given, np.nan))
        points = SortedPoints(lat, lon_deg)
        best = np.full(len(points), -1, dtype=np.int64)
        rank = np.full(len(points), np.iinfo(np.int64).max)
        overlaps = np.zeros(len(points), dtype=np.int64)
        for number, outline in enumerate(self.outlines):
            held = np.zeros(len(points), dtype=bool)
            for polygon in outline.polygons:
                held |= points.inside(polygon)
            overlaps += held & (rank == outline.rank)
            better = held & (outline.rank < rank)
            overlaps[better] = 0
            best[better], rank[better] = number, outline.rank
        outline_ = points.unsorted(best).astype(np.int64)
        distance = np.where(outline_ >= 0, 0.0, np.nan)
        if within_km > 0.0:
            self._to_nearest(lat, np.asarray(lon_deg, float), outline_, distance, within_km)
        return Assigned(outline_, points.unsorted(overlaps).astype(np.int64), distance)

    def _to_nearest(
        self, lat: Floats, lon: Floats, outline: NDArray[np.int64], distance: Floats, within_km: float
    ) -> None:
        from restore.geometry.arcs import nearest_on_edges
        from restore.geometry.sphere import unit_vectors

        lost = np.flatnonzero((outline < 0) & np.isfinite(lat) & np.isfinite(lon))
        if not len(lost):
            return
        places = unit_vectors(lat[lost], lon[lost])
        least = np.full(len(lost), np.inf)
        owner = np.full(len(lost), -1, dtype=np.int64)
        for number, one in enumerate(self.outlines):
            for polygon in one.polygons:
                for ring in polygon.rings:
                    v = ring.vectors()
                    some = _within_reach(places, v, within_km / EARTH_RADIUS_KM)
                    away = nearest_on_edges(places[some], v, closed=True) * EARTH_RADIUS_KM
                    nearer = away < least[some]
                    least[some[nearer]], owner[some[nearer]] = away[nearer], number
        near = least <= within_km
        outline[lost[near]] = owner[near]
        distance[lost[near]] = least[near]

    def lifetimes(self, outline: NDArray[np.int64]) -> tuple[Floats, Floats]:
        """(youngest, oldest) ages, Ma, of outlines by number; 0 and infinity where there is none."""
        young = np.array([*(o.youngest_ma for o in self.outlines), 0.0])
        old = np.array([*(o.oldest_ma for o in self.outlines), math.inf])
        return young[outline], old[outline]


def _within_reach(places: Floats, ring: Floats, reach: float) -> NDArray[np.int64]:
    """Numbers of the places (n, 3) that may lie within `reach` (radians) of a ring (m, 3): near its cap."""
    centre = np.asarray(ring.sum(axis=0))
    radius = float(angular_distance(ring, centre).max())
    if radius > 1.5:  # a cap smaller than a hemisphere holds the arcs between its places
        return np.arange(len(places))
    return np.flatnonzero(angular_distance(places, centre) <= radius + reach + 1e-9)


def _outline(feature: Feature, plate_property: str, edges: str, latitudes: Latitudes) -> Outline:
    properties = _with_short_names(feature)
    label = _label(feature, plate_property)
    geometry = feature.geometry
    kind = None if geometry is None else geometry["type"]
    if geometry is None or kind not in {"Polygon", "MultiPolygon"}:
        raise InputError(f"{feature}: geometry {kind!r}: an outline is a Polygon or a MultiPolygon")
    parts = geometry["coordinates"] if kind == "MultiPolygon" else [geometry["coordinates"]]
    if not parts:
        raise InputError(f"{feature}: a {kind} without a polygon")
    polygons = tuple(_polygon(feature, part, edges, latitudes) for part in parts)
    repeated = sum(
        list(one[:2]) == list(other[:2]) for part in parts for ring in part for one, other in pairwise(ring)
    )
    rank = _rank(feature, properties)
    oldest = _age(feature, properties, "oldest_ma", math.inf)
    youngest = _age(feature, properties, "youngest_ma", 0.0)
    if youngest > oldest:
        raise InputError(f"{feature}: youngest_ma = {youngest:g} is above oldest_ma = {oldest:g}")
    return Outline(label, polygons, oldest, youngest, rank, feature.number, repeated)


def _with_short_names(feature: Feature) -> Mapping[str, Any]:
    """The properties, with `youngest_ma` by its full name: a Shapefile's names have ten letters."""
    properties = dict(feature.properties)
    if feature.file.lower().endswith(".shp") and "youngest_m" in properties:
        properties.setdefault("youngest_ma", properties["youngest_m"])
    return properties


def _label(feature: Feature, plate_property: str) -> str:
    label = feature.properties.get(plate_property)
    if isinstance(label, (float, np.floating)) and float(label).is_integer():
        label = int(label)  # where other features have none, tables keep whole numbers as floats
    if label is None or str(label).strip() == "":
        hint = did_you_mean(plate_property, map(str, feature.properties)) if label is None else ""
        said = "has no property" if label is None else "has an empty property"
        raise InputError(f"{feature}: {said} {plate_property!r}; {hint}".rstrip("; "))
    if isinstance(label, (dict, list, tuple, bool)):
        raise InputError(f"{feature}: {plate_property} = {label!r}: a plate's label is a text")
    return str(label).strip()


def _rank(feature: Feature, properties: Mapping[str, Any]) -> int:
    rank = properties.get("rank")
    if rank is None:
        return 0
    whole = isinstance(rank, (int, float, np.integer, np.floating)) and float(rank).is_integer()
    if not whole or isinstance(rank, bool):
        raise InputError(f"{feature}: rank = {rank!r}: must be a whole number")
    return int(rank)


def _age(feature: Feature, properties: Mapping[str, Any], name: str, default: float) -> float:
    value = properties.get(name)
    if value is None:
        return default
    try:
        age = float(value)
    except (TypeError, ValueError):
        raise InputError(f"{feature}: {name} = {value!r} is not a number") from None
    if not age >= 0.0:
        raise InputError(f"{feature}: {name} = {value!r}: an age is in Ma, positive into the past")
    return age


def _polygon(feature: Feature, rings: Sequence[Any], edges: str, latitudes: Latitudes) -> Polygon:
    made = []
    for number, ring in enumerate(rings, start=1):
        where = np.array([position[:2] for position in ring], dtype=np.float64).reshape(-1, 2)
        if len(where) and not np.array_equal(where[0], where[-1]):
            raise InputError(f"{feature}: ring {number} is not closed; its last position repeats its first")
        lon, lat = where[:-1, 0], where[:-1, 1]
        if edges == "straight" and len(lat):
            lat, lon = densified(lat, lon, STRAIGHT_WITHIN_KM, EARTH_RADIUS_KM)
        one = Ring.of(latitudes.inward(lat), lon)
        if len(one) < 3:
            raise InputError(f"{feature}: ring {number} has {len(one)} different vertices; it needs three")
        _check_ring(feature, number, one)
        made.append(one)
    if not made:
        raise InputError(f"{feature}: a polygon without a ring")
    return Polygon.of(tuple(made))


def _check_ring(feature: Feature, number: int, ring: Ring) -> None:
    """Raise InputError for edges that have no one course and for rings that hold no area."""
    v = ring.vectors()
    opposite = np.flatnonzero(length(v + np.roll(v, -1, axis=0)) < ANTIPODES)
    if len(opposite):
        at = f"{ring.lon_deg[opposite[0]]:g}, {ring.lat_deg[opposite[0]]:g}"
        raise InputError(
            f"{feature}: ring {number}: the edge from {at} ends at its antipode; put a vertex between"
        )
    normal = cross(v, np.roll(v, -1, axis=0))
    longest = normal[np.argmax(length(normal))]
    on_one_circle = np.all(np.abs(v @ longest) <= ON_ONE_CIRCLE * length(longest))
    # a hemisphere's vertices lie on one circle too, and there is an area to the left of them
    if on_one_circle and not math.pi < ring.area_sr() < 3.0 * math.pi:
        raise InputError(f"{feature}: ring {number} holds no area; its edges lie on one another")
