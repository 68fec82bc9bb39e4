"""Rows of a history: frozen columns, checked. The only door through which a row comes in."""

from __future__ import annotations

import math
from collections.abc import Iterator, Sequence
from dataclasses import dataclass, fields, replace
from typing import Any

import numpy as np
from numpy.typing import NDArray

from restore.findings import Finding, Place
from restore.geometry.rotations import Rotations
from restore.geometry.sphere import Floats
from restore.history.conventions import Table, is_positive_definite

OLDEST_AGE_MA = 4600.0
Texts = NDArray[np.object_]


@dataclass(frozen=True)
class Row:
    """One finite rotation as meant: `plate` relative to `relative_to`, from today to `age_ma`.

    Degrees and Ma; `covariance` (3, 3) rad^2 in present-day coordinates of `plate`, or None where
    it is not known; `dof` of an estimated kappa, infinite where kappa is known. `table`, `line`:
    the row's origin; `printed`: what stood there.
    """

    plate: str
    relative_to: str
    age_ma: float
    pole_lat_deg: float
    pole_lon_deg: float
    angle_deg: float
    covariance: Floats | None = None
    dof: float = math.inf
    chron: str = ""
    reference: str = ""
    note: str = ""
    table: int = 0
    line: int = 0
    printed: str = ""

    def faults(self) -> list[tuple[str, str, str]]:
        """What is wrong with the row, as (column, what, remedy); empty if nothing is."""
        return [*self._label_faults(), *self._rotation_faults(), *self._error_faults()]

    def _label_faults(self) -> Iterator[tuple[str, str, str]]:
        for name in ("plate", "relative_to"):
            if not getattr(self, name):
                yield name, f"{name} is empty", "every row names both plates"
        if self.plate and self.plate == self.relative_to:
            what = f"plate {self.plate!r} is relative to itself"
            yield "relative_to", what, "name the plate that was held still"

    def _rotation_faults(self) -> Iterator[tuple[str, str, str]]:
        if not 0.0 <= self.age_ma <= OLDEST_AGE_MA:
            rule = f"ages lie in 0..{OLDEST_AGE_MA:g} Ma, positive into the past"
            yield "age_ma", f"age_ma = {self.age_ma:g}", rule
        if not -360.0 <= self.angle_deg <= 360.0:
            yield "angle_deg", f"angle_deg = {self.angle_deg:g}", "must lie in -360..360 degrees"
        if self.angle_deg == 0.0:
            return
        for name, limit in (("pole_lat_deg", 90.0), ("pole_lon_deg", 360.0)):
            value = getattr(self, name)
            if not -limit <= value <= limit:
                yield name, f"{name} = {value:g}", f"must lie in -{limit:g}..{limit:g}"
        if self.age_ma == 0.0:
            what = f"a row of age 0 turns by {self.angle_deg:g} degrees"
            yield "angle_deg", what, "a plate is today where it is today: the angle must be 0"

    def _error_faults(self) -> Iterator[tuple[str, str, str]]:
        if not self.dof > 0.0:
            yield "dof", f"dof = {self.dof:g}", "degrees of freedom are above 0"
        if self.covariance is None:
            return
        matrix = np.asarray(self.covariance)
        if matrix.shape != (3, 3):
            yield "cov_a", f"the covariance has shape {matrix.shape}", "it is a 3 by 3 matrix"
        elif not np.all(np.isfinite(matrix)):
            yield "cov_a", "the covariance is not finite", "leave it empty if it is not known"
        elif not np.allclose(matrix, matrix.T, rtol=1e-9, atol=0.0):
            yield "cov_a", "the covariance is not symmetric", "compare with the paper"
        elif self.age_ma > 0.0 and np.any(matrix) and not is_positive_definite(matrix):
            low = np.linalg.eigvalsh(self.covariance)[0]
            what = f"the covariance is not positive definite (smallest eigenvalue {low:.3g} rad^2)"
            yield "cov_a", what, "compare with the paper; some are misprinted"


@dataclass(frozen=True, eq=False)
class Rows:
    """The rows of a history as columns `(rows,)`, read-only; meanings as in `Row`.

    `pole_lat_deg` and `pole_lon_deg` are NaN for zero rotations, `covariance` `(rows, 3, 3)` NaN
    where not known, zero for rows of age 0.
    """

    plate: Texts
    relative_to: Texts
    age_ma: Floats
    pole_lat_deg: Floats
    pole_lon_deg: Floats
    angle_deg: Floats
    covariance: Floats
    dof: Floats
    chron: Texts
    reference: Texts
    note: Texts
    table: NDArray[np.int64]
    line: NDArray[np.int64]
    printed: Texts

    def __post_init__(self) -> None:
        for column in fields(self):
            view = getattr(self, column.name).view()
            view.flags.writeable = False
            object.__setattr__(self, column.name, view)

    def __len__(self) -> int:
        return len(self.age_ma)

    @classmethod
    def from_rows(cls, rows: Sequence[Row]) -> Rows:
        """Columns from single rows, which must be without faults (see `check_rows`)."""
        unknown = np.full((3, 3), np.nan)

        def covariance(row: Row) -> Floats:
            if row.age_ma == 0.0:
                return np.zeros((3, 3))
            return unknown if row.covariance is None else row.covariance

        def texts(name: str) -> Texts:
            column = np.empty(len(rows), dtype=object)
            column[:] = [getattr(row, name) for row in rows]
            return column

        def numbers(name: str, kind: type = np.float64) -> NDArray[Any]:
            return np.array([getattr(row, name) for row in rows], dtype=kind)

        return cls(
            plate=texts("plate"),
            relative_to=texts("relative_to"),
            age_ma=numbers("age_ma"),
            pole_lat_deg=np.array([r.pole_lat_deg if r.angle_deg else np.nan for r in rows], float),
            pole_lon_deg=np.array([r.pole_lon_deg if r.angle_deg else np.nan for r in rows], float),
            angle_deg=numbers("angle_deg"),
            covariance=np.array([covariance(row) for row in rows], float).reshape(-1, 3, 3),
            dof=numbers("dof"),
            chron=texts("chron"),
            reference=texts("reference"),
            note=texts("note"),
            table=numbers("table", np.int64),
            line=numbers("line", np.int64),
            printed=texts("printed"),
        )

    def row(self, number: int) -> Row:
        """One row as a value."""
        values = {c.name: getattr(self, c.name)[number] for c in fields(self)}
        covariance = values["covariance"]
        values["covariance"] = None if np.isnan(covariance).any() else covariance
        for name in ("age_ma", "pole_lat_deg", "pole_lon_deg", "angle_deg", "dof"):
            values[name] = float(values[name])
        return Row(**{**values, "table": int(values["table"]), "line": int(values["line"])})

    def rotations(self) -> Rotations:
        """The finite rotations `(rows,)`, from today to each row's age."""
        return Rotations.from_poles(self.pole_lat_deg, self.pole_lon_deg, self.angle_deg)

    def take(self, numbers: NDArray[np.int64] | Sequence[int]) -> Rows:
        """Some of the rows, in the order asked."""
        index = np.asarray(numbers, dtype=np.int64)
        return replace(self, **{c.name: getattr(self, c.name)[index] for c in fields(self)})

    def same_as(self, other: Rows) -> bool:
        """Whether every column is equal to the last bit, NaN equal to NaN."""
        for column in fields(self):
            mine, theirs = getattr(self, column.name), getattr(other, column.name)
            if mine.shape != theirs.shape:
                return False
            if mine.dtype == object:
                if not np.array_equal(mine, theirs):
                    return False
            elif not np.array_equal(mine, theirs, equal_nan=mine.dtype.kind == "f"):
                return False
        return True


def check_rows(rows: Sequence[Row], tables: Sequence[Table]) -> list[Finding]:
    """Faults of rows taken together: at one rank a pair may have one row per age.

    Rows that are not sorted by age are a warning: they are read by age all the same.
    """
    findings = []
    seen: dict[tuple[str, str, int, float], Row] = {}
    last: dict[tuple[str, str, int], Row] = {}
    for row in rows:
        place = Place(tables[row.table].file, row.line or None)
        pair = f"{row.plate} relative to {row.relative_to}"
        key = (row.plate, row.relative_to, tables[row.table].rank, row.age_ma)
        if key in seen:
            first = Place(tables[seen[key].table].file, seen[key].line or None)
            what = f"{pair} has a second row at {row.age_ma:g} Ma (the first: {first})"
            remedy = "keep one of them, or give the tables different ranks"
            findings.append(Finding("error", "duplicate age", place, what, remedy=remedy))
        seen.setdefault(key, row)
        before = last.get((row.plate, row.relative_to, row.table))
        if before is not None and row.age_ma < before.age_ma:
            what = f"{pair}: age {row.age_ma:g} Ma stands after {before.age_ma:g} Ma"
            remedy = "the rows are read by age; check for a slip of the pen"
            findings.append(Finding("warning", "unsorted ages", place, what, remedy=remedy))
        last[row.plate, row.relative_to, row.table] = row
    return findings
