"""A rotation history: rows with the tables they came from; in from any form, out as one file."""

from __future__ import annotations

import json
import math
import os
from collections.abc import Mapping, Sequence
from dataclasses import asdict, dataclass, field, fields, replace
from pathlib import Path
from typing import TYPE_CHECKING, Any

import numpy as np

from restore.errors import HistoryError, InputError, TableError, raise_faults
from restore.files.delimited import Layout
from restore.findings import Finding, Place, did_you_mean
from restore.geometry.uncertain import RowErrors
from restore.history.conventions import Conventions, Table
from restore.history.manifest import FRAME_KINDS, read_manifest
from restore.history.reading import read_table
from restore.history.rows import Row, Rows, check_rows

if TYPE_CHECKING:
    import xarray as xr

LAYOUT_VERSION = 1
TEXT_COLUMNS = frozenset({"plate", "relative_to", "chron", "reference", "note", "printed"})
NETCDF_ENDINGS = frozenset({".nc", ".nc4"})


@dataclass(frozen=True, eq=False)
class History:
    """Rows of finite rotations, the tables they came from, and the kinds of the frames.

    `frames`: label -> `plate`, `mantle` or `spin-axis`; labels that are not named are plates.
    `findings`: warnings of the reading. Build one with `read`, `from_rows` or `from_dataset`.
    """

    rows: Rows
    tables: tuple[Table, ...] = (Table(),)
    frames: Mapping[str, str] = field(default_factory=dict)
    title: str = ""
    findings: tuple[Finding, ...] = ()

    @classmethod
    def read(cls, path: str | os.PathLike[str]) -> History:
        """Read a history: a CSV table, a `.toml` manifest or a `.nc` file, told by the ending.

        Raises HistoryError with one line per fault, all faults of the rows at once.
        """
        ending = Path(path).suffix.lower()
        if ending in NETCDF_ENDINGS:
            return cls._read_netcdf(path)
        if ending == ".toml":
            manifest = read_manifest(path)
            return cls._read_tables(manifest.tables, manifest.frames, manifest.title)
        return cls._read_tables([Table(file=os.fspath(path))], {}, "")

    @classmethod
    def _read_tables(cls, tables: Sequence[Table], frames: Mapping[str, str], title: str) -> History:
        rows: list[Row] = []
        findings: list[Finding] = []
        broken: list[str] = []
        for number, table in enumerate(tables):
            try:
                its_rows, its_findings = read_table(table.file, table, number)
            except TableError as exc:
                broken.append(str(exc))
                continue
            rows += its_rows
            findings += its_findings
        if broken:
            faults = [finding.line() for finding in findings if finding.severity == "error"]
            raise HistoryError("\n".join(broken + faults))
        findings += check_rows(rows, tables)
        known = {row.plate for row in rows} | {row.relative_to for row in rows}
        for label in sorted(set(frames) - known):
            what = f"frames: {label!r} stands in no row"
            findings.append(
                Finding("warning", "unknown frame", Place(), what, remedy=did_you_mean(label, known))
            )
        raise_faults(HistoryError, findings)
        return cls(Rows.from_rows(rows), tuple(tables), frames, title, tuple(findings))

    @classmethod
    def from_rows(
        cls,
        rows: Sequence[Row],
        tables: Sequence[Table] = (Table(),),
        frames: Mapping[str, str] | None = None,
        title: str = "",
    ) -> History:
        """A history from rows made in Python.

        Raises HistoryError naming the first fault of each row at fault, by its number from 0.
        """
        faults = []
        for number, row in enumerate(rows):
            for _, what, remedy in row.faults()[:1]:
                faults.append(f"row {number}: {what}; {remedy}")
        if faults:
            raise HistoryError("\n".join(faults))
        findings = check_rows(rows, tables)
        raise_faults(HistoryError, findings)
        return cls(Rows.from_rows(rows), tuple(tables), frames or {}, title, tuple(findings))

    def __len__(self) -> int:
        return len(self.rows)

    def plates(self) -> list[str]:
        """Every label that stands in the history, plates and frames, sorted."""
        return sorted(set(self.rows.plate) | set(self.rows.relative_to))

    def kind_of(self, frame: str) -> str:
        """The kind of a frame: `plate`, unless the history says `mantle` or `spin-axis`."""
        return self.frames.get(frame, "plate")

    def row_errors(self) -> RowErrors:
        """The errors of all rows, by row number."""
        return RowErrors.from_covariances(self.rows.covariance, self.rows.dof)

    def place_of(self, row: int) -> str:
        """`file:line` of a row."""
        table = self.tables[int(self.rows.table[row])]
        return f"{table.file or '<rows>'}:{int(self.rows.line[row])}"

    def same_as(self, other: History) -> bool:
        """Whether rows, tables, frames and title are the same to the last bit."""
        return (
            self.rows.same_as(other.rows)
            and self.tables == other.tables
            and dict(self.frames) == dict(other.frames)
            and self.title == other.title
        )

    def add(self, rows: Sequence[Row], title: str = "added") -> History:
        """A new history with more rows, which keep a table of their own called `title`.

        Raises HistoryError if a row is at fault or stands there already at its pair's age.
        """
        table = Table(title=title)
        own = [replace(row, table=len(self.tables)) for row in rows]
        return self._rebuilt([*self._single_rows(), *own], (*self.tables, table))

    def replace(self, number: int, row: Row) -> History:
        """A new history with row `number` (from 0) replaced; the new row keeps the old one's place."""
        rows = self._single_rows()
        old = rows[self._checked(number)]
        rows[number] = replace(row, table=old.table, line=old.line, printed=row.printed or old.printed)
        return self._rebuilt(rows, self.tables)

    def drop(self, numbers: Sequence[int]) -> History:
        """A new history without some rows, by number from 0."""
        gone = {self._checked(number) for number in numbers}
        return replace(self, rows=self.rows.take([n for n in range(len(self)) if n not in gone]))

    def merge(self, other: History) -> History:
        """A new history with the rows of both, each row with the table it came from.

        Raises HistoryError if the two call a frame by different kinds or have a pair at one age and
        rank twice.
        """
        for name, kind in other.frames.items():
            if self.frames.get(name, kind) != kind:
                raise HistoryError(
                    f"frame {name!r} is {self.frames[name]} in one history, {kind} in the other"
                )
        shifted = [replace(row, table=row.table + len(self.tables)) for row in other._single_rows()]
        merged = self._rebuilt([*self._single_rows(), *shifted], (*self.tables, *other.tables))
        title = " + ".join(filter(None, (self.title, other.title)))
        return replace(merged, frames={**self.frames, **other.frames}, title=title)

    def _single_rows(self) -> list[Row]:
        return [self.rows.row(number) for number in range(len(self))]

    def _checked(self, number: int) -> int:
        if not 0 <= number < len(self):
            raise HistoryError(f"row {number}: the history has rows 0..{len(self) - 1}")
        return number

    def _rebuilt(self, rows: Sequence[Row], tables: Sequence[Table]) -> History:
        return History.from_rows(rows, tables, self.frames, self.title)

    def to_dataset(self) -> xr.Dataset:
        """The history as an `xarray.Dataset`, without loss; dimension `row`, metadata as attributes."""
        import xarray as xr

        variables: dict[str, Any] = {}
        for column in fields(Rows):
            values = getattr(self.rows, column.name)
            dims = ("row", "axis", "axis_t") if column.name == "covariance" else ("row",)
            variables[column.name] = (dims, np.array(values), dict(_ATTRIBUTES.get(column.name, {})))
        attributes = {
            "Conventions": "CF-1.11",
            "title": self.title,
            "rotation_history_version": LAYOUT_VERSION,
            "comment": (
                "Finite rotations: active, anticlockwise positive; each turns plate from where it is"
                " today to where it was at age_ma, relative_to held still. Covariance of a small"
                " rotation that acts first, in present-day coordinates of plate."
            ),
            "frames": json.dumps(dict(self.frames), sort_keys=True),
            "tables": json.dumps([_table_record(table) for table in self.tables]),
        }
        return xr.Dataset(variables, attrs=attributes)

    @classmethod
    def from_dataset(cls, dataset: xr.Dataset) -> History:
        """The history that `to_dataset` wrote.

        Raises HistoryError if the dataset is something else or of a later layout.
        """
        version = dataset.attrs.get("rotation_history_version")
        if version is None:
            raise HistoryError("the dataset holds no rotation history (no rotation_history_version)")
        if int(version) != LAYOUT_VERSION:
            raise HistoryError(f"rotation_history_version = {version}: this release reads 1")
        columns: dict[str, Any] = {}
        for column in fields(Rows):
            if column.name not in dataset:
                raise HistoryError(f"the dataset has no variable {column.name!r}")
            values = dataset[column.name].values
            if column.name in {"table", "line"}:
                columns[column.name] = values.astype(np.int64)
            elif column.name in TEXT_COLUMNS:
                texts = np.empty(values.shape, dtype=object)
                texts[:] = [str(v) for v in values]
                columns[column.name] = texts
            else:
                columns[column.name] = values.astype(np.float64)
        tables = tuple(_table_from_record(r) for r in json.loads(dataset.attrs["tables"]))
        frames = json.loads(dataset.attrs["frames"])
        return cls(Rows(**columns), tables, frames, str(dataset.attrs.get("title", "")))

    @classmethod
    def _read_netcdf(cls, path: str | os.PathLike[str]) -> History:
        import xarray as xr

        name = os.fspath(path)
        if not Path(path).is_file():
            reason = "is a folder, not a file" if Path(path).is_dir() else "no such file"
            raise HistoryError(f"{name}: {reason}")
        try:
            with xr.open_dataset(path, engine="netcdf4", decode_times=False) as dataset:
                return cls.from_dataset(dataset.load())
        except HistoryError as exc:
            raise HistoryError(f"{name}: {exc}") from None
        except (OSError, ValueError, KeyError) as exc:
            raise HistoryError(f"{name}: not a readable netCDF file ({exc})") from exc

    def write(self, path: str | os.PathLike[str]) -> None:
        """Write the history to one netCDF file (CF-1.11), whole or not at all.

        Raises InputError if the name does not end in `.nc` or the file cannot be written.
        """
        from restore.files.atomic import whole_file

        if Path(path).suffix.lower() not in NETCDF_ENDINGS:
            raise InputError(f"{os.fspath(path)}: a history is written as netCDF; end the name in .nc")
        with whole_file(path) as part:
            self.to_dataset().to_netcdf(part, engine="netcdf4")


_ATTRIBUTES: dict[str, dict[str, str]] = {
    "plate": {"long_name": "plate that moves"},
    "relative_to": {"long_name": "plate or frame held still"},
    "age_ma": {"long_name": "age before present", "units": "Myr"},
    "pole_lat_deg": {"long_name": "latitude of the rotation pole", "units": "degree"},
    "pole_lon_deg": {"long_name": "longitude of the rotation pole", "units": "degree"},
    "angle_deg": {"long_name": "angle of rotation, anticlockwise positive", "units": "degree"},
    "covariance": {"long_name": "covariance of the rotation, plate coordinates", "units": "rad2"},
    "dof": {"long_name": "degrees of freedom of the estimated kappa", "units": "1"},
}


def _table_record(table: Table) -> dict[str, Any]:
    record = asdict(table)
    record["layout"]["columns"] = dict(table.layout.columns)
    # JSON has no infinity
    record["valid_to_ma"] = None if math.isinf(table.valid_to_ma) else table.valid_to_ma
    return record


def _table_from_record(record: dict[str, Any]) -> Table:
    record = dict(record)
    record["conventions"] = Conventions(**record["conventions"])
    record["layout"] = Layout(**record["layout"])
    record["valid_to_ma"] = math.inf if record["valid_to_ma"] is None else record["valid_to_ma"]
    for name in ("plates", "chrons", "constants", "only"):
        record[name] = tuple((a, b) for a, b in record[name])
    return Table(**record)


def check_frame_kind(kind: str) -> str:
    """The kind of a frame, checked; raises InputError if it is none of the three."""
    if kind not in FRAME_KINDS:
        raise InputError(f"frame kind {kind!r}: must be one of {', '.join(FRAME_KINDS)}")
    return kind
