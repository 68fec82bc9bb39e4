"""The rows of a history as a table that a person can hold against the paper."""

from __future__ import annotations

import math
from collections.abc import Iterator

import numpy as np

from restore.geometry.sphere import EARTH_RADIUS_KM
from restore.history.store import History

HEADER = (
    "line",
    "as printed",
    "as meant",
    "age Ma",
    "pole lat",
    "pole lon",
    "angle",
    "sigma km",
    "chron",
    "reference",
)


def listing(history: History) -> Iterator[str]:
    """Lines of text: each table with its title, citation and conventions, then its rows.

    `as printed` are the fields of the file, `as meant` the pair and rotation that came of them;
    `sigma km`: largest and smallest 1-sigma of the rotation on the globe, `?` where not known.
    """
    for number, table in enumerate(history.tables):
        own = np.flatnonzero(history.rows.table == number)
        conventions = table.conventions
        yield f"{table.file or '<rows>'}: {table.title}".rstrip(": ")
        if table.citation:
            yield f"  {table.citation}"
        said = [f"turns {conventions.turns}", f"holds {conventions.holds}"]
        said += [f"positive {conventions.positive_angle}", f"latitudes {conventions.latitudes}"]
        said += [f"covariance in {conventions.covariance_in}"]
        said += [f"time scale {table.time_scale}"] if table.time_scale else []
        said += [f"rank {table.rank}"] if table.rank else []
        said += ["from the present"] if table.from_present else []
        yield "  " + ", ".join(said)
        yield from _aligned([HEADER, *(_fields(history, int(row)) for row in own)])
        yield ""


def _fields(history: History, number: int) -> tuple[str, ...]:
    row = history.rows.row(number)
    pole = ("-", "-") if row.angle_deg == 0.0 else (f"{row.pole_lat_deg:.6g}", f"{row.pole_lon_deg:.6g}")
    sigma = "0" if row.age_ma == 0.0 else "?"
    if row.covariance is not None and np.any(row.covariance):
        axes = np.sqrt(np.linalg.eigvalsh(row.covariance)) * EARTH_RADIUS_KM
        sigma = f"{axes[-1]:.3g}..{axes[0]:.3g}"
        sigma += "" if math.isinf(row.dof) else f" (dof {row.dof:g})"
    return (
        str(row.line or ""),
        row.printed,
        f"{row.plate} relative to {row.relative_to}",
        f"{row.age_ma:g}",
        *pole,
        f"{row.angle_deg:.6g}",
        sigma,
        row.chron,
        row.reference,
    )


def _aligned(rows: list[tuple[str, ...]]) -> Iterator[str]:
    widths = [max(len(row[i]) for row in rows) for i in range(len(rows[0]))]
    for row in rows:
        yield "  " + "  ".join(text.ljust(width) for text, width in zip(row, widths, strict=True)).rstrip()
