"""The geocentric axial dipole: palaeolatitudes, virtual geomagnetic poles, expected directions."""

from __future__ import annotations

from typing import NamedTuple

import numpy as np
from numpy.typing import ArrayLike

from restore.geometry.sphere import Floats, wrap_longitude


def palaeolatitude_deg(inclination_deg: ArrayLike) -> Floats:
    """Latitude in degrees at which a dipole field has an inclination (degrees): tan I = 2 tan lat.

    Butler (1992, Paleomagnetism, eq. 1.15).
    """
    inclination = np.deg2rad(np.asarray(inclination_deg, dtype=np.float64))
    latitude: Floats = np.rad2deg(np.arctan2(np.sin(inclination), 2.0 * np.cos(inclination)))
    return latitude


def expected_inclination_deg(lat_deg: ArrayLike) -> Floats:
    """Inclination in degrees of a dipole field at a latitude (degrees): the inverse of the above."""
    lat = np.deg2rad(np.asarray(lat_deg, dtype=np.float64))
    inclination: Floats = np.rad2deg(np.arctan2(2.0 * np.sin(lat), np.cos(lat)))
    return inclination


class VirtualPole(NamedTuple):
    """A virtual geomagnetic pole: degrees; `dp`, `dm` semi-axes of its 95 % oval, along and across."""

    lat_deg: Floats
    lon_deg: Floats
    colatitude_deg: Floats
    dp_deg: Floats
    dm_deg: Floats


def virtual_pole(
    lat_deg: ArrayLike,
    lon_deg: ArrayLike,
    inclination_deg: ArrayLike,
    declination_deg: ArrayLike,
    a95_deg: ArrayLike = np.nan,
) -> VirtualPole:
    """The pole that a mean direction at a site points to, all in degrees (Butler 1992, ch. 7).

    `colatitude_deg` p is the distance from site to pole. The pole's longitude has two branches; the
    far one, `lon + 180 - beta`, holds where cos p < sin lat sin lat_p, which atan2 picks by itself.
    """
    lat, lon, inclination, declination, a95 = (
        np.asarray(a, dtype=np.float64)
        for a in (lat_deg, lon_deg, inclination_deg, declination_deg, a95_deg)
    )
    phi, inc, dec = np.deg2rad(lat), np.deg2rad(inclination), np.deg2rad(declination)
    p = np.arctan2(2.0 * np.cos(inc), np.sin(inc))
    along = np.cos(p) * np.sin(phi) + np.sin(p) * np.cos(phi) * np.cos(dec)
    east = np.sin(p) * np.sin(dec)
    north = np.cos(p) * np.cos(phi) - np.sin(p) * np.sin(phi) * np.cos(dec)
    pole_lat = np.rad2deg(np.arctan2(along, np.hypot(east, north)))
    pole_lon = wrap_longitude(lon + np.rad2deg(np.arctan2(east, north)))
    dp = a95 * (1.0 + 3.0 * np.cos(p) ** 2) / 2.0
    dm = a95 * np.sin(p) / np.cos(inc)
    return VirtualPole(pole_lat, pole_lon, np.rad2deg(p), dp, dm)
