"""Where findings of the audit stand."""

from __future__ import annotations

from restore.findings import Place
from restore.history.store import History


def place_of_row(history: History, row: int) -> Place:
    """File and line of a row; of an implied zero row nothing but the history."""
    if row < 0:
        return Place()
    table = history.tables[int(history.rows.table[row])]
    return Place(table.file, int(history.rows.line[row]) or None)


def pair_name(plate: str, relative_to: str) -> str:
    """A pair in words."""
    return f"{plate} relative to {relative_to}"
