"""The value `Rotations`: its doors and their messages, indexing, freezing, words."""

import numpy as np
import pytest
from strategies import assert_within, quaternions_apart, random_quaternions

from restore.geometry.rotations import NO_POLE_BELOW_RAD, Rotations


@pytest.mark.parametrize("bad", [np.zeros(3), np.zeros((4, 3)), np.array(1.0), np.zeros((2, 5))])
def test_quaternions_need_four_components(bad):
    """The message names the shape that came and the axis that is wrong, at both doors."""
    for door in (Rotations, Rotations.from_quaternions):
        with pytest.raises(ValueError, match=r"quaternions have shape \(.*\): the last axis must"):
            door(bad)


@pytest.mark.parametrize("value", [0.0, np.nan, np.inf])
def test_a_quaternion_without_a_direction_is_refused(value):
    """The first offender is named by its place in the array and shown."""
    q = random_quaternions(91, 6).reshape(2, 3, 4)
    q[1, 2] = 0.0
    q[1, 2, 1] = value
    with pytest.raises(ValueError, match=r"quaternion \(1, 2\) is \[.*\]: its length must be finite"):
        Rotations.from_quaternions(q)


@pytest.mark.parametrize("size", [1e-3, 7.0, 1e-200, 1e200])
def test_quaternions_of_any_length_are_taken(size):
    """Quaternions of any length but zero say the same rotation, as the door promises."""
    q = np.array([0.5, -0.5, 0.5, 0.5])
    assert_within(quaternions_apart(Rotations.from_quaternions(q * size).quaternions, q), 1e-15)


@pytest.mark.parametrize("bad", [[1.0, 2.0], [1.0, 2.0, 3.0, 4.0], [[1.0], [2.0], [3.0]], 1.0])
def test_rotation_vectors_need_three_components(bad):
    """The message names the shape that came, as it does for quaternions and matrices."""
    with pytest.raises(ValueError, match=r"vectors have shape .*last axis must have length 3"):
        Rotations.from_vectors(bad)


@pytest.mark.parametrize("bad", [np.eye(4), np.zeros(9), np.zeros((3, 3, 2)), np.zeros((0, 3))])
def test_matrices_need_three_by_three(bad):
    """The message names the shape that came and what it must end in."""
    with pytest.raises(ValueError, match=r"matrices have shape \(.*\): the last two axes must be 3"):
        Rotations.from_matrices(bad)


@pytest.mark.parametrize(
    "bad", [-np.eye(3), np.eye(3) * 1.001, np.diag([1.0, 1.0, -1.0]), np.full((3, 3), np.nan)]
)
def test_a_matrix_that_is_no_rotation_is_refused(bad):
    """The first offender is named by its place; mirror images count as offenders."""
    stack = np.stack([np.eye(3), bad, bad])
    with pytest.raises(ValueError, match=r"matrix \(1,\) is not a proper rotation: .*determinant"):
        Rotations.from_matrices(stack)


def test_a_slightly_rounded_matrix_is_taken():
    """A matrix printed to seven digits is taken, and what comes out is a proper rotation."""
    rough = np.round(Rotations.from_poles(37.0, -120.0, 77.0).as_matrices(), 7)
    exact = Rotations.from_matrices(rough).as_matrices()
    assert_within(exact @ exact.T - np.eye(3), 1e-15)
    assert_within(exact - rough, 1e-7)


def test_zero_rotations_have_no_pole():
    """Zero rotations, and those below 6 um on the ground, have a NaN pole and keep their angle."""
    tiny = 0.5 * NO_POLE_BELOW_RAD
    lat, lon, angle = Rotations.from_vectors([[0.0, 0, 0], [tiny, 0, 0], [0, 0, 1e-6]]).as_poles()
    assert np.isnan(lat).tolist() == np.isnan(lon).tolist() == [True, True, False]
    assert_within(np.deg2rad(angle) - [0.0, tiny, 1e-6], 1e-21)
    assert lat[2] == 90.0


def test_a_zero_angle_needs_no_pole():
    """A zero angle gives the zero rotation whatever the pole says; its neighbours keep theirs."""
    turns = Rotations.from_poles([np.nan, 95.0, 90.0], [np.nan, np.inf, 0.0], [0.0, 0.0, 90.0])
    assert np.array_equal(turns.quaternions[:2], [[1.0, 0, 0, 0]] * 2)
    assert_within(turns.apply([1.0, 0, 0])[2] - [0.0, 1.0, 0.0], 1e-15)


def test_missing_poles_of_true_rotations_are_carried_through():
    """NaN in the pole or angle of a rotation that turns gives NaN, never a number."""
    turns = Rotations.from_poles([np.nan, 10.0], [0.0, 0.0], [5.0, np.nan])
    assert np.isnan(turns.quaternions).all()
    assert np.isnan(turns.as_poles()).all()


@pytest.mark.parametrize(
    ("pole", "written"),
    [
        ((10, 20, 30), (10, 20, 30)),
        ((10, 20, -30), (-10, -160, 30)),
        ((10, 20, 330), (-10, -160, 30)),
        ((90, 55, 40), (90, None, 40)),
        ((0, 180, 40), (0, -180, 40)),
        ((-10, 200, 40), (-10, -160, 40)),
    ],
)
def test_poles_are_written_one_way(pole, written):
    """Angles come out in 0..180 with the pole that fits, longitudes in [-180, 180)."""
    lat, lon, angle = (float(v) for v in Rotations.from_poles(*pole).as_poles())
    assert_within([lat - written[0], angle - written[2]], 1e-13)
    if written[1] is not None:
        assert_within(lon - written[1], 1e-13)


def test_anticlockwise_is_positive():
    """About the north pole by +90 degrees 0N 0E goes to 0N 90E; about 0N 0E 0N 90E goes to 90N."""
    assert_within(Rotations.from_poles(90, 0, 90).apply([1.0, 0, 0]) - [0, 1, 0], 1e-15)
    assert_within(Rotations.from_poles(0, 0, 90).apply([0, 1.0, 0]) - [0, 0, 1], 1e-15)


def test_the_order_of_a_chain():
    """P > A is 90 deg about x, A > F 90 deg about y: 0N 90E goes to 0N 0E (worked case)."""
    chain = Rotations.from_poles(0, 90, 90) @ Rotations.from_poles(0, 0, 90)
    assert_within(chain.apply([0.0, 1.0, 0.0]) - [1.0, 0.0, 0.0], 1e-15)


def test_rotations_are_indexed_like_arrays_of_their_shape():
    """Numbers, slices, masks, lists and new axes act on the shape, not on components."""
    q = random_quaternions(92, 12).reshape(3, 4, 4)
    turns = Rotations(q)
    flags = np.arange(12).reshape(3, 4)
    for item in (0, -1, slice(1, 3), (1, 2), (slice(None), 1), [0, 2], flags > 5, None):
        assert turns[item].shape == flags[item].shape
        assert np.array_equal(turns[item].quaternions.reshape(-1, 4)[0], q[item].reshape(-1, 4)[0])


@pytest.mark.parametrize("item", [(..., 0), (..., slice(1)), (0, ...), (...,), (..., None)])
def test_the_ellipsis_counts_axes_of_the_shape(item):
    """`[..., 0]` takes the last axis of rotations, not the scalar parts of the quaternions."""
    turns = Rotations(random_quaternions(92, 12).reshape(3, 4, 4))
    flags = np.arange(12).reshape(3, 4)
    found = turns[item]
    assert found.shape == flags[item].shape
    first = turns.quaternions.reshape(12, 4)[flags[item].ravel()[-1]]
    assert np.array_equal(found.quaternions.reshape(-1, 4)[-1], first)


def test_length_is_that_of_the_first_axis():
    """A stack has a length; a single rotation has none, and says so."""
    assert len(Rotations.identity((3, 2))) == 3
    with pytest.raises(TypeError, match="a single rotation has no length"):
        len(Rotations.identity())


def test_rotations_are_frozen():
    """Neither the array inside nor the field can be written to."""
    turns = Rotations.from_poles(10, 20, 30)
    with pytest.raises(ValueError, match="read-only"):
        turns.quaternions[0] = 1.0
    with pytest.raises(AttributeError, match="cannot assign to field"):
        turns.quaternions = np.zeros(4)


def test_words():
    """A single rotation shows its pole and angle, a stack its shape."""
    assert repr(Rotations.from_poles(10, 20, 30)) == (
        "Rotations(pole_lat_deg=10, pole_lon_deg=20, angle_deg=30)"
    )
    assert repr(Rotations.identity((2, 3))) == "Rotations(shape=(2, 3))"
    assert repr(Rotations.identity()) == ("Rotations(pole_lat_deg=nan, pole_lon_deg=nan, angle_deg=0)")
