"""Lines from files: GeoJSON and the like, or a table of points in their order."""

from __future__ import annotations

import os
from collections.abc import Mapping
from dataclasses import dataclass
from pathlib import Path
from typing import Any

import numpy as np

from restore.errors import InputError
from restore.files.delimited import Layout
from restore.files.points import read_points
from restore.files.vectors import GEOJSON, WITH_GIS, read_features
from restore.geometry.sphere import Floats


@dataclass(frozen=True, eq=False)
class Line:
    """One line: degrees `(n,)`, and the properties of its feature."""

    lat_deg: Floats
    lon_deg: Floats
    properties: Mapping[str, Any]


def read_lines(path: str | os.PathLike[str], layout: Layout | None = None) -> list[Line]:
    """Lines (degrees) of a vector file, each part of a multi-line by itself; or one line from a table.

    Raises InputError naming the feature that is no line, or a line of fewer than two points.
    """
    lines = []
    if Path(path).suffix.lower() not in GEOJSON | WITH_GIS:
        _, lat, lon = read_points(path, layout)
        lines.append(Line(np.array(lat), np.array(lon), {}))
    else:
        for feature in read_features(path):
            kind = None if feature.geometry is None else feature.geometry["type"]
            if feature.geometry is None or kind not in {"LineString", "MultiLineString"}:
                raise InputError(f"{feature}: geometry {kind!r}: a LineString or MultiLineString is wanted")
            parts = feature.geometry["coordinates"]
            for part in parts if kind == "MultiLineString" else [parts]:
                where = np.array([position[:2] for position in part], dtype=np.float64).reshape(-1, 2)
                lines.append(Line(where[:, 1], where[:, 0], feature.properties))
    for number, line in enumerate(lines, start=1):
        if len(line.lat_deg) < 2:
            raise InputError(
                f"{os.fspath(path)}: line {number} has {len(line.lat_deg)} points; it needs two"
            )
    if not lines:
        raise InputError(f"{os.fspath(path)}: holds no line")
    return lines
