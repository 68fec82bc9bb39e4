"""A table of dated sites: the user's own columns untouched, and what was understood of them."""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from dataclasses import dataclass
from typing import Any

import numpy as np
from numpy.typing import NDArray

from restore.errors import TableError
from restore.files.delimited import Chunk, DelimitedReader, parse_numbers
from restore.files.points import own_names
from restore.findings import Finding, Place
from restore.geometry.sphere import Floats
from restore.history.rows import OLDEST_AGE_MA
from restore.motion.site_clock import SiteClock

NUMBERS = (
    "lat_deg",
    "lon_deg",
    "age_ma",
    "age_sigma_myr",
    "age_young_ma",
    "age_old_ma",
    "host_age_ma",
    "position_sigma_km",
)
AGES = ("age_ma", "age_young_ma", "age_old_ma", "host_age_ma")
PLACES = ("lat_deg", "lon_deg", "position_sigma_km")
ERRORS = ("age_sigma_myr", "position_sigma_km")
RELATIONS = (
    "a range needs both its ends",
    "must not be above age_old_ma",
    "must lie between age_young_ma and age_old_ma",
)
KNOWN_COLUMNS = ("site", *NUMBERS, "plate", "chron", "chron_fraction")


@dataclass(eq=False)
class SiteTable:
    """Sites `(n,)`: `own` are the user's columns as they stand, by name in their order.

    `numbers`: parsed columns in degrees, Ma, Myr and km, NaN where there is no value. `bad_place`,
    `bad_age`: rows whose coordinates or ages cannot be used. `ranged`: rows with an age range.
    `findings`: one per fault, with its place. `slipped`: rows of another length than the header,
    whose values stand in the wrong columns.
    """

    own: dict[str, Sequence[Any]]
    site: Sequence[str]
    plate: list[str]
    numbers: dict[str, Floats]
    bad_place: NDArray[np.bool_]
    bad_age: NDArray[np.bool_]
    findings: list[Finding]
    has_ranges: bool
    file: str = "sites"
    lines: Sequence[int] = ()
    plate_column: int | None = None
    header_line: int | None = None
    slipped: frozenset[int] = frozenset()

    def plate_place(self, row: int) -> Place:
        """Where the plate label of a row stands."""
        column = None if self.plate_column is None else self.plate_column + 1
        return Place(self.file, self.lines[row] if self.lines else row, column)

    def __len__(self) -> int:
        return len(self.plate)

    @property
    def ranged(self) -> NDArray[np.bool_]:
        """Rows whose age is given as a range."""
        young, old = self.numbers["age_young_ma"], self.numbers["age_old_ma"]
        return ~np.isnan(young) & ~np.isnan(old) & ~self.bad_age

    def representative_age(self) -> Floats:
        """The age of each site, of a range without one the middle; NaN where there is none."""
        numbers = self.numbers
        middle = 0.5 * (numbers["age_young_ma"] + numbers["age_old_ma"])
        age = np.where(np.isnan(numbers["age_ma"]), middle, numbers["age_ma"])
        return np.where(self.bad_age, np.nan, age)


class SiteReader:
    """Finds the columns of a site table once and parses its chunks."""

    def __init__(self, reader: DelimitedReader, own_ages: bool, clock: SiteClock | None = None) -> None:
        self.reader = reader
        self.clock = clock
        reader.expect(KNOWN_COLUMNS)
        self.at = {
            name: reader.column(name, required=name in {"lat_deg", "lon_deg"}) for name in KNOWN_COLUMNS
        }
        ranged = [name for name in ("age_young_ma", "age_old_ma") if self.at[name] is not None]
        if len(ranged) == 1:
            missing = {"age_young_ma", "age_old_ma"} - set(ranged)
            raise TableError(
                f"{reader.file}:{reader.header_line}: {ranged[0]} stands without {missing.pop()};"
                " an age range needs both"
            )
        self.has_ranges = bool(ranged)
        if self.at["chron"] is not None and clock is None and self.at["age_ma"] is None:
            raise TableError(
                f"{reader.file}:{reader.header_line}: chrons stand instead of ages, and no time scale is named"
            )
        if own_ages and self.at["age_ma"] is None and not ranged and self.at["chron"] is None:
            reader.column("age_ma")

    def parse(self, chunk: Chunk) -> SiteTable:
        """The sites of one chunk; faults become findings, never lost rows."""
        decimal = self.reader.layout.decimal
        numbers: dict[str, Floats] = {}
        findings: list[Finding] = []
        count = len(chunk)
        bad = {"place": np.zeros(count, dtype=bool), "age": np.zeros(count, dtype=bool)}
        slipped = frozenset((*chunk.surplus, *chunk.short))
        said: dict[str, NDArray[np.bool_]] = {}
        for row in slipped:
            wrong_length = self.reader.length_fault(chunk, row)
            if wrong_length is not None:
                findings.append(wrong_length)
                bad["place"][row] = bad["age"][row] = True
        for name in NUMBERS:
            values, faults = parse_numbers(chunk, self.at[name], name, decimal)
            numbers[name] = np.array(values, dtype=np.float64)
            # in a row of another length the values have slipped into other columns
            said[name] = (
                np.isin(np.arange(count), list(slipped)) if slipped else np.zeros(count, dtype=bool)
            )
            if faults:
                row_of = {line: row for row, line in enumerate(chunk.lines)}
                group = "place" if name in PLACES else "age"
                for fault in faults:
                    row = row_of[fault.place.line or 0]
                    bad[group][row] = True
                    if not said[name][row]:
                        findings.append(fault)
                    said[name][row] = True
        if self.clock is not None:
            self.clock.restate(chunk, self.at, numbers, bad["age"], findings, decimal)
        self._check_ranges(chunk, numbers, bad, said, findings)
        labels = self.at["plate"]
        plate = [""] * count if labels is None else [text.strip() for text in chunk.columns[labels]]
        names = self.at["site"]
        site = chunk.columns[names] if names is not None else [str(line) for line in chunk.lines]
        own: dict[str, Sequence[Any]] = dict(zip(own_names(chunk.header), chunk.columns, strict=True))
        findings.sort(key=lambda f: (f.place.line or 0, f.place.column or 0))
        return SiteTable(
            own,
            site,
            plate,
            numbers,
            bad["place"],
            bad["age"],
            findings,
            self.has_ranges,
            chunk.file,
            chunk.lines,
            labels,
            self.reader.header_line,
            slipped,
        )

    def _check_ranges(
        self,
        chunk: Chunk,
        numbers: Mapping[str, Floats],
        bad: Mapping[str, NDArray[np.bool_]],
        said: Mapping[str, NDArray[np.bool_]],
        findings: list[Finding],
    ) -> None:
        for group, name, wrong, rule in range_faults(numbers):
            # what two values are to each other is of interest only if each is good
            fresh = wrong & ~(bad[group] if rule in RELATIONS else said[name])
            bad[group][fresh] = True
            for row in np.flatnonzero(fresh):
                column, value = self.at[name], numbers[name][row]
                text = "" if column is None else chunk.columns[column][row].strip()
                what = f"{name} = {text or format(value, 'g')}"
                if not text and np.isnan(value):
                    what = f"{name} is empty"
                place = chunk.place(int(row), self.at[name])
                findings.append(Finding("error", "bad value", place, what, remedy=rule))


def range_faults(numbers: Mapping[str, Floats]) -> list[tuple[str, str, NDArray[np.bool_], str]]:
    """What values cannot be: (group, column, rows at fault, what would be right)."""
    lat, lon = numbers["lat_deg"], numbers["lon_deg"]
    faults = [
        ("place", "lat_deg", ~(np.abs(lat) <= 90.0), "a latitude must lie in -90..90"),
        ("place", "lon_deg", ~(np.abs(lon) <= 360.0), "a longitude must lie in -360..360"),
    ]
    for name in AGES:
        wrong = ~np.isnan(numbers[name]) & ~((numbers[name] >= 0.0) & (numbers[name] <= OLDEST_AGE_MA))
        faults.append(("age", name, wrong, f"ages lie in 0..{OLDEST_AGE_MA:g} Ma, positive into the past"))
    for name in ERRORS:
        wrong = ~np.isnan(numbers[name]) & ~((numbers[name] >= 0.0) & np.isfinite(numbers[name]))
        faults.append(
            ("place" if name in PLACES else "age", name, wrong, "must be finite and not negative")
        )
    young, old = numbers["age_young_ma"], numbers["age_old_ma"]
    half = np.isnan(young) != np.isnan(old)
    both, ordered, within = RELATIONS
    faults.append(("age", "age_young_ma", half & np.isnan(young), both))
    faults.append(("age", "age_old_ma", half & np.isnan(old), both))
    faults.append(("age", "age_young_ma", young > old, ordered))
    age = numbers["age_ma"]
    faults.append(("age", "age_ma", (age < young) | (age > old), within))
    return faults


def table_from_columns(columns: Mapping[str, Sequence[Any]], own_ages: bool) -> SiteTable:
    """A site table from columns in memory (a dict of sequences, or a pandas DataFrame).

    Raises TableError if a column is missing; values that cannot be used become findings that name
    the row, counted from 0.
    """
    names = [str(name) for name in columns]
    for name in ("lat_deg", "lon_deg", *(("age_ma",) if own_ages and "age_old_ma" not in names else ())):
        if name not in names:
            raise TableError(f"sites: column {name!r} is missing; the columns are {', '.join(names)}")
    own: dict[str, Sequence[Any]] = {name: list(columns[name]) for name in names}
    count = len(own["lat_deg"])
    nan = np.full(count, np.nan)
    try:
        numbers = {
            name: np.array([np.nan if v is None else v for v in own[name]], dtype=np.float64)
            if name in own
            else nan.copy()
            for name in NUMBERS
        }
    except (TypeError, ValueError) as exc:
        raise TableError(f"sites: a column of numbers holds something else: {exc}") from None
    findings: list[Finding] = []
    bad = {"place": np.zeros(count, dtype=bool), "age": np.zeros(count, dtype=bool)}
    chunk = Chunk("sites", names, [], list(range(count)), {}, {})
    for group, name, wrong, rule in range_faults(numbers):
        fresh = wrong & ~bad[group]
        bad[group][fresh] = True
        for row in np.flatnonzero(fresh):
            what = f"{name} = {numbers[name][row]:g}"
            findings.append(Finding("error", "bad value", chunk.place(int(row)), what, remedy=rule))
    labels = own.get("plate", [""] * count)
    plate = ["" if v is None or v != v else str(v) for v in labels]
    site = [str(v) for v in own.get("site", range(count))]
    return SiteTable(own, site, plate, numbers, bad["place"], bad["age"], findings, "age_old_ma" in names)
