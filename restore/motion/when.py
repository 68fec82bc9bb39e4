"""Questions about time: when a site crossed a latitude, came within a distance, was nearest.

Positions are smooth between the rows' ages of a chain; each such span is searched by itself, every
change of sign is bracketed and found with Brent's method (Brent 1973; scipy), and every smallest
value of the distance with golden sections, so that grazing passages are not missed.
"""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass, replace
from itertools import pairwise
from typing import Any

import numpy as np

from restore.errors import InputError
from restore.geometry.arcs import nearest_on_edges
from restore.geometry.latitudes import Latitudes
from restore.geometry.sphere import (
    EARTH_RADIUS_KM,
    Floats,
    angular_distance,
    dot,
    lat_lon,
    tangent_frame,
    unit_vectors,
)
from restore.history.circuit import REACHED, Circuit
from restore.motion.separation import Site, separation

PER_SPAN = 24
XTOL_MYR = 1e-10


@dataclass(frozen=True)
class Event:
    """One answer: the age (Ma), its 1-sigma from the errors of rows (Myr, NaN if not known or if the
    site does not move across), what happened forward in time, and where the site then was, degrees.

    `distance_km`: to what was asked about, NaN for latitudes; `distance_sigma_km`: of a nearest approach,
    1-sigma from the errors of rows.
    """

    age_ma: float
    age_sigma_myr: float
    what: str
    lat_deg: float
    lon_deg: float
    distance_km: float
    distance_sigma_km: float = float("nan")


class _Track:
    """One site in a frame: its place at any age, and the ages at which its motion changes."""

    def __init__(self, circuit: Circuit, site: Site, younger: float, older: float, kind: Latitudes) -> None:
        if not older > younger >= 0.0:
            raise InputError(f"ages {younger:g}:{older:g}: the first must be the younger one, from 0 on")
        self.circuit, self.site, self.kind = circuit, site, kind
        self.start = unit_vectors(kind.inward(site.lat_deg), site.lon_deg)
        for age in (younger, older):
            circuit.at(site.plate, age)
        inner = circuit.row_ages(site.plate, younger, older)
        self.edges = np.concatenate([[younger], inner, [older]])

    def places(self, ages: Floats) -> Floats:
        """Unit vectors (n, 3) of the site at ages (n,)."""
        found = self.circuit.rotations(self.site.plate, ages)
        bad = np.flatnonzero(found.status != REACHED)
        if len(bad):
            raise self.circuit.no_answer(self.site.plate, float(ages[bad[0]]), int(found.status[bad[0]]))
        return found.rotations.apply(self.start)

    def sigma_along(self, age: float, direction: Floats) -> float:
        """1-sigma in radians of the place along a horizontal unit vector (3,), from the rows."""
        found = self.circuit.at(self.site.plate, age)
        own = found.rotations.inverse().apply(direction).reshape(3)
        covector = np.cross(self.start, own)
        variance = covector @ found.covariance()[0] @ covector
        return float(np.sqrt(max(variance, 0.0))) if np.isfinite(variance) else float("nan")


Measure = Callable[[Floats], Floats]


def _spans(edges: Floats, measure: Measure) -> list[tuple[Floats, Floats]]:
    """Ages and values of a measure on a fine grid in each span between edges."""
    grid = np.linspace(0.0, 1.0, PER_SPAN + 1)
    spans = []
    for younger, older in pairwise(edges):
        ages = younger + grid * (older - younger)
        ages[-1] = older
        spans.append((ages, measure(ages)))
    return spans


def roots(edges: Floats, measure: Measure) -> list[float]:
    """All ages at which a measure is zero, each once, from younger to older."""
    from scipy.optimize import brentq

    def at(age: float) -> float:
        return float(measure(np.array([age]))[0])

    found: list[float] = []
    for ages, values in _spans(edges, measure):
        for i in range(len(ages) - 1):
            if values[i] == 0.0:
                found.append(float(ages[i]))
            elif values[i] * values[i + 1] < 0.0:
                found.append(float(brentq(at, ages[i], ages[i + 1], xtol=XTOL_MYR)))
        if values[-1] == 0.0:
            found.append(float(ages[-1]))
        found += _touching(ages, values, at)
    return _each_once(found)


def _touching(ages: Floats, values: Floats, at: Callable[[float], float]) -> list[float]:
    """Pairs of roots between grid ages of one sign: where the smallest size is beyond zero."""
    from scipy.optimize import brentq

    found = []
    size = np.abs(values)
    for i in range(1, len(ages) - 1):
        if not (size[i] <= size[i - 1] and size[i] <= size[i + 1] and values[i] != 0.0):
            continue
        sign = float(np.sign(values[i]))
        if values[i - 1] * sign <= 0.0 or values[i + 1] * sign <= 0.0:
            continue
        least = _least(lambda age, sign=sign: sign * at(age), ages[i - 1], ages[i + 1])  # type: ignore[misc]
        if sign * at(least) < 0.0:
            found += [
                float(brentq(at, ages[i - 1], least, xtol=XTOL_MYR)),
                float(brentq(at, least, ages[i + 1], xtol=XTOL_MYR)),
            ]
    return found


def _least(value: Callable[[float], float], younger: float, older: float) -> float:
    from scipy.optimize import minimize_scalar

    return float(
        minimize_scalar(value, bounds=(younger, older), method="bounded", options={"xatol": 1e-9}).x
    )


def _each_once(ages: list[float]) -> list[float]:
    kept: list[float] = []
    for age in sorted(ages):
        if not kept or age - kept[-1] > 1e-7:
            kept.append(age)
    return kept


def minima(edges: Floats, measure: Measure) -> list[float]:
    """Ages of all local minima of a measure, the ends included where it rises away from them."""
    ages = np.concatenate([span[0] for span in _spans(edges, measure)])
    values = np.concatenate([span[1] for span in _spans(edges, measure)])
    keep = np.append(True, np.diff(ages) > 0.0)
    ages, values = ages[keep], values[keep]
    found = []
    for i in range(len(ages)):
        before = values[i - 1] if i else np.inf
        after = values[i + 1] if i + 1 < len(ages) else np.inf
        if values[i] <= before and values[i] <= after:
            low, high = ages[max(i - 1, 0)], ages[min(i + 1, len(ages) - 1)]
            age = _least(lambda a: float(measure(np.array([a]))[0]), low, high)
            best = min((age, float(ages[i])), key=lambda a: float(measure(np.array([a]))[0]))
            found.append(best)
    return _each_once(found)


def crosses_latitude(
    circuit: Circuit,
    site: Site,
    latitude_deg: float,
    younger_ma: float,
    older_ma: float,
    latitudes: Latitudes | None = None,
) -> list[Event]:
    """When a site crossed a latitude (degrees) between two ages (Ma), from younger to older.

    `what` says in which direction it went, forward in time. Raises InputError for a latitude off the
    globe or ages out of order, DomainError where the history has no answer.
    """
    if not -90.0 <= latitude_deg <= 90.0:
        raise InputError(f"latitude {latitude_deg:g}: must lie in -90..90")
    kind = latitudes or Latitudes()
    track = _Track(circuit, site, younger_ma, older_ma, kind)
    wanted = float(kind.inward(latitude_deg))

    def measure(ages: Floats) -> Floats:
        return np.deg2rad(lat_lon(track.places(ages))[0] - wanted)

    events = []
    for age in roots(track.edges, measure):
        slope = _slope(measure, age, track.edges)
        place = track.places(np.array([age]))[0]
        _, north = tangent_frame(place)
        sigma = track.sigma_along(age, north)
        what = "goes north" if slope < 0.0 else "goes south"
        events.append(_event(track, age, sigma, slope, what, np.nan))
    return events


def _slope(measure: Measure, age: float, edges: Floats) -> float:
    """Change of a measure per Myr of age, by a central difference inside the range."""
    step = 1e-5 * (edges[-1] - edges[0])
    low, high = max(age - step, edges[0]), min(age + step, edges[-1])
    values = measure(np.array([low, high]))
    return float((values[1] - values[0]) / (high - low))


def _event(
    track: _Track, age: float, sigma_rad: float, slope: float, what: str, distance_km: float
) -> Event:
    lat, lon = lat_lon(track.places(np.array([age]))[0])
    age_sigma = abs(sigma_rad / slope) if slope != 0.0 else float("nan")
    if age_sigma > track.edges[-1] - track.edges[0]:
        # a grazing passage: the linear form says nothing of its age
        age_sigma = float("nan")
    return Event(age, age_sigma, what, float(track.kind.outward(lat)), float(lon), distance_km)


def _distance_events(
    track: _Track,
    measure: Measure,
    sigma: Callable[[float], float],
    within_km: float | None,
    radius_km: float,
) -> list[Event]:
    """Events of a distance (radians): entering and leaving a circle, or the nearest approaches."""
    if within_km is None:
        events = []
        for age in minima(track.edges, measure):
            distance = float(measure(np.array([age]))[0]) * radius_km
            at_end = bool(np.any(np.abs(track.edges[[0, -1]] - age) < 1e-6))
            what = "nearest at the end of the range" if at_end else "nearest"
            event = _event(track, age, float("nan"), 0.0, what, distance)
            events.append(replace(event, distance_sigma_km=sigma(age) * radius_km))
        return events
    if not within_km > 0.0:
        raise InputError(f"within {within_km:g} km: must be above 0")
    limit = within_km / radius_km
    events = []
    for age in roots(track.edges, lambda ages: measure(ages) - limit):
        slope = _slope(measure, age, track.edges)
        what = "comes within" if slope > 0.0 else "goes beyond"
        events.append(_event(track, age, sigma(age), slope, what, within_km))
    return events


def near_point(
    circuit: Circuit,
    site: Site,
    point: tuple[float, float],
    younger_ma: float,
    older_ma: float,
    within_km: float | None = None,
    latitudes: Latitudes | None = None,
    radius_km: float = EARTH_RADIUS_KM,
) -> list[Event]:
    """When a site came within a distance (km) of a point that is fixed in the frame (degrees), or,
    without a distance, when it was nearest; ages in Ma.
    """
    kind = latitudes or Latitudes()
    track = _Track(circuit, site, younger_ma, older_ma, kind)
    fixed = unit_vectors(kind.inward(point[0]), point[1])

    def measure(ages: Floats) -> Floats:
        return angular_distance(track.places(ages), fixed)

    def sigma(age: float) -> float:
        place = track.places(np.array([age]))[0]
        away = place * float(dot(place, fixed)) - fixed
        size = float(np.linalg.norm(away))
        return track.sigma_along(age, away / size) if size > 0.0 else float("nan")

    return _distance_events(track, measure, sigma, within_km, radius_km)


def near_site(
    circuit: Circuit,
    site: Site,
    other: Site,
    younger_ma: float,
    older_ma: float,
    within_km: float | None = None,
    latitudes: Latitudes | None = None,
    radius_km: float = EARTH_RADIUS_KM,
) -> list[Event]:
    """When a site came within a distance (km) of another that moves too, or when it was nearest."""
    kind = latitudes or Latitudes()
    track = _Track(circuit, site, younger_ma, older_ma, kind)
    beside = _Track(circuit, other, younger_ma, older_ma, kind)
    track.edges = np.unique(np.concatenate([track.edges, beside.edges]))

    def measure(ages: Floats) -> Floats:
        return angular_distance(track.places(ages), beside.places(ages))

    def sigma(age: float) -> float:
        return float(separation(circuit, site, other, age, kind, 1.0).distance_sigma_km[0])

    return _distance_events(track, measure, sigma, within_km, radius_km)


def near_lines(
    circuit: Circuit,
    site: Site,
    lines: list[tuple[Floats, Floats]],
    line_plate: str,
    younger_ma: float,
    older_ma: float,
    within_km: float | None = None,
    latitudes: Latitudes | None = None,
    radius_km: float = EARTH_RADIUS_KM,
) -> list[Event]:
    """When a site came within a distance (km) of today's lines (degrees) of another plate, or when it was
    nearest. The distance is measured in coordinates of the lines' plate; its sigma is not computed.
    """
    kind = latitudes or Latitudes()
    track = _Track(circuit, site, younger_ma, older_ma, kind)
    parts = [unit_vectors(kind.inward(lat), lon) for lat, lon in lines]
    first = lines[0]
    carrier = _Track(
        circuit, Site(float(first[0][0]), float(first[1][0]), line_plate), younger_ma, older_ma, kind
    )
    track.edges = np.unique(np.concatenate([track.edges, carrier.edges]))

    def measure(ages: Floats) -> Floats:
        back = circuit.rotations(line_plate, ages).rotations.inverse()
        places = back.apply(track.places(ages))
        nearest: Floats = np.min([nearest_on_edges(places, part) for part in parts], axis=0)
        return nearest

    return _distance_events(track, measure, lambda age: float("nan"), within_km, radius_km)


NEVER = Event(float("nan"), float("nan"), "never", float("nan"), float("nan"), float("nan"))


def as_columns(events: list[tuple[str, Event]]) -> dict[str, Any]:
    """Events as columns, each with the name of its site; `what` is `never` where there was none. Crossings
    are said as they happened, forward in time.
    """
    names = ("age_ma", "age_sigma_myr", "what", "lat_deg", "lon_deg", "distance_km", "distance_sigma_km")
    columns: dict[str, Any] = {"site": [name for name, _ in events]}
    for name in names:
        values = [getattr(event, name) for _, event in events]
        columns[name] = values if name == "what" else np.array(values, dtype=np.float64)
    return columns
