"""Isochrons: the lines of crust of one age on both plates, from the ridge that made them.

Today's shape of the ridge is assumed to be that of all ages: every isochron is the ridge line turned as
a whole, so that segments and transforms are kept, and the two of an age meet on the ridge at that age.
"""

from __future__ import annotations

import os
from collections.abc import Iterator, Sequence
from dataclasses import dataclass
from pathlib import Path
from typing import Any

import numpy as np

from restore.errors import InputError
from restore.files.columns import read_columns
from restore.files.delimited import Layout
from restore.files.vectors import GEOJSON, WITH_GIS, read_features
from restore.geometry.arcs import densified_arcs
from restore.geometry.circles import cut_at_antimeridian
from restore.geometry.latitudes import Latitudes
from restore.geometry.sphere import Floats, lat_lon, unit_vectors
from restore.history.circuit import REACHED
from restore.history.timescale import Chron, TimeScale
from restore.motion.flowlines import ELLIPSE, STATUSES, FlowlineMaker, Flowlines, Spreading
from restore.motion.ridge_points import RidgePoints

ASSUMES = "the ridge had today's shape at every age"


@dataclass(frozen=True, eq=False)
class RidgeLine:
    """One line of a ridge: its name, and places `(m,)` in degrees, in order along it."""

    name: str
    lat_deg: Floats
    lon_deg: Floats

    def vectors(self, latitudes: Latitudes) -> Floats:
        """Unit vectors `(m, 3)`."""
        return unit_vectors(latitudes.inward(self.lat_deg), self.lon_deg)


def read_ridge(path: str | os.PathLike[str], layout: Layout | None = None) -> list[RidgeLine]:
    """The lines of a ridge: GeoJSON (or what `gis` reads) LineStrings and MultiLineStrings, each part a
    line, or a table `lat_deg, lon_deg[, line]` whose points stand in order along each line.

    Raises InputError for other geometries and for a line without two different points.
    """
    if Path(path).suffix.lower() in GEOJSON | WITH_GIS:
        lines = list(_lines_of_features(path))
    else:
        table = read_columns(path, ("lat_deg", "lon_deg"), ("line",), ("lat_deg", "lon_deg"), layout)
        labels = table.texts["line"]
        members = {label: [row for row, own in enumerate(labels) if own == label] for label in labels}
        lines = [
            RidgeLine(label or "1", table.numbers["lat_deg"][rows], table.numbers["lon_deg"][rows])
            for label, rows in members.items()
        ]
    if not lines:
        raise InputError(f"{os.fspath(path)}: holds no line; a ridge needs at least one")
    for line in lines:
        _check_line(os.fspath(path), line)
    return lines


def _lines_of_features(path: str | os.PathLike[str]) -> Iterator[RidgeLine]:
    for feature in read_features(path):
        geometry = feature.geometry or {}
        kind = geometry.get("type")
        if kind not in {"LineString", "MultiLineString"}:
            raise InputError(f"{feature}: geometry {kind!r}: a ridge is a LineString or MultiLineString")
        coordinates = geometry["coordinates"]
        parts = [coordinates] if kind == "LineString" else coordinates
        own = str(feature.properties.get("name") or feature.number)
        for number, part in enumerate(parts, start=1):
            name = own if len(parts) == 1 else f"{own}/{number}"
            places = np.array([position[:2] for position in part], dtype=np.float64).reshape(-1, 2)
            yield RidgeLine(name, places[:, 1], places[:, 0])


def _check_line(file: str, line: RidgeLine) -> None:
    if len(line.lat_deg) < 2:
        count = len(line.lat_deg)
        raise InputError(f"{file}: line {line.name!r} has {count} point; a line needs two different ones")
    places = unit_vectors(line.lat_deg, line.lon_deg)
    if not np.any(np.abs(places - places[0]) > 1e-12):
        raise InputError(
            f"{file}: line {line.name!r} is one point repeated {len(places)} times; a line needs two"
            " different ones"
        )


def repeated_points(line: RidgeLine) -> int:
    """How many points of a line are the same as the one before them; they are kept as they are."""
    places = unit_vectors(line.lat_deg, line.lon_deg)
    return int(np.sum(np.all(np.abs(np.diff(places, axis=0)) <= 1e-12, axis=-1)))


def densified_line(line: RidgeLine, longest_km: float, spreading: Spreading) -> RidgeLine:
    """The same line with points at most `longest_km` apart along its great-circle arcs.

    Raises InputError for a length that is not above 0.
    """
    if not longest_km > 0.0:
        raise InputError(f"longest_km = {longest_km:g}: must be above 0, in km")
    kind = spreading.latitudes
    made, number = densified_arcs(line.vectors(kind), longest_km / spreading.radius_km)
    lat, lon = lat_lon(made)
    lat = kind.outward(lat)
    whole = number == np.round(number)
    lat[whole] = line.lat_deg[number[whole].astype(int)]
    lon[whole] = line.lon_deg[number[whole].astype(int)]
    return RidgeLine(line.name, lat, lon)


def chron_ages(labels: Sequence[str], scale: TimeScale) -> dict[float, str]:
    """The age (Ma) of each chron edge such as `C5n.2n(o)`, and its label.

    Raises InputError for a chron that the scale lacks or a label without an edge.
    """
    return {scale.age_of(Chron.parse(label)): label.strip() for label in labels}


@dataclass(frozen=True, eq=False)
class Isochrons:
    """The isochrons of ridge lines: for each line both arms of all its points."""

    lines: tuple[RidgeLine, ...]
    arms: tuple[Flowlines, ...]
    chrons: dict[float, str]

    def columns(self) -> dict[str, Any]:
        """Long form: by line, plate, age, and then along the line."""
        parts = [self._of_line(line, arm) for line, arm in zip(self.lines, self.arms, strict=True)]
        return {
            name: np.concatenate([part[name] for part in parts])
            if isinstance(parts[0][name], np.ndarray)
            else [value for part in parts for value in part[name]]
            for name in parts[0]
        }

    def _of_line(self, line: RidgeLine, arm: Flowlines) -> dict[str, Any]:
        count, _, steps = arm.lat_deg.shape
        # (points, plates, ages) -> (plates, ages, points)
        turned = np.moveaxis(np.arange(arm.lat_deg.size).reshape(arm.lat_deg.shape), 0, -1).ravel()
        ages = np.tile(np.repeat(arm.age_ma, count), 2)
        columns: dict[str, Any] = {
            "line": [line.name] * len(turned),
            "plate": np.repeat(np.array(arm.spreading.plates, dtype=object), steps * count).tolist(),
            "age_ma": ages,
            "chron": [self.chrons.get(age, "") for age in ages.tolist()],
            "vertex": np.tile(np.arange(1, count + 1), 2 * steps),
            "lat_deg": arm.lat_deg.ravel()[turned],
            "lon_deg": arm.lon_deg.ravel()[turned],
        }
        columns |= {name: axis.ravel()[turned] for name, axis in zip(ELLIPSE, arm.axes, strict=True)}
        columns["errors"] = np.where(np.isnan(columns[ELLIPSE[0]]), "", "rows only").tolist()
        columns["status"] = [STATUSES[code] for code in arm.status.ravel()[turned].tolist()]
        columns["assumes"] = [ASSUMES] * len(turned)
        return columns

    def features(self) -> list[tuple[dict[str, Any] | None, dict[str, Any]]]:
        """GeoJSON geometries and properties: one feature for each line, plate and age."""
        made: list[tuple[dict[str, Any] | None, dict[str, Any]]] = []
        for line, arm in zip(self.lines, self.arms, strict=True):
            for side, plate in enumerate(arm.spreading.plates):
                for k, age in enumerate(arm.age_ma.tolist()):
                    state = int(arm.status[0, side, k])
                    geometry: dict[str, Any] | None = None
                    if state == REACHED:
                        parts = cut_at_antimeridian(arm.lat_deg[:, side, k], arm.lon_deg[:, side, k])
                        geometry = {"type": "MultiLineString", "coordinates": parts}
                        if len(parts) == 1:
                            geometry = {"type": "LineString", "coordinates": parts[0]}
                    major = arm.axes[0, :, side, k]
                    properties = {
                        "line": line.name,
                        "plate": plate,
                        "age_ma": age,
                        "chron": self.chrons.get(age, ""),
                        "greatest_ellipse_major_km": None
                        if np.any(np.isnan(major))
                        else float(major.max()),
                        "status": STATUSES[state],
                        "assumes": ASSUMES,
                    }
                    made.append((geometry, properties))
        return made


def isochrons(
    spreading: Spreading,
    lines: Sequence[RidgeLine],
    chrons: dict[float, str] | None = None,
    ridge_ma: float = 0.0,
    on_plate: str = "",
) -> Isochrons:
    """The crust of each age (Ma) on both plates, from the lines of a ridge.

    An extinct ridge lay there at `ridge_ma`, in coordinates of `on_plate`. Raises as `flowlines` does, and
    InputError for an extinct ridge without a plate.
    """
    arms = []
    points = [_points_of(line, spreading, ridge_ma, on_plate) for line in lines]
    maker = FlowlineMaker(spreading, points[0])
    for its_points in points:
        arms.append(maker.make(its_points))
    return Isochrons(tuple(lines), tuple(arms), chrons or {})


def _points_of(line: RidgeLine, spreading: Spreading, ridge_ma: float, on_plate: str) -> RidgePoints:
    count = len(line.lat_deg)
    return RidgePoints.of(
        line.lat_deg,
        line.lon_deg,
        spreading.plates,
        start=[line.name] * count,
        age_ma=np.full(count, ridge_ma),
        on_plate=[on_plate] * count,
    )
