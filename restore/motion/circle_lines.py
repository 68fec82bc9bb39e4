"""Small circles through a table of points, ready to be written."""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from dataclasses import dataclass
from typing import Any

import numpy as np

from restore.geometry.circles import circle_radius, cut_at_antimeridian, small_circle
from restore.geometry.latitudes import Latitudes
from restore.geometry.sphere import EARTH_RADIUS_KM, Floats, lat_lon, unit_vectors, wrap_longitude


@dataclass(frozen=True, eq=False)
class CircleLine:
    """One small circle: its name, pole (degrees), angular radius, and places by angle about the pole."""

    name: str
    pole_lat_deg: float
    pole_lon_deg: float
    radius_deg: float
    angle_deg: Floats
    lat_deg: Floats
    lon_deg: Floats

    def feature(self) -> tuple[dict[str, Any] | None, dict[str, Any]]:
        """As a GeoJSON geometry and properties; a point on the pole is no line but a Point."""
        properties = {
            "circle": self.name,
            "pole_lat_deg": self.pole_lat_deg,
            "pole_lon_deg": self.pole_lon_deg,
            "radius_deg": self.radius_deg,
        }
        if self.radius_deg in {0.0, 180.0}:
            return {
                "type": "Point",
                "coordinates": [float(self.lon_deg[0]), float(self.lat_deg[0])],
            }, properties
        parts = cut_at_antimeridian(self.lat_deg, self.lon_deg)
        if len(parts) == 1:
            return {"type": "LineString", "coordinates": parts[0]}, properties
        return {"type": "MultiLineString", "coordinates": parts}, properties


def circle_lines(
    pole: tuple[float, float],
    own: Mapping[str, Sequence[str]],
    lat_deg: Sequence[float],
    lon_deg: Sequence[float],
    latitudes: Latitudes,
    arc_deg: tuple[float, float] = (0.0, 360.0),
    step_deg: float = 1.0,
) -> list[CircleLine]:
    """The small circles about a pole (degrees) through points; named by a column `point` or `start`.

    At angle 0 each has its point, to the last digit. Raises InputError as `small_circle` does.
    """
    axis = unit_vectors(latitudes.inward(pole[0]), pole[1])
    names = own.get("point") or own.get("start") or [str(row + 1) for row in range(len(lat_deg))]
    lines = []
    for name, lat, lon in zip(names, lat_deg, lon_deg, strict=True):
        through = unit_vectors(latitudes.inward(lat), lon)
        places, angles = small_circle(axis, through, *arc_deg, step_deg)
        lats, lons = lat_lon(places)
        lats = latitudes.outward(lats)
        own_place = (angles == 0.0) | (angles == 360.0)
        lats, lons = np.where(own_place, lat, lats), np.where(own_place, wrap_longitude(lon), lons)
        radius = float(np.rad2deg(circle_radius(axis, through)))
        lines.append(CircleLine(str(name), pole[0], pole[1], radius, angles, lats, lons))
    return lines


def circle_columns(lines: Sequence[CircleLine], radius_km: float = EARTH_RADIUS_KM) -> dict[str, Any]:
    """All circles as the columns of a table, one row per point; `pole_distance_km` on the ground."""
    counts = [len(line.angle_deg) for line in lines]
    columns: dict[str, Any] = {
        "circle": [line.name for line, count in zip(lines, counts, strict=True) for _ in range(count)]
    }
    for name in ("pole_lat_deg", "pole_lon_deg", "radius_deg"):
        columns[name] = np.repeat([getattr(line, name) for line in lines], counts).astype(np.float64)
    columns["pole_distance_km"] = np.deg2rad(columns["radius_deg"]) * radius_km
    for name in ("angle_deg", "lat_deg", "lon_deg"):
        columns[name] = np.concatenate([np.zeros(0), *(getattr(line, name) for line in lines)])
    return columns
