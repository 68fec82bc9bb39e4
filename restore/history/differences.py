"""What two histories differ in, row by row, and what a difference is worth in km."""

from __future__ import annotations

from collections import Counter
from typing import Any

import numpy as np

from restore.geometry.sphere import EARTH_RADIUS_KM
from restore.history.store import History

COLUMNS = ("plate", "relative_to", "age_ma", "what", "km", "first_row", "second_row")


def differences(first: History, second: History) -> dict[str, list[Any]]:
    """Rows that stand in one history only, or in both with another rotation or error, as columns.

    `what`: `only in the first`, `only in the second`, `rotation`, `covariance`. `km`: the greatest
    distance on the globe between the two rotations, None where there is no second one. Rows are
    matched by pair and age, in the order of the first history, then of the second.
    """
    keys = [_keys(history) for history in (first, second)]
    apart = _apart_km(
        first, second, [(row, keys[1][key]) for key, row in keys[0].items() if key in keys[1]]
    )
    records: list[tuple[Any, ...]] = []
    for key, row in keys[0].items():
        if key not in keys[1]:
            records.append((*key[:3], "only in the first", None, first.place_of(row), ""))
            continue
        other = keys[1][key]
        km = apart[row]
        places = (first.place_of(row), second.place_of(other))
        if km > 1e-6:
            records.append((*key[:3], "rotation", km, *places))
        elif not np.array_equal(first.rows.covariance[row], second.rows.covariance[other], equal_nan=True):
            records.append((*key[:3], "covariance", km, *places))
    for key, row in keys[1].items():
        if key not in keys[0]:
            records.append((*key[:3], "only in the second", None, "", second.place_of(row)))
    return {name: [record[i] for record in records] for i, name in enumerate(COLUMNS)}


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
