"""Tables of points: latitude and longitude, and any columns of the user's own."""

from __future__ import annotations

import os

from restore.errors import TableError, raise_faults
from restore.files.delimited import DelimitedReader, Layout, parse_numbers
from restore.findings import Finding


def read_points(
    path: str | os.PathLike[str], layout: Layout | None = None
) -> tuple[dict[str, list[str]], list[float], list[float]]:
    """The user's other columns, latitudes and longitudes (degrees) of a table of points.

    Raises TableError, one line per fault, for a point that is not on the globe.
    """
    with DelimitedReader(path, layout) as reader:
        places = {name: reader.column(name) for name in ("lat_deg", "lon_deg")}
        (chunk,) = reader.chunks(size=2**62)
        findings = [fault for row in range(len(chunk)) if (fault := reader.length_fault(chunk, row))]
        numbers = {}
        for name, limit in (("lat_deg", 90.0), ("lon_deg", 360.0)):
            column = places[name]
            values, faults = parse_numbers(chunk, column, name, reader.layout.decimal)
            findings += faults
            faulty = {fault.place for fault in faults}
            for row, value in enumerate(values):
                place = chunk.place(row, column)
                if not abs(value) <= limit and place not in faulty:
                    what = f"{name} = {value:g}" if value == value else f"{name} is empty"
                    remedy = f"must lie in -{limit:g}..{limit:g}"
                    findings.append(Finding("error", "bad coordinate", place, what, remedy=remedy))
            numbers[name] = values
        raise_faults(TableError, findings)
        taken = set(places.values())
        own = {
            n: c for i, (n, c) in enumerate(zip(chunk.header, chunk.columns, strict=True)) if i not in taken
        }
        return own, numbers["lat_deg"], numbers["lon_deg"]
