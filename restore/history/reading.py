"""A rotation table on disk -> rows as meant, and a finding for each fault."""

from __future__ import annotations

import math
from collections.abc import Mapping
from dataclasses import replace

import numpy as np

from restore.errors import InputError, TableError
from restore.files.delimited import Chunk, DelimitedReader, parse_number
from restore.findings import Finding, Place, did_you_mean
from restore.geometry.rotations import Rotations
from restore.geometry.sphere import Floats, lat_lon
from restore.history.conventions import (
    RADIANS_PER_MYR,
    Table,
    covariance_from_ellipse,
    published_covariance,
)
from restore.history.rows import Row
from restore.history.timescale import Chron, TimeScale

PUBLISHED = ("cov_a", "cov_b", "cov_c", "cov_d", "cov_e", "cov_f")
ELLIPSE = (
    "pole_ellipse_major_deg",
    "pole_ellipse_minor_deg",
    "pole_ellipse_azimuth_deg",
    "angle_sigma_deg",
)
NUMBERS = (
    *("age_ma", "pole_lat_deg", "pole_lon_deg", "angle_deg", "rate_deg_per_myr"),
    "chron_fraction",
    *("kappa", "dof", *PUBLISHED, "cov_factor", *ELLIPSE),
    *(f"omega_{axis}{unit}" for unit in RADIANS_PER_MYR for axis in "xyz"),
)
TEXTS = ("plate", "relative_to", "chron", "reference", "note", "covariance_in")
KNOWN_COLUMNS = frozenset(NUMBERS + TEXTS)


class _RowError(Exception):
    """A row cannot be read: column, what, remedy."""


def read_table(path: str, table: Table, number: int) -> tuple[list[Row], list[Finding]]:
    """The rows of one table, in the order of the file, and what was found wrong with it.

    Rows at fault are left out, each with a finding of severity `error`. Angular velocities give two
    rows: a zero row at 0 Ma and one at `rates_hold_to_ma`. Raises TableError if the table as a whole
    cannot be read.
    """
    with DelimitedReader(path, table.layout) as reader:
        return _TableReading(reader, table, number).read()


class _TableReading:
    """The columns of one table and how its rows are made from them."""

    def __init__(self, reader: DelimitedReader, table: Table, number: int) -> None:
        self.reader = reader
        self.table = replace(table, file=reader.file)
        self.number = number
        self.findings: list[Finding] = []
        self.constants = dict(table.constants)
        self.only = [(self._place_of(name), text) for name, text in table.only]
        self.columns = self._find_columns()
        self.scale = TimeScale.read(table.time_scale) if table.time_scale else None
        self.omega_unit = self._omega_unit()

    def _place_of(self, theirs: str) -> int:
        """The place of one of the table's own columns, by name, or by number without a header."""
        if theirs not in self.reader.header:
            hint = did_you_mean(theirs, self.reader.header)
            place = f"{self.reader.file}:{self.reader.header_line}"
            raise TableError(f"{place}: only: column {theirs!r} is missing; {hint}")
        return self.reader.header.index(theirs)

    def _find_columns(self) -> dict[str, int]:
        columns: dict[str, int] = {}
        self.reader.expect(KNOWN_COLUMNS)
        for name in (*NUMBERS, *TEXTS):
            if name in self.constants and self.reader.column(name, required=False) is not None:
                header = f"{self.reader.file}:{self.reader.header_line}"
                raise TableError(f"{header}: {name} is a constant of the manifest and a column; keep one")
            required = name in {"plate", "relative_to"} and name not in self.constants
            place = self.reader.column(name, required=required)
            if place is not None:
                columns[name] = place
        return columns

    def _omega_unit(self) -> str:
        has_angle, has_rate = "angle_deg" in self.columns, "rate_deg_per_myr" in self.columns
        units = [unit for unit in RADIANS_PER_MYR if f"omega_x{unit}" in self.columns]
        for unit in units:
            for axis in "yz":
                self.reader.column(f"omega_{axis}{unit}")
        if has_angle + has_rate + len(units) != 1:
            place = f"{self.reader.file}:{self.reader.header_line}"
            if has_angle + has_rate + len(units) == 0:
                missing = [n for n in ("age_ma", "angle_deg") if n not in self.columns]
                close = did_you_mean("angle_deg", set(self.reader.header) - KNOWN_COLUMNS)
                hint = close if close.startswith("did") else "or rate_deg_per_myr, or omega_x.. with unit"
                if any(name.startswith("omega_") for name in self.reader.header):
                    hint = "omega columns end in their unit: " + ", ".join(RADIANS_PER_MYR)
                raise TableError(f"{place}: column {', '.join(map(repr, missing))} is missing; {hint}")
            raise TableError(
                f"{place}: angles, rates and angular velocities stand side by side;"
                " a table gives one of them"
            )
        if not units:
            for name in ("pole_lat_deg", "pole_lon_deg"):
                self.reader.column(name)
        if has_angle and "age_ma" not in self.columns and not self.scale:
            if "chron" in self.columns:
                place = f"{self.reader.file}:{self.reader.header_line}"
                raise TableError(f"{place}: chrons stand instead of ages, and no time scale is named")
            self.reader.column("age_ma")
        return units[0] if units else ""

    def read(self) -> tuple[list[Row], list[Finding]]:
        rows: list[Row] = []
        for chunk in self.reader.chunks():
            for at in range(len(chunk)):
                if any(chunk.columns[column][at].strip() != text for column, text in self.only):
                    continue
                fault = self.reader.length_fault(chunk, at)
                if fault is not None:
                    self.findings.append(fault)
                    continue
                try:
                    rows.extend(self._rows(chunk, at))
                except _RowError as exc:
                    column, what, remedy = exc.args
                    place = chunk.place(at, self.columns.get(column))
                    self.findings.append(Finding("error", "bad row", place, what, remedy=remedy))
        if not rows and not self.findings:
            place = Place(self.reader.file, self.reader.header_line)
            remedy = "a history needs at least one finite rotation"
            what = "the table has a header and no rows" + (" of those asked for" if self.only else "")
            self.findings.append(Finding("error", "no rows", place, what, remedy=remedy))
        return rows, self.findings

    def _numbers(self, chunk: Chunk, at: int) -> dict[str, float]:
        numbers = {}
        for name in NUMBERS:
            column = self.columns.get(name)
            if column is None:
                continue
            text = chunk.columns[column][at]
            try:
                value = parse_number(text, self.reader.layout.decimal)
            except ValueError:
                remedy = "numbers are written as 12.5 or 3e-7"
                if text.strip().replace(",", "").replace("-", "").isdigit():
                    remedy = "state decimal = ',' in a manifest if decimal commas are meant"
                raise _RowError(name, f"{name} = {text!r} is not a number", remedy) from None
            if text.strip() and not math.isfinite(value):
                raise _RowError(
                    name, f"{name} = {text!r}", "a row of a history may not hold NaN or infinity"
                )
            if text.strip():
                numbers[name] = value
        return numbers

    def _text(self, chunk: Chunk, at: int, name: str) -> str:
        column = self.columns.get(name)
        if column is None:
            return self.constants.get(name, "")
        return chunk.columns[column][at].strip()

    def _rows(self, chunk: Chunk, at: int) -> list[Row]:
        numbers = self._numbers(chunk, at)
        printed = {self.reader.header[c]: chunk.columns[c][at].strip() for c in self._shown()}
        base = Row(
            plate=self.table.label(self._text(chunk, at, "plate")),
            relative_to=self.table.label(self._text(chunk, at, "relative_to")),
            age_ma=0.0,
            pole_lat_deg=math.nan,
            pole_lon_deg=math.nan,
            angle_deg=0.0,
            dof=numbers.get("dof", math.inf),
            chron=self._chron(chunk, at, numbers.get("chron_fraction", math.nan)),
            reference=self._text(chunk, at, "reference"),
            note=self._text(chunk, at, "note"),
            table=self.number,
            line=chunk.lines[at],
            printed="; ".join(f"{name} {text}" for name, text in printed.items()),
        )
        if "angle_deg" in self.columns:
            rows = [self._finite_row(base, numbers)]
        else:
            rows = [base, self._velocity_row(base, numbers)]
        for row in rows:
            for column, what, remedy in row.faults():
                raise _RowError(column, what, remedy)
        covariance = self._covariance(rows[-1], numbers, self._text(chunk, at, "covariance_in"))
        rows[-1] = replace(rows[-1], covariance=covariance)
        for column, what, remedy in rows[-1].faults():
            raise _RowError(column, what, remedy)
        return rows

    def _shown(self) -> list[int]:
        shown = [
            "plate",
            "relative_to",
            "age_ma",
            "chron",
            "chron_fraction",
            "pole_lat_deg",
            "pole_lon_deg",
            "angle_deg",
        ]
        shown += ["rate_deg_per_myr", *(f"omega_{axis}{self.omega_unit}" for axis in "xyz")]
        return [self.columns[name] for name in shown if name in self.columns]

    def _pole(self, base: Row, numbers: Mapping[str, float]) -> Row:
        for name in ("pole_lat_deg", "pole_lon_deg"):
            if name not in numbers:
                raise _RowError(name, f"{name} is empty", "only a zero rotation has no pole")
        if not -90.0 <= numbers["pole_lat_deg"] <= 90.0:
            what = f"pole_lat_deg = {numbers['pole_lat_deg']:g}"
            raise _RowError("pole_lat_deg", what, "a latitude must lie in -90..90")
        lat = self.table.conventions.latitude_as_meant(numbers["pole_lat_deg"])
        return replace(base, pole_lat_deg=lat, pole_lon_deg=numbers["pole_lon_deg"])

    def _finite_row(self, base: Row, numbers: Mapping[str, float]) -> Row:
        if "angle_deg" not in numbers:
            raise _RowError("angle_deg", "angle_deg is empty", "every row needs one")
        if "age_ma" not in numbers:
            numbers = {**numbers, "age_ma": self._age_of_chron(base.chron)}
        row = replace(base, age_ma=numbers["age_ma"])
        if numbers["angle_deg"] == 0.0:
            return row
        angle = self.table.conventions.angle_as_meant(numbers["angle_deg"])
        return replace(self._pole(row, numbers), angle_deg=angle)

    def _age_of_chron(self, chron: str) -> float:
        if not chron:
            raise _RowError("age_ma", "age_ma is empty", "every row needs an age or a chron")
        if self.scale is None:
            raise _RowError(
                "age_ma", f"age_ma is empty and chron {chron} has no clock", "name a time_scale"
            )
        try:
            return self.scale.age_of(Chron.parse(chron))
        except InputError as exc:
            raise _RowError("chron", str(exc), "pick one in [table.chrons]") from None

    def _chron(self, chunk: Chunk, at: int, fraction: float) -> str:
        """The chron as meant, `name(edge)`; one that is only a remark stays as it is."""
        printed = self._text(chunk, at, "chron")
        chron = self.table.chron(printed)
        if not chron or (self.scale is None and math.isnan(fraction)):
            return chron
        try:
            return str(Chron.parse(chron, fraction))
        except InputError as exc:
            if self._text(chunk, at, "age_ma") and math.isnan(fraction):
                return chron
            raise _RowError("chron", str(exc), "or pick one in [table.chrons]") from None

    def _velocity_row(self, base: Row, numbers: Mapping[str, float]) -> Row:
        """The finite rotation of an angular velocity that held since `rates_hold_to_ma`."""
        span = self.table.rates_hold_to_ma
        if "rate_deg_per_myr" in self.columns:
            if "rate_deg_per_myr" not in numbers:
                raise _RowError("rate_deg_per_myr", "rate_deg_per_myr is empty", "every row needs one")
            row, rate = base, numbers["rate_deg_per_myr"]
            if rate != 0.0:
                row = self._pole(base, numbers)
        else:
            omega = self._omega(numbers)
            rate = float(np.rad2deg(np.linalg.norm(omega)))
            lat, lon = (float(v) for v in lat_lon(omega))
            row = base if rate == 0.0 else replace(base, pole_lat_deg=lat, pole_lon_deg=lon)
        rate = self.table.conventions.rate_as_meant(rate)
        return replace(row, age_ma=span, angle_deg=-rate * span)

    def _omega(self, numbers: Mapping[str, float]) -> Floats:
        names = [f"omega_{axis}{self.omega_unit}" for axis in "xyz"]
        for name in names:
            if name not in numbers:
                raise _RowError(name, f"{name} is empty", "all three components are needed")
        return np.array([numbers[name] for name in names]) * RADIANS_PER_MYR[self.omega_unit]

    def _covariance(self, row: Row, numbers: Mapping[str, float], stated_in: str) -> Floats | None:
        """The covariance as meant, None where the row has none."""
        if row.age_ma == 0.0:
            return None
        if any(name in numbers for name in ELLIPSE):
            return self._covariance_from_ellipse(row, numbers)
        given = [name for name in PUBLISHED if name in numbers]
        if not given:
            return None
        if len(given) < len(PUBLISHED):
            missing = next(name for name in PUBLISHED if name not in numbers)
            raise _RowError(missing, f"{missing} is empty", "all six of cov_a..cov_f are needed, or none")
        kappa, factor = numbers.get("kappa", 1.0), numbers.get("cov_factor", 1.0)
        for name, value in (("kappa", kappa), ("cov_factor", factor)):
            if value <= 0.0:
                raise _RowError(name, f"{name} = {value:g}", "must be above 0")
        matrix = published_covariance([numbers[name] for name in PUBLISHED], kappa, factor)
        conventions = self.table.conventions
        if stated_in:
            if stated_in not in {"plate", "relative_to"}:
                what = f"covariance_in = {stated_in!r}"
                raise _RowError("covariance_in", what, "must be plate or relative_to")
            conventions = replace(conventions, covariance_in=stated_in)
        rotation = Rotations.from_poles(row.pole_lat_deg, row.pole_lon_deg, row.angle_deg)
        return conventions.covariance_as_meant(rotation.quaternions, matrix)

    def _covariance_from_ellipse(self, row: Row, numbers: Mapping[str, float]) -> Floats:
        missing = [name for name in ELLIPSE if name not in numbers]
        if missing:
            what = f"{missing[0]} is empty"
            raise _RowError(
                missing[0], what, "a pole ellipse needs both semi-axes, azimuth and angle sigma"
            )
        if row.angle_deg == 0.0:
            raise _RowError(ELLIPSE[0], "a zero rotation has a pole ellipse", "give it as cov_a..cov_f")
        return covariance_from_ellipse(
            row.pole_lat_deg, row.pole_lon_deg, row.angle_deg, *(numbers[n] for n in ELLIPSE)
        )
