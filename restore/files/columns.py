"""Small tables whose columns are known by name: numbers checked, texts as they stand."""

from __future__ import annotations

import os
from collections.abc import Iterator, Sequence
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from restore.errors import TableError, raise_faults
from restore.files.delimited import Chunk, DelimitedReader, Layout, parse_numbers
from restore.files.points import LIMITS, own_names
from restore.findings import Finding, Place

LEAST = {"age_ma": 0.0, "younger_ma": 0.0, "older_ma": 0.0, "age_sigma_myr": 0.0, "sigma_km": 0.0}


@dataclass(frozen=True, eq=False)
class ColumnTable:
    """The columns of a table: `numbers` as floats (NaN: no value), `texts` stripped, and the others.

    `own`: the columns that have no meaning here, as they stand; `lines`: the line of each row.
    """

    file: str
    numbers: dict[str, NDArray[np.float64]]
    texts: dict[str, list[str]]
    own: dict[str, list[str]]
    lines: list[int]

    def __len__(self) -> int:
        return len(self.lines)

    def place(self, row: int) -> Place:
        """Where a row stands."""
        return Place(self.file, self.lines[row])


def read_columns(
    path: str | os.PathLike[str],
    numbers: Sequence[str],
    texts: Sequence[str] = (),
    required: Sequence[str] = (),
    layout: Layout | None = None,
) -> ColumnTable:
    """Read a table by the names of its columns; a column that is missing has no values.

    `required`: columns that must be there, with a value in every row; latitudes, longitudes and ages
    must be possible ones. Raises TableError, one line per fault.
    """
    with DelimitedReader(path, layout) as reader:
        reader.expect([*numbers, *texts])
        places = {name: reader.column(name, name in required) for name in (*numbers, *texts)}
        (chunk,) = reader.chunks(size=2**62)
        findings = [fault for row in range(len(chunk)) if (fault := reader.length_fault(chunk, row))]
        cut = {finding.place.line for finding in findings}
        parsed: dict[str, NDArray[np.float64]] = {}
        for name in numbers:
            values, faults = parse_numbers(chunk, places[name], name, reader.layout.decimal)
            parsed[name] = np.array(values, dtype=np.float64)
            faults += _out_of_range(chunk, places[name], name, values, name in required)
            findings += [fault for fault in faults if fault.place.line not in cut]
        said = {name: _texts(chunk, places[name]) for name in texts}
        for name in texts:
            findings += _empty(chunk, places[name], name, said[name]) if name in required else ()
        findings.sort(key=lambda f: (f.place.line or 0, f.place.column or 0))
        raise_faults(TableError, findings)
        taken = set(places.values())
        own = {n: chunk.columns[i] for i, n in enumerate(own_names(chunk.header)) if i not in taken}
        return ColumnTable(reader.file, parsed, said, own, chunk.lines)


def _texts(chunk: Chunk, column: int | None) -> list[str]:
    return [""] * len(chunk) if column is None else [text.strip() for text in chunk.columns[column]]


def _empty(chunk: Chunk, column: int | None, name: str, values: list[str]) -> Iterator[Finding]:
    for row, text in enumerate(values):
        if not text:
            place = chunk.place(row, column)
            yield Finding("error", "no value", place, f"{name} is empty", remedy="every row needs one")


def _out_of_range(
    chunk: Chunk, column: int | None, name: str, values: list[float], required: bool
) -> Iterator[Finding]:
    if column is None:
        return
    limit, least = LIMITS.get(name, np.inf), LEAST.get(name, -LIMITS.get(name, np.inf))
    for row, value in enumerate(values):
        text = chunk.columns[column][row].strip()
        if value != value:
            blank = not text or text.lower() == "nan"
            if required and blank:
                place = chunk.place(row, column)
                yield Finding("error", "no value", place, f"{name} is empty", remedy="every row needs one")
        elif not least <= value <= limit or abs(value) == np.inf:
            place = chunk.place(row, column)
            bounds = f"must lie in {least:g}..{limit:g}" if limit < np.inf else "must be finite, 0 or above"
            yield Finding("error", "out of range", place, f"{name} = {text}", remedy=bounds)
