"""Findings about pairs: rows that do not fit their neighbours, stages too fast, too far, too rough.

A row is judged by where its neighbours say that the plate was at its age: between them along the
stage that leaves the row out. The present, where a plate is where it is, counts as a neighbour.
"""

from __future__ import annotations

import math
from collections.abc import Iterator, Sequence
from dataclasses import dataclass
from itertools import pairwise

import numpy as np

from restore.findings import Finding
from restore.geometry import so3
from restore.geometry.sphere import EARTH_RADIUS_KM, Floats
from restore.geometry.uncertain import significance
from restore.history.audit.places import pair_name, place_of_row
from restore.history.links import Pair
from restore.history.store import History

FASTEST_KM_PER_MYR = 250.0
"""No plate is known to have moved faster (common practice)."""

MISFIT_KM = 500.0
"""A row less far from its neighbours' path is not suspected of a slip of the pen."""

BETTER_BY = 5.0
"""A suspected slip must bring the row this many times nearer when it is undone."""

WIDEST_STAGE_DEG = 90.0
SHORT_STAGE_MYR = 3.0
CHANCE = 0.001


@dataclass(frozen=True, eq=False)
class Track:
    """One pair as a track in rotation space: ages, quaternions (n, 4) and row numbers (-1 today)."""

    name: str
    ages: Floats
    turns: Floats
    rows: np.ndarray

    @classmethod
    def of(cls, history: History, pair: Pair) -> Track:
        """The pair's rows with the present before them."""
        numbers, ages = pair.rows, pair.ages
        turns = np.concatenate([history.rows.rotations().quaternions, so3.IDENTITY[None]])[numbers]
        if ages[0] > 0.0:
            numbers, ages = np.insert(numbers, 0, -1), np.insert(ages, 0, 0.0)
            turns = np.concatenate([so3.IDENTITY[None], turns])
        return cls(pair_name(pair.plate, pair.relative_to), ages, turns, numbers)

    def expected(self, at: int) -> Floats:
        """Where the neighbours put row `at`; beyond the oldest the last stage goes on."""
        one, other = (at - 1, at + 1) if at + 1 < len(self.ages) else (at - 2, at - 1)
        fraction = (self.ages[at] - self.ages[one]) / (self.ages[other] - self.ages[one])
        return so3.slerp(self.turns[one], self.turns[other], fraction)

    def misfit_km(self, at: int, turn: Floats) -> float:
        """Greatest distance on the globe between a rotation and the expected one at row `at`."""
        away = so3.multiply(so3.conjugate(self.expected(at)), turn)
        return float(so3.angle(away)) * EARTH_RADIUS_KM


@dataclass(frozen=True)
class Slip:
    """A suspected slip of the pen: the place in the track, what undoes it, and how far it is off."""

    at: int
    kind: str
    turn: Floats
    km: float
    left_km: float


def slips(history: History, pairs: Sequence[Pair]) -> Iterator[Finding]:
    """Rows that are far off their neighbours' path and near it with the sign or the unit changed."""
    words = {
        "sign": (
            "the angle's sign (or the sense of the turn) looks wrong",
            "compare the sign with the paper",
        ),
        "radians": ("the angle looks like radians", "angles are in degrees"),
    }
    for pair in pairs:
        _, found = corrected(Track.of(history, pair))
        for slip, row in found:
            said, remedy = words[slip.kind]
            what = (
                f"{pair_name(pair.plate, pair.relative_to)} at {history.rows.age_ma[row]:g} Ma is off its"
                f" neighbours' path: {said}; undone, it is {slip.left_km:.0f} km off"
            )
            yield Finding("error", f"likely {slip.kind}", place_of_row(history, row), what, slip.km, remedy)


def corrected(track: Track) -> tuple[Track, list[tuple[Slip, int]]]:
    """The track with suspected slips undone one after the other, worst first, and the slips by row."""
    found: list[tuple[Slip, int]] = []
    turns = np.array(track.turns)
    for _ in range(len(track.ages)):
        track = Track(track.name, track.ages, turns, track.rows)
        suspects = [s for at in range(1, len(track.ages)) if (s := _slip(track, at)) is not None]
        if not suspects:
            break
        worst = max(suspects, key=lambda s: s.km / max(s.left_km, 1.0))
        turns = np.array(turns)
        turns[worst.at] = worst.turn
        found.append((worst, int(track.rows[worst.at])))
    return track, sorted(found, key=lambda pair: pair[0].at)


def _slip(track: Track, at: int) -> Slip | None:
    if len(track.ages) < 4 or track.rows[at] < 0:
        return None
    km = track.misfit_km(at, track.turns[at])
    if km < MISFIT_KM:
        return None
    vector = so3.logarithm(track.turns[at])
    degrees = so3.exponential(vector * (180.0 / math.pi)) if np.linalg.norm(vector) < 0.1 else None
    for kind, turn in (("sign", so3.conjugate(track.turns[at])), ("radians", degrees)):
        if turn is None:
            continue
        left = track.misfit_km(at, turn)
        if left * BETTER_BY < km:
            return Slip(at, kind, turn, km, left)
    return None


def stages_too_fast_or_wide(history: History, pairs: Sequence[Pair]) -> Iterator[Finding]:
    """Stages faster than any plate is known to have moved, and stages of more than 90 degrees.

    Slips of the pen are undone first: they are findings by themselves.
    """
    for pair in pairs:
        track, _ = corrected(Track.of(history, pair))
        if len(track.ages) < 2:
            continue
        angles = so3.angle(so3.multiply(so3.conjugate(track.turns[:-1]), track.turns[1:]))
        rates = angles * EARTH_RADIUS_KM / np.diff(track.ages)
        for at in range(len(angles)):
            span = f"{track.ages[at]:g} to {track.ages[at + 1]:g} Ma"
            place = place_of_row(history, int(track.rows[at + 1]))
            if rates[at] > FASTEST_KM_PER_MYR:
                what = f"{track.name}, {span}: up to {rates[at]:.0f} mm/yr"
                remedy = f"above {FASTEST_KM_PER_MYR:.0f} mm/yr an age or an angle is likely wrong (common practice)"
                km = float(angles[at]) * EARTH_RADIUS_KM
                yield Finding("warning", "too fast", place, what, km, remedy)
            if math.degrees(angles[at]) > WIDEST_STAGE_DEG:
                what = f"{track.name}, {span}: a stage of {math.degrees(angles[at]):.1f} degrees"
                remedy = "the short way round is taken; add a row between them"
                yield Finding("warning", "wide stage", place, what, remedy=remedy)


def antipodal_poles(history: History, pairs: Sequence[Pair]) -> Iterator[Finding]:
    """Neighbouring rows whose poles are antipodal and whose angles differ in sign: one and the same
    rotation typed in two ways.
    """
    rows = history.rows
    for pair in pairs:
        numbers = [int(n) for n in pair.rows if n >= 0 and rows.angle_deg[n] != 0.0]
        vectors = so3.logarithm(rows.rotations().quaternions)
        for before, after in pairwise(numbers):
            signs = np.sign(rows.angle_deg[[before, after]])
            one, other = (vectors[n] / np.linalg.norm(vectors[n]) for n in (before, after))
            if signs[0] != signs[1] and float(one @ other) > 0.5:
                what = (
                    f"{pair_name(pair.plate, pair.relative_to)} at {rows.age_ma[after]:g} Ma: the pole is"
                    f" the antipode of its younger neighbour's, with the angle's sign"
                )
                place = place_of_row(history, after)
                remedy = "the rotation is the same; type both poles on one side"
                yield Finding("note", "antipodal pole", place, what, 0.0, remedy)


def rough_velocities(history: History, pairs: Sequence[Pair]) -> Iterator[Finding]:
    """Short stages whose velocity differs from both neighbours' by more than the rows' errors allow.

    The difference `w2 - (w1 + w3) / 2` of angular velocities in the plate's coordinates, each
    `-(u_older - u_younger) / dt` in its errors, against chi-square with 3 degrees of freedom.
    """
    errors = history.row_errors()
    for pair in pairs:
        track, _ = corrected(Track.of(history, pair))
        steps = np.diff(track.ages)
        between = so3.multiply(so3.conjugate(track.turns[:-1]), track.turns[1:])
        omega = -so3.logarithm(between) / steps[:, np.newaxis]
        for at in range(1, len(steps) - 1):
            rows = track.rows[at - 1 : at + 3]
            if steps[at] > SHORT_STAGE_MYR or not all(errors.known[r] for r in rows if r >= 0):
                continue
            weights = np.array([-0.5 / steps[at - 1], 0.5 / steps[at - 1] + 1.0 / steps[at], 0.0, 0.0])
            weights[2] = -(1.0 / steps[at] + 0.5 / steps[at + 1])
            weights[3] = 0.5 / steps[at + 1]
            covariance = np.zeros((3, 3))
            for row, weight in zip(rows, weights, strict=True):
                if row >= 0:
                    covariance += weight**2 * errors.covariance[row]
            kink = omega[at] - 0.5 * (omega[at - 1] + omega[at + 1])
            test = significance(kink, covariance)
            if test.probability < CHANCE:
                km = float(np.linalg.norm(kink)) * float(steps[at]) * EARTH_RADIUS_KM
                what = (
                    f"{track.name}, {track.ages[at]:g} to {track.ages[at + 1]:g} Ma: the velocity saws"
                    f" against both neighbours beyond its error (probability {test.probability:.1g})"
                )
                place = place_of_row(history, int(rows[1]))
                remedy = "noise in the rows or errors stated too small; consider longer stages"
                yield Finding("warning", "rough velocity", place, what, km, remedy)
