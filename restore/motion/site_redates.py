"""A table of sites restated to another time scale, row by row, with its own columns kept."""

from __future__ import annotations

import os
from collections.abc import Mapping
from typing import Any

import numpy as np

from restore.files.delimited import Chunk, DelimitedReader, Layout, parse_numbers
from restore.files.tables import TableOut
from restore.findings import Finding
from restore.history.timescale import TimeScale
from restore.motion.site_clock import AGES, SiteClock

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
        at = {name: reader.column(name, required=False) for name in (*AGES, "chron", "chron_fraction")}
        if at["age_ma"] is None and at["chron"] is None and at["age_old_ma"] is None:
            reader.column("age_ma")
        for chunk in reader.chunks():
            target.add(_restated(chunk, at, clock, reader, findings))
    return findings


def _restated(
    chunk: Chunk,
    at: Mapping[str, int | None],
    clock: SiteClock,
    reader: DelimitedReader,
    findings: list[Finding],
) -> dict[str, Any]:
    numbers = {}
    bad = np.zeros(len(chunk), dtype=bool)
    line_of = {line: row for row, line in enumerate(chunk.lines)}
    for name in AGES:
        values, faults = parse_numbers(chunk, at[name], name, reader.layout.decimal)
        numbers[name] = np.array(values)
        findings += faults
        bad[[line_of[fault.place.line or 0] for fault in faults]] = True
    before = dict(numbers)
    how = clock.restate(chunk, at, numbers, bad, findings)
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
