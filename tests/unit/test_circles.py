"""Small circles as lines, feet on lines, and lines cut at 180 degrees."""

import math

import numpy as np
import pytest
from published.support import unit
from strategies import R_M

from restore.errors import InputError
from restore.geometry.circles import (
    cut_at_antimeridian,
    nearest_on_line,
    small_circle,
    to_small_circle,
)
from restore.geometry.latitudes import Latitudes
from restore.geometry.sphere import angular_distance, unit_vectors
from restore.motion.circle_lines import circle_columns, circle_lines

POLE = unit(62.0, -30.0)


def test_a_circle_keeps_its_distance_from_the_pole():
    """To a micrometre, all the way round; it begins and ends with the point itself."""
    through = unit(10.0, 15.0)
    points, angles = small_circle(POLE, through, step_deg=0.5)
    away = angular_distance(np.broadcast_to(POLE, points.shape), points)
    assert (len(points), angles[0], angles[-1]) == (721, 0.0, 360.0)
    assert np.ptp(away) * R_M < 1e-6
    assert points[0].tolist() == points[-1].tolist() == through.tolist()


def test_anticlockwise_about_the_north_pole():
    """Positive angles go east."""
    points, angles = small_circle(unit(90.0, 0.0), unit(40.0, 10.0), -20.0, 30.0, 10.0)
    assert angles.tolist() == [-20.0, -10.0, 0.0, 10.0, 20.0, 30.0]
    assert np.rad2deg(np.arctan2(points[:, 1], points[:, 0])) == pytest.approx(angles + 10.0, abs=1e-12)


def test_a_point_on_the_pole_stays():
    points, _ = small_circle(POLE, POLE, step_deg=90.0)
    assert np.max(angular_distance(points, np.broadcast_to(POLE, points.shape))) * R_M < 1e-6
    (line,) = circle_lines((62.0, -30.0), {}, [62.0], [-30.0], Latitudes(), step_deg=90.0)
    assert line.feature()[0] == {"type": "Point", "coordinates": [-30.0, 62.0]}


@pytest.mark.parametrize(("arc", "step"), [((0.0, 360.0), 0.0), ((10.0, 10.0), 1.0), ((0.0, 361.0), 1.0)])
def test_arcs_at_fault(arc, step):
    with pytest.raises(InputError, match="must"):
        small_circle(POLE, unit(0.0, 0.0), *arc, step)


def test_distance_from_a_circle():
    """Outside is positive."""
    off = to_small_circle(unit_vectors([50.0, 70.0], [0.0, 0.0]), unit(90.0, 0.0), math.radians(30.0))
    assert np.rad2deg(off) == pytest.approx([10.0, -10.0], abs=1e-12)


def test_feet_on_a_line():
    """On an edge, past an end, at a corner, over a repeated point; positive to the right."""
    line = unit_vectors([0.0, 0.0, 0.0, 10.0], [0.0, 10.0, 10.0, 10.0])
    points = unit_vectors([-2.0, 3.0, 0.0, 5.0, 5.0, 12.0], [5.0, 4.0, -3.0, 11.0, 9.5, 10.0])
    position, off = nearest_on_line(points, line)
    assert position == pytest.approx([0.5, 0.4, 0.0, 2.5, 2.5, 3.0], abs=1e-3)
    assert np.rad2deg(off[:3]) == pytest.approx([2.0, -3.0, 3.0], abs=1e-12)
    assert np.sign(off[3:5]).tolist() == [1.0, -1.0]
    assert abs(np.rad2deg(off[5])) == pytest.approx(2.0, abs=1e-12)


def test_a_line_of_one_place_has_no_direction():
    with pytest.raises(InputError, match="coincide"):
        nearest_on_line(unit_vectors([1.0], [1.0]), unit_vectors([0.0, 0.0], [5.0, 5.0]))


def test_lines_are_cut_at_180_degrees():
    """Both parts end at the crossing of the great circle; on the equator at 0."""
    parts = cut_at_antimeridian(np.array([0.0, 0.0]), np.array([170.0, -170.0]))
    assert parts == [[[170.0, 0.0], [180.0, 0.0]], [[-180.0, 0.0], [-170.0, 0.0]]]
    # half-way from 60N 170E to 60N 170W: atan(tan 60 / cos 10)
    north = math.degrees(math.atan(math.tan(math.radians(60.0)) / math.cos(math.radians(10.0))))
    parts = cut_at_antimeridian(np.array([60.0, 60.0]), np.array([170.0, -170.0]))
    assert parts[0][-1] == pytest.approx([180.0, north], abs=1e-12)
    back = cut_at_antimeridian(np.array([60.0, 60.0]), np.array([-170.0, 170.0]))
    assert [part[::-1] for part in back[::-1]] == [pytest.approx(np.array(part)) for part in parts]


def test_a_vertex_on_180_degrees():
    """A place on the edge of the map belongs to both sides and makes no part of its own."""
    parts = cut_at_antimeridian(np.array([0.0, 5.0, 9.0]), np.array([170.0, -180.0, -170.0]))
    assert parts == [[[170.0, 0.0], [180.0, 5.0]], [[-180.0, 5.0], [-170.0, 9.0]]]
    assert len(cut_at_antimeridian(np.array([0.0, 1.0]), np.array([10.0, 20.0]))) == 1


def test_columns():
    """Angles, the radius and where each circle has its own point, to the digit."""
    lines = circle_lines((90.0, 0.0), {"start": ["P"]}, [33.3], [190.1], Latitudes(), (-1.0, 1.0), 1.0)
    columns = circle_columns(lines)
    assert columns["circle"] == ["P"] * 3
    assert columns["lat_deg"][1] == 33.3
    assert columns["lon_deg"] == pytest.approx([-170.9, -169.9, -168.9], abs=1e-12)
    assert columns["radius_deg"] == pytest.approx([56.7] * 3, abs=1e-12)
