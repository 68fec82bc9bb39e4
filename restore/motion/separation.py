"""Two restored points: how far apart they stood and in which direction, with the rows' errors."""

from __future__ import annotations

from dataclasses import dataclass
from typing import Any

import numpy as np
from numpy.typing import ArrayLike

from restore.geometry.latitudes import Latitudes
from restore.geometry.sphere import (
    EARTH_RADIUS_KM,
    Floats,
    angular_distance,
    azimuth_deg,
    cross,
    lat_lon,
    length,
    tangent_frame,
    unit_vectors,
)
from restore.geometry.uncertain import Sensitivity
from restore.history.circuit import REACHED, Circuit, CircuitRotations


@dataclass(frozen=True)
class Site:
    """A point of today on a plate: degrees."""

    lat_deg: float
    lon_deg: float
    plate: str


@dataclass(frozen=True, eq=False)
class Separation:
    """Distance and bearing from one site to another at ages `(n,)`, Ma.

    `one`, `other`: latitude and longitude (2, n) in the frame, degrees. `distance_km`, `azimuth_deg`
    at the first site, and their 1-sigma from the errors of the rows, NaN where not known. Rows that
    both sites use cancel: neighbours on one plate have a distance without error.
    """

    age_ma: Floats
    one: Floats
    other: Floats
    distance_km: Floats
    distance_sigma_km: Floats
    azimuth_deg: Floats
    azimuth_sigma_deg: Floats

    def columns(self) -> dict[str, Any]:
        """The columns of the command, in its order."""
        return {
            "age_ma": self.age_ma,
            "first_lat_deg": self.one[0],
            "first_lon_deg": self.one[1],
            "second_lat_deg": self.other[0],
            "second_lon_deg": self.other[1],
            "distance_km": self.distance_km,
            "distance_sigma_km": self.distance_sigma_km,
            "azimuth_deg": self.azimuth_deg,
            "azimuth_sigma_deg": self.azimuth_sigma_deg,
        }


def separation(
    circuit: Circuit,
    one: Site,
    other: Site,
    ages: ArrayLike,
    latitudes: Latitudes | None = None,
    radius_km: float = EARTH_RADIUS_KM,
) -> Separation:
    """Distance (km) and bearing (degrees) from `one` to `other` at ages (Ma) in the Circuit's frame.

    The bearing depends on the frame, the distance does not. Raises DomainError where a site has no
    chain to the frame.
    """
    kind = latitudes or Latitudes()
    age = np.atleast_1d(np.asarray(ages, dtype=np.float64))
    found, starts, places = [], [], []
    for site in (one, other):
        circuit.at(site.plate, float(age[0]))
        rotations = circuit.rotations(site.plate, age)
        bad = np.flatnonzero(rotations.status != REACHED)
        if len(bad):
            raise circuit.no_answer(site.plate, float(age[bad[0]]), int(rotations.status[bad[0]]))
        start = unit_vectors(kind.inward(site.lat_deg), site.lon_deg)
        found.append(rotations)
        starts.append(start)
        places.append(rotations.rotations.apply(start))
    covariance = _sensitivity(found, starts, places).covariance(circuit.history.row_errors())
    lats_lons = []
    for place in places:
        lat, lon = lat_lon(place)
        lats_lons.append(np.stack([kind.outward(lat), lon]))
    return Separation(
        age,
        lats_lons[0],
        lats_lons[1],
        angular_distance(*places) * radius_km,
        np.sqrt(np.maximum(covariance[:, 0, 0], 0.0)) * radius_km,
        azimuth_deg(*places),
        np.rad2deg(np.sqrt(np.maximum(covariance[:, 1, 1], 0.0))),
    )


def _sensitivity(found: list[CircuitRotations], starts: list[Floats], places: list[Floats]) -> Sensitivity:
    """Jacobians (n, m, 2, 3) of distance and bearing (radians) by the rows of both chains.

    With d the direction at the first point, r = d x y to its right and D the distance, the distance
    changes by the steps along the great circle, the bearing by `dy2.r / sin D - dy1.r cot D` and by
    what local north turns under the first point, `tan(lat) dy1.east`. A step is `A (u x x)`, whose
    component along t is `u . (x x A^T t)`.
    """
    first, second = places
    right = cross(second, first)
    sine = length(right)[..., np.newaxis]
    right = np.divide(right, sine, out=np.zeros_like(right), where=sine > 0.0)
    cosine = np.sum(first * second, axis=-1, keepdims=True)
    east, _ = tangent_frame(first)
    level = np.hypot(first[..., 0], first[..., 1])[..., np.newaxis]
    tangent = np.divide(first[..., 2:], level, out=np.zeros_like(level), where=level > 0.0)
    with np.errstate(divide="ignore", invalid="ignore"):
        apart, cotangent = 1.0 / sine, cosine / sine
    ahead = (cross(first, right), cross(second, right))
    steps = (
        (-ahead[0], -cotangent * right + tangent * east),
        (ahead[1], apart * right),
    )
    parts = []
    for rotations, start, along in zip(found, starts, steps, strict=True):
        back = rotations.rotations.inverse()
        origin = np.broadcast_to(start, first.shape)
        covectors = [cross(origin, back.apply(direction)) for direction in along]
        parts.append(rotations.sensitivity().mapped(np.stack(covectors, axis=-2)))
    return Sensitivity.combined(parts)
