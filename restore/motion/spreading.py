"""The plain door to flowlines: a file or columns in memory, a history, and what is asked."""

from __future__ import annotations

import os
from collections.abc import Iterable, Mapping, Sequence
from typing import Any

from restore.errors import InputError
from restore.geometry.latitudes import Latitudes
from restore.geometry.sphere import EARTH_RADIUS_KM
from restore.history.store import History
from restore.motion.flowlines import FlowlineMaker, Flowlines, Spreading
from restore.motion.ridge_points import RidgePoints
from restore.motion.shares import Shares

Columns = Mapping[str, Sequence[Any]]
Ages = str | float | Iterable[float]


def flowlines(
    points: str | os.PathLike[str] | Columns,
    history: History,
    between: tuple[str, str],
    ages: Ages,
    *,
    share: float | str | os.PathLike[str] = 0.5,
    frame: str | None = None,
    every_myr: float | None = None,
    latitudes: str = "as-given",
    radius_km: float = EARTH_RADIUS_KM,
    beyond: str = "refuse",
) -> Flowlines:
    """Both arms of the flowlines from points on the ridge between two plates, at ages (Ma).

    `points`: a table, or columns in memory, `lat_deg, lon_deg[, start, age_ma, on_plate]` (degrees, Ma).
    `share`: the part of new crust that the first plate keeps, a number in [0, 1] or a table
    `younger_ma, older_ma, share`. Positions are in present-day coordinates of each plate, or in `frame`
    at each crust's own age; `every_myr` (Myr) adds positions in between. Raises InputError for points,
    ages or a share at fault, DomainError where no chain joins the plates.
    """
    shares = Shares.constant(share) if isinstance(share, (int, float)) else Shares.read(share)
    spreading = Spreading.between(
        history, between, ages, shares, frame, beyond,
        latitudes=Latitudes(latitudes), radius_km=radius_km, every_myr=every_myr,
    )  # fmt: skip
    if isinstance(points, (str, os.PathLike)):
        starts = RidgePoints.read(points, between)
    else:
        known = {name: points[name] for name in ("start", "age_ma", "on_plate") if name in points}
        starts = RidgePoints.of(_needed(points, "lat_deg"), _needed(points, "lon_deg"), between, **known)
    return FlowlineMaker(spreading, starts).make(starts, None)


def _needed(columns: Columns, name: str) -> Sequence[Any]:
    if name not in columns:
        raise InputError(f"column {name!r} is missing; the columns are {', '.join(map(str, columns))}")
    return columns[name]
