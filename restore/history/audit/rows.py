"""Findings about rows by themselves: references, errors, and the clocks of their tables."""

from __future__ import annotations

from collections.abc import Iterator

import numpy as np

from restore.errors import InputError
from restore.findings import Finding, Place
from restore.history.audit.places import place_of_row
from restore.history.redate import one_clock
from restore.history.store import History
from restore.history.timescale import TimeScale


def rows_without_reference(history: History) -> Iterator[Finding]:
    """Rows that say on whose evidence they stand neither themselves nor by their table's citation."""
    for number, table in enumerate(history.tables):
        if table.citation:
            continue
        own = (history.rows.table == number) & (history.rows.age_ma > 0.0)
        bare = np.flatnonzero(own & (history.rows.reference == ""))
        if len(bare):
            what = f"{len(bare)} rows have no reference (the first here)"
            remedy = "fill the column reference, or name the table's citation in a manifest"
            place = place_of_row(history, int(bare[0]))
            yield Finding("note", "no reference", place, what, remedy=remedy)


def rows_without_covariance(history: History) -> Iterator[Finding]:
    """Rows whose error is not known: no result that uses them has one."""
    errors = history.row_errors()
    for number in range(len(history.tables)):
        own = (history.rows.table == number) & (history.rows.age_ma > 0.0)
        bare = np.flatnonzero(own & ~errors.known)
        if len(bare):
            what = f"{len(bare)} of {int(own.sum())} rows have no covariance (the first here)"
            remedy = "results that use them have no error bar"
            place = place_of_row(history, int(bare[0]))
            yield Finding("note", "no covariance", place, what, remedy=remedy)


def mixed_clocks(history: History) -> Iterator[Finding]:
    """Tables whose ages are on different time scales, or on none beside one that is named."""
    names = {table.time_scale for table in history.tables if table.time_scale}
    if not names:
        return
    first = next(table for table in history.tables if table.time_scale)
    try:
        done = one_clock(history, TimeScale.read(first.time_scale))
    except InputError as exc:
        for line in str(exc).splitlines():
            yield Finding("warning", "clocks mixed", Place(first.file), line)
        return
    for finding in done.findings:
        what = finding.what.replace("restated from", "the clock differs: restated from")
        yield Finding(
            "warning", "clocks mixed", finding.place, what, finding.km, "name one clock for the run"
        )
