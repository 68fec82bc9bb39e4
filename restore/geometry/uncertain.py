"""Errors of results: sums over the rows they used, taken last.

The rows of a history are the random variables. A row's rotation is `A expm([u]x)` with
u ~ N(0, C): a small rotation that acts first, in present-day coordinates of the plate that moves
(Chang 1988, J. Am. Stat. Assoc. 83, 1178-1183; Royer & Chang 1991, J. Geophys. Res. 96,
11779-11802). A result's error is to first order `sum_r J_r u_r`, so its covariance is
`sum_r J_r C_r J_r^T`, and rows that two results share cancel where they should.
"""

from __future__ import annotations

import math
from dataclasses import dataclass
from typing import NamedTuple

import numpy as np
from numpy.typing import ArrayLike, NDArray

from restore.geometry.sphere import Floats


def confidence_factor(dof: ArrayLike = np.inf, probability: float = 0.95) -> Floats:
    """K of a confidence ellipse in two dimensions: `k^2 = 2 F(p; 2, nu)`, for nu = inf `chi2(p; 2)`.

    `dof` nu > 0, where kappa was estimated; else infinite, which gives 2.4477 at 95 %. With two
    degrees of freedom the F quantile has the closed form nu/2 ((1-p)^(-2/nu) - 1).
    """
    nu = np.asarray(dof, dtype=np.float64)
    tail = -2.0 * math.log(1.0 - probability)
    finite = np.isfinite(nu)
    safe = np.where(finite, nu, 1.0)
    square = np.where(finite, safe * np.expm1(tail / safe), tail)
    return np.where(np.isnan(nu), np.nan, np.sqrt(square))


class Ellipse(NamedTuple):
    """Semi-axes in km and the azimuth of the longer, degrees clockwise from north, [0, 180)."""

    major_km: Floats
    minor_km: Floats
    azimuth_deg: Floats


def ellipse(
    var_east: Floats, var_north: Floats, cov: Floats, factor: ArrayLike, radius_km: float
) -> Ellipse:
    """The ellipse of a tangent-plane covariance (rad^2), scaled by `factor` (k), in km.

    An isotropic error (a circle) has azimuth 0. NaN gives NaN.
    """
    mean = 0.5 * (var_east + var_north)
    half_difference = 0.5 * (var_north - var_east)
    spread = np.hypot(half_difference, cov)
    scale = np.asarray(factor, dtype=np.float64) * radius_km
    major = scale * np.sqrt(mean + spread)
    # the product of the eigenvalues over the larger keeps digits that their difference loses
    determinant = var_east * var_north - cov * cov
    with np.errstate(invalid="ignore", divide="ignore"):
        smaller = np.where(mean + spread > 0.0, determinant / (mean + spread), mean)
    minor = scale * np.sqrt(np.where(smaller < 0.0, 0.0, smaller))
    azimuth = np.mod(0.5 * np.rad2deg(np.arctan2(cov, half_difference)), 180.0)
    azimuth = np.where(azimuth >= 180.0, 0.0, azimuth)
    round_ = spread <= 1e-12 * mean
    azimuth = np.where(round_, 0.0, azimuth)
    return Ellipse(major, minor, np.where(np.isnan(major), np.nan, azimuth))


@dataclass(frozen=True, eq=False)
class RowErrors:
    """What is known of the errors of the rows of a history.

    `covariance` `(rows, 3, 3)`, rad^2, zero where nothing is known; `known` `(rows,)`;
    `dof` `(rows,)`: degrees of freedom of an estimated kappa, infinite where kappa is known.
    """

    covariance: Floats
    known: NDArray[np.bool_]
    dof: Floats

    @classmethod
    def from_covariances(cls, covariance: Floats, dof: Floats) -> RowErrors:
        """From covariances `(rows, 3, 3)` in which NaN says "not known"."""
        known = np.asarray(~np.isnan(covariance).any(axis=(-1, -2)))
        filled = np.where(known[:, np.newaxis, np.newaxis], covariance, 0.0)
        return cls(filled, known, np.where(np.isnan(dof), np.inf, dof))


@dataclass(frozen=True, eq=False)
class Sensitivity:
    """How results of k components move with the errors of the rows they used.

    `rows` `(..., m)`: numbers of rows, -1 where a place is empty; `matrices` `(..., m, k, 3)`: the
    Jacobian of the result by the row's small rotation. Each row stands once per result.
    """

    rows: NDArray[np.int64]
    matrices: Floats

    @classmethod
    def combined(cls, parts: list[Sensitivity]) -> Sensitivity:
        """The sensitivity of a sum: Jacobians of shared rows are added."""
        rows = np.concatenate([part.rows for part in parts], axis=-1)
        matrices = np.concatenate([part.matrices for part in parts], axis=-3)
        for later in range(1, rows.shape[-1]):
            for earlier in range(later):
                same = (rows[..., later] == rows[..., earlier]) & (rows[..., later] >= 0)
                moved = np.where(same[..., np.newaxis, np.newaxis], matrices[..., later, :, :], 0.0)
                matrices[..., earlier, :, :] += moved
                matrices[..., later, :, :] -= moved
                rows[..., later] = np.where(same, -1, rows[..., later])
        return cls(rows, matrices)

    def mapped(self, matrix: Floats) -> Sensitivity:
        """The sensitivity of `matrix @ result`; `matrix` `(..., j, k)`."""
        return Sensitivity(self.rows, matrix[..., np.newaxis, :, :] @ self.matrices)

    def contributions(self, errors: RowErrors) -> Floats:
        """The covariance `(..., m, k, k)` that each row brings; NaN for a row of unknown error."""
        used = (self.rows >= 0) & np.any(self.matrices != 0.0, axis=(-1, -2))
        if not len(errors.known):
            return np.zeros((*self.matrices.shape[:-1], self.matrices.shape[-2]))
        row = np.where(used, self.rows, 0)
        unknown = used & ~errors.known[row]
        matrices = np.where(used[..., np.newaxis, np.newaxis], self.matrices, 0.0)
        parts = matrices @ errors.covariance[row] @ np.swapaxes(matrices, -1, -2)
        return np.where(unknown[..., np.newaxis, np.newaxis], np.nan, parts)

    def covariance(self, errors: RowErrors) -> Floats:
        """The covariance `(..., k, k)`, symmetric; NaN where a row of unknown error was used."""
        total = self.contributions(errors).sum(axis=-3)
        symmetric: Floats = 0.5 * (total + np.swapaxes(total, -1, -2))
        return symmetric

    def cross_covariance(self, other: Sensitivity, errors: RowErrors) -> Floats:
        """`sum_r J1_r C_r J2_r^T` `(..., k, j)` over the rows that both results used."""
        shape = np.broadcast_shapes(self.rows.shape[:-1], other.rows.shape[:-1])
        total = np.zeros((*shape, self.matrices.shape[-2], other.matrices.shape[-2]))
        for i in range(self.rows.shape[-1]):
            for j in range(other.rows.shape[-1]):
                row = self.rows[..., i]
                shared = (row == other.rows[..., j]) & (row >= 0)
                if np.any(shared):
                    safe = np.where(shared, row, 0)
                    left, right = self.matrices[..., i, :, :], other.matrices[..., j, :, :]
                    part = left @ errors.covariance[safe] @ np.swapaxes(right, -1, -2)
                    unknown = shared & ~errors.known[safe]
                    part = np.where(unknown[..., np.newaxis, np.newaxis], np.nan, part)
                    total += np.where(shared[..., np.newaxis, np.newaxis], part, 0.0)
        return total

    def variance_shares(self, errors: RowErrors) -> Floats:
        """Each row's fraction `(..., m)` of the trace of the covariance; they sum to 1."""
        traces = np.trace(self.contributions(errors), axis1=-2, axis2=-1)
        total = traces.sum(axis=-1, keepdims=True)
        shares: Floats = np.divide(traces, total, out=np.zeros_like(traces), where=total != 0.0)
        return shares

    def effective_dof(self, errors: RowErrors) -> Floats:
        """Degrees of freedom `(...)` behind the covariance, infinite where no kappa was estimated.

        With several rows: Welch (1947, Biometrika 34, 28-35) and Satterthwaite (1946, Biometrics
        Bull. 2, 110-114), on the traces; with one row its own.
        """
        traces = np.trace(self.contributions(errors), axis1=-2, axis2=-1)
        row = np.where(self.rows >= 0, self.rows, 0)
        nu = errors.dof[row] if len(errors.dof) else np.full(row.shape, np.inf)
        return welch_satterthwaite(traces.sum(axis=-1), (traces**2 / nu).sum(axis=-1))


def welch_satterthwaite(total: Floats, squares_by_dof: Floats) -> Floats:
    """`(sum v)^2 / sum(v^2 / nu)`: degrees of freedom of a sum of variances; infinite if known."""
    estimated = squares_by_dof > 0.0
    nu: Floats = np.divide(
        total * total, squares_by_dof, out=np.full(np.shape(total), np.inf), where=estimated
    )
    return nu


class Significance(NamedTuple):
    """A test of whether a small rotation is zero."""

    statistic: float
    probability: float
    dof: float


def significance(vector: Floats, covariance: Floats, dof: float = math.inf) -> Significance:
    """Probability that errors alone make a difference of rotation as large as `vector` (3,), rad.

    `u^T C^-1 u` against chi-square with 3 degrees of freedom, or a third of it against
    F(3, dof) where kappa was estimated (Royer & Chang 1991). NaN where C is not known.
    """
    from scipy import special

    if not np.all(np.isfinite(covariance)):
        return Significance(math.nan, math.nan, dof)
    if not np.any(covariance):
        differs = bool(np.any(vector))
        return Significance(math.inf if differs else 0.0, 0.0 if differs else 1.0, dof)
    # along directions without any error a pseudo-inverse would call every difference fine
    values, axes = np.linalg.eigh(covariance)
    floor = values[-1] * 1e-14
    along = axes.T @ vector
    statistic = float(np.sum(along**2 / np.maximum(values, floor)))
    if math.isinf(dof):
        return Significance(statistic, float(special.chdtrc(3, statistic)), dof)
    return Significance(statistic, float(special.fdtrc(3, dof, statistic / 3.0)), dof)
