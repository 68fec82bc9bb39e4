"""Outlines and lines of the demo world as RFC 7946 text.

Rings are cut at the 180th meridian. The map is a rectangle whose border is
walked anticlockwise from the south-east corner: up the east side, west along
the north pole, down the west side, east along the south pole. A ring that
leaves the map follows this border to the next place where the plate comes in,
which also closes the plates that cover a pole.
"""

from __future__ import annotations

import json
from collections.abc import Iterable, Mapping
from itertools import pairwise
from pathlib import Path
from typing import Any

import numpy as np
from demo_sphere import Array, to_latlon, to_xyz

DIGITS = 4
Place = tuple[float, float]
CORNERS: dict[float, Place] = {
    180.0: (180.0, 90.0),
    540.0: (-180.0, 90.0),
    720.0: (-180.0, -90.0),
    1080.0: (180.0, -90.0),
}


def lonlat(xyz: Array) -> list[Place]:
    """Return rounded (lon, lat) pairs in degrees."""
    lat, lon = to_latlon(xyz)
    # Adding zero turns -0.0 into 0.0, which prints the same everywhere.
    pairs = np.round(np.stack([lon, lat], axis=1), DIGITS) + 0.0
    if np.any(np.abs(pairs[:, 0]) == 180.0):
        raise ValueError("a vertex lies on the 180th meridian")
    return [(float(lon), float(lat)) for lon, lat in pairs]


def crossing_lat(first: Place, second: Place) -> float:
    """Return the latitude at which a great circle meets the 180th meridian."""
    a, b = to_xyz(first[1], first[0]), to_xyz(second[1], second[0])
    normal = np.cross(a, b)
    return round(float(np.degrees(np.arctan(normal[0] / normal[2]))), DIGITS)


def border(place: Place) -> float:
    """Return how far along the border of the map a place on its sides lies."""
    lon, lat = place
    return lat + 90.0 if lon > 0 else 540.0 + 90.0 - lat


def pieces_of(ring: list[Place]) -> list[list[Place]]:
    """Split a closed ring into the pieces between its crossings of the 180th meridian."""
    pieces: list[list[Place]] = [[ring[0]]]
    for first, second in pairwise(ring):
        if abs(first[0] - second[0]) > 180.0:
            side, lat = float(np.copysign(180.0, first[0])), crossing_lat(first, second)
            pieces[-1].append((side, lat))
            pieces.append([(-side, lat)])
        pieces[-1].append(second)
    if len(pieces) > 1:
        pieces[0] = pieces.pop()[:-1] + pieces[0]
    return pieces


def cut_ring(ring: list[Place]) -> list[list[Place]]:
    """Return closed anticlockwise rings inside the map that cover a closed ring."""
    pieces, parts = pieces_of(ring), []
    if pieces == [ring]:
        return [ring]
    while pieces:
        part = pieces.pop(0)
        while True:
            here = border(part[-1])
            ahead = {
                (border(piece[0]) - here) % 1080.0: number for number, piece in enumerate([part, *pieces])
            }
            way = min(ahead)
            part = part + corners_between(here, way)
            if ahead[way] == 0:
                break
            part = part + pieces.pop(ahead[way] - 1)
        parts.append([*part, part[0]])
    return parts


def corners_between(here: float, way: float) -> list[Place]:
    """Return the corners of the map met on a walk along its border."""
    met = [((at - here) % 1080.0, corner) for at, corner in CORNERS.items()]
    return [corner for distance, corner in sorted(met) if distance < way]


def polygon(ring: Array) -> dict[str, Any]:
    """Return the geometry of one plate from its closed ring of unit vectors."""
    parts = cut_ring(lonlat(ring))
    if len(parts) == 1:
        return {"type": "Polygon", "coordinates": parts}
    return {"type": "MultiPolygon", "coordinates": [[part] for part in parts]}


def line(path: Array) -> dict[str, Any]:
    """Return the geometry of a line that stays inside the map."""
    return {"type": "LineString", "coordinates": lonlat(path)}


def write_features(path: Path, features: Iterable[tuple[dict[str, Any], Mapping[str, object]]]) -> None:
    """Write (geometry, properties) pairs, one feature on each line."""
    rows = [
        json.dumps({"type": "Feature", "properties": dict(told), "geometry": shape})
        for shape, told in features
    ]
    text = '{"type": "FeatureCollection", "features": [\n' + ",\n".join(rows) + "\n]}\n"
    path.write_text(text, encoding="utf-8", newline="\n")
