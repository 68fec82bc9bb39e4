"""Vector features in and out: GeoJSON in core, GeoPackage, Shapefile and GeoParquet with `gis`."""

from __future__ import annotations

import json
import math
import os
from collections.abc import Iterator, Mapping, Sequence
from dataclasses import dataclass
from pathlib import Path
from typing import Any

from restore.errors import InputError, MissingPackageError
from restore.files.atomic import whole_file
from restore.files.text import read_text

GEOJSON = frozenset({".geojson", ".json"})
WITH_GIS = frozenset({".gpkg", ".shp", ".parquet", ".geoparquet", ".fgb"})
DEPTH = {
    "Point": 0,
    "MultiPoint": 1,
    "LineString": 1,
    "MultiLineString": 2,
    "Polygon": 2,
    "MultiPolygon": 3,
}


@dataclass(frozen=True)
class Feature:
    """One feature: a GeoJSON geometry (None if it has none), its properties, its number from 1."""

    file: str
    number: int
    geometry: Mapping[str, Any] | None
    properties: Mapping[str, Any]

    def __str__(self) -> str:
        return f"{self.file}: feature {self.number}"


def read_features(path: str | os.PathLike[str]) -> list[Feature]:
    """All features of a file, in its order, with longitudes and latitudes in degrees.

    GeoJSON (RFC 7946: a FeatureCollection, a Feature or a bare geometry) needs nothing;
    GeoPackage, Shapefile and GeoParquet need the extra `gis`. Raises InputError in one line, naming
    the feature, for what cannot be read, and MissingPackageError.
    """
    ending = Path(path).suffix.lower()
    if ending in WITH_GIS:
        return _read_with_gis(path)
    if ending not in GEOJSON:
        known = ", ".join(sorted(GEOJSON | WITH_GIS))
        raise InputError(f"{os.fspath(path)}: cannot tell what it is; known endings are {known}")
    name = os.fspath(path)
    try:
        content = json.loads(read_text(path, InputError))
    except json.JSONDecodeError as exc:
        raise InputError(f"{name}:{exc.lineno}:{exc.colno}: not valid JSON: {exc.msg}") from None
    features = list(_features(name, content))
    for feature in features:
        check_geometry(feature)
    return features


def _features(name: str, content: Any) -> Iterator[Feature]:
    kind = content.get("type") if isinstance(content, dict) else None
    if kind == "FeatureCollection":
        members = content.get("features")
        if not isinstance(members, list):
            raise InputError(f"{name}: the FeatureCollection has no list of features")
    elif kind == "Feature":
        members = [content]
    elif kind in DEPTH or kind == "GeometryCollection":
        members = [{"type": "Feature", "geometry": content, "properties": {}}]
    else:
        raise InputError(f"{name}: type = {kind!r}: not GeoJSON (RFC 7946)")
    for number, member in enumerate(members, start=1):
        if not isinstance(member, dict) or member.get("type") != "Feature":
            raise InputError(f"{name}: feature {number}: is no Feature")
        yield Feature(name, number, member.get("geometry"), member.get("properties") or {})


def _read_with_gis(path: str | os.PathLike[str]) -> list[Feature]:
    name = os.fspath(path)
    try:
        import geopandas
    except ImportError:
        raise MissingPackageError(f"{name}: needs geopandas; install oncewhere[gis]") from None
    if not Path(path).exists():
        raise InputError(f"{name}: no such file")
    try:
        parquet = Path(path).suffix.lower() in {".parquet", ".geoparquet"}
        frame = geopandas.read_parquet(path) if parquet else geopandas.read_file(path)
    except Exception as exc:
        raise InputError(f"{name}: cannot be read: {str(exc).splitlines()[0]}") from exc
    if frame.crs is not None and not frame.crs.is_geographic:
        frame = frame.to_crs("EPSG:4326")
    features = []
    others = [column for column in frame.columns if column != frame.geometry.name]
    for number, (shape, values) in enumerate(
        zip(frame.geometry, frame[others].itertuples(index=False), strict=True), start=1
    ):
        geometry = None if shape is None or shape.is_empty else shape.__geo_interface__
        properties = {n: None if v != v else v for n, v in zip(others, values, strict=True)}
        features.append(Feature(name, number, geometry, properties))
        check_geometry(features[-1])
    return features


def check_geometry(feature: Feature) -> None:
    """Raise InputError if a geometry is of no known type or holds a position off the globe."""
    geometry = feature.geometry
    if geometry is None:
        return
    kind = geometry.get("type") if isinstance(geometry, Mapping) else None
    if kind not in DEPTH:
        raise InputError(f"{feature}: geometry {kind!r}: known are {', '.join(DEPTH)}")
    for position in positions(geometry.get("coordinates"), DEPTH[kind], feature):
        lon, lat = position[0], position[1]
        if not (abs(lat) <= 90.0 and abs(lon) <= 360.0):
            raise InputError(
                f"{feature}: position {lon:g}, {lat:g}: longitude in -360..360 and then latitude in"
                " -90..90 are wanted"
            )


def positions(coordinates: Any, depth: int, feature: Feature) -> Iterator[Sequence[float]]:
    """Every position of nested coordinates; raises InputError where there is none."""
    if depth > 0:
        if not isinstance(coordinates, (list, tuple)):
            raise InputError(f"{feature}: coordinates are not nested as its type asks")
        for part in coordinates:
            yield from positions(part, depth - 1, feature)
        return
    good = isinstance(coordinates, (list, tuple)) and len(coordinates) >= 2
    if not good or not all(
        isinstance(v, (int, float)) and not isinstance(v, bool) and math.isfinite(v)
        for v in coordinates[:2]
    ):
        raise InputError(f"{feature}: position {coordinates!r} is not two numbers")
    yield coordinates


def write_geojson(
    path: str | os.PathLike[str],
    features: Sequence[tuple[Mapping[str, Any] | None, Mapping[str, Any]]],
    provenance: Mapping[str, Any],
) -> None:
    """Write (geometry, properties) pairs as a GeoJSON FeatureCollection (RFC 7946), one a line."""
    with whole_file(path) as part, part.open("w", encoding="utf-8") as stream:
        head = json.dumps({"type": "FeatureCollection", "provenance": provenance})
        stream.write(head[:-1] + ', "features": [\n')
        for number, (geometry, properties) in enumerate(features):
            member = {"type": "Feature", "geometry": geometry, "properties": properties}
            stream.write((",\n" if number else "") + json.dumps(member, allow_nan=False))
        stream.write("\n]}\n")
