"""Rotations: a thin frozen value over quaternion arrays of any shape."""

from __future__ import annotations

from dataclasses import dataclass
from typing import Any

import numpy as np
from numpy.typing import ArrayLike

from restore.geometry import so3
from restore.geometry.sphere import Floats, lat_lon, unit_vectors

NO_POLE_BELOW_RAD = 1e-12
"""Below this angle (6 micrometres on the ground) the direction of the axis is rounding noise."""


@dataclass(frozen=True, eq=False)
class Rotations:
    """Rotations of shape `(...)`, held as unit quaternions `(..., 4)`, scalar first, read-only.

    Active and right-handed: anticlockwise seen from outside the globe. `later @ earlier` composes,
    as matrices do: the one on the right acts first.
    """

    quaternions: Floats

    def __post_init__(self) -> None:
        q = self.quaternions
        if q.ndim == 0 or q.shape[-1] != 4:
            raise ValueError(f"quaternions have shape {q.shape}: the last axis must have length 4")
        view = q.view()
        view.flags.writeable = False
        object.__setattr__(self, "quaternions", view)

    @classmethod
    def identity(cls, shape: tuple[int, ...] = ()) -> Rotations:
        """Zero rotations of a shape."""
        return cls(np.broadcast_to(so3.IDENTITY, (*shape, 4)))

    @classmethod
    def from_poles(cls, lat_deg: ArrayLike, lon_deg: ArrayLike, angle_deg: ArrayLike) -> Rotations:
        """From finite poles in degrees, broadcast together; angles anticlockwise positive.

        A zero angle gives the zero rotation, whatever the pole says (it may be NaN then).
        """
        lat, lon, angle = np.broadcast_arrays(
            *(np.asarray(a, dtype=np.float64) for a in (lat_deg, lon_deg, angle_deg))
        )
        half = 0.5 * np.deg2rad(angle)
        zero = angle == 0.0
        axis = unit_vectors(np.where(zero, 0.0, lat), np.where(zero, 0.0, lon))
        q = np.concatenate([np.cos(half)[..., np.newaxis], np.sin(half)[..., np.newaxis] * axis], axis=-1)
        return cls(so3.normalise(q))

    @classmethod
    def from_quaternions(cls, wxyz: ArrayLike) -> Rotations:
        """From quaternions `(..., 4)`, scalar first, of any length but zero; they are normalised.

        Raises ValueError where the length is zero or not finite, naming the first.
        """
        q = np.asarray(wxyz, dtype=np.float64)
        if q.ndim == 0 or q.shape[-1] != 4:
            raise ValueError(f"quaternions have shape {q.shape}: the last axis must have length 4")
        size = np.max(np.abs(q), axis=-1)
        bad = ~(np.isfinite(size) & (size > 0.0))
        if np.any(bad):
            where = tuple(int(i) for i in np.argwhere(bad)[0])
            raise ValueError(f"quaternion {where} is {q[where]}: its length must be finite, above 0")
        # scaled first, so that squares neither overflow nor vanish
        return cls(so3.normalise(q / size[..., np.newaxis]))

    @classmethod
    def from_vectors(cls, vectors: ArrayLike) -> Rotations:
        """From rotation vectors `(..., 3)`: axis times angle, radians.

        Raises ValueError if the last axis does not have length 3.
        """
        v = np.asarray(vectors, dtype=np.float64)
        if v.ndim == 0 or v.shape[-1] != 3:
            raise ValueError(f"vectors have shape {v.shape}: the last axis must have length 3")
        return cls(so3.exponential(v))

    @classmethod
    def from_matrices(cls, matrices: ArrayLike) -> Rotations:
        """From proper rotation matrices `(..., 3, 3)`.

        Raises ValueError where a matrix is not orthogonal to 1e-6 or turns left into right.
        """
        m = np.asarray(matrices, dtype=np.float64)
        if m.shape[-2:] != (3, 3):
            raise ValueError(f"matrices have shape {m.shape}: the last two axes must be 3 by 3")
        with np.errstate(invalid="ignore", over="ignore"):
            departure = np.abs(m @ np.swapaxes(m, -1, -2) - np.eye(3)).max(axis=(-1, -2))
            determinant = np.linalg.det(m)
        bad = ~((departure < 1e-6) & (determinant > 0.0))
        if np.any(bad):
            where = tuple(int(i) for i in np.argwhere(bad)[0])
            raise ValueError(
                f"matrix {where} is not a proper rotation: M M^T differs from the identity by"
                f" {departure[where]:.3g}, determinant {determinant[where]:.6g}"
            )
        return cls(so3.from_matrices(m))

    @property
    def shape(self) -> tuple[int, ...]:
        """Shape of the array of rotations."""
        return self.quaternions.shape[:-1]

    def __getitem__(self, item: Any) -> Rotations:
        """Some of the rotations, indexed as an array of `shape` would be."""
        numbers = np.arange(int(np.prod(self.shape, dtype=np.int64))).reshape(self.shape)
        return Rotations(self.quaternions.reshape(-1, 4)[numbers[item]])

    def __len__(self) -> int:
        if not self.shape:
            raise TypeError("a single rotation has no length")
        return self.shape[0]

    def __matmul__(self, earlier: Rotations) -> Rotations:
        """The rotation that does `earlier` first, then this one; shapes broadcast."""
        return Rotations(so3.multiply(self.quaternions, earlier.quaternions))

    def inverse(self) -> Rotations:
        """The rotations back."""
        return Rotations(so3.conjugate(self.quaternions))

    def power(self, exponent: ArrayLike) -> Rotations:
        """About the same axes, by `exponent` times the angle (taken the short way, [0, 180])."""
        scale = np.asarray(exponent, dtype=np.float64)[..., np.newaxis]
        return Rotations(so3.exponential(scale * so3.logarithm(self.quaternions)))

    def between(self, other: Rotations, fraction: ArrayLike) -> Rotations:
        """At a fraction of the way to `other` at constant angular velocity (Shoemake 1985)."""
        return Rotations(so3.slerp(self.quaternions, other.quaternions, fraction))

    def apply(self, vectors: ArrayLike) -> Floats:
        """Vectors `(..., 3)` turned; shapes broadcast."""
        return so3.rotate(self.quaternions, np.asarray(vectors, dtype=np.float64))

    def angle_deg(self) -> Floats:
        """Angles in degrees, [0, 180]."""
        degrees: Floats = np.rad2deg(so3.angle(self.quaternions))
        return degrees

    def as_poles(self) -> tuple[Floats, Floats, Floats]:
        """Pole latitude, pole longitude and angle in degrees; angle in [0, 180].

        A zero rotation has no pole: NaN (see NO_POLE_BELOW_RAD).
        """
        vectors = so3.logarithm(self.quaternions)
        angle = so3.angle(self.quaternions)
        lat, lon = lat_lon(vectors)
        none = ~(angle >= NO_POLE_BELOW_RAD)
        return np.where(none, np.nan, lat), np.where(none, np.nan, lon), np.rad2deg(angle)

    def as_quaternions(self) -> Floats:
        """Canonical unit quaternions `(..., 4)`, scalar first, w >= 0."""
        return so3.canonical(self.quaternions)

    def as_vectors(self) -> Floats:
        """Rotation vectors `(..., 3)`, radians, the short way."""
        return so3.logarithm(self.quaternions)

    def as_matrices(self) -> Floats:
        """Rotation matrices `(..., 3, 3)`."""
        return so3.matrices(self.quaternions)

    def angle_to(self, other: Rotations) -> Floats:
        """Angle in radians, [0, pi], of the rotation that leads from this one to `other`.

        Times the radius it is the greatest distance on the globe between what the two give.
        """
        return so3.angle(so3.multiply(so3.conjugate(self.quaternions), other.quaternions))

    def __repr__(self) -> str:
        if self.shape:
            return f"Rotations(shape={self.shape})"
        lat, lon, angle = (float(a) for a in self.as_poles())
        return f"Rotations(pole_lat_deg={lat:.6g}, pole_lon_deg={lon:.6g}, angle_deg={angle:.6g})"
