"""What two histories differ in, row by row, and what a difference is worth in km."""

from __future__ import annotations

from typing import Any

import numpy as np

from restore.geometry.rotations import Rotations
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
    records: list[tuple[Any, ...]] = []
    for key, row in keys[0].items():
        if key not in keys[1]:
            records.append((*key, "only in the first", None, first.place_of(row), ""))
            continue
        other = keys[1][key]
        km = _apart_km(first, row, second, other)
        places = (first.place_of(row), second.place_of(other))
        if km > 1e-6:
            records.append((*key, "rotation", km, *places))
        elif not np.array_equal(first.rows.covariance[row], second.rows.covariance[other], equal_nan=True):
            records.append((*key, "covariance", km, *places))
    for key, row in keys[1].items():
        if key not in keys[0]:
            records.append((*key, "only in the second", None, "", second.place_of(row)))
    return {name: [record[i] for record in records] for i, name in enumerate(COLUMNS)}


def _keys(history: History) -> dict[tuple[str, str, float], int]:
    rows = history.rows
    found: dict[tuple[str, str, float], int] = {}
    for row in range(len(rows)):
        found.setdefault((rows.plate[row], rows.relative_to[row], float(rows.age_ma[row])), row)
    return found


def _apart_km(first: History, row: int, second: History, other: int) -> float:
    one: Rotations = first.rows.take([row]).rotations()
    two: Rotations = second.rows.take([other]).rotations()
    return float(one.angle_to(two)[0]) * EARTH_RADIUS_KM
