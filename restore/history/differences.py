"""What two histories differ in, row by row, and what a difference is worth in km."""

from __future__ import annotations

from collections import Counter
from typing import Any

import numpy as np

from restore.geometry.sphere import EARTH_RADIUS_KM
from restore.history.store import History

COLUMNS = ("plate", "relative_to", "age_ma", "what", "km", "moved_myr", "first_row", "second_row")


def differences(first: History, second: History) -> dict[str, list[Any]]:
    """Rows that stand in one history only, or in both with another rotation or error, as columns.

    `what`: `only in the first`, `only in the second`, `age`, `rotation`, `covariance`. `km`: the greatest
    distance on the globe between the two rotations, None where there is no second one; `moved_myr`: by
    how much the age differs. Rows are matched by pair and age, and those left over by pair and the line
    that they came from, in the order of the first history, then of the second.
    """
    keys = [_keys(history) for history in (first, second)]
    matched = {row: keys[1][key] for key, row in keys[0].items() if key in keys[1]}
    matched |= _by_line(first, second, matched)
    apart = _apart_km(first, second, list(matched.items()))
    records: list[tuple[Any, ...]] = []
    for key, row in keys[0].items():
        if row not in matched:
            records.append((*key[:3], "only in the first", None, None, first.place_of(row), ""))
            continue
        other, km = matched[row], apart[row]
        moved = float(second.rows.age_ma[other] - first.rows.age_ma[row])
        same = np.array_equal(first.rows.covariance[row], second.rows.covariance[other], equal_nan=True)
        what = "age" if moved else "rotation" if km > 1e-6 else "" if same else "covariance"
        if what:
            records.append(
                (*key[:3], what, round(km, 6), round(moved, 9), first.place_of(row), second.place_of(other))
            )
    known = set(matched.values())
    for key, row in keys[1].items():
        if row not in known:
            records.append((*key[:3], "only in the second", None, None, "", second.place_of(row)))
    return {name: [record[i] for record in records] for i, name in enumerate(COLUMNS)}


def _by_line(first: History, second: History, matched: dict[int, int]) -> dict[int, int]:
    """Rows without a match that came from the same line of a table: a restated row is the same row."""

    def origin(history: History, row: int) -> tuple[str, str, str]:
        return (history.rows.plate[row], history.rows.relative_to[row], history.place_of(row))

    taken = set(matched.values())
    left = {
        origin(second, row): row
        for row in range(len(second))
        if row not in taken and int(second.rows.line[row]) > 0
    }
    return {
        row: left[origin(first, row)]
        for row in range(len(first))
        if row not in matched and origin(first, row) in left
    }


def _keys(history: History) -> dict[tuple[str, str, float, int], int]:
    """Pair, age, and which of the rows there are (tables of several ranks have one each) -> row."""
    rows = history.rows
    found: dict[tuple[str, str, float, int], int] = {}
    seen: Counter[tuple[str, str, float]] = Counter()
    for row in range(len(rows)):
        key = (rows.plate[row], rows.relative_to[row], float(rows.age_ma[row]))
        found[*key, seen[key]] = row
        seen[key] += 1
    return found


def _apart_km(first: History, second: History, pairs: list[tuple[int, int]]) -> dict[int, float]:
    """Greatest distances on the globe between rows of two histories, km, by row of the first."""
    one, two = ([pair[side] for pair in pairs] for side in (0, 1))
    turns = first.rows.take(one).rotations(), second.rows.take(two).rotations()
    km = turns[0].angle_to(turns[1]) * EARTH_RADIUS_KM
    return {int(row): float(value) for row, value in zip(one, km, strict=True)}
