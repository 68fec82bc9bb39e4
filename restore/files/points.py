"""Tables of points: latitude and longitude, and any columns of the user's own."""

from __future__ import annotations

import os
from collections.abc import Iterable, Iterator, Mapping, Sequence
from typing import Any

from restore.errors import TableError, raise_faults
from restore.files.delimited import Chunk, DelimitedReader, Layout, parse_numbers
from restore.findings import Finding, Place

LIMITS = {"lat_deg": 90.0, "lon_deg": 360.0}


def read_points(
    path: str | os.PathLike[str], layout: Layout | None = None
) -> tuple[dict[str, list[str]], list[float], list[float]]:
    """The user's other columns, latitudes and longitudes (degrees) of a table of points.

    Raises TableError, one line per fault, for a point that is not on the globe.
    """
    with DelimitedReader(path, layout) as reader:
        reader.expect(LIMITS)
        places = {name: reader.column(name) for name in LIMITS}
        (chunk,) = reader.chunks(size=2**62)
        findings = [fault for row in range(len(chunk)) if (fault := reader.length_fault(chunk, row))]
        numbers = {}
        for name, column in places.items():
            assert column is not None
            numbers[name], faults = parse_numbers(chunk, column, name, reader.layout.decimal)
            faults += _off_the_globe(chunk, column, name, numbers[name])
            cut = {finding.place.line for finding in findings if finding.place.column is None}
            findings += [fault for fault in faults if fault.place.line not in cut]
        findings.sort(key=lambda f: (f.place.line or 0, f.place.column or 0))
        raise_faults(TableError, findings)
        taken = set(places.values())
        own = {n: chunk.columns[i] for i, n in enumerate(own_names(chunk.header)) if i not in taken}
        return own, numbers["lat_deg"], numbers["lon_deg"]


def _off_the_globe(chunk: Chunk, column: int, name: str, values: list[float]) -> Iterator[Finding]:
    limit = LIMITS[name]
    for row, value in enumerate(values):
        text = chunk.columns[column][row].strip()
        is_number = value == value or not text or text.lower() == "nan"
        if not abs(value) <= limit and is_number:
            what = f"{name} = {text}" if text else f"{name} is empty"
            remedy = f"must lie in -{limit:g}..{limit:g}"
            yield Finding("error", "bad coordinate", chunk.place(row, column), what, remedy=remedy)


def beside(own: Mapping[str, Any], results: Mapping[str, Any]) -> dict[str, Any]:
    """The user's own columns, then results; an own column with a result's name becomes `own_NAME`."""
    columns: dict[str, Any] = {}
    for name, values in own.items():
        while name in results or name in columns:
            name = f"own_{name}"
        columns[name] = values
    return {**columns, **results}


def own_names(header: list[str]) -> list[str]:
    """The names of a table's columns, each once: where several have none, their numbers."""
    if header.count("") < 2:
        return header
    return [name or str(number) for number, name in enumerate(header, start=1)]


def refuse_result_names(own: Sequence[str], results: Iterable[str], file: str, line: int | None) -> None:
    """Raise TableError if a column of the user's own has the name of a result, one line for each."""
    taken = set(results)
    findings = [
        Finding(
            "error", "taken name", Place(file, line, None if line is None else at),
            f"column {name!r} has the name of a result", remedy="give it another name",
        )
        for at, name in enumerate(own, start=1)
        if name in taken
    ]  # fmt: skip
    raise_faults(TableError, findings)
