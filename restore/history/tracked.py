"""Rotations that know how they move with the errors of the rows: algebra with one Jacobian per row.

A result's error is `u = sum_r J_r u_r`, a small rotation that acts first (see `geometry.uncertain`).
Of a composition AB it is `B^T u_A + u_B`, of an inverse `-A u_A`, of a power f `f Jr(fs) Jr(s)^-1 u`.
Whatever is written with these three carries its errors along, and rows used twice cancel.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import ArrayLike, NDArray

from restore.geometry import so3
from restore.geometry.rotations import Rotations
from restore.geometry.sphere import Floats, dot, tangent_frame
from restore.geometry.uncertain import (
    Ellipse,
    RowErrors,
    Sensitivity,
    confidence_factor,
    ellipse,
    welch_satterthwaite,
)
from restore.history.circuit import CircuitRotations
from restore.history.links import Ints

NO_ROWS: Ints = np.zeros(0, dtype=np.int64)


@dataclass(frozen=True, eq=False)
class Tracked:
    """Rotations `(n,)` with their Jacobians `(n, m, 3, 3)` by the rows `(m,)`, sorted, that they share.

    Without rows (m = 0) nothing is tracked and the algebra costs no more than that of the rotations.
    """

    quaternions: Floats
    rows: Ints
    jacobians: Floats

    @classmethod
    def of(cls, found: CircuitRotations, errors: bool = True) -> Tracked:
        """The rotations of a Circuit, in the shape (n,); with `errors` their rows are tracked."""
        quaternions = found.rotations.quaternions.reshape(-1, 4)
        if not errors:
            return cls(quaternions, NO_ROWS, np.zeros((len(quaternions), 0, 3, 3)))
        sensitivity = found.sensitivity()
        used = sensitivity.rows >= 0
        rows = np.unique(sensitivity.rows[used])
        jacobians = np.zeros((len(quaternions), len(rows), 3, 3))
        item, place = np.nonzero(used)
        at = np.searchsorted(rows, sensitivity.rows[item, place])
        jacobians[item, at] = sensitivity.matrices[item, place]
        return cls(quaternions, rows, jacobians)

    def __len__(self) -> int:
        return len(self.quaternions)

    def __getitem__(self, index: slice | Ints | NDArray[np.bool_]) -> Tracked:
        """Some of them, by an index that keeps the axis."""
        return Tracked(self.quaternions[index], self.rows, self.jacobians[index])

    def without_rows(self) -> Tracked:
        """The same rotations, no longer tracked."""
        return Tracked(self.quaternions, NO_ROWS, self.jacobians[:, :0])

    def by_rows(self, rows: Ints) -> Tracked:
        """The same, tracked by more rows (sorted)."""
        if len(rows) == len(self.rows):
            return self
        jacobians = np.zeros((len(self), len(rows), 3, 3))
        jacobians[:, np.searchsorted(rows, self.rows)] = self.jacobians
        return Tracked(self.quaternions, rows, jacobians)

    def __matmul__(self, earlier: Tracked) -> Tracked:
        """The composition: `earlier` first, then this one; one of a kind is used with each."""
        rows = np.union1d(self.rows, earlier.rows)
        back = np.swapaxes(so3.matrices(earlier.quaternions), -1, -2)[:, np.newaxis]
        return Tracked(
            so3.multiply(self.quaternions, earlier.quaternions),
            rows,
            back @ self.by_rows(rows).jacobians + earlier.by_rows(rows).jacobians,
        )

    def inverse(self) -> Tracked:
        """The rotations back."""
        turned = -so3.matrices(self.quaternions)[:, np.newaxis] @ self.jacobians
        return Tracked(so3.conjugate(self.quaternions), self.rows, turned)

    def power(self, exponent: ArrayLike) -> Tracked:
        """About the same axes, by `exponent` `(n,)` times the angle, taken the short way."""
        vectors = so3.logarithm(self.quaternions)
        fraction = np.broadcast_to(np.asarray(exponent, dtype=np.float64), vectors.shape[:-1])
        jacobians = so3.stage_jacobian(vectors, fraction)[:, np.newaxis] @ self.jacobians
        return Tracked(so3.exponential(fraction[:, np.newaxis] * vectors), self.rows, jacobians)

    def products(self) -> Tracked:
        """Running products `(n + 1,)`: nothing, the first, the first and then the second, ..."""
        running = np.empty((len(self) + 1, 4))
        running[0] = so3.IDENTITY
        for k in range(len(self)):
            running[k + 1] = so3.multiply(self.quaternions[k], running[k])
        running = so3.normalise(running)
        jacobians = np.zeros((len(self) + 1, *self.jacobians.shape[1:]))
        back = np.swapaxes(so3.matrices(running[:-1]), -1, -2)[:, np.newaxis]
        np.cumsum(back @ self.jacobians, axis=0, out=jacobians[1:])
        return Tracked(running, self.rows, jacobians)

    def apply(self, vectors: Floats) -> Floats:
        """Vectors `(..., 3)` turned; shapes broadcast."""
        return so3.rotate(self.quaternions, vectors)

    def rotations(self) -> Rotations:
        """The rotations alone."""
        return Rotations(self.quaternions)

    def spread(self, errors: RowErrors) -> PointSpread:
        """What the rows' errors do to points that these rotations have turned."""
        outward = so3.matrices(self.quaternions)[:, np.newaxis] @ self.jacobians
        rows = np.broadcast_to(self.rows, outward.shape[:2])
        parts = Sensitivity(rows, outward).contributions(errors)
        per_dof = 1.0 / errors.dof[self.rows] if len(self.rows) else np.zeros(0)
        return PointSpread(parts.sum(axis=1), parts[:, per_dof > 0.0], per_dof[per_dof > 0.0])

    def variance(self, covectors: Floats, errors: RowErrors) -> Floats:
        """Variances `(n,)` of the results `c . u`, for covectors `(n, 3)`."""
        weights = np.einsum("ni,nmij->nmj", covectors, self.jacobians)
        return row_variance(weights, self.rows, errors)


def row_variance(weights: Floats, rows: Ints, errors: RowErrors) -> Floats:
    """Variances `(...)` of `sum_r w_r . u_r` for weights `(..., m, 3)`; NaN if a row's is not known."""
    covariance = errors.covariance[rows]
    parts = np.einsum("...mi,mij,...mj->...m", weights, covariance, weights)
    unknown = ~errors.known[rows] & np.any(weights != 0.0, axis=-1)
    total: Floats = np.where(unknown, np.nan, parts).sum(axis=-1)
    return total


@dataclass(frozen=True, eq=False)
class PointSpread:
    """Covariances `(n, 3, 3)`, rad^2, of small rotations that act last, after each of n rotations.

    `parts` `(n, j, 3, 3)` and `per_dof` `(j,)`: those rows whose kappa was estimated, and 1 / nu.
    """

    total: Floats
    parts: Floats
    per_dof: Floats

    def ellipse(self, number: int, moved: Floats, radius_km: float) -> tuple[Ellipse, Floats]:
        """95 % ellipses at points `(k, 3)` that rotation `number` gave, and the degrees of freedom.

        A step is `u x y`: along east it is `u . north`, along north `-u . east`.
        """
        east, north = tangent_frame(moved)
        var_east, var_north, cov = _forms(self.total[number], east, north)
        squares = np.zeros(len(moved))
        for part, per_dof in zip(self.parts[number], self.per_dof, strict=True):
            own_east, own_north, _ = _forms(part, east, north)
            squares += (own_east + own_north) ** 2 * per_dof
        dof = welch_satterthwaite(var_east + var_north, squares)
        return ellipse(var_east, var_north, cov, confidence_factor(dof), radius_km), dof

    def across(self, number: int, moved: Floats, direction: Floats) -> Floats:
        """Variance (rad^2) of the step of points `(k, 3)` along unit tangents `(k, 3)`."""
        covector = np.cross(moved, direction)
        return _form(self.total[number], covector, covector)


def _forms(matrix: Floats, east: Floats, north: Floats) -> tuple[Floats, Floats, Floats]:
    return _form(matrix, north, north), _form(matrix, east, east), -_form(matrix, north, east)


def _form(matrix: Floats, a: Floats, b: Floats) -> Floats:
    """`a M b` for covectors `(k, 3)` and one matrix, summed in a fixed order."""
    total = np.zeros(len(a))
    for i in range(3):
        total += a[..., i] * dot(np.broadcast_to(matrix[i], b.shape), b)
    return total
