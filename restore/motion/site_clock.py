"""Site ages brought to the clock of the run: by chron where a row has one, else by interpolation."""

from __future__ import annotations

import math
from collections.abc import Mapping

import numpy as np
from numpy.typing import NDArray

from restore.errors import InputError
from restore.files.delimited import Chunk, parse_number
from restore.findings import Finding
from restore.geometry.sphere import Floats
from restore.history.timescale import Chron, Restatement, TimeScale

AGES = ("age_ma", "age_young_ma", "age_old_ma", "host_age_ma")


class SiteClock:
    """Restates the ages of site tables from their own time scale, if they name one, to the run's.

    `most_myr`: the most that an age has moved by so far, Myr.

    Raises InputError if ages between the two scales cannot be restated at all.
    """

    def __init__(self, to: TimeScale, own: TimeScale | None = None) -> None:
        self.to = to
        self.restatement = None
        self.most_myr = 0.0
        if own is not None and own.name != to.name and not own.same_as(to):
            self.restatement = Restatement.between(own, to)

    def restate(
        self,
        chunk: Chunk,
        at: Mapping[str, int | None],
        numbers: dict[str, Floats],
        bad_age: NDArray[np.bool_],
        findings: list[Finding],
        decimal: str = ".",
    ) -> list[str]:
        """Restate `numbers` in place and say for each row how its own age came about.

        `chron`, `interpolated`, or empty. Rows whose ages cannot be restated become bad, with a
        finding each.
        """
        how = [""] * len(chunk)
        if self.restatement is not None:
            for name in AGES:
                before = np.array(numbers[name])
                self._interpolate(name, chunk, at, numbers, bad_age, findings, how)
                moved = np.abs(numbers[name] - before)
                self.most_myr = max(self.most_myr, float(np.nanmax(moved, initial=0.0)))
        column = at.get("chron")
        if column is not None:
            self._by_chron(chunk, at, column, numbers, bad_age, findings, how, decimal)
        return how

    def _interpolate(
        self,
        name: str,
        chunk: Chunk,
        at: Mapping[str, int | None],
        numbers: dict[str, Floats],
        bad_age: NDArray[np.bool_],
        findings: list[Finding],
        how: list[str],
    ) -> None:
        assert self.restatement is not None
        before = numbers[name]
        after = self.restatement(before)
        chron = at.get("chron") if name == "age_ma" else None
        for row in np.flatnonzero(np.isnan(after) & ~np.isnan(before) & ~bad_age):
            if chron is not None and chunk.columns[chron][row].strip():
                continue
            bad_age[row] = True
            what = f"{name} = {before[row]:g} cannot be restated to {self.to.name}"
            place = chunk.place(int(row), at.get(name))
            remedy = f"only {self.restatement.span()} can"
            findings.append(Finding("error", "outside the scale", place, what, remedy=remedy))
        if name == "age_ma":
            for row in np.flatnonzero(~np.isnan(after)):
                how[row] = "interpolated"
        numbers[name] = after

    def _by_chron(
        self,
        chunk: Chunk,
        at: Mapping[str, int | None],
        column: int,
        numbers: dict[str, Floats],
        bad_age: NDArray[np.bool_],
        findings: list[Finding],
        how: list[str],
        decimal: str,
    ) -> None:
        fractions = at.get("chron_fraction")
        ages = np.array(numbers["age_ma"])
        for row, text in enumerate(chunk.columns[column]):
            if not text.strip() or bad_age[row]:
                continue
            said = "" if fractions is None else chunk.columns[fractions][row]
            try:
                fraction = parse_number(said, decimal) if said.strip() else math.nan
                ages[row], how[row] = self.to.age_of(Chron.parse(text, fraction)), "chron"
            except (InputError, ValueError) as exc:
                bad_age[row] = True
                named = isinstance(exc, InputError)
                what = str(exc) if named else f"chron_fraction = {said!r} is not a number"
                place = chunk.place(row, column if named else fractions)
                findings.append(Finding("error", "chron", place, what))
        numbers["age_ma"] = ages
