"""Which rows of a track turn the other way: the choice of signs that makes its path smoothest.

One row with the wrong sign, or a run of them (two papers typed into one table), is a path that jumps
to its mirror image. The smoothest choice is found by dynamic programming (Viterbi 1967, IEEE Trans.
Inf. Theory 13, 260-269) over the sign of each row.
"""

from __future__ import annotations

from itertools import product

import numpy as np

from restore.geometry import so3
from restore.geometry.sphere import Floats

SIGNS = (0, 1)
PER_ROW_RAD, PER_CHANGE_RAD = 1e-6, 1e-7
"""What it costs to turn a row, and to change the sign: of two choices as smooth the one is taken that
turns fewer rows, then the one with fewer runs.
"""


def turned_runs(ages: Floats, turns: Floats) -> list[tuple[int, int]]:
    """Runs (first, last) of rows that the smoothest path through ages (n,), Ma, and turns (n, 4) inverts.

    Row 0, the present or the youngest row, stays as it is.
    """
    if len(ages) < 3:
        return []
    choice = _smoothest(_kinks(ages, turns))
    edges = np.flatnonzero(np.diff([0, *choice, 0]))
    return [(int(first), int(end) - 1) for first, end in zip(edges[::2], edges[1::2], strict=True)]


def roughness(ages: Floats, turns: Floats, at: int) -> float:
    """Changes of velocity where the stage from row `at` - 1 to row `at` begins and ends, rad; ages in Ma."""
    kinks = _kinks(ages, turns)[0, 0, 0]
    return float(kinks[max(at - 2, 0) : at].sum())


def _kinks(ages: Floats, turns: Floats) -> Floats:
    """Changes of velocity (2, 2, 2, n - 2) by the signs of three rows, times the shorter stage, rad."""
    both = np.stack([turns, so3.conjugate(turns)])
    steps = np.diff(ages)
    velocity = {
        (one, other): so3.logarithm(so3.multiply(so3.conjugate(both[one][:-1]), both[other][1:]))
        / steps[:, np.newaxis]
        for one, other in product(SIGNS, SIGNS)
    }
    shorter = np.minimum(steps[:-1], steps[1:])
    kinks = np.empty((2, 2, 2, len(steps) - 1))
    for one, middle, other in product(SIGNS, SIGNS, SIGNS):
        change = velocity[middle, other][1:] - velocity[one, middle][:-1]
        kinks[one, middle, other] = np.linalg.norm(change, axis=-1) * shorter
    return kinks


def _smoothest(kinks: Floats) -> list[int]:
    """The signs (n,) with the smallest sum of kinks; 1 where a row is inverted."""
    best = {(0, sign): ((PER_ROW_RAD + PER_CHANGE_RAD) * sign, [0, sign]) for sign in SIGNS}
    for at in range(kinks.shape[-1]):
        following: dict[tuple[int, int], tuple[float, list[int]]] = {}
        for (one, middle), (cost, signs) in best.items():
            for other in SIGNS:
                total = cost + float(kinks[one, middle, other, at]) + PER_ROW_RAD * other
                total += PER_CHANGE_RAD * (middle != other)
                if (middle, other) not in following or total < following[middle, other][0]:
                    following[middle, other] = (total, [*signs, other])
        best = following
    return min(best.values())[1]
