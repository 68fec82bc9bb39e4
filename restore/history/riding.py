"""Plates that ride on others: a table that says on which plate a piece moved between which ages.

A terrane that docked rides on one plate since, on another before. Its rows are made from the
history: on the youngest plate it stands still; at each change it is handed over where it is, so that
its position is continuous. The rows then stand in the history like any others, ledger included.
"""

from __future__ import annotations

import math
import os
from dataclasses import dataclass
from itertools import pairwise

import numpy as np

from restore.errors import DomainError, HistoryError, TableError, raise_faults
from restore.files.delimited import DelimitedReader, Layout, parse_numbers
from restore.findings import Finding, Place
from restore.geometry.rotations import Rotations
from restore.geometry.sphere import Floats
from restore.history.circuit import Circuit
from restore.history.conventions import Table
from restore.history.rows import Row
from restore.history.store import History

COLUMNS = ("plate", "rides_on", "youngest_ma", "oldest_ma")


@dataclass(frozen=True)
class Ride:
    """One piece, the plate it rides on, and between which ages, Ma; `line` of its table."""

    plate: str
    rides_on: str
    youngest_ma: float
    oldest_ma: float
    line: int = 0


def read_rides(path: str | os.PathLike[str], layout: Layout | None = None) -> list[Ride]:
    """Read a table `plate,rides_on,youngest_ma,oldest_ma`.

    Raises TableError with one line per row at fault.
    """
    rides: list[Ride] = []
    findings: list[Finding] = []
    with DelimitedReader(path, layout or Layout(comment="#")) as reader:
        at = [reader.column(name) or 0 for name in COLUMNS]
        for chunk in reader.chunks():
            ages = []
            for column, name in zip(at[2:], COLUMNS[2:], strict=True):
                values, faults = parse_numbers(chunk, column, name, reader.layout.decimal)
                ages.append(values)
                findings += faults
            for row in range(len(chunk)):
                young, old = ages[0][row], ages[1][row]
                plate, on = (chunk.columns[column][row].strip() for column in at[:2])
                ride = Ride(plate, on, young, old, chunk.lines[row])
                wrong = _wrong(ride)
                if wrong:
                    place = chunk.place(row)
                    findings.append(Finding("error", "bad row", place, *wrong))
                rides.append(ride)
    raise_faults(TableError, findings)
    return rides


def _wrong(ride: Ride) -> tuple[str, None, str] | None:
    if not ride.plate or not ride.rides_on or ride.plate == ride.rides_on:
        return (f"{ride.plate!r} rides on {ride.rides_on!r}", None, "name two different plates")
    if not 0.0 <= ride.youngest_ma < ride.oldest_ma < math.inf:
        what = f"{ride.plate} on {ride.rides_on}: {ride.youngest_ma:g}..{ride.oldest_ma:g} Ma"
        return (what, None, "youngest_ma lies below oldest_ma, both are ages in Ma")
    return None


def with_rides(history: History, rides: list[Ride], file: str = "", table: Table | None = None) -> History:
    """A history in which each piece rides as the table says; `table` describes it.

    The errors at a change are those of the rows it was made from, taken as if they were others: ellipses
    at older ages are rather too large than too small.

    Raises HistoryError if a piece's rides do not follow one another from 0 Ma on without gap or
    overlap, if the history already moves the piece, or if it does not tie two of its plates at the
    age of a change.
    """
    number = len(history.tables)
    rows: list[Row] = []
    for plate in dict.fromkeys(ride.plate for ride in rides):
        own = sorted((r for r in rides if r.plate == plate), key=lambda r: r.youngest_ma)
        if plate in set(history.rows.plate):
            raise HistoryError(f"{Place(file, own[0].line or None)}: the history already moves {plate!r}")
        expected = 0.0
        for ride in own:
            if ride.youngest_ma != expected:
                raise HistoryError(
                    f"{Place(file, ride.line or None)}: {plate} on {ride.rides_on} begins at"
                    f" {ride.youngest_ma:g} Ma where {expected:g} Ma is expected; rides follow one another"
                )
            expected = ride.oldest_ma
        rows += _rows_of(history, own, number, file)
    clocks = {one.time_scale for one in history.tables}
    clock = clocks.pop() if len(clocks) == 1 else ""
    added = table or Table(file=file, title="pieces that ride on plates", time_scale=clock)
    return History.from_rows(
        [*(history.rows.row(n) for n in range(len(history))), *rows],
        (*history.tables, added),
        history.frames,
        history.title,
    )


def _rows_of(history: History, rides: list[Ride], table: int, file: str) -> list[Row]:
    standing, covariance = Rotations.identity(), np.zeros((3, 3))
    rows = []
    for at, ride in enumerate(rides):
        if at:
            turn, own = _handed_over(history, rides[at - 1], ride, file)
            # the piece stands on the new plate where the old one had carried it
            covariance = _sum(standing.as_matrices().T @ own @ standing.as_matrices(), covariance)
            standing = turn @ standing
        lat, lon, angle = (float(value) for value in standing.as_poles())
        known = None if np.isnan(covariance).any() else covariance
        for age in (ride.youngest_ma, ride.oldest_ma):
            rows.append(
                Row(
                    ride.plate,
                    ride.rides_on,
                    age,
                    lat,
                    lon,
                    0.0 if math.isnan(lat) else angle,
                    known,
                    reference="rides",
                    note=f"stands still on {ride.rides_on}",
                    table=table,
                    line=ride.line,
                )
            )
    return rows


def _sum(one: Floats, other: Floats) -> Floats:
    total: Floats = one + other
    return 0.5 * (total + total.T)


def _handed_over(history: History, before: Ride, after: Ride, file: str) -> tuple[Rotations, Floats]:
    """The rotation of the younger plate relative to the older one at the change, and its covariance."""
    try:
        found = Circuit(history, after.rides_on).at(before.rides_on, after.youngest_ma)
    except DomainError as exc:
        raise HistoryError(f"{Place(file, after.line or None)}: {exc}") from None
    return Rotations(found.rotations.quaternions.reshape(4)), found.covariance()[0]


def changes(rides: list[Ride]) -> list[tuple[str, float]]:
    """The piece and the age, Ma, of every change of the plate that it rides on."""
    found = []
    for plate in dict.fromkeys(ride.plate for ride in rides):
        own = sorted((r for r in rides if r.plate == plate), key=lambda r: r.youngest_ma)
        found += [(plate, after.youngest_ma) for _, after in pairwise(own)]
    return found
