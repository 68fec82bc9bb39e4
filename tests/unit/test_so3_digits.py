"""Jacobians and small angles against 50-digit arithmetic, on a logarithmic grid of angles.

A matrix is compared by the size of its error against its largest element: what an error vector of
given length may be wrong by. The scalar weights are compared one by one, relative to themselves.
"""

import mpmath as mp
import numpy as np
import pytest
from strategies import assert_within

from restore.geometry import so3, sphere

mp.mp.dps = 80  # 50 digits are left after (t - sin t) / t^3 at 1e-12

RELATIVE = 1e-13
ANGLES = [*np.logspace(-12.0, np.log10(np.pi), 49).tolist(), float(np.pi)]
AXES = [np.array([0.0, 0.0, 1.0]), np.array([1 / 3, -2 / 3, 2 / 3]), np.array([0.6, 0.0, -0.8])]
FRACTIONS = [0.0, 1e-9, 0.25, 0.5, 0.999, 1.0, 1.5, -0.5]


def mp_skew(v: np.ndarray) -> mp.matrix:
    x, y, z = (mp.mpf(float(c)) for c in v)
    return mp.matrix([[0, -z, y], [z, 0, -x], [-y, x, 0]])


def mp_right_jacobian(v: np.ndarray, scale: object = 1) -> mp.matrix:
    """I - (1 - cos t)/t^2 K + (t - sin t)/t^3 K^2 of `scale` v (Chirikjian's form), 80 digits."""
    k = mp_skew(v) * mp.mpf(scale)
    t = mp.sqrt(k[0, 1] ** 2 + k[0, 2] ** 2 + k[1, 2] ** 2)
    if t == 0:
        return mp.eye(3)
    return mp.eye(3) - (1 - mp.cos(t)) / t**2 * k + (t - mp.sin(t)) / t**3 * k * k


def mp_stage_jacobian(v: np.ndarray, fraction: float) -> mp.matrix:
    """G = f Jr(f v) Jr(v)^-1, the derivative of exp(f log(exp(v) exp(u))), 80 digits."""
    f = mp.mpf(fraction)
    return f * mp_right_jacobian(v, f) * mp.inverse(mp_right_jacobian(v))


def as_floats(m: mp.matrix) -> np.ndarray:
    return np.array([[float(m[i, j]) for j in range(m.cols)] for i in range(m.rows)])


def relative(found: np.ndarray, truth: mp.matrix) -> float:
    """Largest error of a matrix, computed with 80 digits, over its largest element."""
    errors = [abs(mp.mpf(float(found[i, j])) - truth[i, j]) for i in range(3) for j in range(3)]
    size = max(abs(truth[i, j]) for i in range(3) for j in range(3))
    return float(max(errors) / size) if size else float(max(errors))


@pytest.mark.parametrize("axis", range(len(AXES)))
def test_right_jacobian(axis):
    """Right Jacobians at angles 1e-12 .. pi are right to 1e-13. Measured: 2e-16."""
    for angle in ANGLES:
        v = angle * AXES[axis]
        misfit = relative(so3.right_jacobian(v), mp_right_jacobian(v))
        assert_within(misfit, RELATIVE, f"angle {angle:.3g}")


@pytest.mark.parametrize("fraction", FRACTIONS)
def test_stage_jacobian(fraction):
    """Stage Jacobians at angles 1e-12 .. pi, inside and outside the stage. Measured: 3e-16."""
    for angle in ANGLES:
        for axis in AXES:
            v = angle * axis
            truth = mp_stage_jacobian(v, fraction)
            misfit = relative(so3.stage_jacobian(v, fraction), truth)
            assert_within(misfit, RELATIVE, f"angle {angle:.3g}")


@pytest.mark.parametrize("fraction", FRACTIONS)
def test_stage_weights_one_by_one(fraction):
    """Along, across and turned, each to 1e-13 of itself, tiny ones included. Measured: 1.4e-14.

    Read off the 80-digit matrix of a stage about z. Where a weight passes through zero as the angle
    goes by (across, turned: near whole quarter turns) rounding of the angle itself, 1e-16 of the
    larger of the two weights, is allowed for.
    """
    for angle in ANGLES:
        truth = mp_stage_jacobian(np.array([0.0, 0.0, angle]), fraction)
        along, across, turned = truth[2, 2], truth[0, 0], truth[1, 0]
        found = so3.stage_weights(fraction, 0.5 * angle)
        floor = mp.mpf(4e-16) * max(abs(across), abs(turned)) if angle > 1.0 else 0
        floor += mp.mpf("1e-60")
        for mine, right in zip(found, (along, across, turned), strict=True):
            misfit = abs(mp.mpf(float(mine)) - right)
            assert_within(float(misfit / (abs(right) + floor / RELATIVE)), RELATIVE, f"angle {angle:.3g}")


def test_no_stage_at_all():
    """Of a stage that does not turn, the Jacobians are the identity and the plain fraction."""
    zero = np.zeros(3)
    assert np.array_equal(so3.right_jacobian(zero), np.eye(3))
    for fraction in FRACTIONS:
        assert np.array_equal(so3.stage_jacobian(zero, fraction), fraction * np.eye(3))
        assert [float(w) for w in so3.stage_weights(fraction, 0.0)] == [fraction, fraction, 0.0]


def test_many_stages_at_once():
    """Jacobians of a table of stages and fractions are those of each stage alone, bit for bit."""
    vectors = np.random.default_rng(71).normal(size=(4, 5, 3))
    fractions = np.random.default_rng(72).uniform(size=(4, 5))
    together = so3.stage_jacobian(vectors, fractions)
    rights = so3.right_jacobian(vectors)
    assert together.shape == rights.shape == (4, 5, 3, 3)
    for i, j in np.ndindex(4, 5):
        assert np.array_equal(together[i, j], so3.stage_jacobian(vectors[i, j], fractions[i, j]))
        assert np.array_equal(rights[i, j], so3.right_jacobian(vectors[i, j]))
    spread = so3.stage_jacobian(vectors[0, 0], fractions)
    assert spread.shape == (4, 5, 3, 3)


def test_the_exponential():
    """Quaternions of rotation vectors 1e-12 .. pi, each component to 1e-13 but w at pi."""
    for angle in ANGLES:
        for axis in AXES:
            v = angle * axis
            x = [mp.mpf(float(c)) for c in v]
            t = mp.sqrt(sum(c * c for c in x))
            truth = [mp.cos(t / 2), *(mp.sin(t / 2) / t * c for c in x)]
            found = so3.exponential(v)
            for mine, right in zip(found, truth, strict=True):
                # at a half turn w is the rounding of the angle itself
                size = abs(right) + (4e-16 / RELATIVE if angle > 3.0 else mp.mpf("1e-60"))
                assert_within(float(abs(mp.mpf(float(mine)) - right) / size), RELATIVE)


def test_the_logarithm():
    """Rotation vectors of quaternions 1e-12 .. pi to 1e-13 of their size. Measured: 3e-16.

    The 80-digit vector is of the very floats of the quaternion, scaled to unit length.
    """
    for angle in ANGLES:
        for axis in AXES:
            q = np.array([np.cos(angle / 2), *(np.sin(angle / 2) * axis)])
            w, *v = (mp.mpf(float(c)) for c in q)
            sine = mp.sqrt(sum(c * c for c in v))
            truth = [2 * mp.atan2(sine, w) / sine * c for c in v]
            found = so3.logarithm(q)
            worst = max(abs(mp.mpf(float(mine)) - right) for mine, right in zip(found, truth, strict=True))
            assert_within(float(worst) / angle, RELATIVE)


def mp_unit(lat: float, lon: float) -> list[mp.mpf]:
    a, b = mp.radians(mp.mpf(lat)), mp.radians(mp.mpf(lon))
    return [mp.cos(a) * mp.cos(b), mp.cos(a) * mp.sin(b), mp.sin(a)]


METRES = [1e-3, 1e-2, 1.0, 1e2, 1e3, 1e5, 1e6, 1e7, 1.5e7, 2.0e7]
HALF_GLOBE_M = float(np.pi) * 6_371_008.8


@pytest.mark.parametrize("metres", [*METRES, *(HALF_GLOBE_M - m for m in METRES[:6])])
def test_distance_from_a_millimetre_to_the_antipode(metres):
    """Distances are right to 3e-9 m from 1 mm to 1 mm before the antipode. Measured: 6e-10 m.

    The truth is taken between the very floats of the unit vectors, so that only the formula is
    under test and not the rounding of the points.
    """
    radius = 6_371_008.8
    for lat, lon, azimuth in ((0, 0, 45), (37.5, -120, 200), (-89.9999, 10, 10), (90, 0, 77)):
        start = sphere.unit_vectors(lat, lon)
        end = sphere.destination(start, azimuth, metres / radius)
        a = [mp.mpf(float(c)) for c in start]
        b = [mp.mpf(float(c)) for c in end]
        cross = [a[i] * b[j] - a[j] * b[i] for i, j in ((1, 2), (2, 0), (0, 1))]
        dot = sum(p * q for p, q in zip(a, b, strict=True))
        truth = mp.atan2(mp.sqrt(sum(c * c for c in cross)), dot)
        assert_within(float((mp.mpf(float(sphere.angular_distance(start, end))) - truth) * radius), 3e-9)


def test_unit_vectors_by_digits():
    """Unit vectors of awkward places, poles and date line among them, to 3e-16 per component."""
    for lat in (90.0, -90.0, 89.9999999, 45.0, 1e-12, 0.0, -33.3):
        for lon in (0.0, 180.0, -180.0, 90.0, 179.9999999, -77.7, 1e-12):
            found = sphere.unit_vectors(lat, lon)
            for mine, right in zip(found, mp_unit(lat, lon), strict=True):
                assert_within(float(mp.mpf(float(mine)) - right), 3e-16)
