"""Laws of rotations: the group, isometry, the double cover, powers and the way between two."""

import math

import numpy as np
import pytest
from hypothesis import assume, given
from hypothesis import strategies as st
from scipy.spatial.transform import Rotation
from strategies import (
    angles,
    assert_within,
    metres_apart,
    quaternions,
    quaternions_apart,
    random_quaternions,
    rotation_vectors,
    unit_vectors,
)

from restore.geometry import so3
from restore.geometry.rotations import Rotations

# a product of unit quaternions rounds by about 2e-16; some of them in a row by 2e-15 (0.01 um)
ROUNDING_RAD = 5e-15
# a unit vector of float64 stands for a place to about 1e-9 m
ROUNDING_M = 2e-8

fractions = st.one_of(st.sampled_from([0.0, 1.0, 0.5]), st.floats(0.0, 1.0))


def apart(one: Rotations, other: Rotations) -> np.ndarray:
    return quaternions_apart(one.quaternions, other.quaternions)


def stage_angle(one: np.ndarray, other: np.ndarray) -> float:
    """Angle of the rotation from one to the other, radians, by scipy."""
    turns = Rotation.from_quat([one, other], scalar_first=True)
    return float((turns[0].inv() * turns[1]).magnitude())


@given(quaternions(), quaternions(), quaternions())
def test_composition_is_associative(a, b, c):
    """Bracketing three rotations either way gives one rotation."""
    a, b, c = Rotations(a), Rotations(b), Rotations(c)
    assert_within(apart((a @ b) @ c, a @ (b @ c)), ROUNDING_RAD)


@given(quaternions())
def test_the_identity_changes_nothing(a):
    """The zero rotation on either side leaves every bit of a rotation."""
    zero = Rotations.identity()
    assert np.array_equal((Rotations(a) @ zero).quaternions, a)
    assert np.array_equal((zero @ Rotations(a)).quaternions, a)


@given(quaternions())
def test_a_rotation_and_its_inverse_cancel(a):
    """There and back is the zero rotation, in either order; inverting twice changes nothing."""
    a = Rotations(a)
    zero = Rotations.identity()
    assert_within(apart(a @ a.inverse(), zero), ROUNDING_RAD)
    assert_within(apart(a.inverse() @ a, zero), ROUNDING_RAD)
    assert np.array_equal(a.inverse().inverse().quaternions, a.quaternions)


@given(quaternions(), quaternions())
def test_the_inverse_of_a_product_turns_the_order_round(a, b):
    """(A B)^-1 = B^-1 A^-1."""
    a, b = Rotations(a), Rotations(b)
    assert_within(apart((a @ b).inverse(), b.inverse() @ a.inverse()), ROUNDING_RAD)


@given(quaternions(), quaternions(), unit_vectors())
def test_the_rotation_on_the_right_acts_first(a, b, x):
    """(A B) x = A (B x), on the ground."""
    a, b = Rotations(a), Rotations(b)
    assert_within(metres_apart((a @ b).apply(x), a.apply(b.apply(x))), ROUNDING_M)


@given(quaternions(), unit_vectors(), unit_vectors())
def test_rotations_keep_lengths_angles_and_handedness(q, x, y):
    """Lengths, scalar products and vector products come through a rotation unharmed."""
    turn = Rotations(q)
    turned_x, turned_y = turn.apply(x), turn.apply(y)
    assert_within(np.linalg.norm(turned_x) - 1.0, 1e-15 * 4)
    assert_within(turned_x @ turned_y - x @ y, 1e-15 * 4)
    assert_within(metres_apart(np.cross(turned_x, turned_y), turn.apply(np.cross(x, y))), ROUNDING_M)


@given(rotation_vectors())
def test_the_axis_stays_where_it_is(vector):
    """Points on the axis do not move."""
    size = np.linalg.norm(vector)
    assume(size > 0.0)
    pole = vector / size
    assert_within(metres_apart(Rotations.from_vectors(vector).apply(pole), pole), ROUNDING_M)


@given(quaternions(), quaternions(), unit_vectors(), fractions)
def test_q_and_minus_q_are_one_rotation(a, b, x, fraction):
    """The sign of a quaternion has no say in any result."""
    one, other = Rotations(a), Rotations(-a)
    assert np.array_equal(one.apply(x), other.apply(x))
    assert np.array_equal(one.as_matrices(), other.as_matrices())
    assert np.array_equal(one.as_quaternions(), other.as_quaternions())
    assert np.array_equal(one.as_vectors(), other.as_vectors())
    assert one.angle_deg() == other.angle_deg()
    assert_within(one.angle_to(other), 4e-16)
    b = Rotations(b)
    assert np.array_equal((one @ b).as_quaternions(), (other @ b).as_quaternions())
    # at a half turn of the stage both arcs are equally short and rounding picks one
    if stage_angle(a, b.quaternions) < math.pi - 1e-6:
        assert_within(apart(b.between(one, fraction), b.between(other, fraction)), ROUNDING_RAD)
        assert_within(apart(one.between(b, fraction), other.between(b, fraction)), ROUNDING_RAD)


@given(quaternions())
def test_the_canonical_form_is_one_of_the_two_and_never_another(q):
    """Canonical quaternions have w >= 0; of a half turn the first component not 0 is > 0."""
    canonical = Rotations(q).as_quaternions()
    assert np.array_equal(canonical, q) or np.array_equal(canonical, -q)
    first = next(c for c in canonical if c != 0.0)
    assert first > 0.0
    assert not np.any(np.signbit(canonical) & (canonical == 0.0))


def test_the_length_of_a_product_stays_one():
    """Ten thousand rotations in a row without renormalising: length off by under 1e-12.

    Measured: 1e-14, which is 0.06 um on the ground.
    """
    turns = Rotations(random_quaternions(1, 10_000))
    total = Rotations.identity()
    for i in range(len(turns)):
        total = turns[i] @ total
    assert_within(np.linalg.norm(total.quaternions) - 1.0, 1e-12)


@given(rotation_vectors(), st.floats(-3.0, 3.0), st.floats(-3.0, 3.0))
def test_powers_of_a_rotation_add_up(vector, m, n):
    """A^m A^n = A^(m + n), for angles below a half turn, where the axis is not in doubt."""
    assume(np.linalg.norm(vector) < math.pi - 1e-6)
    turn = Rotations.from_vectors(vector)
    assert_within(apart(turn.power(m) @ turn.power(n), turn.power(m + n)), 2 * ROUNDING_RAD)


@given(quaternions())
def test_simple_powers(q):
    """Power 1 is the rotation, -1 its inverse, 0 the zero rotation, one half twice the whole."""
    turn = Rotations(q)
    assert_within(apart(turn.power(1.0), turn), ROUNDING_RAD)
    assert_within(apart(turn.power(-1.0), turn.inverse()), ROUNDING_RAD)
    assert_within(apart(turn.power(0.0), Rotations.identity()), 0.0)
    assert_within(apart(turn.power(0.5) @ turn.power(0.5), turn), ROUNDING_RAD)


@given(quaternions(), quaternions())
def test_the_way_between_two_rotations_begins_and_ends_at_them(a, b):
    """Fraction 0 is the first to the last bit, fraction 1 the second to rounding."""
    one, other = Rotations(a), Rotations(b)
    assert_within(apart(one.between(other, 0.0), one), 0.0)
    assert_within(apart(one.between(other, 1.0), other), ROUNDING_RAD)
    assert_within(apart(one.between(one, 0.3), one), ROUNDING_RAD)


@given(quaternions(), quaternions(), fractions)
def test_the_way_between_is_the_same_from_either_end(a, b, fraction):
    """A to B at f is B to A at 1 - f."""
    assume(stage_angle(a, b) < math.pi - 1e-6)
    one, other = Rotations(a), Rotations(b)
    assert_within(apart(one.between(other, fraction), other.between(one, 1.0 - fraction)), ROUNDING_RAD)


@given(quaternions(), quaternions(), quaternions(), fractions)
def test_the_way_between_does_not_depend_on_the_coordinates(a, b, g, fraction):
    """Turning both ends, before or after, turns the way between them."""
    assume(stage_angle(a, b) < math.pi - 1e-6)
    a, b, g = Rotations(a), Rotations(b), Rotations(g)
    way = a.between(b, fraction)
    assert_within(apart((g @ a).between(g @ b, fraction), g @ way), 2 * ROUNDING_RAD)
    assert_within(apart((a @ g).between(b @ g, fraction), way @ g), 2 * ROUNDING_RAD)
    assert_within(apart(a.inverse().between(b.inverse(), fraction), way.inverse()), ROUNDING_RAD)


@given(quaternions(), rotation_vectors(3.1), st.floats(0.0, 1.0))
def test_the_way_between_has_constant_angular_velocity(a, stage, fraction):
    """At fraction f the angle covered is f times the stage angle."""
    start = Rotations(a)
    end = start @ Rotations.from_vectors(stage)
    covered = start.angle_to(start.between(end, fraction))
    assert_within(covered - fraction * np.linalg.norm(stage), ROUNDING_RAD)


@given(angles(), unit_vectors())
def test_half_turns_and_tiny_turns_keep_their_angle(angle, axis):
    """The angle of a rotation comes back from 1e-12 rad to a half turn; zero stays exactly zero.

    A rotation vector rounds relatively, so a tiny angle keeps its digits too.
    """
    turn = Rotations.from_vectors(axis * angle)
    size = math.hypot(*(axis * angle))
    assert_within(np.deg2rad(turn.angle_deg()) - size, 4e-16 * size)


SHAPES = [(), (5,), (2, 3), (0,), (4, 4)]


def turned_stack(shape: tuple[int, ...]) -> Rotations:
    """Seeded rotations of a shape, first among them zero, tiny and half turns as room allows."""
    count = int(np.prod(shape))
    q = random_quaternions(2, count)
    special = np.array([[1.0, 0, 0, 0], [0, 0, 1.0, 0], [1.0, 0, 1e-12, 0]])[: count // 2]
    q[: len(special)] = special
    return Rotations(q.reshape(*shape, 4))


@pytest.mark.parametrize("shape", SHAPES)
@pytest.mark.parametrize("form", ["quaternions", "vectors", "matrices"])
def test_every_form_of_a_rotation_reads_back(form, shape):
    """from_x(as_x) is the same rotation for one, for a row and for a table of them."""
    turns = turned_stack(shape)
    back = getattr(Rotations, f"from_{form}")(getattr(turns, f"as_{form}")())
    assert turns.shape == back.shape == shape
    assert_within(apart(turns, back), 2 * ROUNDING_RAD)


@pytest.mark.parametrize("shape", SHAPES)
def test_poles_read_back(shape):
    """from_poles(as_poles) is the same rotation; the zero rotation comes back from a NaN pole."""
    turns = turned_stack(shape)
    lat, lon, angle = turns.as_poles()
    assert lat.shape == lon.shape == angle.shape == shape
    assert_within(apart(turns, Rotations.from_poles(lat, lon, angle)), 2 * ROUNDING_RAD)


@pytest.mark.parametrize("shape", SHAPES)
def test_shapes_are_kept_and_broadcast(shape):
    """Composing, inverting, powers, the way between and moved vectors all keep the shape."""
    turns = turned_stack(shape)
    one = Rotations(random_quaternions(3, 1)[0])
    assert (turns @ one).shape == (one @ turns).shape == shape
    assert turns.inverse().shape == turns.power(0.3).shape == shape
    assert turns.between(one, 0.25).shape == one.between(turns, 0.25).shape == shape
    assert turns.apply([1.0, 0.0, 0.0]).shape == (*shape, 3)
    assert turns.angle_deg().shape == shape
    assert turns.as_matrices().shape == (*shape, 3, 3)
    flat = turns.quaternions.reshape(-1, 4)
    for i, q in enumerate((turns @ one).quaternions.reshape(-1, 4)):
        assert np.array_equal(q, (Rotations(flat[i]) @ one).quaternions)


def test_many_fractions_of_one_way():
    """One pair of ends and many fractions give many rotations, each as if asked alone."""
    one, other = (Rotations(q) for q in random_quaternions(4, 2))
    fractions_ = np.linspace(0.0, 1.0, 7)
    together = one.between(other, fractions_)
    assert together.shape == (7,)
    for fraction, q in zip(fractions_, together.quaternions, strict=True):
        assert np.array_equal(q, one.between(other, fraction).quaternions)


@given(quaternions(), unit_vectors())
def test_turning_back_undoes_turning(q, x):
    """`rotate_back` brings every point home, on the ground."""
    assert_within(metres_apart(so3.rotate_back(q, so3.rotate(q, x)), x), ROUNDING_M)


@given(rotation_vectors())
def test_logarithm_undoes_exponential_on_the_short_way(vector):
    """Vectors below a half turn come back to rounding; at a half turn v and -v are one rotation."""
    back = so3.logarithm(so3.exponential(vector))
    size = np.linalg.norm(vector)
    misfit = np.linalg.norm(back - vector)
    if size > math.pi - 1e-9:
        misfit = min(misfit, np.linalg.norm(back + vector))
    assert_within(misfit, 1e-15 * max(size, 0.0) if size < 1.0 else ROUNDING_RAD)
