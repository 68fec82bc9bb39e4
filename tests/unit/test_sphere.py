"""Points on the sphere in detail: poles, date line, NaN, shapes, ranges, known distances."""

import math

import numpy as np
import pytest
from strategies import R_M, assert_within, vector_of

from restore.geometry import sphere

HALF_GLOBE_KM = 20_015.114
"""pi times 6371.0088 km, typed from a pocket calculation."""


@pytest.mark.parametrize(
    ("lat", "lon", "vector"),
    [
        (0.0, 0.0, (1, 0, 0)),
        (0.0, 90.0, (0, 1, 0)),
        (90.0, 0.0, (0, 0, 1)),
        (-90.0, 123.0, (0, 0, -1)),
        (0.0, 180.0, (-1, 0, 0)),
        (0.0, -180.0, (-1, 0, 0)),
        (0.0, -90.0, (0, -1, 0)),
    ],
)
def test_axes(lat, lon, vector):
    """x points to 0N 0E, y to 0N 90E, z to the north pole, to 1e-9 m."""
    assert_within((sphere.unit_vectors(lat, lon) - vector) * R_M, 1e-9)


@pytest.mark.parametrize(
    ("asked", "written"),
    [(180.0, -180.0), (-180.0, -180.0), (540.0, -180.0), (181.0, -179.0), (-181.0, 179.0)],
)
def test_the_date_line_is_minus_180(asked, written):
    """Longitudes of the date line are written -180, beyond it on the other side."""
    assert sphere.wrap_longitude(asked) == written
    _, lon = sphere.lat_lon(sphere.unit_vectors(10.0, asked))
    assert_within(math.radians(math.remainder(float(lon) - written, 360.0)) * R_M, 1e-8)


def test_a_hair_below_the_date_line_stays_there():
    """The largest longitude below 180 and the smallest above -180 keep their bits."""
    for lon in (np.nextafter(180.0, 0.0), np.nextafter(-180.0, 0.0)):
        assert sphere.wrap_longitude(lon) == lon
    assert sphere.wrap_longitude(np.nextafter(-180.0, -np.inf)) < 180.0


@pytest.mark.parametrize("z", [1.0, -1.0])
@pytest.mark.parametrize("x", [0.0, -0.0])
@pytest.mark.parametrize("y", [0.0, -0.0])
def test_the_longitude_of_a_pole_is_zero(x, y, z):
    """At an exact pole the longitude is 0, whatever the signs of the zeros are."""
    lat, lon = sphere.lat_lon([x, y, z])
    assert float(lat) == math.copysign(90.0, z)
    assert float(lon) == 0.0


def test_latitude_near_the_pole_keeps_its_digits():
    """A point 1 mm from the pole is 1 mm from it, to 2e-9 m, by its own latitude."""
    angle = 1e-3 / R_M
    lat, lon = sphere.lat_lon([math.sin(angle), 0.0, math.cos(angle)])
    assert_within((math.radians(90.0 - float(lat)) - angle) * R_M, 2e-9)
    assert lon == 0.0


def test_vectors_of_any_length_have_a_place():
    """Latitude and longitude do not depend on the length, from 1e-150 to 1e150."""
    for size in (1e-150, 1e-8, 3.0, 1e150):
        lat, lon = sphere.lat_lon(vector_of(12.5, -77.25) * size)
        assert_within([float(lat) - 12.5, float(lon) + 77.25], 1e-13)


def test_nothing_has_no_place():
    """The zero vector and NaN give NaN for both coordinates and touch no neighbour."""
    lat, lon = sphere.lat_lon([[0, 0, 0], [np.nan, 0, 1], [0, 0, 2.0]])
    assert np.isnan(lat).tolist() == [True, True, False]
    assert np.isnan(lon).tolist() == [True, True, False]
    assert lat[2] == 90.0


def test_nan_coordinates_are_carried_through():
    """NaN in latitude or longitude makes a NaN vector and spares its neighbours."""
    vectors = sphere.unit_vectors([np.nan, 10.0, 10.0], [0.0, np.nan, 20.0])
    assert np.isnan(vectors).any(axis=-1).tolist() == [True, True, False]
    assert np.isnan(sphere.wrap_longitude(np.nan))
    assert np.isnan(sphere.angular_distance(vectors[0], vectors[2]))
    assert np.isnan(sphere.azimuth_deg(vectors[2], vectors[0]))
    assert np.isnan(sphere.destination(vectors[0], 10.0, 0.1)).all()


@pytest.mark.parametrize("shape", [(), (3,), (2, 3), (0,), (2, 0, 3)])
def test_shapes(shape):
    """Functions keep the shape of what they are given and put components last."""
    lat, lon = np.full(shape, 10.0), np.full(shape, 20.0)
    vectors = sphere.unit_vectors(lat, lon)
    assert vectors.shape == (*shape, 3)
    assert [c.shape for c in sphere.lat_lon(vectors)] == [shape] * 2
    assert [c.shape for c in sphere.colatitude_east_longitude(vectors)] == [shape] * 2
    assert [c.shape for c in sphere.tangent_frame(vectors)] == [(*shape, 3)] * 2
    assert sphere.angular_distance(vectors, vectors).shape == shape
    assert sphere.azimuth_deg(vectors, vectors).shape == shape
    assert sphere.destination(vectors, lon, lat * 0.01).shape == (*shape, 3)
    assert sphere.cross(vectors, vectors).shape == (*shape, 3)
    assert sphere.unit_vectors_from_colatitude(lat, lon).shape == (*shape, 3)


def test_broadcasting():
    """One latitude with many longitudes, one start with many azimuths, each against each."""
    assert sphere.unit_vectors(10.0, np.zeros((4, 2))).shape == (4, 2, 3)
    assert sphere.destination([1.0, 0.0, 0.0], np.zeros(5), 0.1).shape == (5, 3)
    a, b = np.tile([1.0, 0, 0], (4, 1, 1)), np.tile([0, 1.0, 0], (1, 3, 1))
    assert sphere.angular_distance(a, b).shape == (4, 3)
    assert sphere.azimuth_deg(a, b).shape == (4, 3)


@pytest.mark.parametrize(
    ("one", "other", "km"),
    [
        ((0, 0), (0, 180), HALF_GLOBE_KM),
        ((90, 0), (-90, 77), HALF_GLOBE_KM),
        ((0, 0), (0, 90), HALF_GLOBE_KM / 2),
        ((45, 10), (45, 10), 0.0),
        ((0, 179.5), (0, -179.5), HALF_GLOBE_KM / 180),
        ((89.5, 0), (89.5, 180), HALF_GLOBE_KM / 180),
    ],
)
def test_known_distances(one, other, km):
    """Half the globe, a quarter, nothing, and one degree across the date line and over the pole."""
    found = sphere.distance_km(sphere.unit_vectors(*one), sphere.unit_vectors(*other))
    # the constant is typed to a metre
    assert_within((found - km) * 1e3, 1.0)


def test_distance_on_another_sphere():
    """A stated radius scales the distance: a quarter globe of radius 1000 km is 1570.796 km."""
    found = sphere.distance_km([1.0, 0, 0], [0, 0, 1.0], radius_km=1000.0)
    assert_within(found - 1570.796327, 1e-6)


def test_vectors_need_not_have_unit_length_for_angles():
    """The angle between (3, 0, 0) and (0, 0.1, 0) is a right angle."""
    assert_within(sphere.angular_distance([3.0, 0, 0], [0, 0.1, 0]) - math.pi / 2, 1e-16)


@pytest.mark.parametrize(
    ("start", "end", "azimuth"),
    [
        ((0, 0), (10, 0), 0.0),
        ((0, 0), (0, 10), 90.0),
        ((0, 0), (-10, 0), 180.0),
        ((0, 0), (0, -10), 270.0),
        ((0, 175), (0, -175), 90.0),
        ((10, 20), (10, 20), 0.0),
        ((45, 30), (90, 0), 0.0),
        ((-45, 30), (-90, 0), 180.0),
    ],
)
def test_known_azimuths(start, end, azimuth):
    """North 0, east 90, south 180, west 270, also across the date line; 0 for no direction."""
    found = float(sphere.azimuth_deg(sphere.unit_vectors(*start), sphere.unit_vectors(*end)))
    assert 0.0 <= found < 360.0
    assert_within(math.remainder(found - azimuth, 360.0), 1e-13)


def test_the_azimuth_between_antipodes_is_zero():
    """Between exact antipodes there is no direction, and the azimuth says 0, never a rounding."""
    random = np.random.default_rng(81)
    starts = sphere.unit_vectors(random.uniform(-90, 90, 500), random.uniform(-180, 180, 500))
    assert not sphere.azimuth_deg(starts, -starts).any()


def test_the_tangent_frame_at_the_poles():
    """At a pole the longitude counts as 0: east is y; north is -x in the north, x in the south."""
    for z, north_x in ((1.0, -1.0), (-1.0, 1.0)):
        east, north = sphere.tangent_frame([0.0, 0.0, z])
        assert_within(east - [0.0, 1.0, 0.0], 0.0)
        assert_within(north - [north_x, 0.0, 0.0], 0.0)


@pytest.mark.parametrize(
    ("east", "north", "direction"),
    [(0, 1, 0), (1, 0, 90), (0, -1, 180), (-1, 0, 270), (0, 0, 0), (-1e-20, 1, 0), (-1, 1, 315)],
)
def test_compass(east, north, direction):
    """Directions run clockwise from north in [0, 360): a hair west of north is written 0."""
    found = sphere.compass_deg(float(east), float(north))
    assert_within(found - direction, 1e-13)


def test_colatitude_has_its_own_ranges():
    """Colatitude 0 at the north pole, 180 at the south; east longitude in [0, 360)."""
    colat, east = sphere.colatitude_east_longitude(
        [[0, 0, 1.0], [0, 0, -1.0], [0, -1.0, 0], [-1.0, -1e-20, 0], [1.0, -1e-20, 0]]
    )
    assert_within(colat - [0, 180, 90, 90, 90], 1e-13)
    assert_within(east - [0, 0, 270, 180, 0], 1e-13)


def test_products():
    """Scalar and vector products against numpy's, and a length where squares would underflow."""
    random = np.random.default_rng(82)
    a, b = random.normal(size=(2, 100, 3))
    assert_within(sphere.dot(a, b) - np.einsum("ni,ni->n", a, b), 1e-14)
    assert_within(sphere.cross(a, b) - np.cross(a, b), 1e-14)
    assert_within(sphere.length(np.array([3e-200, 4e-200, 0.0])) / 5e-200 - 1.0, 1e-15)
