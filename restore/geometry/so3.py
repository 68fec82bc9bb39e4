"""Unit quaternions as plain arrays: the hot kernels under `Rotations` and `Circuit`.

Scalar first, `(w, x, y, z)`, component axis last, float64. Active and right-handed: a rotation
about the z axis by a positive angle takes 0N 0E towards 0N 90E. Functions broadcast over leading
axes and never write to their arguments. Sums are written out, so that the last bit of a result does
not depend on how many were computed together.
"""

from __future__ import annotations

from typing import NamedTuple

import numpy as np
from numpy.typing import ArrayLike

from restore.geometry.sphere import Floats, cross, dot, empty_components, length

IDENTITY = np.array([1.0, 0.0, 0.0, 0.0])


def multiply(later: Floats, earlier: Floats) -> Floats:
    """The quaternion `(..., 4)` of `earlier` first, `later` after it (Hamilton product)."""
    pw, px, py, pz = (later[..., i] for i in range(4))
    qw, qx, qy, qz = (earlier[..., i] for i in range(4))
    product = empty_components(np.broadcast_shapes(later.shape[:-1], earlier.shape[:-1]), 4)
    product[..., 0] = pw * qw - px * qx - py * qy - pz * qz
    product[..., 1] = pw * qx + px * qw + py * qz - pz * qy
    product[..., 2] = pw * qy - px * qz + py * qw + pz * qx
    product[..., 3] = pw * qz + px * qy - py * qx + pz * qw
    return product


def conjugate(q: Floats) -> Floats:
    """The inverse rotation `(..., 4)` of unit quaternions."""
    inverse = empty_components(q.shape[:-1], 4)
    inverse[..., 0] = q[..., 0]
    np.negative(q[..., 1:], out=inverse[..., 1:])
    return inverse


def normalise(q: Floats) -> Floats:
    """Quaternions `(..., 4)` scaled to unit length."""
    w, x, y, z = (q[..., i] for i in range(4))
    scale = 1.0 / np.sqrt(w * w + x * x + y * y + z * z)
    scaled = empty_components(q.shape[:-1], 4)
    np.multiply(q, scale[..., np.newaxis], out=scaled)
    return scaled


def canonical(q: Floats) -> Floats:
    """Of q and -q, one rotation, the one with w > 0; of a half turn, whose w is 0, the one whose
    first component that is not zero is positive.
    """
    sign = np.where(q[..., 0] < 0.0, -1.0, 1.0)
    half_turn = q[..., 0] == 0.0
    if np.any(half_turn):
        x, y, z = q[..., 1], q[..., 2], q[..., 3]
        first = np.where(x != 0.0, x, np.where(y != 0.0, y, z))
        sign = np.where(half_turn & (first < 0.0), -1.0, sign)
    return q * sign[..., np.newaxis] + 0.0


def exponential(vectors: ArrayLike) -> Floats:
    """Quaternions `(..., 4)` of rotation vectors `(..., 3)`: axis times angle, radians."""
    v = np.asarray(vectors, dtype=np.float64)
    half = 0.5 * length(v)
    q = empty_components(v.shape[:-1], 4)
    q[..., 0] = np.cos(half)
    scale = 0.5 * np.where(half == 0.0, 1.0, np.sin(half) / np.where(half == 0.0, 1.0, half))
    np.multiply(v, scale[..., np.newaxis], out=q[..., 1:])
    return q


def logarithm(q: Floats) -> Floats:
    """Rotation vectors `(..., 3)`, radians, of quaternions: the short way, angle in [0, pi]."""
    q = canonical(q)
    w, v = q[..., 0], q[..., 1:]
    sine = length(v)
    still = sine == 0.0
    scale = np.where(still, 2.0, 2.0 * np.arctan2(sine, w) / np.where(still, 1.0, sine))
    vectors: Floats = v * scale[..., np.newaxis]
    return vectors


def angle(q: Floats) -> Floats:
    """The angle of rotation in radians, [0, pi]."""
    turned: Floats = 2.0 * np.arctan2(length(q[..., 1:]), np.abs(q[..., 0]))
    return turned


def rotate(q: Floats, x: Floats) -> Floats:
    """Vectors `(..., 3)` turned by unit quaternions `(..., 4)`: x + 2w (v x x) + 2 v x (v x x)."""
    w, v = q[..., 0], q[..., 1:]
    twice = cross(v, x)
    twice += twice
    again = cross(v, twice)
    turned = empty_components(again.shape[:-1], 3)
    for i in range(3):
        turned[..., i] = x[..., i] + w * twice[..., i] + again[..., i]
    return turned


def rotate_back(q: Floats, x: Floats) -> Floats:
    """Vectors `(..., 3)` turned by the inverses of unit quaternions `(..., 4)`."""
    return rotate(conjugate(q), x)


def matrices(q: Floats) -> Floats:
    """Rotation matrices `(..., 3, 3)` of unit quaternions."""
    w, x, y, z = (q[..., i] for i in range(4))
    m = np.empty((*q.shape[:-1], 3, 3))
    m[..., 0, 0] = 1.0 - 2.0 * (y * y + z * z)
    m[..., 1, 1] = 1.0 - 2.0 * (x * x + z * z)
    m[..., 2, 2] = 1.0 - 2.0 * (x * x + y * y)
    m[..., 0, 1], m[..., 1, 0] = 2.0 * (x * y - w * z), 2.0 * (x * y + w * z)
    m[..., 0, 2], m[..., 2, 0] = 2.0 * (x * z + w * y), 2.0 * (x * z - w * y)
    m[..., 1, 2], m[..., 2, 1] = 2.0 * (y * z - w * x), 2.0 * (y * z + w * x)
    return m


def from_matrices(m: Floats) -> Floats:
    """Quaternions `(..., 4)` of rotation matrices `(..., 3, 3)`, stable at every angle.

    The largest of the four components is computed first (Shepperd 1978, J. Guidance and Control 1,
    223-224).
    """
    d0, d1, d2 = m[..., 0, 0], m[..., 1, 1], m[..., 2, 2]
    squares = np.stack([d0 + d1 + d2, d0 - d1 - d2, d1 - d0 - d2, d2 - d0 - d1], axis=-1) + 1.0
    a, b = m[..., 2, 1] - m[..., 1, 2], m[..., 2, 1] + m[..., 1, 2]
    c, d = m[..., 0, 2] - m[..., 2, 0], m[..., 0, 2] + m[..., 2, 0]
    e, f = m[..., 1, 0] - m[..., 0, 1], m[..., 1, 0] + m[..., 0, 1]
    # row k is 4 q_k times the quaternion
    rows = np.stack(
        [
            np.stack([squares[..., 0], a, c, e], axis=-1),
            np.stack([a, squares[..., 1], f, d], axis=-1),
            np.stack([c, f, squares[..., 2], b], axis=-1),
            np.stack([e, d, b, squares[..., 3]], axis=-1),
        ],
        axis=-2,
    )
    largest = np.argmax(squares, axis=-1)[..., np.newaxis, np.newaxis]
    return normalise(np.take_along_axis(rows, largest, axis=-2)[..., 0, :])


class Arc(NamedTuple):
    """The short great circle of quaternions from `start` towards another: cos(fw) start + sin(fw) side.

    `start`, `side` `(..., 4)`, orthonormal; `half` `(...)`, half of the stage's rotation angle,
    radians, [0, pi/2].
    """

    start: Floats
    side: Floats
    half: Floats


def arc(q0: Floats, q1: Floats) -> Arc:
    """The short arc from `q0` to `q1` (Shoemake 1985, ACM SIGGRAPH 19, 245-254), stable from 0 to
    180 degrees: the angle is an atan2, the side is made orthogonal, nothing is divided by a sine.

    At exactly 180 degrees both ways are equally short and rounding picks one.
    """
    along = np.sum(q0 * q1, axis=-1, keepdims=True)
    aligned = np.where(along < 0.0, -q1, q1)
    along = np.abs(along)
    # q1 - q0 is exact where the two are close; the part along q0 is then taken out of it
    step = aligned - q0
    side = step - np.sum(step * q0, axis=-1, keepdims=True) * q0
    size = np.sqrt(np.sum(side * side, axis=-1, keepdims=True))
    half = np.arctan2(size, along)[..., 0]
    side = np.divide(side, size, out=np.zeros_like(side), where=size > 0.0)
    return Arc(q0, side, half)


def along_arc(start: Floats, side: Floats, cos_fw: Floats, sin_fw: Floats) -> Floats:
    """The quaternions cos(fw) start + sin(fw) side."""
    shape = np.broadcast_shapes(start.shape[:-1], cos_fw.shape)
    q = empty_components(shape, 4)
    for i in range(4):
        q[..., i] = cos_fw * start[..., i] + sin_fw * side[..., i]
    return q


def slerp(q0: Floats, q1: Floats, fraction: ArrayLike) -> Floats:
    """The rotation at `fraction` of the way from `q0` to `q1` at constant angular velocity.

    Fractions outside [0, 1] go on at the same velocity. Shoemake (1985); see `arc`.
    """
    between = arc(np.asarray(q0, dtype=np.float64), np.asarray(q1, dtype=np.float64))
    turned = np.asarray(fraction, dtype=np.float64) * between.half
    return along_arc(between.start, between.side, np.cos(turned), np.sin(turned))


def skew(v: ArrayLike) -> Floats:
    """The matrices `[v]x` `(..., 3, 3)` with `[v]x y = v x y`."""
    v = np.asarray(v, dtype=np.float64)
    m = np.zeros((*v.shape[:-1], 3, 3))
    m[..., 0, 1], m[..., 1, 0] = -v[..., 2], v[..., 2]
    m[..., 0, 2], m[..., 2, 0] = v[..., 1], -v[..., 1]
    m[..., 1, 2], m[..., 2, 1] = -v[..., 0], v[..., 0]
    return m


def right_jacobian(v: ArrayLike) -> Floats:
    """Right Jacobians `(..., 3, 3)` of rotation vectors: exp(v + d) = exp(v) exp(Jr(v) d) to first order.

    On the plane across v it is multiplication by `(1 - exp(-it)) / (it) = sinc(t/2) exp(-it/2)`, on
    the axis 1: a closed form without cancellation, so that no series and no switch is needed.
    """
    v = np.asarray(v, dtype=np.float64)
    half = 0.5 * length(v)
    sinc = np.where(half == 0.0, 1.0, np.sin(half) / np.where(half == 0.0, 1.0, half))
    return _about(v, np.ones_like(half), sinc * np.cos(half), -sinc * np.sin(half))


def _about(v: Floats, along: Floats, across: Floats, turned: Floats) -> Floats:
    """`along` P + `across` (I - P) + `turned` K, with P the projector on v and K = [v/|v|]x."""
    size = length(v)[..., np.newaxis]
    axis = np.divide(v, size, out=np.zeros_like(v), where=size > 0.0)
    projector = axis[..., :, np.newaxis] * axis[..., np.newaxis, :]
    terms = (along - across)[..., np.newaxis, np.newaxis] * projector
    terms += across[..., np.newaxis, np.newaxis] * np.eye(3)
    total: Floats = terms + turned[..., np.newaxis, np.newaxis] * skew(axis)
    return total


class StageWeights(NamedTuple):
    """How the error of a stage's older end acts at a fraction of the stage; see `stage_weights`."""

    along: Floats
    across: Floats
    turned: Floats


def stage_weights(fraction: ArrayLike, half: ArrayLike) -> StageWeights:
    """Weights of G = f Jr(f s) Jr(s)^-1 along the stage vector s, across it, and turned about it.

    `fraction` f of the stage, `half` = |s| / 2 in radians, [0, pi/2]. The rotation
    `A(f) = A1 exp(f log(A1^T A2))` has the error `u = J1 u1 + G u2` with J1 = I - G (the right
    Jacobians of SO(3)). On the plane across s, G is multiplication by
    `(1 - exp(-2ifw)) / (1 - exp(-2iw)) = exp(i(1-f)w) sin(fw) / sin(w)`, w = |s| / 2: a closed form
    that is right to rounding at every angle. For a power of a rotation s is its rotation vector.
    """
    f, w = np.asarray(fraction, dtype=np.float64), np.asarray(half, dtype=np.float64)
    sine = np.sin(w)
    still = sine == 0.0
    ratio = np.where(still, f, np.sin(f * w) / np.where(still, 1.0, sine))
    rest = (1.0 - f) * w
    return StageWeights(f + 0.0 * w, ratio * np.cos(rest), ratio * np.sin(rest))


def stage_jacobian(v: ArrayLike, fraction: ArrayLike) -> Floats:
    """The matrices G `(..., 3, 3)` of stages with rotation vectors v `(..., 3)` at a fraction."""
    v = np.asarray(v, dtype=np.float64)
    weights = stage_weights(fraction, 0.5 * length(v))
    return _about(np.broadcast_to(v, (*weights.along.shape, 3)), *weights)


def pull_back_stage(covectors: Floats, axis: Floats, weights: StageWeights) -> Floats:
    """G^T c for covectors c `(..., 3)`: what of `c . u` is due to the error of the older end.

    `axis` `(..., 3)`: unit vector of the stage in the plate's coordinates, or zero. The part due to
    the younger end is the rest, `c - G^T c`.
    """
    on_axis = dot(covectors, axis)
    side = cross(axis, covectors)
    pulled = empty_components(side.shape[:-1], 3)
    extra = (weights.along - weights.across) * on_axis
    for i in range(3):
        pulled[..., i] = extra * axis[..., i] + weights.across * covectors[..., i]
        pulled[..., i] -= weights.turned * side[..., i]
    return pulled
