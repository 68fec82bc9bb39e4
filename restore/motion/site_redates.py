"""A table of sites restated to another time scale, row by row, with its own columns kept."""

from __future__ import annotations

import os
from collections.abc import Mapping
from typing import Any

import numpy as np
from numpy.typing import NDArray

from restore.files.delimited import Chunk, DelimitedReader, Layout, parse_numbers
from restore.files.tables import TableOut
from restore.findings import Finding
from restore.geometry.sphere import Floats
from restore.history.timescale import TimeScale
from restore.motion.site_clock import AGES, SiteClock
from restore.motion.site_table import KNOWN_COLUMNS

ADDED = ("age_before_ma", "age_moved_myr", "redated_by", "loose")


def redate_sites(
    table: str | os.PathLike[str],
    layout: Layout,
    own: TimeScale | None,
    to: TimeScale,
    out: str | os.PathLike[str] | None,
    provenance: Mapping[str, Any],
) -> list[Finding]:
    """Write the table with its ages (Ma) restated; returns the faults of its rows.

    Age columns hold the new ages, all others stay as they stood; added are the age before, what it
    moved by (Myr), how (`chron` or `interpolated`), and whether it lies inside a long interval
    without reversals. A row that cannot be restated loses its age and keeps all else. Raises
    TableError or InputError if the table or the scales as a whole are at fault.
    """
    clock = SiteClock(to, own)
    findings: list[Finding] = []
    with DelimitedReader(table, layout) as reader, TableOut(out, provenance) as target:
        reader.expect(KNOWN_COLUMNS)
        at = {name: reader.column(name, required=False) for name in (*AGES, "chron", "chron_fraction")}
        if at["age_ma"] is None and at["chron"] is None and at["age_old_ma"] is None:
            reader.column("age_ma")
        for chunk in reader.chunks():
            target.add(_restated(chunk, at, clock, own is not None, reader, findings))
    return findings


def _restated(
    chunk: Chunk,
    at: Mapping[str, int | None],
    clock: SiteClock,
    has_own: bool,
    reader: DelimitedReader,
    findings: list[Finding],
) -> dict[str, Any]:
    found: list[Finding] = []
    numbers, bad = _parsed(chunk, at, reader, found)
    if not has_own:
        _check_clock(chunk, at, numbers, bad, found)
    before = dict(numbers)
    how = clock.restate(chunk, at, numbers, bad, found, reader.layout.decimal)
    findings += sorted(found, key=lambda fault: (fault.place.line or 0, fault.place.column or 0))
    columns: dict[str, Any] = dict(zip(chunk.header, chunk.columns, strict=True))
    for name in AGES:
        column = at[name]
        if column is not None:
            columns[chunk.header[column]] = np.where(bad, np.nan, np.round(numbers[name], 6))
    if at["age_ma"] is None and at["chron"] is not None:
        columns["age_ma"] = np.where(bad, np.nan, np.round(numbers["age_ma"], 6))
    columns["age_before_ma"] = before["age_ma"]
    columns["age_moved_myr"] = np.where(bad, np.nan, np.round(numbers["age_ma"] - before["age_ma"], 6))
    columns["redated_by"] = ["" if is_bad else said for said, is_bad in zip(how, bad, strict=True)]
    loose = np.zeros(len(chunk), dtype=bool)
    if clock.restatement is not None:
        loose = clock.restatement.loose(before["age_ma"])
    columns["loose"] = [
        bool(flag) and said == "interpolated" for flag, said in zip(loose, how, strict=True)
    ]
    return columns


def _parsed(
    chunk: Chunk, at: Mapping[str, int | None], reader: DelimitedReader, findings: list[Finding]
) -> tuple[dict[str, Floats], NDArray[np.bool_]]:
    """The ages (Ma) by column, and the rows that are at fault."""
    bad = np.zeros(len(chunk), dtype=bool)
    for row in (*chunk.surplus, *chunk.short):
        wrong_length = reader.length_fault(chunk, row)
        findings += [] if wrong_length is None else [wrong_length]
        bad[row] = True
    slipped = bad.copy()
    numbers = {}
    line_of = {line: row for row, line in enumerate(chunk.lines)}
    for name in AGES:
        values, faults = parse_numbers(chunk, at[name], name, reader.layout.decimal)
        numbers[name] = np.array(values, dtype=np.float64)
        for fault in faults:
            row = line_of[fault.place.line or 0]
            bad[row] = True
            findings += [] if slipped[row] else [fault]
    return numbers, bad


def _check_clock(
    chunk: Chunk,
    at: Mapping[str, int | None],
    numbers: Mapping[str, Floats],
    bad: NDArray[np.bool_],
    findings: list[Finding],
) -> None:
    """Ages that neither a chron nor a time scale of the table dates."""
    column = at["chron"]
    chrons = [""] * len(chunk) if column is None else chunk.columns[column]
    for name in AGES:
        for row in np.flatnonzero(~np.isnan(numbers[name]) & (numbers[name] != 0.0) & ~bad):
            if name == "age_ma" and chrons[row].strip():
                continue
            bad[row] = True
            what = f"{name} = {numbers[name][row]:g} has no chron and the table names no time scale"
            place = chunk.place(int(row), at[name])
            remedy = "say which clock its ages are on (--from)"
            findings.append(Finding("error", "no clock", place, what, remedy=remedy))
