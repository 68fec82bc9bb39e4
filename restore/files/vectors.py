"""Vector features in and out: GeoJSON in core, GeoPackage, Shapefile and GeoParquet with `gis`."""

from __future__ import annotations

import io
import json
import math
import os
import reprlib
import sys
from collections.abc import Iterable, Iterator, Mapping, Sequence
from dataclasses import dataclass, replace
from itertools import pairwise
from pathlib import Path
from typing import Any, TextIO

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
    except RecursionError:
        raise InputError(f"{name}: is nested too deeply to be GeoJSON (RFC 7946)") from None
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
        if not isinstance(member.get("properties") or {}, dict):
            raise InputError(f"{name}: feature {number}: its properties are no object of names and values")
        yield Feature(name, number, member.get("geometry"), member.get("properties") or {})


def _read_with_gis(path: str | os.PathLike[str]) -> list[Feature]:
    name = os.fspath(path)
    try:
        import geopandas
        import pandas
    except ImportError:
        raise MissingPackageError(f"{name}: needs geopandas; install oncewhere[gis]") from None
    if not Path(path).exists():
        raise InputError(f"{name}: no such file")
    try:
        parquet = Path(path).suffix.lower() in {".parquet", ".geoparquet"}
        frame = geopandas.read_parquet(path) if parquet else geopandas.read_file(path)
    except Exception as exc:
        raise InputError(f"{name}: cannot be read: {str(exc).splitlines()[0]}") from exc
    if getattr(frame, "crs", None) is not None and not frame.crs.is_geographic:
        frame = frame.to_crs("EPSG:4326")
    geometries = getattr(frame, "geometry", None)
    if geometries is None:
        raise InputError(f"{name}: holds a table without geometries")
    turned = Path(path).suffix.lower() == ".shp"
    features = []
    others = [column for column in frame.columns if column != geometries.name]
    for number, (shape, values) in enumerate(
        zip(geometries, frame[others].itertuples(index=False), strict=True), start=1
    ):
        geometry = None if shape is None or shape.is_empty else shape.__geo_interface__
        properties = {
            n: None if v is pandas.NA or v != v else v for n, v in zip(others, values, strict=True)
        }
        feature = Feature(name, number, geometry, properties)
        check_geometry(feature)
        features.append(_rings_turned(feature) if turned else feature)
    return features


def _rings_turned(feature: Feature) -> Feature:
    """A Shapefile's polygons with outer rings anticlockwise and holes clockwise.

    The format asks for the opposite and its writers turn rings as they lie on the map, so that a
    ring says its inside by its course over the map alone; one round a pole holds the lesser side.
    """
    geometry = feature.geometry
    if geometry is None or geometry["type"] not in {"Polygon", "MultiPolygon"}:
        return feature
    single = geometry["type"] == "Polygon"
    parts = [geometry["coordinates"]] if single else geometry["coordinates"]
    made = [[_turned(ring, hole=number > 0) for number, ring in enumerate(part)] for part in parts]
    coordinates = made[0] if single else made
    return replace(feature, geometry={"type": geometry["type"], "coordinates": coordinates})


def _turned(ring: Sequence[Sequence[float]], hole: bool) -> list[Sequence[float]]:
    """A ring run anticlockwise on the map, a hole clockwise; edges over 180 degrees go the short way."""
    east, doubled = 0.0, 0.0
    for (lon, lat), (after_lon, after_lat) in pairwise(position[:2] for position in ring):
        step = after_lon - lon
        if 180.0 < abs(step) < 360.0:
            step -= math.copysign(360.0, step)
        doubled += east * (after_lat - lat) - lat * step
        east += step
    if abs(east) > 180.0:  # round a pole: the cap about the nearer one is on the left
        north = sum(position[1] for position in ring) > 0.0
        anticlockwise = (east > 0.0) == north
    else:
        anticlockwise = doubled > 0.0
    return list(ring) if anticlockwise != hole else list(ring)[::-1]


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
        raise InputError(f"{feature}: position {reprlib.repr(coordinates)} is not two numbers")
    yield coordinates


Pair = tuple[Mapping[str, Any] | None, Mapping[str, Any]]
WRITTEN = (".geojson", ".json", ".gpkg")


def check_vector_ending(path: str | os.PathLike[str]) -> str:
    """The ending of an output name, checked; raises InputError for one that is not written."""
    ending = Path(path).suffix.lower()
    if ending not in WRITTEN:
        raise InputError(
            f"{os.fspath(path)}: cannot tell what to write; end the name in {', '.join(WRITTEN)}"
        )
    return ending


def write_vectors(
    path: str | os.PathLike[str] | None, features: Iterable[Pair], provenance: Mapping[str, Any]
) -> None:
    """Write (geometry, properties) pairs by the ending of a name, or as GeoJSON to standard output.

    Raises InputError for an ending that is not written and MissingPackageError for GeoPackage without
    geopandas.
    """
    if path is None:
        _write_collection(sys.stdout, features, provenance)
    elif check_vector_ending(path) == ".gpkg":
        _write_geopackage(Path(path), features, provenance)
    else:
        write_geojson(path, features, provenance)


def write_geojson(
    path: str | os.PathLike[str], features: Iterable[Pair], provenance: Mapping[str, Any]
) -> None:
    """Write (geometry, properties) pairs as a GeoJSON FeatureCollection (RFC 7946), one a line."""
    with whole_file(path) as part, part.open("w", encoding="utf-8") as stream:
        _write_collection(stream, features, provenance)


def _write_collection(stream: TextIO, features: Iterable[Pair], provenance: Mapping[str, Any]) -> None:
    head = json.dumps({"type": "FeatureCollection", "provenance": plain(provenance)})
    stream.write(head[:-1] + ', "features": [\n')
    for number, (geometry, properties) in enumerate(features):
        member = {"type": "Feature", "properties": plain(properties), "geometry": geometry}
        stream.write((",\n" if number else "") + json.dumps(member, allow_nan=False))
    stream.write("\n]}\n")


def plain(value: Any) -> Any:
    """A value as JSON has it: NaN and infinity are null, dates and the like are texts."""
    if hasattr(value, "item") and getattr(value, "ndim", None) == 0:
        value = value.item()
    if value is None or isinstance(value, (str, bool, int)):
        return value
    if isinstance(value, float):
        return value if math.isfinite(value) else None
    if isinstance(value, Mapping):
        return {str(name): plain(member) for name, member in value.items()}
    if isinstance(value, (list, tuple)):
        return [plain(member) for member in value]
    return str(value)


def _write_geopackage(path: Path, features: Iterable[Pair], provenance: Mapping[str, Any]) -> None:
    try:
        import geopandas
    except ImportError:
        raise MissingPackageError(f"{path}: GeoPackage needs geopandas; install oncewhere[gis]") from None
    from shapely.geometry import shape

    shapes, records = [], []
    for geometry, properties in features:
        shapes.append(None if geometry is None else shape(geometry))
        records.append(
            {n: json.dumps(v) if isinstance(v, (dict, list)) else v for n, v in plain(properties).items()}
        )
    table = geopandas.GeoDataFrame(records, geometry=shapes, crs="EPSG:4326")
    metadata = {"provenance": json.dumps(plain(provenance))}
    # a file by the name of a part would be remarked on; the format asks for .gpkg
    with whole_file(path) as part, io.BytesIO() as whole:
        table.to_file(whole, driver="GPKG", layer=path.stem, dataset_metadata=metadata)
        part.write_bytes(whole.getvalue())
