"""Result tables on their way out: CSV as a stream, other forms by the ending of the file's name.

Every form is whole or not there. CSV has no place for comments, so its provenance is written beside
it as `NAME.provenance.json`, Parquet's likewise; JSON, GeoJSON and netCDF carry it inside.
"""

from __future__ import annotations

import contextlib
import csv
import io
import json
import os
import sys
from collections.abc import Mapping, Sequence
from pathlib import Path
from types import TracebackType
from typing import TYPE_CHECKING, Any, TextIO

import numpy as np

from restore.errors import InputError, MissingPackageError
from restore.files.atomic import check_target, refuse_input, whole_file

if TYPE_CHECKING:
    import pandas as pd

ENDINGS = (".csv", ".json", ".geojson", ".nc", ".parquet", ".gpkg")
Columns = Mapping[str, Sequence[Any] | np.ndarray]


def decimals_of(name: str) -> int | None:
    """Decimals that a column is written with: 1e-10 degrees are 0.01 mm, 1e-6 km a millimetre."""
    if name.endswith("_deg"):
        return 10
    if name.endswith(("_ma", "_myr")):
        return 9
    if name.endswith(("_km", "_km2", "_mm_yr", "_dof")):
        return 6
    if name in {"probability", "statistic", "obliquity_deg"}:
        return 10
    return None


def texts(name: str, values: Sequence[Any] | np.ndarray) -> list[str]:
    """A column as texts: texts as they are, numbers short and without loss, NaN and None empty."""
    if isinstance(values, np.ndarray) and values.dtype.kind == "f":
        decimals = decimals_of(name)
        if decimals is None:
            said = ["" if v != v else repr(v) for v in values.tolist()]
        else:
            said = ["" if v != v else repr(round(v, decimals) + 0.0) for v in values.tolist()]
        return [text[:-2] if text.endswith(".0") else text for text in said]
    if isinstance(values, np.ndarray) and values.dtype == np.bool_:
        return ["true" if value else "false" for value in values.tolist()]
    if len(values) and isinstance(values[0], str) and all(isinstance(v, str) for v in values):
        return list(values)
    words = {True: "true", False: "false"}
    return [words[v] if isinstance(v, bool) else "" if v is None or v != v else str(v) for v in values]


def record_value(name: str, value: Any) -> Any:
    """A value as JSON has it: NaN is null, numbers rounded as in CSV."""
    if isinstance(value, np.generic):
        value = value.item()
    if isinstance(value, float):
        if value != value:
            return None
        decimals = decimals_of(name)
        return value if decimals is None else round(value, decimals) + 0.0
    return value


def check_ending(path: str | os.PathLike[str]) -> str:
    """The ending of an output name, checked; raises InputError for one that is not written."""
    ending = Path(path).suffix.lower()
    if ending not in ENDINGS:
        raise InputError(
            f"{os.fspath(path)}: cannot tell what to write; end the name in {', '.join(ENDINGS)}"
        )
    return ending


class TableOut:
    """A table written in pieces to a file, or to standard output as CSV; a context manager.

    `geometry`: the columns of latitude and longitude that GeoJSON and GeoPackage make points of.
    """

    def __init__(
        self,
        path: str | os.PathLike[str] | None,
        provenance: Mapping[str, Any],
        geometry: tuple[str, str] | None = None,
    ) -> None:
        self.path = None if path is None else Path(path)
        self.ending = ".csv" if path is None else check_ending(path)
        self.provenance = dict(provenance)
        if path is not None:
            check_target(path)
            refuse_input(path, (record["file"] for record in self.provenance.get("inputs", ())))
        self.geometry = geometry
        self.pieces: list[dict[str, Any]] = []
        self._stack = contextlib.ExitStack()
        self._stream: TextIO | None = None
        self._begun = False

    def __enter__(self) -> TableOut:
        if self.ending == ".csv":
            if self.path is None:
                self._stream = sys.stdout
            else:
                self._part = self._stack.enter_context(whole_file(self.path))
                stream = self._open(self._part)
                self._stream = self._stack.enter_context(stream)
        return self

    def _open(self, part: Path) -> TextIO:
        try:
            return part.open("w", encoding="utf-8", newline="")
        except OSError as exc:
            raise InputError(f"{self.path}: cannot be written: {exc.strerror}") from None

    def add(self, columns: Columns) -> None:
        """Write some rows, given by column; every piece has the same columns."""
        columns = honest_errors(columns)
        if self._stream is None:
            self.pieces.append(dict(columns))
            return
        writer = csv.writer(self._stream, lineterminator="\n")
        if not self._begun:
            writer.writerow(columns)
            self._begun = True
        writer.writerows(zip(*(texts(name, values) for name, values in columns.items()), strict=True))

    def __exit__(
        self, kind: type[BaseException] | None, exc: BaseException | None, trace: TracebackType | None
    ) -> None:
        if kind is not None:
            self._stack.__exit__(kind, exc, trace)
            return
        if self._stream is not None:
            self._stream.flush()
            self._stack.close()
        elif self.path is not None:
            with whole_file(self.path) as part:
                self._write_other(part)
        if self.path is not None and self.ending in {".csv", ".parquet"}:
            beside = self.path.with_name(self.path.name + ".provenance.json")
            with whole_file(beside) as part:
                part.write_text(json.dumps(self.provenance, indent=2) + "\n", encoding="utf-8")

    def _columns(self) -> dict[str, Any]:
        if not self.pieces:
            return {}
        joined: dict[str, Any] = {}
        for name, first in self.pieces[0].items():
            parts = [piece[name] for piece in self.pieces]
            if isinstance(first, np.ndarray):
                joined[name] = np.concatenate(parts)
            else:
                joined[name] = _as_numbers(name, [value for part in parts for value in part])
        return joined

    def _write_other(self, part: Path) -> None:
        columns = self._columns()
        writers = {
            ".json": self._write_json,
            ".geojson": self._write_geojson,
            ".nc": self._write_netcdf,
            ".parquet": self._write_parquet,
            ".gpkg": self._write_geopackage,
        }
        writers[self.ending](part, columns)

    def _records(self, columns: Mapping[str, Any]) -> list[dict[str, Any]]:
        names = list(columns)
        rows = zip(*columns.values(), strict=True)
        return [{n: record_value(n, v) for n, v in zip(names, row, strict=True)} for row in rows]

    def _write_json(self, part: Path, columns: Mapping[str, Any]) -> None:
        content = {"provenance": self.provenance, "rows": self._records(columns)}
        part.write_text(json.dumps(content, indent=1, allow_nan=False) + "\n", encoding="utf-8")

    def _write_geojson(self, part: Path, columns: Mapping[str, Any]) -> None:
        """RFC 7946: one feature per row, its geometry null where there is no position."""
        lat_name, lon_name = self._geometry_columns()
        features = []
        for record in self._records(columns):
            lat, lon = record[lat_name], record[lon_name]
            at = None if lat is None else {"type": "Point", "coordinates": [lon, lat]}
            features.append({"type": "Feature", "geometry": at, "properties": record})
        content = {"type": "FeatureCollection", "provenance": self.provenance, "features": features}
        part.write_text(json.dumps(content, allow_nan=False) + "\n", encoding="utf-8")

    def _geometry_columns(self) -> tuple[str, str]:
        if self.geometry is None:
            raise InputError(f"{self.path}: this table has no positions; write it as .csv, .json or .nc")
        return self.geometry

    def _dataframe(self, columns: Mapping[str, Any]) -> pd.DataFrame:
        import pandas as pd

        return pd.DataFrame({name: list(values) for name, values in columns.items()})

    def _write_netcdf(self, part: Path, columns: Mapping[str, Any]) -> None:
        import xarray as xr

        units = {"_deg": "degree", "_km": "km", "_ma": "Myr", "_myr": "Myr", "_mm_yr": "mm year-1"}
        variables = {}
        for name, values in columns.items():
            attributes = next(({"units": u} for end, u in units.items() if name.endswith(end)), {})
            if not isinstance(values, np.ndarray):
                values = np.array([str(v) for v in values], dtype=object)
                attributes = {}
            variables[name] = (("row",), values, attributes)
        attributes = {"Conventions": "CF-1.11", "provenance": json.dumps(self.provenance)}
        try:
            xr.Dataset(variables, attrs=attributes).to_netcdf(part, engine="netcdf4")
        except (RuntimeError, ValueError) as exc:
            # names from the user's header may hold what netCDF does not allow
            reason = str(exc).partition(". ")[0]
            raise InputError(
                f"{self.path}: cannot be written as netCDF: {reason}; rename the column, or write another kind"
            ) from None

    def _write_parquet(self, part: Path, columns: Mapping[str, Any]) -> None:
        try:
            import pyarrow  # noqa: F401
        except ImportError:
            raise MissingPackageError(
                f"{self.path}: Parquet needs pyarrow; install oncewhere[parquet]"
            ) from None
        self._dataframe(columns).to_parquet(part, index=False)

    def _write_geopackage(self, part: Path, columns: Mapping[str, Any]) -> None:
        try:
            import geopandas
        except ImportError:
            raise MissingPackageError(
                f"{self.path}: GeoPackage needs geopandas; install oncewhere[gis]"
            ) from None
        lat_name, lon_name = self._geometry_columns()
        frame = self._dataframe(columns)
        places = geopandas.points_from_xy(frame[lon_name], frame[lat_name], crs="EPSG:4326")
        table = geopandas.GeoDataFrame(frame, geometry=places)
        metadata = {"provenance": json.dumps(self.provenance)}
        # the driver wants a name that ends in .gpkg, which the part's does not
        content = io.BytesIO()
        layer = Path(str(self.path)).stem
        table.to_file(content, driver="GPKG", layer=layer, dataset_metadata=metadata)
        part.write_bytes(content.getvalue())


def honest_errors(columns: Columns) -> Columns:
    """Columns whose `errors` says `not known` in rows that have no sigma at all."""
    sigmas = [
        values
        for name, values in columns.items()
        if "_sigma_" in name and isinstance(values, np.ndarray) and values.dtype.kind == "f"
    ]
    if "errors" not in columns or not sigmas:
        return columns
    bare = np.all([np.isnan(values) for values in sigmas], axis=0)
    said = ["not known" if none else text for none, text in zip(bare, columns["errors"], strict=True)]
    return {**columns, "errors": said}


def _as_numbers(name: str, values: list[Any]) -> list[Any] | np.ndarray:
    """A user's column of texts as numbers, if its name says what they are and all of them are."""
    if not name.endswith(("_deg", "_ma", "_myr", "_km")) or not all(isinstance(v, str) for v in values):
        return values
    try:
        return np.array([float(v) if v.strip() else np.nan for v in values], dtype=np.float64)
    except ValueError:
        return values


def csv_text(columns: Columns) -> str:
    """A whole table as CSV text."""
    stream = io.StringIO()
    writer = csv.writer(stream, lineterminator="\n")
    writer.writerow(columns)
    writer.writerows(zip(*(texts(name, values) for name, values in columns.items()), strict=True))
    return stream.getvalue()
