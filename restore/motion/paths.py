"""The paths that points follow between two ages: how long they are."""

from __future__ import annotations

import numpy as np

from restore.geometry.sphere import Floats, cross, length
from restore.history.circuit import Circuit
from restore.history.links import Ints
from restore.history.velocity import angular_velocity
from restore.motion.points import Points

_NODES, _WEIGHTS = np.polynomial.legendre.leggauss(8)


def path_length_km(
    circuit: Circuit, points: Points, younger_ma: Floats, older_ma: Floats, radius_km: float
) -> Floats:
    """Length in km `(n,)` of each point's path in the frame from an older to a younger age (Ma).

    The speed `|eta x x|` is smooth between the rows' ages of a chain; in each such span it is
    integrated with eight Gauss-Legendre nodes, which leaves less than a millimetre. Steps at a
    change of partner are not counted. NaN where the chain has a gap.
    """
    total = np.full(len(points.codes), np.nan)
    for code in np.unique(points.codes):
        if code < 0:
            continue
        items = np.flatnonzero(points.codes == code)
        total[items] = _of_one_plate(circuit, points, items, younger_ma[items], older_ma[items])
    return total * radius_km


def _of_one_plate(circuit: Circuit, points: Points, items: Ints, younger: Floats, older: Floats) -> Floats:
    code = int(points.codes[items[0]])
    inner = circuit.row_ages(circuit.plates[code], float(younger.min()), float(older.max()))
    first = np.searchsorted(inner, younger, side="right")
    last = np.maximum(np.searchsorted(inner, older, side="left"), first)
    spans = last - first + 1
    owner = np.repeat(np.arange(len(items)), spans)
    within = np.arange(len(owner)) - np.repeat(np.cumsum(spans) - spans, spans)
    edge = np.concatenate([inner, [np.inf]])
    start = np.where(within == 0, younger[owner], edge[np.maximum(first[owner] + within - 1, 0)])
    end = np.where(within == spans[owner] - 1, older[owner], edge[first[owner] + within])
    ages = (start[:, None] + (end - start)[:, None] * 0.5 * (_NODES + 1.0)).ravel()
    found = circuit.rotations_by_code(np.full(len(ages), code), ages)
    place = points.vectors(items)[np.repeat(owner, len(_NODES))]
    speed = length(cross(angular_velocity(found), place)).reshape(len(owner), len(_NODES))
    pieces = np.where(end > start, (speed * _WEIGHTS).sum(axis=1) * 0.5 * (end - start), 0.0)
    total: Floats = np.bincount(owner, weights=pieces, minlength=len(items)).astype(np.float64)
    return total
