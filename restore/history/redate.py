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
    tables = tuple(replace(table, time_scale=to.name) for table in history.tables)
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
    if clock is not None and clock.name == to.name:
        return
    restatement: Restatement | None = None
    for row in np.flatnonzero((history.rows.table == number) & (history.rows.age_ma > 0.0)):
        age = _age_by_chron(history.rows.chron[row], to)
        if not math.isnan(age):
            ages[row], how[row] = age, "chron"
            continue
        place = Place(table.file, int(history.rows.line[row]) or None)
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


def _move_together(
    history: History, pairs: list[Pair], ages: Floats, how: list[str], findings: list[Finding]
) -> None:
    """Give rows that touch at a change of partner one age: the one by chron where either has one."""
    before = history.rows.age_ma
    ends: dict[tuple[str, float], list[int]] = {}
    for pair in pairs:
        for row in {int(pair.rows[0]), int(pair.rows[-1])}:
            if row >= 0 and before[row] > 0.0:
                ends.setdefault((pair.plate, float(before[row])), []).append(row)
    for (plate, age), rows in ends.items():
        if len(rows) < 2:
            continue
        by_chron = [row for row in rows if how[row] == "chron"]
        leading = by_chron[0] if by_chron else rows[0]
        for row in by_chron[1:]:
            if ages[row] != ages[leading]:
                place = Place(
                    history.tables[int(history.rows.table[row])].file, int(history.rows.line[row])
                )
                what = (
                    f"{plate} changes its partner at {age:g} Ma, where two chrons say"
                    f" {ages[leading]:g} and {ages[row]:g} Ma"
                )
                findings.append(
                    Finding("error", "chrons differ", place, what, remedy="give both rows one chron")
                )
        for row in rows:
            if row not in by_chron and ages[row] != ages[leading]:
                ages[row], how[row] = ages[leading], "with its neighbour"


def _check_order(history: History, pairs: list[Pair], ages: Floats, findings: list[Finding]) -> None:
    for pair in pairs:
        numbers = pair.rows[pair.rows >= 0]
        for younger, older in itertools.pairwise(numbers):
            if not ages[older] > ages[younger]:
                place = Place(
                    history.tables[int(history.rows.table[older])].file,
                    int(history.rows.line[older]) or None,
                )
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
    others = [t for t in history.tables if t.time_scale and t.time_scale != to.name]
    findings = []
    if silent and (others or any(t.time_scale for t in history.tables)):
        for table in silent:
            what = f"the table names no time scale; its ages are taken as {to.name}"
            place = Place(table.file)
            findings.append(Finding("warning", "no clock", place, what, remedy="name its time_scale"))
    if not others:
        return Redated(history, (), tuple(findings))
    done = redate(history, to, to)
    worst: dict[int, Moved] = {}
    for moved in done.moved:
        table_number = int(history.rows.table[moved.row])
        if moved.km > worst.get(table_number, moved).km or table_number not in worst:
            worst[table_number] = moved
    for number, moved in sorted(worst.items()):
        if history.tables[number].time_scale in {"", to.name}:
            continue
        table = history.tables[number]
        what = (
            f"restated from {table.time_scale} to {to.name}: up to"
            f" {abs(moved.after_ma - moved.before_ma):.3g} Myr (row of {moved.before_ma:g} Ma)"
        )
        place = Place(table.file, int(history.rows.line[moved.row]) or None)
        findings.append(Finding("note", "restated", place, what, moved.km, ""))
    return Redated(done.history, done.moved, (*findings, *done.findings))


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
            " for the run"
        )
    return TimeScale.read(named[0]) if named else None
