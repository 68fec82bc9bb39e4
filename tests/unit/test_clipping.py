"""Polygons cut by the edge of a map: the 180th meridian and the windows of gnomonic views.

Areas are held against formulas and against the package `antimeridian`, crossings against arcs whose
meeting points are known by symmetry.
"""

import math

import numpy as np
import pytest
from scipy.spatial.transform import Rotation

from restore.geometry.arcs import along_arcs, crossings, near_pairs
from restore.geometry.clipping import View, cube, cut_line, cut_rings, signed_area
from restore.geometry.polygons import Polygon, Ring
from restore.geometry.sphere import unit_vectors


def cap(lat, lon, radius_deg, count, clockwise=False):
    """A regular polygon about a point: longitude, latitude (count, 2), anticlockwise."""
    turn = np.arange(count) * 2 * np.pi / count
    r = math.radians(radius_deg)
    points = np.stack(
        [np.sin(r) * np.cos(turn), np.sin(r) * np.sin(turn), np.full(count, np.cos(r))], axis=-1
    )
    x, y, z = Rotation.from_euler("yz", [90 - lat, lon], degrees=True).apply(points).T
    ring = np.stack([np.degrees(np.arctan2(y, x)), np.degrees(np.arctan2(z, np.hypot(x, y)))], axis=-1)
    return ring[::-1] if clockwise else ring


def regular_area(radius_deg, count):
    """Area of a regular spherical polygon: its angles' sum less that of a plane one (Girard)."""
    half = math.atan(1 / (math.cos(math.radians(radius_deg)) * math.tan(math.pi / count)))
    return 2 * count * half - (count - 2) * math.pi


def polygon_of(*rings):
    return Polygon.of(tuple(Ring.of(ring[:, 1], ring[:, 0]) for ring in rings))


def area_of(polygons):
    """The sum of spherical areas of cut polygons, modulo the sphere."""
    total = 0.0
    for outer, *holes in polygons:
        total += Ring.of(outer[:-1, 1], outer[:-1, 0]).area_sr()
        total -= sum(Ring.of(hole[::-1][:-1, 1], hole[::-1][:-1, 0]).area_sr() for hole in holes)
    return total % (4 * math.pi)


def assert_rfc_7946(polygons):
    """Longitudes within 180, rings closed, outer ones anticlockwise, no step above 180 degrees."""
    for polygon in polygons:
        for number, ring in enumerate(polygon):
            assert np.array_equal(ring[0], ring[-1])
            assert np.all(np.abs(ring).max(axis=0) <= [180, 90])
            assert np.abs(np.diff(ring[:, 0])).max() <= 180
            assert (signed_area(ring) > 0) == (number == 0)


SHAPES = {
    "in the middle": (10, 20, 5, 1),
    "across the date line": (10, 178, 5, 2),
    "touching the date line": (0, 170, 10, 1),
    "round the north pole": (86, 40, 10, 1),
    "round the south pole": (-88, -100, 30, 1),
    "a vertex on the pole": (80, 30, 10, 1),
    "almost a hemisphere": (20, 100, 89.9, 1),
    "all but a cap": (20, 10, 150, 1),
    "all but a cap on the date line": (20, 179, 150, 1),
}


@pytest.mark.parametrize(("lat", "lon", "radius", "parts"), SHAPES.values(), ids=SHAPES)
def test_the_area_stays(lat, lon, radius, parts):
    """A regular polygon keeps the area that Girard's formula gives, in as many parts as expected."""
    ring = cap(lat, lon, radius, 48)
    cut = cut_rings([ring], may_fill=True)
    assert_rfc_7946(cut)
    assert len(cut) == parts
    if radius < 90:
        assert area_of(cut) == pytest.approx(regular_area(radius, 48), rel=1e-9)
    else:
        assert area_of(cut) == pytest.approx(4 * math.pi - regular_area(180 - radius, 48), rel=1e-9)


@pytest.mark.parametrize("middle", [(5, 179), (0, -178), (88, 0), (-87, 120)])
def test_against_antimeridian(middle):
    """Where the package `antimeridian` cuts well, small polygons, both cut to the same shape."""
    antimeridian = pytest.importorskip("antimeridian")
    shapely = pytest.importorskip("shapely")
    ring = np.round(cap(*middle, 8, 40), 7)
    ours = shapely.MultiPolygon([shapely.Polygon(r[0], r[1:]) for r in cut_rings([ring], may_fill=True)])
    theirs = antimeridian.fix_polygon(shapely.Polygon(ring), fix_winding=False)
    assert shapely.symmetric_difference(ours, theirs).area < 1e-4 * theirs.area


def test_a_hole_across_the_date_line():
    """Outer ring and hole are cut together; round a pole the hole opens the ring."""
    outer, hole = cap(0, 180, 20, 36), cap(0, 180, 5, 12, clockwise=True)
    cut = cut_rings([outer, hole], may_fill=True)
    assert_rfc_7946(cut)
    assert [len(polygon) for polygon in cut] == [1, 1]
    assert area_of(cut) == pytest.approx(regular_area(20, 36) - regular_area(5, 12), rel=1e-9)
    belt = cut_rings([cap(90, 0, 20, 36), cap(90, 7, 5, 12, clockwise=True)], may_fill=True)
    assert_rfc_7946(belt)
    assert area_of(belt) == pytest.approx(regular_area(20, 36) - regular_area(5, 12), rel=1e-9)


def test_a_hole_goes_to_the_part_that_holds_it():
    """Of two halves the eastern one holds the hole."""
    cut = cut_rings([cap(0, 180, 20, 36), cap(0, 172, 3, 12, clockwise=True)], may_fill=True)
    assert {(len(polygon), bool(polygon[0][:, 0].max() > 0)) for polygon in cut} == {(2, True), (1, False)}


def test_a_speck_is_never_the_globe():
    """A polygon that rounding turns to nothing does not become the whole map."""
    assert cut_rings([cap(0, 0, 1e-12, 8)], may_fill=False) == []


def test_lines():
    """A line is cut at the date line and led over the pole along two meridians."""
    (east, west) = cut_line(np.array([[179.0, 0.0], [-179.0, 0.0]]))
    assert (east.tolist(), west.tolist()) == ([[179, 0], [180, 0]], [[-180, 0], [-179, 0]])
    (over,) = cut_line(np.array([[-30.0, 80.0], [100.0, 90.0], [20.0, 85.0]]))
    assert over.tolist() == [[-30, 80], [-30, 90], [20, 90], [20, 85]]
    (straight,) = cut_line(np.array([[-90.0, 80.0], [90.0, 80.0]]))
    assert straight.tolist() == [[-90, 80], [-90, 90], [90, 90], [90, 80]]


@pytest.mark.parametrize("radius", [3, 40, 89, 91, 140])
def test_six_views_show_everything_once(radius):
    """A polygon's parts in the six views of a cube have its area together."""
    polygon = polygon_of(cap(33, -71, radius, 60), cap(33, -71, 0.5 * radius, 20, clockwise=True))
    total = 0.0
    for view in cube():
        for rings in view.clip(polygon):
            back = [np.degrees(_lat_lon(view.sphere(ring))) for ring in rings]
            total += area_of([back])
    assert total == pytest.approx(polygon.area_sr(), rel=1e-9)


def _lat_lon(vectors):
    x, y, z = vectors.T
    return np.stack([np.arctan2(y, x), np.arctan2(z, np.hypot(x, y))], axis=-1)


def test_a_view_and_back():
    """A view holds what it was made of, and gives places back to 1e-9 degrees; too large has none."""
    polygon = polygon_of(cap(60, 170, 40, 30))
    view = View.of(polygon)
    (rings,) = view.clip(polygon)
    assert len(rings[0]) == 31
    there = polygon.rings[0].vectors()
    assert np.abs(view.sphere(view.plane(there)) - there).max() < math.radians(1e-9)
    assert View.of(polygon_of(cap(60, 170, 70, 30))) is None


def test_crossings():
    """Two diagonals of a square about a point meet in it; others do not meet."""
    a, b = unit_vectors([10.0, 10.0, 10.0], [-10.0, -10.0, -10.0]), unit_vectors([-10.0] * 3, [10.0] * 3)
    c, d = (
        unit_vectors([-10.0, 20.0, 10.0], [-10.0, 30.0, 170.0]),
        unit_vectors([10.0, 30.0, -10.0], [10.0, 40.0, -170.0]),
    )
    parted, place = crossings(a, b, c, d)
    assert parted.tolist() == [True, False, False]
    assert np.abs(place[0] - [1, 0, 0]).max() < 1e-15
    assert np.isnan(place[1:]).all()
    near = set(zip(*(n.tolist() for n in near_pairs(a[:1], b[:1], c, d)), strict=True))
    assert (0, 0) in near
    assert (0, 2) not in near


def test_along_arcs():
    """Fractions of an arc are fractions of its angle."""
    place = along_arcs(unit_vectors([0.0], [0.0]), unit_vectors([0.0], [90.0]), np.array([1 / 3]))
    assert np.abs(place - unit_vectors([0.0], [30.0])).max() < 1e-15
