"""Rotations against scipy's, thousands of random and degenerate cases, to 1e-12 rad.

The worst measured is named at each check: all lie below 4e-15 rad, 3e-8 m on the ground.
"""

import itertools
import math

import numpy as np
import pytest
from scipy.spatial.transform import Rotation, Slerp
from strategies import assert_within, quaternions_apart, random_quaternions, scipy_of

from restore.geometry import so3
from restore.geometry.rotations import Rotations

BAR_RAD = 1e-12
COUNT = 4000
NEAR_HALF = math.radians(180.0 - 1e-7)
DEGENERATE_ANGLES = (
    [0.0, math.pi, NEAR_HALF, math.radians(1e-7), math.pi / 2, 1e-300]
    + [10.0**-k for k in range(1, 13)]
    + [math.pi - 10.0**-k for k in range(1, 13)]
)
AXES = np.array(
    [[1.0, 0, 0], [0, -1.0, 0], [0, 0, 1.0], [0.6, 0.8, 0], [1 / 3, -2 / 3, 2 / 3], [0, -0.8, -0.6]]
)


def degenerate_vectors() -> np.ndarray:
    """Rotation vectors of every degenerate angle about every axis, parallel and antiparallel."""
    return np.array([s * t * a for t in DEGENERATE_ANGLES for a in AXES for s in (1.0, -1.0)])


def cases() -> np.ndarray:
    """Quaternions, scalar first: random ones and the degenerate ones, some with the sign turned."""
    degenerate = Rotation.from_rotvec(degenerate_vectors()).as_quat(scalar_first=True)
    degenerate[::3] *= -1.0
    return np.concatenate([random_quaternions(61, COUNT), degenerate])


def pairs() -> tuple[np.ndarray, np.ndarray]:
    """Pairs of quaternions: random, and stages of every degenerate angle from random starts."""
    start = cases()
    vectors = degenerate_vectors()
    order = np.random.default_rng(62).integers(0, len(vectors), len(start))
    stage = Rotation.from_rotvec(vectors[order])
    near = (scipy_of(start) * stage).as_quat(scalar_first=True)
    return np.concatenate([start, start]), np.concatenate([np.roll(start, 7, axis=0), near])


def apart(ours: np.ndarray, theirs: Rotation) -> np.ndarray:
    return quaternions_apart(ours, theirs.as_quat(scalar_first=True))


def test_products():
    """q p is scipy's product. Measured: 1.1e-15 rad."""
    one, other = pairs()
    assert_within(apart(so3.multiply(one, other), scipy_of(one) * scipy_of(other)), BAR_RAD)
    composed = Rotations(one) @ Rotations(other)
    assert_within(apart(composed.quaternions, scipy_of(one) * scipy_of(other)), BAR_RAD)


def test_inverses():
    """The inverse is scipy's. Measured: 6e-16 rad."""
    q = cases()
    assert_within(apart(Rotations(q).inverse().quaternions, scipy_of(q).inv()), BAR_RAD)


def test_matrices_out_and_in():
    """Matrices, out and in, are scipy's, by element and by angle. Measured: 1e-15, 8e-16 rad."""
    q = cases()
    theirs = scipy_of(q).as_matrix()
    assert_within(Rotations(q).as_matrices() - theirs, BAR_RAD)
    assert_within(apart(Rotations.from_matrices(theirs).quaternions, scipy_of(q)), BAR_RAD)


def test_half_turn_matrices_in():
    """Exact half-turn matrices, whose trace is -1, come in about the right axis."""
    for axis in AXES:
        axis = axis / np.linalg.norm(axis)
        matrix = 2.0 * np.outer(axis, axis) - np.eye(3)
        turn = Rotations.from_matrices(matrix)
        assert_within(turn.angle_deg() - 180.0, 1e-12)
        assert_within(np.cross(turn.quaternions[1:], axis), 1e-15)


def test_vectors_out_and_in():
    """Rotation vectors, out and in, are scipy's; at a half turn up to the sign of the axis.

    Measured: 1.8e-15 rad.
    """
    q = cases()
    ours, theirs = Rotations(q).as_vectors(), scipy_of(q).as_rotvec()
    misfit = np.linalg.norm(ours - theirs, axis=1)
    half = np.linalg.norm(theirs, axis=1) > math.pi - 1e-12
    misfit[half] = np.minimum(misfit, np.linalg.norm(ours + theirs, axis=1))[half]
    assert_within(misfit, BAR_RAD)
    vectors = np.concatenate([degenerate_vectors(), 7.0 * random_quaternions(63, COUNT)[:, 1:]])
    assert_within(
        apart(Rotations.from_vectors(vectors).quaternions, Rotation.from_rotvec(vectors)), BAR_RAD
    )


def test_tiny_vectors_keep_their_digits():
    """Rotation vectors of 1e-300 to 1e-3 rad come back to 4e-16 of their own size."""
    sizes = 10.0 ** np.arange(-300.0, -2.0, 7.0)
    vectors = sizes[:, np.newaxis] * np.array([1 / 3, -2 / 3, 2 / 3])
    back = Rotations.from_vectors(vectors).as_vectors()
    assert_within((back - vectors) / sizes[:, np.newaxis], 4e-16)


def test_angles():
    """Angles are scipy's magnitudes from 0 to a half turn. Measured: 9e-16 rad."""
    q = cases()
    assert_within(np.radians(Rotations(q).angle_deg()) - scipy_of(q).magnitude(), BAR_RAD)
    one, other = pairs()
    theirs = (scipy_of(one).inv() * scipy_of(other)).magnitude()
    assert_within(Rotations(one).angle_to(Rotations(other)) - theirs, BAR_RAD)


def test_turned_points():
    """Turned vectors are scipy's, by all kernels. Measured: 1.1e-15 rad."""
    q = cases()
    x = np.random.default_rng(64).normal(size=(len(q), 3))
    x /= np.linalg.norm(x, axis=1, keepdims=True)
    theirs = scipy_of(q).apply(x)
    assert_within(np.linalg.norm(Rotations(q).apply(x) - theirs, axis=1), BAR_RAD)
    assert_within(np.linalg.norm(so3.rotate_back(q, theirs) - x, axis=1), BAR_RAD)
    matrices = so3.matrices(q)
    assert_within(np.linalg.norm(np.einsum("nij,nj->ni", matrices, x) - theirs, axis=1), BAR_RAD)


@pytest.mark.parametrize("exponent", [0.0, 1e-9, 0.25, 0.5, 1.0, 1.7, -0.3, -1.0])
def test_powers(exponent):
    """Powers are scipy's; at a half turn about either end of the axis. Measured: 3e-15 rad."""
    q = cases()
    q = q[np.abs(q[:, 0]) > 1e-12]
    theirs = Rotation.from_rotvec(exponent * scipy_of(q).as_rotvec())
    assert_within(apart(Rotations(q).power(exponent).quaternions, theirs), BAR_RAD)


@pytest.mark.parametrize("fraction", [0.0, 1e-9, 0.25, 0.5, 0.999, 1.0])
def test_the_way_between(fraction):
    """`between` is scipy's Slerp for stages of 0, 1e-12 rad, 1e-7 deg ... 180 - 1e-7 deg.

    Stages within 1e-12 rad of a half turn are left to the test of half turns: rounding alone picks
    their arc. Measured: 1.9e-15 rad.
    """
    one, other = pairs()
    stage = (scipy_of(one).inv() * scipy_of(other)).as_rotvec()
    clear = np.linalg.norm(stage, axis=1) < math.pi - 1e-12
    one, other, stage = one[clear], other[clear], stage[clear]
    assert len(one) > 8000
    theirs = scipy_of(one) * Rotation.from_rotvec(fraction * stage)
    assert_within(apart(Rotations(one).between(Rotations(other), fraction).quaternions, theirs), BAR_RAD)


def test_the_way_between_by_slerp_itself():
    """A few hundred pairs through scipy's Slerp class. Measured: 1.5e-15 rad."""
    one, other = pairs()
    chosen = np.random.default_rng(65).choice(len(one), 300, replace=False)
    fractions = np.linspace(0.0, 1.0, 5)
    for i in chosen:
        ends = scipy_of(np.array([one[i], other[i]]))
        if (ends[0].inv() * ends[1]).magnitude() > math.pi - 1e-9:
            continue
        theirs = Slerp([0.0, 1.0], ends)(fractions)
        assert_within(apart(so3.slerp(one[i], other[i], fractions), theirs), BAR_RAD)


def test_a_stage_near_half_a_turn():
    """Stages of 180 - 1e-7 deg go the short way; of exactly 180 deg one of the two ways."""
    start = random_quaternions(66, 50)
    for axis, fraction in itertools.product(AXES, (0.1, 0.5, 0.9)):
        axis = axis / np.linalg.norm(axis)
        end = (scipy_of(start) * Rotation.from_rotvec(NEAR_HALF * axis)).as_quat(scalar_first=True)
        theirs = scipy_of(start) * Rotation.from_rotvec(fraction * NEAR_HALF * axis)
        assert_within(apart(so3.slerp(start, end, fraction), theirs), BAR_RAD)
        exact = so3.multiply(start, np.array([0.0, *axis]))
        ways = [
            apart(
                so3.slerp(start, exact, fraction),
                scipy_of(start) * Rotation.from_rotvec(sign * fraction * math.pi * axis),
            )
            for sign in (1.0, -1.0)
        ]
        assert_within(np.minimum(*ways), BAR_RAD)


def test_the_parts_of_an_arc_are_orthonormal():
    """start and side have unit length and stand across each other, also where the stage is tiny."""
    one, other = pairs()
    arc = so3.arc(one, other)
    moving = np.linalg.norm(arc.side, axis=1) > 0.0
    assert_within(np.linalg.norm(arc.side[moving], axis=1) - 1.0, 1e-15)
    # the side of a tiny stage has few digits; across the start it must stand all the same,
    # since what it lacks there is multiplied by the stage angle only
    slant = np.sum(arc.start * arc.side, axis=1)
    assert_within(slant * np.sin(arc.half), 1e-15)
    assert np.all((arc.half >= 0.0) & (arc.half <= math.pi / 2))


def test_poles_are_axes():
    """A finite pole is scipy's rotation about that axis by that angle, beyond 180 too."""
    random = np.random.default_rng(67)
    lat, lon = random.uniform(-90.0, 90.0, 500), random.uniform(-180.0, 180.0, 500)
    angle = random.uniform(-360.0, 360.0, 500)
    lat[:4], angle[4:8] = [90.0, -90.0, 0.0, 90.0], [180.0, -180.0, 360.0, 1e-9]
    a, b = np.radians(lat), np.radians(lon)
    axis = np.stack([np.cos(a) * np.cos(b), np.cos(a) * np.sin(b), np.sin(a)], axis=-1)
    theirs = Rotation.from_rotvec(np.radians(angle)[:, np.newaxis] * axis)
    turns = Rotations.from_poles(lat, lon, angle)
    assert_within(apart(turns.quaternions, theirs), BAR_RAD)
    out_lat, out_lon, out_angle = turns.as_poles()
    assert np.all((out_angle >= 0.0) & (out_angle <= 180.0))
    zero = out_angle < 1e-10
    assert np.isnan(out_lat[zero]).all()
    assert np.isnan(out_lon[zero]).all()
    back = Rotations.from_poles(out_lat[~zero], out_lon[~zero], out_angle[~zero])
    assert_within(apart(back.quaternions, theirs[~zero]), BAR_RAD)
