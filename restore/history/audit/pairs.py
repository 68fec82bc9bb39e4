"""Findings about pairs: rows that do not fit their neighbours, stages too fast, too far, too rough.

A row is judged by where its neighbours say that the plate was at its age: between them along the
stage that leaves the row out. The present, where a plate is where it is, counts as a neighbour.
"""

from __future__ import annotations

import math
from collections.abc import Iterator, Sequence
from dataclasses import dataclass, replace
from functools import cached_property

import numpy as np

from restore.findings import Finding
from restore.geometry import so3
from restore.geometry.sphere import EARTH_RADIUS_KM, Floats
from restore.geometry.uncertain import RowErrors, Significance, significance, welch_satterthwaite
from restore.history.audit.places import pair_name, place_of_row
from restore.history.audit.signs import roughness, turned_runs
from restore.history.links import Pair
from restore.history.store import History

FASTEST_KM_PER_MYR = 250.0
"""No plate is known to have moved faster (common practice)."""

MISFIT_KM = 500.0
"""A row less far from its neighbours' path is not suspected of a slip of the pen."""

BETTER_BY = 5.0
"""A suspected slip must bring the row this many times nearer when it is undone."""

SLOWEST_KM_PER_MYR = 3.0
"""A table that is slower throughout moves at plate speeds if its angles are radians."""

FEWEST_TO_JUDGE = 4
"""A row is judged by its neighbours only in a track of so many rows, the present among them."""

WIDEST_STAGE_DEG = 90.0
SHORT_STAGE_MYR = 3.0
CHANCE = 0.001


@dataclass(frozen=True, eq=False)
class Track:
    """One pair as a track in rotation space: ages, quaternions (n, 4) and row numbers (-1 today).

    `first`: the first stage in which the pair holds, 1 where the present is only a neighbour.
    """

    name: str
    ages: Floats
    turns: Floats
    rows: np.ndarray
    first: int = 0

    @classmethod
    def of(cls, pair: Pair, quaternions: Floats) -> Track:
        """The pair's rows with the present before them; `quaternions` of all rows, today's last."""
        numbers, ages = pair.rows, pair.ages
        first = int(ages[0] > 0.0)
        if first:
            numbers, ages = np.insert(numbers, 0, -1), np.insert(ages, 0, 0.0)
        name = pair_name(pair.plate, pair.relative_to)
        return cls(name, ages, quaternions[numbers], numbers, first)

    @cached_property
    def expected(self) -> Floats:
        """Where the neighbours put each row but the first; beyond the oldest the last stage goes on."""
        at = np.arange(1, len(self.ages))
        one, other = at - 1, at + 1
        one[-1], other[-1] = at[-1] - 2, at[-1] - 1
        fraction = (self.ages[at] - self.ages[one]) / (self.ages[other] - self.ages[one])
        return so3.slerp(self.turns[one], self.turns[other], fraction)

    def misfit_km(self, at: int, turn: Floats) -> float:
        """Greatest distance on the globe between a rotation and the expected one at row `at`."""
        away = so3.multiply(so3.conjugate(self.expected[at - 1]), turn)
        return float(so3.angle(away)) * EARTH_RADIUS_KM

    def misfits_km(self) -> Floats:
        """The same for every row but the first, as it stands."""
        away = so3.multiply(so3.conjugate(self.expected), self.turns[1:])
        return so3.angle(away) * EARTH_RADIUS_KM

    @cached_property
    def slips(self) -> list[tuple[Slip, int]]:
        """Suspected slips of the pen and their rows, by age."""
        return self._undone[1]

    @property
    def corrected(self) -> Track:
        """The track with its suspected slips undone."""
        return self._undone[0]

    @cached_property
    def _undone(self) -> tuple[Track, list[tuple[Slip, int]]]:
        """Slips are undone one after the other, worst first: one that is left misleads its neighbours."""
        track, found = self, list[tuple[Slip, int]]()
        while len(self.ages) >= FEWEST_TO_JUDGE and len(found) < len(self.ages):
            suspects = np.flatnonzero(track.misfits_km() >= MISFIT_KM) + 1
            slips = [*_in_radians(track, suspects.tolist())]
            slips = slips or ([*_turned_round(track)] if len(suspects) else [])
            if not slips:
                break
            worst = max(slips, key=lambda slip: slip.km / max(slip.left_km, 1.0))
            track = worst.undone(track)
            found.append((worst, int(track.rows[worst.at])))
        return track, sorted(found, key=lambda slip: slip[0].at)

    def stage_angles(self) -> Floats:
        """Angles of the stages, radians."""
        return so3.angle(so3.multiply(so3.conjugate(self.turns[:-1]), self.turns[1:]))


def tracks_of(history: History, pairs: Sequence[Pair]) -> list[Track]:
    """The tracks of all pairs."""
    quaternions = np.concatenate([history.rows.rotations().quaternions, so3.IDENTITY[None]])
    return [Track.of(pair, quaternions) for pair in pairs]


@dataclass(frozen=True)
class Slip:
    """A suspected slip of the pen: rows `at` to `last` of a track, their turns with the slip undone
    (n, 4), and how far the worst is off its neighbours' path, as it stands and undone.
    """

    at: int
    last: int
    kind: str
    turns: Floats
    km: float
    left_km: float

    def undone(self, track: Track) -> Track:
        """The track without the slip."""
        turns = np.array(track.turns)
        turns[self.at : self.last + 1] = self.turns
        return replace(track, turns=turns)


def slips(history: History, tracks: Sequence[Track]) -> Iterator[Finding]:
    """Rows that are far off their neighbours' path and near it with the sign or the unit changed."""
    words = {
        "sign": (
            "the angle's sign (or the sense of the turn) looks wrong",
            "compare the sign with the paper",
        ),
        "radians": ("the angle looks like radians", "angles are in degrees"),
    }
    for track in tracks:
        for slip, row in track.slips:
            said, remedy = words[slip.kind]
            age = f"{track.ages[slip.at]:g} Ma"
            if slip.last > slip.at:
                rows = slip.last - slip.at + 1
                age = f"{track.ages[slip.at]:g} to {track.ages[slip.last]:g} Ma ({rows} rows)"
                remedy = "compare the signs with the paper: these rows turn against the others"
            what = (
                f"{track.name} at {age} is off its neighbours' path: {said};"
                f" undone, it is {slip.left_km:.0f} km off"
            )
            yield Finding("error", f"likely {slip.kind}", place_of_row(history, row), what, slip.km, remedy)


def _in_radians(track: Track, suspects: Sequence[int]) -> Iterator[Slip]:
    for at in suspects:
        vector = so3.logarithm(track.turns[at])
        if track.rows[at] >= 0 and np.linalg.norm(vector) < math.radians(2.0 * math.pi):
            degrees = so3.exponential(vector * (180.0 / math.pi))
            km, left = track.misfit_km(at, track.turns[at]), track.misfit_km(at, degrees)
            if left * BETTER_BY < km:
                yield Slip(at, at, "radians", degrees[np.newaxis], km, left)


def _turned_round(track: Track) -> Iterator[Slip]:
    """Runs of rows that are on the others' path with their signs changed, judged at their ends."""
    for first, last in turned_runs(track.ages, track.turns):
        turns = so3.conjugate(track.turns[first : last + 1])
        slip = Slip(first, last, "sign", turns, 0.0, 0.0)
        undone = slip.undone(track)
        km, left = max(
            (undone.misfit_km(at, track.turns[at]), undone.misfit_km(at, undone.turns[at]))
            for at in {first, last}
        )
        # the present is its own mirror image: there is no jump from it to a row that is turned
        ends = [end for end in (first, last + 1) if 1 < end < len(track.ages)]
        jumps = [[roughness(t.ages, t.turns, end) for t in (track, undone)] for end in ends]
        clear = all(after * BETTER_BY < before for before, after in jumps)
        if km >= MISFIT_KM and left * BETTER_BY < km and (first == last or (ends and clear)):
            yield replace(slip, km=km, left_km=left)


def tables_in_radians(history: History, tracks: Sequence[Track]) -> Iterator[Finding]:
    """Tables in which nothing ever moved faster than a plate does if its angles are radians.

    Where all rows of a table have the wrong unit no neighbour gives a row away; the speeds do.
    """
    for number in range(len(history.tables)):
        own = [track for track in tracks if _is_of_table(history, track, number)]
        rows = np.flatnonzero((history.rows.table == number) & (history.rows.angle_deg != 0.0))
        if len(rows) < FEWEST_TO_JUDGE - 1 or not own:
            continue
        fastest = max(float(np.max(t.stage_angles() / np.diff(t.ages))) for t in own) * EARTH_RADIUS_KM
        angles = np.abs(history.rows.angle_deg[rows])
        if fastest >= SLOWEST_KM_PER_MYR or angles.max() > 2.0 * math.pi:
            continue
        row = int(rows[angles.argmax()])
        what = (
            f"all {len(rows)} angles of the table lie below 2 pi and the fastest stage has"
            f" {fastest:.2g} mm/yr: the angles look like radians"
        )
        remedy = "angles are in degrees; pass over this if the plates hardly moved"
        km = float(np.rad2deg(angles.max()) - angles.max()) * math.pi / 180.0 * EARTH_RADIUS_KM
        yield Finding("warning", "likely radians", place_of_row(history, row), what, km, remedy)


def _is_of_table(history: History, track: Track, number: int) -> bool:
    rows = track.rows[track.rows >= 0]
    return len(track.ages) > 1 and bool(np.all(history.rows.table[rows] == number))


def stages_too_fast_or_wide(history: History, tracks: Sequence[Track]) -> Iterator[Finding]:
    """Stages faster than any plate is known to have moved, and stages of more than 90 degrees.

    Slips of the pen are undone first: they are findings by themselves.
    """
    for track in (t.corrected for t in tracks):
        angles = track.stage_angles()
        rates = angles * EARTH_RADIUS_KM / np.diff(track.ages)
        doubtful = (rates > FASTEST_KM_PER_MYR) | (np.rad2deg(angles) > WIDEST_STAGE_DEG)
        for at in np.flatnonzero(doubtful):
            span = f"{track.ages[at]:g} to {track.ages[at + 1]:g} Ma"
            place = place_of_row(history, int(track.rows[at + 1]))
            if rates[at] > FASTEST_KM_PER_MYR:
                what = f"{track.name}, {span}: up to {rates[at]:.0f} mm/yr"
                remedy = f"above {FASTEST_KM_PER_MYR:.0f} mm/yr an age or an angle is likely wrong (common practice)"
                km = float(angles[at]) * EARTH_RADIUS_KM
                yield Finding("warning", "too fast", place, what, km, remedy)
            if math.degrees(angles[at]) > WIDEST_STAGE_DEG and at >= track.first:
                what = f"{track.name}, {span}: a stage of {math.degrees(angles[at]):.1f} degrees"
                remedy = "the short way round is taken; add a row between them"
                yield Finding("warning", "wide stage", place, what, remedy=remedy)


def antipodal_poles(history: History, tracks: Sequence[Track]) -> Iterator[Finding]:
    """Neighbouring rows whose poles are antipodal and whose angles differ in sign: one and the same
    rotation typed in two ways.
    """
    rows = history.rows
    for track in tracks:
        turning = (track.rows >= 0) & (rows.angle_deg[track.rows] != 0.0)
        numbers, vectors = track.rows[turning], so3.logarithm(track.turns[turning])
        signs = np.sign(rows.angle_deg[numbers])
        for at in np.flatnonzero(signs[1:] != signs[:-1]):
            one, other = (vectors[n] / np.linalg.norm(vectors[n]) for n in (at, at + 1))
            if float(one @ other) > 0.5:
                row = int(numbers[at + 1])
                what = (
                    f"{track.name} at {rows.age_ma[row]:g} Ma: the pole is the antipode of its younger"
                    f" neighbour's, with the angle's sign"
                )
                remedy = "the rotation is the same; type both poles on one side"
                yield Finding("note", "antipodal pole", place_of_row(history, row), what, 0.0, remedy)


def rough_velocities(history: History, tracks: Sequence[Track]) -> Iterator[Finding]:
    """Short stages whose velocity differs from both neighbours' by more than the rows' errors allow.

    The difference `w2 - (w1 + w3) / 2` of angular velocities in the plate's coordinates, each
    `-(u_older - u_younger) / dt` in its errors, against chi-square with 3 degrees of freedom, or
    against F where a kappa was estimated.
    """
    errors = history.row_errors()
    for track in (t.corrected for t in tracks):
        steps = np.diff(track.ages)
        known = (track.rows < 0) | errors.known[track.rows]
        judged = (steps[1:-1] <= SHORT_STAGE_MYR) & known[:-3] & known[1:-2] & known[2:-1] & known[3:]
        for at in np.flatnonzero(judged) + 1:
            kink, test = _kink(track, steps, int(at), errors)
            if test.probability < CHANCE:
                km = float(np.linalg.norm(kink)) * float(steps[at]) * EARTH_RADIUS_KM
                what = (
                    f"{track.name}, {track.ages[at]:g} to {track.ages[at + 1]:g} Ma: the velocity saws"
                    f" against both neighbours beyond its error (probability {test.probability:.1g})"
                )
                place = place_of_row(history, int(track.rows[at + 1]))
                remedy = "noise in the rows or errors stated too small; consider longer stages"
                yield Finding("warning", "rough velocity", place, what, km, remedy)


def _kink(track: Track, steps: Floats, at: int, errors: RowErrors) -> tuple[Floats, Significance]:
    """The difference of one stage's velocity (3,), rad/Myr, from the mean of its neighbours', tested."""
    turns = track.turns[at - 1 : at + 3]
    vectors = so3.logarithm(so3.multiply(so3.conjugate(turns[:-1]), turns[1:]))
    before, own, after = steps[at - 1 : at + 2]
    kink = 0.5 * (vectors[0] / before + vectors[2] / after) - vectors[1] / own
    weights = (-0.5 / before, 0.5 / before + 1.0 / own, -1.0 / own - 0.5 / after, 0.5 / after)
    covariance, by_dof = np.zeros((3, 3)), 0.0
    for row, weight in zip(track.rows[at - 1 : at + 3], weights, strict=True):
        if row >= 0:
            part = weight**2 * errors.covariance[row]
            covariance += part
            by_dof += np.trace(part) ** 2 / errors.dof[row]
    dof = float(welch_satterthwaite(np.trace(covariance), np.asarray(by_dof)))
    return kink, significance(kink, covariance, dof)
