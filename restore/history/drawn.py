"""Histories drawn from the errors of their rows: for answers where the linear form is too rough."""

from __future__ import annotations

from dataclasses import replace

import numpy as np

from restore.errors import InputError
from restore.findings import Finding, Place
from restore.geometry import so3
from restore.geometry.rotations import Rotations
from restore.geometry.sphere import Floats
from restore.history.store import History


def draw_errors(history: History, count: int, seed: int) -> Floats:
    """Small rotations (count, rows, 3), rad, one per row and draw; zero where no error is known.

    Normal with each row's covariance; where kappa was estimated, multivariate t with its degrees of
    freedom, so that the 95 % region is that of the F distribution (Royer & Chang 1991). The same
    seed gives the same draws, and the first n of more draws are the draws of n.
    """
    errors = history.row_errors()
    values, axes = np.linalg.eigh(errors.covariance) if len(history) else (np.zeros((0, 3)), None)
    drawn = np.zeros((count, len(history), 3))
    if axes is None:
        return drawn
    roots = axes * np.sqrt(np.maximum(values, 0.0))[:, np.newaxis, :]
    estimated = np.isfinite(errors.dof)
    nu = errors.dof[estimated]
    for number in range(count):
        generator = np.random.default_rng([seed, number])
        normal = generator.standard_normal((len(history), 3))
        normal[estimated] *= np.sqrt(nu / generator.chisquare(nu))[:, np.newaxis]
        drawn[number] = np.einsum("rij,rj->ri", roots, normal)
    return drawn


def drawn_rotations(history: History, count: int, seed: int) -> Floats:
    """Quaternions (count, rows, 4) of the rows with drawn errors: `A expm([u]x)`."""
    rows = history.rows.rotations().quaternions
    return so3.multiply(rows[np.newaxis], so3.exponential(draw_errors(history, count, seed)))


def drawn_history(history: History, quaternions: Floats, number: int) -> History:
    """A complete history whose rows are one draw, (rows, 4). Its rows have no covariance: a draw is
    one possible world, not an estimate.
    """
    lat, lon, angle = Rotations(quaternions).as_poles()
    still = history.rows.angle_deg == 0.0
    drawn = np.any(history.row_errors().covariance != 0.0, axis=(1, 2))
    old = history.rows
    unknown = np.where((old.age_ma == 0.0)[:, None, None], 0.0, np.full((len(old), 3, 3), np.nan))
    rows = replace(
        old,
        pole_lat_deg=np.where(drawn, lat, old.pole_lat_deg),
        pole_lon_deg=np.where(drawn, lon, old.pole_lon_deg),
        angle_deg=np.where(drawn, angle, np.where(still, 0.0, old.angle_deg)),
        covariance=unknown,
        dof=np.full(len(old), np.inf),
    )
    title = f"{history.title} (draw {number})".strip()
    return History(rows, history.tables, history.frames, title)


def undrawn(history: History) -> Finding | None:
    """A warning if rows have no covariance and so stay as they are in every draw."""
    errors = history.row_errors()
    rows = np.flatnonzero(~errors.known & (history.rows.age_ma > 0.0))
    if not len(rows):
        return None
    first = int(rows[0])
    table = history.tables[int(history.rows.table[first])]
    what = f"{len(rows)} of {len(history)} rows have no covariance (the first here)"
    return Finding(
        "warning", "no covariance", Place(table.file, int(history.rows.line[first]) or None), what,
        remedy="they are the same in every draw",
    )  # fmt: skip


def check_count(count: int) -> int:
    """The number of draws, checked; raises InputError below 1."""
    if count < 1:
        raise InputError(f"draws = {count}: must be at least 1")
    return count
