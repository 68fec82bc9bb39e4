"""Flowlines and isochrons against what was observed: digitised fracture zones, anomaly picks."""

from __future__ import annotations

import math
import os
from collections.abc import Sequence
from dataclasses import dataclass
from typing import Any

import numpy as np
from numpy.typing import NDArray

from restore.errors import TableError, raise_faults
from restore.files.columns import ColumnTable, read_columns
from restore.files.delimited import Layout
from restore.findings import Finding, did_you_mean
from restore.geometry import so3
from restore.geometry.circles import nearest_on_line
from restore.geometry.sphere import Floats, angular_distance, cross, dot, length, unit_vectors
from restore.history.circuit import REACHED
from restore.history.links import Ints
from restore.history.tracked import Tracked, row_variance
from restore.motion.flowlines import Spreading
from restore.motion.half_stages import HalfStages
from restore.motion.isochrons import RidgeLine
from restore.motion.nearest import Curve
from restore.motion.ridge_points import RidgePoints

TAKEN = frozenset(
    {"line", "age_ma", "along_km", "distance_km", "line_sigma_km", "sigmas", "probability", "plate"}
)
STAGE_COLUMNS = (
    *("plate", "younger_ma", "older_ma", "points"),
    *("rms_km", "mean_km", "mean_sigma_km", "probability"),
)
TOUCHING = 1e-9
"""Radians (6 mm): within it a point is on the line and its direction from it is rounding noise."""
SHORT_MYR = 1e-3


@dataclass(frozen=True, eq=False)
class Misfits:
    """Observed points `(n,)` against lines: signed `distance_km`, the crust's `age_ma` at the foot.

    `line`: which line is nearest. `sigma_km`: of the line, from the errors of rows, across it;
    `weights` `(n, m, 3)`: how the distance (radians) moves with each of the `rows`.
    """

    observed: ColumnTable
    line: list[str]
    age_ma: Floats
    along_km: Floats
    distance_km: Floats
    sigma_km: Floats
    weights: Floats
    rows: Ints

    def columns(self) -> dict[str, Any]:
        """One row per observed point, in its order.

        `sigmas`: the distance over the joined sigma of the line and of the point (`sigma_km` of its
        table); `probability` that errors alone make a distance as great (normal, two-sided).
        """
        own = np.nan_to_num(self.observed.numbers["sigma_km"])
        with np.errstate(divide="ignore", invalid="ignore"):
            both = np.hypot(self.sigma_km, own)
            sigmas = np.where(both > 0.0, self.distance_km / both, np.nan)
        return {
            "point": [t or str(row + 1) for row, t in enumerate(self.observed.texts["point"])],
            "plate": self.observed.texts["plate"],
            "lat_deg": self.observed.numbers["lat_deg"],
            "lon_deg": self.observed.numbers["lon_deg"],
            "line": self.line,
            "age_ma": self.age_ma,
            "along_km": self.along_km,
            "distance_km": self.distance_km,
            "line_sigma_km": self.sigma_km,
            "sigmas": sigmas,
            "probability": _two_sided(sigmas),
            **{n: v for n, v in self.observed.own.items() if n not in TAKEN},
        }

    def by_stage(self, edges: Floats, spreading: Spreading) -> dict[str, Any]:
        """Root mean square and mean distance by plate and stage, and over all ages (the last of a plate).

        The mean's sigma holds what the errors of the rows do to all the points together, and the points'
        own sigmas; `probability` that errors alone make a mean as far from 0.
        """
        columns: dict[str, list[Any]] = {name: [] for name in STAGE_COLUMNS}
        plates = np.array(self.observed.texts["plate"], dtype=object)
        spans = [*zip(edges[:-1].tolist(), edges[1:].tolist(), strict=True)]
        for plate in spreading.plates:
            mine = ~np.isnan(self.distance_km) & (plates == plate)
            for younger, older in spans:
                # at an age shared by two stages the younger one counts
                begun = self.age_ma > younger if younger > spans[0][0] else self.age_ma >= younger
                values = self._summary(mine & begun & (self.age_ma <= older), spreading)
                for name, value in zip(STAGE_COLUMNS, (plate, younger, older, *values), strict=True):
                    columns[name].append(value)
            values = self._summary(mine, spreading)
            whole = (plate, float(edges[0]), float(edges[-1]), *values)
            for name, value in zip(STAGE_COLUMNS, whole, strict=True):
                columns[name].append(value)
        filled = [number for number, count in enumerate(columns["points"]) if count]
        return {
            name: [values[n] for n in filled] if name == "plate" else np.array(values)[filled]
            for name, values in columns.items()
        }

    def _summary(
        self, here: NDArray[np.bool_], spreading: Spreading
    ) -> tuple[int, float, float, float, float]:
        """Points, root mean square, mean, sigma of the mean (km), and its probability."""
        distance, count = self.distance_km[here], int(here.sum())
        if not count:
            return 0, math.nan, math.nan, math.nan, math.nan
        errors = spreading.circuit.history.row_errors()
        of_rows = math.nan
        if spreading.errors:
            variance = float(row_variance(self.weights[here].mean(axis=0), self.rows, errors))
            of_rows = math.sqrt(max(variance, 0.0)) * spreading.radius_km
        own = np.nan_to_num(self.observed.numbers["sigma_km"][here])
        sigma = math.hypot(of_rows, math.sqrt(float(np.sum(own**2))) / count)
        mean = float(distance.mean())
        sure = np.array([mean / sigma if sigma > 0.0 else math.nan])
        return count, math.sqrt(float(np.mean(distance**2))), mean, sigma, float(_two_sided(sure)[0])


def _two_sided(sigmas: Floats) -> Floats:
    return np.array([math.erfc(abs(s) / math.sqrt(2.0)) for s in sigmas.tolist()])


def read_observed(
    path: str | os.PathLike[str],
    spreading: Spreading,
    aged: bool = False,
    layout: Layout | None = None,
) -> ColumnTable:
    """Read `plate, lat_deg, lon_deg[, point, start, age_ma, chron, sigma_km]`.

    `plate`: one of the two, on which the point was observed. `aged`: every point needs an age. Raises
    TableError, one line per fault.
    """
    numbers, texts = ("lat_deg", "lon_deg", "age_ma", "sigma_km"), ("plate", "point", "start")
    required = ("plate", "lat_deg", "lon_deg", *(("age_ma",) if aged else ()))
    table = read_columns(path, numbers, texts, required, layout)
    findings = [
        Finding(
            "error", "plate", table.place(row), f"plate = {label!r}",
            remedy=did_you_mean(label, spreading.plates),
        )
        for row, label in enumerate(table.texts["plate"])
        if label not in spreading.plates
    ]  # fmt: skip
    raise_faults(TableError, findings)
    return table


def against_flowlines(
    spreading: Spreading, starts: RidgePoints, observed: ColumnTable
) -> tuple[Misfits, HalfStages]:
    """Observed points against the nearest flowline on their plate, or against that of their `start`.

    Distances are positive to the right of the flowline, looking away from the ridge. Also the stages.
    Raises TableError for a `start` that is not there, else as `flowlines` does.
    """
    findings = [
        Finding("error", "start", observed.place(row), f"no start point {name!r}",
                remedy=did_you_mean(name, starts.start))
        for row, name in enumerate(observed.texts["start"])
        if name and name not in starts.start
    ]  # fmt: skip
    raise_faults(TableError, findings)
    oldest = max(spreading.ages)
    youngest = float(starts.age_ma.min()) if len(starts) else 0.0
    half = spreading.half_stages(youngest, max(oldest, youngest))
    kind = spreading.latitudes
    points = unit_vectors(kind.inward(observed.numbers["lat_deg"]), observed.numbers["lon_deg"])
    vectors = unit_vectors(kind.inward(starts.lat_deg), starts.lon_deg)
    nearest = _Nearest(spreading, half, points)
    for row, name in enumerate(starts.start):
        start_ma, first = float(starts.age_ma[row]), bool(starts.on_first[row])
        for side, plate in enumerate(spreading.plates):
            mine = [
                number
                for number, (its_plate, its_start) in enumerate(
                    zip(observed.texts["plate"], observed.texts["start"], strict=True)
                )
                if its_plate == plate and its_start in {"", name}
            ]
            if mine and oldest > start_ma:
                nearest.take(np.array(mine), name, _Arm(start_ma, first, side, vectors[row]))
    return nearest.misfits(observed), half


@dataclass(frozen=True, eq=False)
class _Arm:
    """One arm: the age of its start point, on which plate that is given and on which the arm lies."""

    start_ma: float
    first: bool
    side: int
    start: Floats


class _Nearest:
    """For each observed point the nearest arm so far."""

    def __init__(self, spreading: Spreading, half: HalfStages, points: Floats) -> None:
        self.spreading, self.half, self.points = spreading, half, points
        # a curve has many points, and only its nearest one needs its errors
        self.plain = half.without_errors()
        count = len(points)
        self.line = [""] * count
        self.age, self.along, self.distance = (np.full(count, np.nan) for _ in range(3))
        self.pieces: list[tuple[Ints, Floats, Ints]] = []
        self.owner = np.full(count, -1, dtype=np.int64)

    def take(self, mine: Ints, name: str, arm: _Arm) -> None:
        """Compare some points with one arm."""
        oldest = max(self.spreading.ages)
        inside = self.half.edges[(self.half.edges > arm.start_ma) & (self.half.edges < oldest)]
        edges = np.unique(np.concatenate([[arm.start_ma], inside, [oldest]]))

        def at(ages: Floats) -> Floats:
            reach = self.plain.reach(arm.start_ma, arm.first, ages)
            moved = reach.on[arm.side].apply(arm.start)
            return np.where((reach.status == REACHED)[:, np.newaxis], moved, np.nan)

        foot = Curve.of(edges, at, self.spreading.radius_km).nearest(self.points[mine])
        better = ~(np.abs(foot.across_km) >= np.abs(self.distance[mine])) & ~np.isnan(foot.across_km)
        chosen = mine[better]
        if not len(chosen):
            return
        self.age[chosen], self.along[chosen] = foot.age_ma[better], foot.along_km[better]
        self.distance[chosen] = foot.across_km[better]
        for number in chosen.tolist():
            self.line[number] = name
        turn = self.half.reach(arm.start_ma, arm.first, self.age[chosen]).on[arm.side]
        right = cross(foot.ahead[better], turn.apply(arm.start))
        # a line that moves to the right leaves the point farther to its left
        weights = -_step_weights(turn, np.broadcast_to(arm.start, right.shape), right)
        self.owner[chosen] = len(self.pieces)
        self.pieces.append((chosen, weights, turn.rows))

    def misfits(self, observed: ColumnTable) -> Misfits:
        """All points with what was nearest."""
        rows = np.unique(np.concatenate([np.zeros(0, np.int64), *(piece[2] for piece in self.pieces)]))
        weights = np.zeros((len(self.points), len(rows), 3))
        for number, (chosen, own, its_rows) in enumerate(self.pieces):
            still = self.owner[chosen] == number
            weights[np.ix_(chosen[still], np.searchsorted(rows, its_rows))] = own[still]
        sigma = _sigma_km(self.spreading, weights, rows)
        sigma = np.where(np.isnan(self.distance), np.nan, sigma)
        return Misfits(observed, self.line, self.age, self.along, self.distance, sigma, weights, rows)


def _sigma_km(spreading: Spreading, weights: Floats, rows: Ints) -> Floats:
    if not spreading.errors:
        return np.full(len(weights), np.nan)
    variance = row_variance(weights, rows, spreading.circuit.history.row_errors())
    sigma: Floats = np.sqrt(np.maximum(variance, 0.0)) * spreading.radius_km
    return sigma


def _step_weights(turn: Tracked, start: Floats, direction: Floats) -> Floats:
    """How the step of turned points along a direction moves with each row: `(n, m, 3)`, radians."""
    covector = cross(start, so3.rotate_back(turn.quaternions, direction))
    weights: Floats = np.einsum("ni,nmij->nmj", covector, turn.jacobians)
    return weights


def against_isochrons(
    spreading: Spreading, lines: Sequence[RidgeLine], observed: ColumnTable
) -> tuple[Misfits, HalfStages]:
    """Anomaly picks against the isochron of their own age on their plate.

    Each pick is brought back to the ridge that made it; distances are positive where the pick lies
    farther from the ridge than the isochron. Also the stages. Raises as `flowlines` does.
    """
    ages = observed.numbers["age_ma"]
    half = spreading.half_stages(0.0, float(ages.max()) if len(ages) else 0.0)
    kind = spreading.latitudes
    points = unit_vectors(kind.inward(observed.numbers["lat_deg"]), observed.numbers["lon_deg"])
    count = len(points)
    distance, along = np.full(count, np.nan), np.full(count, np.nan)
    names = [""] * count
    reach = half.reach(0.0, False, ages)
    rows = np.union1d(reach.on[0].rows, reach.on[1].rows)
    weights = np.zeros((count, len(rows), 3))
    plates = np.array(observed.texts["plate"], dtype=object)
    for side, plate in enumerate(spreading.plates):
        mine = np.flatnonzero((plates == plate) & (reach.status == REACHED))
        turn = reach.on[side][mine].by_rows(rows)
        at_ridge = so3.rotate_back(turn.quaternions, points[mine])
        flow = so3.rotate_back(turn.quaternions, _flow(half, side, ages[mine], points[mine]))
        for line in lines if len(mine) else ():
            feet = _from_ridge(at_ridge, flow, line.vectors(kind))
            better = ~(np.abs(feet.off) * spreading.radius_km >= np.abs(distance[mine]))
            chosen = mine[better]
            distance[chosen] = feet.off[better] * spreading.radius_km
            along[chosen] = feet.along[better] * spreading.radius_km
            for number in chosen.tolist():
                names[number] = line.name
            outward = so3.rotate(turn.quaternions, feet.outward)
            weights[chosen] = -_step_weights(turn, feet.foot, outward)[better]
    sigma = np.where(np.isnan(distance), np.nan, _sigma_km(spreading, weights, rows))
    return Misfits(observed, names, ages, along, distance, sigma, weights, rows), half


@dataclass(frozen=True, eq=False)
class _RidgeFeet:
    """For points brought back to the ridge: how far off (radians, positive outward), how far along it
    (radians), the unit vector outward and the foot.
    """

    off: Floats
    along: Floats
    outward: Floats
    foot: Floats


def _from_ridge(points: Floats, flow: Floats, vertices: Floats) -> _RidgeFeet:
    position, off = nearest_on_line(points, vertices)
    arcs = angular_distance(vertices[:-1], vertices[1:])
    along = np.interp(position, np.arange(len(vertices)), np.concatenate([[0.0], np.cumsum(arcs)]))
    # repeated vertices make no edge: the one before them goes on
    edges = np.flatnonzero(arcs > 0.0)
    edge = edges[np.clip(np.searchsorted(edges, np.floor(position), side="right") - 1, 0, len(edges) - 1)]
    fraction = np.clip(position - edge, 0.0, 1.0)[:, np.newaxis]
    foot = (1.0 - fraction) * vertices[edge] + fraction * vertices[edge + 1]
    foot = foot / length(foot)[:, np.newaxis]
    across = cross(vertices[edge + 1] - vertices[edge], foot)
    # a pick on the line itself would be off it across the line, one past a corner is off the corner
    toward = np.where(np.abs(off)[:, np.newaxis] > TOUCHING, points - foot, across)
    outward = toward / length(toward)[:, np.newaxis]
    outward = np.where((dot(outward, flow) < 0.0)[:, np.newaxis], -outward, outward)
    sign = np.where(dot(points - foot, outward) >= 0.0, 1.0, -1.0)
    return _RidgeFeet(sign * np.abs(off), along, outward, foot)


def _flow(half: HalfStages, side: int, ages: Floats, points: Floats) -> Floats:
    """The direction `(n, 3)` in which the crust made at each age leaves the ridge, on a plate's side."""
    older = np.maximum(ages, SHORT_MYR)
    after, before = half.at(older).turn, half.at(older - SHORT_MYR).turn
    if side == 1:
        step = so3.multiply(after.quaternions, so3.conjugate(before.quaternions))
    else:
        step = so3.multiply(so3.conjugate(after.quaternions), before.quaternions)
    return cross(so3.logarithm(step), points)
