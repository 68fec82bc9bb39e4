"""Geodetic and geocentric latitudes, and the stated choice between them as one value.

Most published poles and sites are geodetic numbers used as if the Earth were a sphere (common
practice): `as-given`. With `geodetic` every latitude is turned to geocentric on the way in and back
on the way out, on the GRS80 ellipsoid (Moritz 2000, J. Geodesy 74, 128-133).
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import ArrayLike

from restore.geometry.sphere import Floats

GRS80_E2 = 0.00669438002290
"""First eccentricity squared of GRS80 (Moritz 2000)."""

KINDS = ("as-given", "geodetic")


def geocentric_from_geodetic(lat_deg: ArrayLike) -> Floats:
    """Geocentric latitude in degrees of a geodetic latitude in degrees: tan c = (1 - e2) tan g."""
    lat = np.deg2rad(np.asarray(lat_deg, dtype=np.float64))
    geocentric: Floats = np.rad2deg(np.arctan2((1.0 - GRS80_E2) * np.sin(lat), np.cos(lat)))
    return geocentric


def geodetic_from_geocentric(lat_deg: ArrayLike) -> Floats:
    """Geodetic latitude in degrees of a geocentric latitude in degrees: tan g = tan c / (1 - e2)."""
    lat = np.deg2rad(np.asarray(lat_deg, dtype=np.float64))
    geodetic: Floats = np.rad2deg(np.arctan2(np.sin(lat), (1.0 - GRS80_E2) * np.cos(lat)))
    return geodetic


@dataclass(frozen=True)
class Latitudes:
    """What latitudes at the public doors mean: `as-given` or `geodetic`.

    Raises ValueError for any other kind.
    """

    kind: str = "as-given"

    def __post_init__(self) -> None:
        if self.kind not in KINDS:
            raise ValueError(f"latitudes = {self.kind!r}: must be one of {', '.join(KINDS)}")

    def inward(self, lat_deg: ArrayLike) -> Floats:
        """Latitudes in degrees as the sphere wants them."""
        if self.kind == "geodetic":
            return geocentric_from_geodetic(lat_deg)
        return np.asarray(lat_deg, dtype=np.float64)

    def outward(self, lat_deg: ArrayLike) -> Floats:
        """Latitudes in degrees of the sphere as the user wants them."""
        if self.kind == "geodetic":
            return geodetic_from_geocentric(lat_deg)
        return np.asarray(lat_deg, dtype=np.float64)
