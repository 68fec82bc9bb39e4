"""A line with an age at each of its points, and the place on it that is nearest to others."""

from __future__ import annotations

import itertools
from collections.abc import Callable
from dataclasses import dataclass

import numpy as np

from restore.geometry.circles import foot_on_arc
from restore.geometry.sphere import Floats, angular_distance, length

LONGEST_KM = 0.5
"""The greatest piece of a curve: a great circle leaves it by less than 5 mm."""
MOST_POINTS = 200_000
AT_ONCE = 4_000_000


@dataclass(frozen=True, eq=False)
class Foot:
    """The nearest place on a curve `(n,)`: its age (Ma), km along the curve, and km off it.

    `across_km` is positive to the right of the curve, looking from young to old; `ahead` `(n, 3)` is the
    unit vector that looks there, zero where the curve stays in one place.
    """

    age_ma: Floats
    along_km: Floats
    across_km: Floats
    ahead: Floats


@dataclass(frozen=True, eq=False)
class Curve:
    """Places `(j, 3)` by age `(j,)`, close together, with the distance along the curve, km."""

    ages: Floats
    places: Floats
    along_km: Floats
    radius_km: float

    @classmethod
    def of(cls, edges: Floats, at: Callable[[Floats], Floats], radius_km: float) -> Curve:
        """A curve `at` (ages to unit vectors) that is smooth between some ages, the `edges`.

        Where `at` gives NaN there is no curve.
        """
        corners = at(edges)
        apart = angular_distance(corners[:-1], corners[1:]) * radius_km
        # a curve that comes back has a short chord: eight pieces show how far it went
        fine = np.concatenate([np.linspace(a, b, 9)[:-1] for a, b in itertools.pairwise(edges)])
        fine = np.append(fine, edges[-1])
        steps = angular_distance(at(fine)[:-1], at(fine)[1:]) * radius_km
        whole = np.maximum(steps.reshape(len(apart), 8).max(axis=1) * 8.0, apart)
        wanted = np.nan_to_num(np.ceil(whole * 1.1 / LONGEST_KM))
        counts = np.clip(wanted, 8, MOST_POINTS).astype(int)
        parts = [
            np.linspace(a, b, n + 1)[:-1] for a, b, n in zip(edges[:-1], edges[1:], counts, strict=True)
        ]
        ages = np.append(np.concatenate(parts), edges[-1])
        places = at(ages)
        good = ~np.isnan(places[:, 0])
        ages, places = ages[good], places[good]
        lengths = angular_distance(places[:-1], places[1:]) * radius_km
        return cls(ages, places, np.concatenate([[0.0], np.cumsum(lengths)]), radius_km)

    def nearest(self, points: Floats) -> Foot:
        """The nearest place to each point `(n, 3)`.

        A curve that stays in one place has no left and right: the distance is then positive.
        """
        if len(self.ages) < 2:
            blank = np.full(len(points), np.nan)
            return Foot(blank, blank, blank, np.full((len(points), 3), np.nan))
        if self.along_km[-1] == 0.0:
            off = angular_distance(points, self.places[:1]) * self.radius_km
            zero = np.zeros((len(points), 3))
            return Foot(np.full(len(points), self.ages[0]), zero[:, 0], off, zero)
        number = np.arange(len(self.ages), dtype=np.float64)
        position, off, ahead = self._positions(points)
        return Foot(
            np.interp(position, number, self.ages),
            np.interp(position, number, self.along_km),
            off * self.radius_km,
            ahead,
        )

    def _positions(self, points: Floats) -> tuple[Floats, Floats, Floats]:
        """Places on the curve counted in its pieces, how far off, and the direction of the piece.

        Only the pieces at the nearest vertex are looked at.
        """
        moving = np.concatenate([[True], np.diff(self.along_km) > 0.0])
        number, vertices = np.flatnonzero(moving), self.places[moving]
        position, off = np.empty(len(points)), np.empty(len(points))
        ahead = np.empty((len(points), 3))
        block = max(1, AT_ONCE // len(vertices))
        for at in range(0, len(points), block):
            p = points[at : at + block]
            nearest = np.argmax(p @ vertices.T, axis=1)
            first = np.stack([np.maximum(nearest - 1, 0), np.minimum(nearest, len(vertices) - 2)], axis=1)
            fraction, across = foot_on_arc(p[:, np.newaxis], vertices[first], vertices[first + 1])
            pick = np.arange(len(p)), np.argmin(np.abs(across), axis=1)
            begin, end = number[first[pick]], number[first[pick] + 1]
            position[at : at + block] = np.where(
                fraction[pick] > 0.0, end - 1.0 + fraction[pick], begin.astype(np.float64)
            )
            off[at : at + block] = across[pick]
            piece = vertices[first[pick] + 1] - vertices[first[pick]]
            ahead[at : at + block] = piece / length(piece)[:, np.newaxis]
        return position, off, ahead
