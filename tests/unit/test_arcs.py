"""Great-circle lines: nearest distances against dense search, densified vertices, lengths in closed form."""

import math

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st

from restore.geometry.arcs import densified_arcs, line_length, nearest_on_edges
from restore.geometry.sphere import unit_vectors

places = st.tuples(st.floats(-89, 89), st.floats(-180, 180))


def angle(a, b):
    return np.arctan2(np.linalg.norm(np.cross(a, b), axis=-1), np.sum(a * b, axis=-1))


def vectors(*pairs):
    return unit_vectors(*np.array(pairs, dtype=float).T)


@pytest.mark.parametrize(
    ("place", "degrees"),
    [
        ((0, 10), 0.0), ((7, 10), 7.0), ((-7, 33), 7.0), ((0, 45), 5.0), ((0, -3), 3.0), ((0, 0), 0.0),
        ((0, 180), 140.0), ((90, 0), 90.0),
    ],
)  # fmt: skip
def test_distance_from_a_line_on_the_equator(place, degrees):
    """From 0E to 40E: off the side by the latitude, beyond an end by the longitude."""
    found = nearest_on_edges(vectors(place), vectors((0, 0), (0, 15), (0, 40)))
    assert found == pytest.approx([math.radians(degrees)], abs=1e-15)


def test_closed_lines_have_a_last_edge():
    """The edge from the last vertex to the first counts only if the line is closed."""
    triangle = vectors((0, 0), (0, 60), (50, 30))
    place = vectors((25.0, 5.0))
    (opened,), (closed,) = nearest_on_edges(place, triangle), nearest_on_edges(place, triangle, closed=True)
    normal = np.cross(triangle[2], triangle[0])
    assert closed == pytest.approx(abs(math.asin(place[0] @ normal / np.linalg.norm(normal))), rel=1e-14)
    assert opened > closed + 0.01


@given(st.lists(places, min_size=2, max_size=6, unique=True), places)
def test_nearest_against_a_dense_search(line, place):
    """Never above the least distance to thousands of places on the line, and within their spacing of it."""
    line, place = vectors(*line), vectors(place)
    dense, owner = densified_arcs(line, 2e-3)
    least = float(angle(dense, place).min())
    (found,) = nearest_on_edges(place, line)
    assert found <= least + 1e-12
    assert found >= least - 1.1e-3
    assert owner[-1] == len(line) - 1


def test_many_points_are_taken_in_blocks():
    """The same answers for many points against many vertices as one by one."""
    rng = np.random.default_rng(3)
    line = vectors(*zip(rng.uniform(-80, 80, 3000), rng.uniform(-180, 180, 3000), strict=True))
    points = vectors(*zip(rng.uniform(-90, 90, 900), rng.uniform(-180, 180, 900), strict=True))
    together = nearest_on_edges(points, line)
    alone = np.concatenate([nearest_on_edges(points[i : i + 1], line) for i in range(0, 900, 100)])
    assert together[::100].tolist() == alone.tolist()


def test_a_line_of_one_place():
    """Vertices that lie on one another leave the distance to the place itself."""
    found = nearest_on_edges(vectors((0, 10), (3, 0)), vectors((0, 0), (0, 0)))
    assert found == pytest.approx(np.deg2rad([10.0, 3.0]), rel=1e-14)


def test_densified_arcs_keep_their_vertices_and_lie_on_the_arcs():
    """No arc is longer than asked; the original vertices are there bit by bit, at whole numbers."""
    line = vectors((0, 0), (0, 90), (60, 90), (60, 91))
    dense, owner = densified_arcs(line, math.radians(7))
    whole = owner == np.floor(owner)
    assert np.array_equal(dense[whole], line)
    assert owner[whole].tolist() == [0, 1, 2, 3]
    assert angle(dense[1:], dense[:-1]).max() <= math.radians(7) + 1e-15
    assert len(dense) == 13 + 9 + 1 + 1
    assert np.linalg.norm(dense, axis=1) == pytest.approx(1.0, abs=1e-15)
    on_equator = owner <= 1
    assert np.abs(dense[on_equator, 2]).max() == 0.0
    steps = angle(dense[:13], dense[1:14])
    assert steps == pytest.approx(math.radians(90) / 13, rel=1e-13)


def test_lengths():
    """A quarter, a third of a parallel by great circles (textbook), and nothing."""
    assert line_length(vectors((0, 0), (0, 90))) == pytest.approx(math.pi / 2, rel=1e-15)
    third = 2 * math.asin(math.cos(math.radians(60)) * math.sin(math.radians(60)))
    assert line_length(vectors((60, 0), (60, 120), (60, -120))) == pytest.approx(2 * third, rel=1e-14)
    assert line_length(vectors((60, 0))) == 0.0
