"""A history restated to another time scale: ages change, rotations never.

A row with a chron takes the chron's age in the new scale, any other is interpolated between the
reversals that both scales date. Rows of one plate that touch (one pair ends where another begins)
move together, so that a change of partner opens no gap.
"""

from __future__ import annotations

import itertools
import math
from dataclasses import dataclass, replace

import numpy as np

from restore.errors import HistoryError, InputError, raise_faults
from restore.findings import Finding, Place
from restore.geometry.sphere import EARTH_RADIUS_KM, Floats
from restore.history.conventions import Table
from restore.history.links import Pair, Stages, pairs_of
from restore.history.store import History
from restore.history.timescale import Chron, Restatement, TimeScale


@dataclass(frozen=True)
class Moved:
    """One row whose age was restated: Ma before and after, how, and how far that matters.

    `how`: `chron`, `interpolated`, `with its neighbour`, or `unchanged`. `loose`: the age lies inside
    a long interval without reversals. `km`: what the change of age is worth at the rate of the
    stage, at most, on the globe.
    """

    row: int
    before_ma: float
    after_ma: float
    how: str
    loose: bool
    km: float


@dataclass(frozen=True, eq=False)
class Redated:
    """A restated history, what moved, and remarks."""

    history: History
    moved: tuple[Moved, ...]
    findings: tuple[Finding, ...]


def redate(history: History, to: TimeScale, default_from: TimeScale | None = None) -> Redated:
    """Restate every row to the scale `to`; tables that name no clock are taken to be on `default_from`.

    Raises HistoryError with one line per row that cannot be restated: no chron and no clock, outside
    the reversals that both scales date, or rows of a pair that would change their order.
    """
    findings: list[Finding] = []
    ages = np.array(history.rows.age_ma)
    how = ["unchanged"] * len(ages)
    loose = np.zeros(len(ages), dtype=bool)
    for number in range(len(history.tables)):
        _restate_table(history, number, to, default_from, ages, how, loose, findings)
    raise_faults(HistoryError, findings)
    pairs = pairs_of(history)
    _move_together(history, pairs, ages, how, findings)
    _check_order(history, pairs, ages, findings)
    raise_faults(HistoryError, findings)
    tables = tuple(
        _with_limits(replace(table, time_scale=to.name), history.rows.age_ma[own], ages[own])
        for table, own in ((t, history.rows.table == i) for i, t in enumerate(history.tables))
    )
    rows = replace(history.rows, age_ma=ages)
    km = _sizes(history, pairs, ages)
    moved = tuple(
        Moved(i, float(history.rows.age_ma[i]), float(ages[i]), how[i], bool(loose[i]), float(km[i]))
        for i in range(len(ages))
    )
    kept = replace(history, rows=rows, tables=tables)
    return Redated(kept, moved, tuple(findings))


def _restate_table(
    history: History,
    number: int,
    to: TimeScale,
    default_from: TimeScale | None,
    ages: Floats,
    how: list[str],
    loose: np.ndarray,
    findings: list[Finding],
) -> None:
    table = history.tables[number]
    clock = TimeScale.read(table.time_scale) if table.time_scale else default_from
    if clock is not None and (clock.name == to.name or clock.same_as(to)):
        return
    restatement: Restatement | None = None
    for row in np.flatnonzero((history.rows.table == number) & (history.rows.age_ma > 0.0)):
        age = _age_by_chron(history.rows.chron[row], to)
        if not math.isnan(age):
            ages[row], how[row] = age, "chron"
            continue
        place = _place(history, int(row))
        before = float(history.rows.age_ma[row])
        if clock is None:
            what = f"age {before:g} Ma has no chron and its table names no time scale"
            findings.append(
                Finding("error", "no clock", place, what, remedy="name time_scale for the table")
            )
            continue
        if restatement is None:
            restatement = Restatement.between(clock, to)
        age = float(restatement(before))
        if math.isnan(age):
            what = f"age {before:g} Ma cannot be restated from {clock.name} to {to.name}"
            remedy = f"only {restatement.span()} can; give the row a chron"
            findings.append(Finding("error", "outside the scale", place, what, remedy=remedy))
            continue
        ages[row], how[row] = age, "interpolated"
        loose[row] = bool(restatement.loose(before))


def _age_by_chron(text: str, to: TimeScale) -> float:
    """The age of a row's chron in a scale; NaN if it has none that the scale knows."""
    try:
        return to.age_of(Chron.parse(text)) if text else math.nan
    except InputError:
        return math.nan


def _with_limits(table: Table, before: Floats, after: Floats) -> Table:
    """The table with the ages between which it is meant carried along with its rows."""
    order = np.argsort(before, kind="stable")
    known, moved = before[order], after[order]

    def carried(limit: float) -> float:
        if not len(known) or not 0.0 < limit < math.inf:
            return limit
        nearest = min(max(limit, float(known[0])), float(known[-1]))
        return max(float(np.interp(nearest, known, moved)) + (limit - nearest), 0.0)

    young, old = carried(table.valid_from_ma), carried(table.valid_to_ma)
    return replace(table, valid_from_ma=young, valid_to_ma=old)


def _place(history: History, row: int) -> Place:
    return Place(history.tables[int(history.rows.table[row])].file, int(history.rows.line[row]) or None)


def _move_together(
    history: History, pairs: list[Pair], ages: Floats, how: list[str], findings: list[Finding]
) -> None:
    """Give rows that touch at a change of partner one age: the one by chron where either has one."""
    for plate, age, rows in _touching(history, pairs):
        by_chron = [row for row in rows if how[row] == "chron"]
        leading = by_chron[0] if by_chron else rows[0]
        for row in by_chron[1:]:
            if ages[row] != ages[leading]:
                what = (
                    f"{plate} changes its partner at {age:g} Ma, where two chrons say"
                    f" {ages[leading]:g} and {ages[row]:g} Ma"
                )
                remedy = "give both rows one chron"
                findings.append(
                    Finding("error", "chrons differ", _place(history, row), what, remedy=remedy)
                )
        for row in rows:
            if row not in by_chron and ages[row] != ages[leading]:
                ages[row], how[row] = ages[leading], "with its neighbour"


def _touching(history: History, pairs: list[Pair]) -> list[tuple[str, float, list[int]]]:
    """Rows at the ends of pairs of one plate that have one age: plate, age, row numbers.

    A pair that lists the plate as the side held still belongs to them where it goes on from another.
    """
    before = history.rows.age_ma
    ends: dict[tuple[str, float], list[tuple[int, bool, bool]]] = {}
    for pair in pairs:
        for row, oldest in ((int(pair.rows[0]), False), (int(pair.rows[-1]), True)):
            if row >= 0 and before[row] > 0.0:
                for label, moves in ((pair.plate, True), (pair.relative_to, False)):
                    ends.setdefault((label, float(before[row])), []).append((row, moves, oldest))
    group_of: dict[int, tuple[str, float, dict[int, None]]] = {}
    for (plate, age), found in ends.items():
        own = {oldest for _, moves, oldest in found if moves}
        rows = {row: None for row, moves, oldest in found if moves or (not oldest) in own}
        if own and len(rows) > 1:
            # rows that touch those of another plate as well must go with them all
            for row in list(rows):
                rows |= group_of[row][2] if row in group_of else {}
            group_of.update(dict.fromkeys(rows, (plate, age, rows)))
    groups = {id(group): group for group in group_of.values()}.values()
    return [(plate, age, list(rows)) for plate, age, rows in groups]


def _check_order(history: History, pairs: list[Pair], ages: Floats, findings: list[Finding]) -> None:
    for pair in pairs:
        numbers = pair.rows[pair.rows >= 0]
        for younger, older in itertools.pairwise(numbers):
            if not ages[older] > ages[younger]:
                place = _place(history, int(older))
                what = (
                    f"{pair.plate} relative to {pair.relative_to}: restated, this row is at"
                    f" {ages[older]:g} Ma and its younger neighbour at {ages[younger]:g} Ma"
                )
                remedy = "give both rows a chron"
                findings.append(Finding("error", "order of ages", place, what, remedy=remedy))


def _sizes(history: History, pairs: list[Pair], ages: Floats) -> Floats:
    """Change of age times the rate of the faster adjoining stage, km, by row."""
    stages = Stages.of(history.rows.rotations().quaternions, pairs)
    km = np.zeros(len(ages))
    for number, pair in enumerate(pairs):
        first = int(stages.first[number])
        count = max(len(pair.ages) - 1, 1)
        speed = 2.0 * stages.half[first : first + count] / stages.length_myr[first : first + count]
        around = np.maximum(np.append(speed, 0.0), np.insert(speed, 0, 0.0))
        for at, row in enumerate(pair.rows):
            if row >= 0:
                change = abs(ages[row] - history.rows.age_ma[row])
                km[row] = change * around[min(at, len(around) - 1)] * EARTH_RADIUS_KM
    return km


def one_clock(history: History, to: TimeScale) -> Redated:
    """The history on one clock: tables that name another are restated, those that name none are kept
    and remarked upon.
    """
    silent = [table for table in history.tables if not table.time_scale]
    others = [number for number, table in enumerate(history.tables) if _is_on_another(table, to)]
    findings = []
    if len(silent) < len(history.tables):
        for table in silent:
            what = f"the table names no time scale; its ages are taken as {to.name}"
            place = Place(table.file)
            findings.append(Finding("warning", "no clock", place, what, remedy="name its time_scale"))
    if not others:
        return Redated(history, (), tuple(findings))
    done = redate(history, to, to)
    for number in others:
        table = history.tables[number]
        own = [moved for moved in done.moved if int(history.rows.table[moved.row]) == number]
        if not own:
            continue
        moved = max(own, key=lambda m: (m.km, abs(m.after_ma - m.before_ma)))
        what = (
            f"restated from {table.time_scale} to {to.name}: up to"
            f" {abs(moved.after_ma - moved.before_ma):.3g} Myr (row of {moved.before_ma:g} Ma)"
        )
        place = _place(history, moved.row)
        findings.append(Finding("note", "restated", place, what, moved.km, ""))
    return Redated(done.history, done.moved, (*findings, *done.findings))


def _is_on_another(table: Table, to: TimeScale) -> bool:
    if table.time_scale in {"", to.name}:
        return False
    return not TimeScale.read(table.time_scale).same_as(to)


def clock_of(history: History, name: str | None, folder: str = ".") -> TimeScale | None:
    """The one clock of a run: the named scale, else the one that the history's tables name.

    None if nobody names one. Raises HistoryError if the tables name several and none is chosen.
    """
    if name:
        return TimeScale.read(name, folder)
    named = sorted({table.time_scale for table in history.tables if table.time_scale})
    if len(named) > 1:
        raise HistoryError(
            f"the tables of the history are on {len(named)} clocks ({', '.join(named)}); name one time scale"
            " for the run, or restate it first (redate)"
        )
    return TimeScale.read(named[0]) if named else None
