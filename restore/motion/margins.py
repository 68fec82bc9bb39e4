"""What happens along a line between two plates: opening, closing, sliding, and how much in all.

With r up, t along the line as drawn and n horizontal from the second plate to the first, the first
plate moves at v: `v . n` is opening (> 0) or closing (< 0), `v . (n x r)` right-lateral (> 0) or
left-lateral (< 0). Neither depends on the direction in which the line was drawn or on which of the
two plates is named first.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass
from typing import Any

import numpy as np
from numpy.typing import NDArray

from restore.errors import InputError
from restore.geometry.arcs import densified_arcs
from restore.geometry.latitudes import Latitudes
from restore.geometry.sphere import (
    EARTH_RADIUS_KM,
    Floats,
    angular_distance,
    azimuth_deg,
    dot,
    lat_lon,
    unit_vectors,
)
from restore.history.circuit import REACHED, Circuit
from restore.history.store import History
from restore.history.velocity import angular_velocity
from restore.motion.rates import Rates, rates
from restore.outlines import Outlines

REGIMES = ("opening", "closing", "left-lateral", "right-lateral")
SIDE_STEP_KM = 2.0
_NODES, _WEIGHTS = np.polynomial.legendre.leggauss(8)


@dataclass(frozen=True, eq=False)
class MarginLine:
    """Segments of today's line: ends (n, 3), which line each is of, and on which side the first plate is.

    `first_on_left` (n,): whether the first plate lies to the left of the segment as drawn; `side_from` (n,): how
    that is known, `given`, `outlines`, `other segments` of the same line, or `assumed`.
    """

    start: Floats
    end: Floats
    line: NDArray[np.int64]
    first_on_left: NDArray[np.bool_]
    side_from: tuple[str, ...] = ()

    @property
    def middle(self) -> Floats:
        """Midpoints (n, 3) of the segments."""
        half = self.start + self.end
        middle: Floats = half / np.sqrt(dot(half, half))[:, np.newaxis]
        return middle

    @property
    def length_rad(self) -> Floats:
        """Lengths (n,) of the segments, radians."""
        return angular_distance(self.start, self.end)


def margin_line(
    lines: Sequence[tuple[Floats, Floats]],
    between: tuple[str, str],
    left: str | None = None,
    outlines: Outlines | None = None,
    every_km: float = 50.0,
    latitudes: Latitudes | None = None,
) -> MarginLine:
    """Lines (latitudes, longitudes in degrees) cut into segments of at most `every_km`.

    The side of the first plate comes from `left`, the plate that lies to the left of the lines as
    drawn, or from outlines (each segment looks 2 km to both sides; segments that see neither plate
    take the answer of most others), else the first plate is taken to lie on the left. Raises
    InputError for a line with fewer than two different points or a plate that is not of the two.
    """
    kind = latitudes or Latitudes()
    starts, ends, numbers = [], [], []
    for number, (lat, lon) in enumerate(lines):
        vertices = unit_vectors(kind.inward(lat), lon)
        keep = np.append(True, angular_distance(vertices[1:], vertices[:-1]) > 1e-12)
        vertices = vertices[keep]
        if len(vertices) < 2:
            raise InputError(f"line {number + 1} has {len(vertices)} different points; a margin needs two")
        dense, _ = densified_arcs(vertices, every_km / EARTH_RADIUS_KM)
        starts.append(dense[:-1])
        ends.append(dense[1:])
        numbers.append(np.full(len(dense) - 1, number))
    start, end, line = np.concatenate(starts), np.concatenate(ends), np.concatenate(numbers)
    on_left = np.ones(len(line), dtype=bool)
    side_from = ("assumed",) * len(line)
    segments = MarginLine(start, end, line, on_left, side_from)
    if left is not None:
        if left not in between:
            raise InputError(f"left = {left!r}: must be one of {' and '.join(between)}")
        on_left, side_from = np.full(len(line), left == between[0]), ("given",) * len(line)
    elif outlines is not None:
        on_left, side_from = _side_by_outlines(segments, between, outlines)
    return MarginLine(start, end, line, on_left, side_from)


def _left_normal(segments: MarginLine) -> Floats:
    """Horizontal unit vectors (n, 3) to the left of the segments at their midpoints."""
    normal = np.cross(segments.start, segments.end)
    size = np.linalg.norm(normal, axis=-1, keepdims=True)
    unit: Floats = normal / size
    return unit


def _side_by_outlines(
    segments: MarginLine, between: tuple[str, str], outlines: Outlines
) -> tuple[NDArray[np.bool_], tuple[str, ...]]:
    step = SIDE_STEP_KM / EARTH_RADIUS_KM * _left_normal(segments)
    count = len(segments.line)
    votes = np.zeros(count, dtype=int)
    seen: set[str] = set()
    for sign, on_this_side in ((1.0, between), (-1.0, between[::-1])):
        lat, lon = lat_lon(segments.middle + sign * step)
        found = outlines.plate_at(outlines.latitudes.outward(lat), lon).outline
        labels = np.array([*(outline.plate for outline in outlines.outlines), ""], dtype=object)[found]
        votes += (labels == on_this_side[0]).astype(int) - (labels == on_this_side[1]).astype(int)
        seen |= set(labels.tolist())
    on_left = np.zeros(count, dtype=bool)
    for number in np.unique(segments.line):
        own = segments.line == number
        if not np.any(votes[own]):
            beside = ", ".join(sorted(seen - {""})) or "no plate"
            raise InputError(
                f"line {number + 1}: the outlines do not show {between[0]} on one side and {between[1]} on the"
                f" other, {SIDE_STEP_KM:g} km off the line, but {beside}; bring it to the boundary, or name"
                " the plate on its left"
            )
        on_left[own] = np.where(votes[own] == 0, votes[own].sum() > 0, votes[own] > 0)
    return on_left, tuple("outlines" if vote else "other segments" for vote in votes.tolist())


@dataclass(frozen=True, eq=False)
class Margin:
    """Rates along a margin at one age, by segment `(n,)`, mm/yr; see the module for the signs.

    `obliquity_deg`: angle of the motion from the line's normal, [0, 90]. `regime`: the larger of the
    two components in a word. Sigmas are of the errors of rows, NaN where not known.
    """

    line: MarginLine
    rates: Rates
    normal_mm_yr: Floats
    parallel_mm_yr: Floats
    normal_sigma_mm_yr: Floats
    parallel_sigma_mm_yr: Floats

    @property
    def obliquity_deg(self) -> Floats:
        """Angle between the motion and the line's normal, degrees in [0, 90]; NaN at rest."""
        oblique = np.rad2deg(np.arctan2(np.abs(self.parallel_mm_yr), np.abs(self.normal_mm_yr)))
        return np.where(self.rates.speed_mm_yr > 0.0, oblique, np.nan)

    @property
    def regime(self) -> list[str]:
        """The regime of each segment in a word, empty at rest."""
        sliding = np.abs(self.parallel_mm_yr) > np.abs(self.normal_mm_yr)
        code = np.where(
            sliding, np.where(self.parallel_mm_yr > 0.0, 3, 2), np.where(self.normal_mm_yr > 0.0, 0, 1)
        )
        moving = self.rates.speed_mm_yr > 0.0
        return [REGIMES[c] if m else "" for c, m in zip(code.tolist(), moving.tolist(), strict=True)]

    def columns(self) -> dict[str, Any]:
        """The columns of the command, in its order."""
        return {
            "line": self.line.line + 1,
            "segment": np.arange(1, len(self.line.line) + 1),
            "length_km": self.line.length_rad * EARTH_RADIUS_KM,
            **self.rates.columns(),
            "normal_mm_yr": self.normal_mm_yr,
            "parallel_mm_yr": self.parallel_mm_yr,
            "normal_sigma_mm_yr": self.normal_sigma_mm_yr,
            "parallel_sigma_mm_yr": self.parallel_sigma_mm_yr,
            "obliquity_deg": self.obliquity_deg,
            "regime": self.regime,
        }


def margin_rates(
    history: History,
    between: tuple[str, str],
    line: MarginLine,
    age_ma: float = 0.0,
    at_on: str = "plate",
    latitudes: Latitudes | None = None,
    radius_km: float = EARTH_RADIUS_KM,
    beyond: str = "refuse",
) -> Margin:
    """Rates of the first plate relative to the second along a margin at an age (Ma).

    `at_on = "plate"`: the line is today's on the first plate, carried back with it; `relative-to`: it
    stays in coordinates of the second. Raises DomainError where the history has no answer.
    """
    kind = latitudes or Latitudes()
    lat, lon = lat_lon(line.middle)
    found = rates(history, *between, kind.outward(lat), lon, age_ma, at_on, kind, radius_km, beyond)
    ends = (line.start, line.end)
    then = unit_vectors(kind.inward(found.then_lat_deg), found.then_lon_deg)
    if at_on == "plate" and found.found is not None:
        ends = tuple(found.found.rotations.apply(end) for end in ends)  # type: ignore[assignment]
        then = found.found.rotations.apply(line.middle)
    along = np.deg2rad(azimuth_deg(then, ends[1]))
    # n is to the left of the line where the first plate lies there, else to its right
    side = np.where(line.first_on_left, 1.0, -1.0)
    n_east, n_north = -np.cos(along) * side, np.sin(along) * side
    east, north = found.east_mm_yr, found.north_mm_yr
    ee, nn, en = found.covariance[:, 0, 0], found.covariance[:, 1, 1], found.covariance[:, 0, 1]
    # n x up is n turned clockwise: east -> south
    normal = east * n_east + north * n_north
    parallel = east * n_north - north * n_east
    var_normal = n_east**2 * ee + n_north**2 * nn + 2.0 * n_east * n_north * en
    var_parallel = n_north**2 * ee + n_east**2 * nn - 2.0 * n_east * n_north * en
    return Margin(
        line,
        found,
        normal,
        parallel,
        np.sqrt(np.maximum(var_normal, 0.0)),
        np.sqrt(np.maximum(var_parallel, 0.0)),
    )


def margin_totals(
    history: History,
    between: tuple[str, str],
    line: MarginLine,
    older_ma: float,
    younger_ma: float,
    at_on: str = "plate",
    radius_km: float = EARTH_RADIUS_KM,
) -> dict[str, Floats]:
    """Crust made (> 0) or consumed (< 0) along each segment between two ages (Ma): km2, and km of it.

    The area that a line of ends r1, r2 sweeps on its left is `R^2 omega . (r1 - r2)` per unit of time,
    whatever its shape: the integral of `(omega x r) . (r x t)` along it. It is exact within a stage of
    one link; composed chains are integrated between their rows' ages with eight Gauss-Legendre nodes.
    Raises InputError if the ages are not in order, DomainError where the history has no answer.
    """
    if not older_ma > younger_ma >= 0.0:
        raise InputError(f"from {older_ma:g} to {younger_ma:g} Ma: the first age must be the older one")
    circuit = Circuit(history, between[1])
    cuts = circuit.row_ages(between[0], younger_ma, older_ma)
    edges = np.concatenate([[younger_ma], cuts, [older_ma]])
    half = 0.5 * np.diff(edges)
    ages = (edges[:-1, None] + half[:, None] * (1.0 + _NODES)).ravel()
    weights = (half[:, None] * _WEIGHTS).ravel()
    found = circuit.rotations(between[0], ages)
    bad = np.flatnonzero(found.status != REACHED)
    if len(bad):
        raise circuit.no_answer(between[0], float(ages[bad[0]]), int(found.status[bad[0]]))
    turning = angular_velocity(found)
    if at_on != "plate":
        turning = found.rotations.apply(turning)
    swept = (turning * weights[:, np.newaxis]).sum(axis=0)
    side = np.where(line.first_on_left, 1.0, -1.0)
    # the chord keeps its digits where the difference of two nearly equal products would not
    area = radius_km**2 * side * ((line.start - line.end) @ swept)
    length = line.length_rad * radius_km
    return {"length_km": length, "area_km2": area, "normal_km": area / length}


def margin_table(
    history: History,
    between: tuple[str, str],
    line: MarginLine,
    ages: Sequence[float],
    at_on: str = "plate",
    latitudes: Latitudes | None = None,
    radius_km: float = EARTH_RADIUS_KM,
    beyond: str = "refuse",
) -> dict[str, Any]:
    """Rates along a margin at ages (Ma) as columns, by segment and then by age."""
    kind = latitudes or Latitudes()
    tables = [
        margin_rates(history, between, line, age, at_on, kind, radius_km, beyond).columns() for age in ages
    ]
    order = np.arange(len(line.line) * len(ages)).reshape(len(ages), -1).T.ravel()
    columns: dict[str, Any] = {}
    for name in tables[0]:
        values = np.concatenate([np.asarray(table[name]) for table in tables])[order]
        columns[name] = values if values.dtype.kind == "f" else values.tolist()
    columns |= _sides(between, line, order % len(line.line))
    return columns | _said(between, at_on, kind, len(order), "error of rows only")


def margin_totals_table(
    history: History,
    between: tuple[str, str],
    line: MarginLine,
    older_ma: float,
    younger_ma: float,
    at_on: str = "plate",
    latitudes: Latitudes | None = None,
    radius_km: float = EARTH_RADIUS_KM,
) -> dict[str, Any]:
    """Crust made or consumed between two ages (Ma) as columns, by segment (see `margin_totals`)."""
    kind = latitudes or Latitudes()
    totals = margin_totals(history, between, line, older_ma, younger_ma, at_on, radius_km)
    lat, lon = lat_lon(line.middle)
    count = len(line.line)
    columns: dict[str, Any] = {
        "line": (line.line + 1).tolist(),
        "segment": list(range(1, count + 1)),
        "lat_deg": kind.outward(lat),
        "lon_deg": lon,
        "from_age_ma": np.full(count, older_ma),
        "to_age_ma": np.full(count, younger_ma),
        "length_km": totals["length_km"],
        "normal_km": totals["normal_km"],
        "area_km2": totals["area_km2"],
    }
    columns["crust"] = [
        "made" if area > 0.0 else "consumed" if area < 0.0 else "" for area in totals["area_km2"]
    ]
    columns |= _sides(between, line, np.arange(count))
    return columns | _said(between, at_on, kind, count, "not known")


def _sides(between: tuple[str, str], line: MarginLine, segments: NDArray[np.int64]) -> dict[str, list[str]]:
    """Which plate lies to the left of each segment as drawn, and how that is known."""
    left = [between[0] if on_left else between[1] for on_left in line.first_on_left[segments].tolist()]
    return {"left_plate": left, "side_from": [line.side_from[i] for i in segments.tolist()]}


def _said(
    between: tuple[str, str], at_on: str, latitudes: Latitudes, count: int, errors: str
) -> dict[str, list[str]]:
    said = {"plate": between[0], "relative_to": between[1], "at_on": at_on}
    said |= {"latitudes": latitudes.kind, "errors": errors}
    return {name: [text] * count for name, text in said.items()}
