"""Laws of points on the sphere: round trips of coordinates, distances, directions, latitudes."""

import math

import numpy as np
from hypothesis import assume, given
from hypothesis import strategies as st
from strategies import (
    R_M,
    assert_within,
    latitudes,
    longitudes,
    metres_apart,
    quaternions,
    unit_vectors,
    vector_of,
)

from restore.geometry import latitudes as kinds
from restore.geometry import so3, sphere

# float64 degrees near 180 have steps of 2.8e-14 deg = 3e-9 m, unit vectors of 1.1e-16 = 7e-10 m
ROUND_TRIP_M = 1e-8
MM_RAD = 1e-3 / R_M

any_longitudes = st.one_of(longitudes(), st.floats(-1e4, 1e4), st.sampled_from([180.0, 540.0]))
azimuths = st.one_of(st.sampled_from([0.0, 90.0, 180.0, 270.0]), st.floats(0.0, 359.999999))
# from a millimetre to a millimetre before the antipode, evenly in the logarithm from either end
arcs = st.one_of(
    st.floats(math.log10(MM_RAD), 0.0).map(lambda x: 10.0**x),
    st.floats(math.log10(MM_RAD), 0.0).map(lambda x: math.pi - 10.0**x),
)


@given(latitudes(), longitudes())
def test_latitude_and_longitude_read_back(lat, lon):
    """A place comes back from its unit vector within 1e-8 m, as do its latitude and longitude."""
    back_lat, back_lon = sphere.lat_lon(sphere.unit_vectors(lat, lon))
    assert_within(metres_apart(vector_of(back_lat, back_lon), vector_of(lat, lon)), ROUND_TRIP_M)
    assert_within(math.radians(float(back_lat) - lat) * R_M, ROUND_TRIP_M)
    along = math.radians(math.remainder(float(back_lon) - lon, 360.0))
    assert_within(along * math.cos(math.radians(lat)) * R_M, ROUND_TRIP_M)


@given(latitudes(), any_longitudes)
def test_longitudes_come_out_in_one_range(lat, lon):
    """Whatever goes in, longitudes come out in [-180, 180): the date line is -180."""
    _, written = sphere.lat_lon(sphere.unit_vectors(lat, lon))
    wrapped = sphere.wrap_longitude(lon)
    assert -180.0 <= written < 180.0
    assert -180.0 <= wrapped < 180.0
    off = math.remainder(float(wrapped) - lon, 360.0)
    # a longitude of 1e4 deg has steps of 2e-12 deg
    assert_within(off, 4e-12)


@given(longitudes())
def test_longitudes_in_range_keep_every_bit(lon):
    """Wrapping does not touch a longitude that is in range already."""
    assert np.array_equal(sphere.wrap_longitude(lon), lon)
    assert np.signbit(sphere.wrap_longitude(lon)) == np.signbit(lon)


@given(latitudes(), longitudes())
def test_colatitude_and_east_longitude_read_back(lat, lon):
    """Colatitude and east longitude describe the same place, in their own ranges."""
    there = vector_of(lat, lon)
    colat, east = sphere.colatitude_east_longitude(there)
    assert 0.0 <= colat <= 180.0
    assert 0.0 <= east < 360.0
    assert_within(metres_apart(sphere.unit_vectors_from_colatitude(colat, east), there), ROUND_TRIP_M)
    assert_within(math.radians(90.0 - float(colat) - lat) * R_M, ROUND_TRIP_M)


@given(unit_vectors(), azimuths, arcs)
def test_distance_and_azimuth_undo_destination(start, azimuth, angle):
    """From 1 mm to 1 mm before the antipode: distance within 5e-9 m, sideways within 1e-8 m.

    Where the azimuth is asked between points a millimetre apart it is only as good as the points,
    which is why it is measured as the distance it leads astray.
    """
    end = sphere.destination(start, azimuth, angle)
    assert_within(np.linalg.norm(end) - 1.0, 1e-15)
    assert_within((sphere.angular_distance(start, end) - angle) * R_M, 5e-9)
    off = math.radians(math.remainder(float(sphere.azimuth_deg(start, end)) - azimuth, 360.0))
    assert_within(off * math.sin(angle) * R_M, 1e-8)


@given(unit_vectors(), azimuths, arcs)
def test_destination_undoes_distance_and_azimuth(start, azimuth, angle):
    """Going the measured distance along the measured azimuth arrives within 1e-8 m."""
    end = sphere.destination(start, azimuth, angle)
    found = sphere.destination(start, sphere.azimuth_deg(start, end), sphere.angular_distance(start, end))
    assert_within(metres_apart(found, end), 1e-8)


@given(unit_vectors(), unit_vectors())
def test_distance_is_symmetric_and_complements_the_antipode(a, b):
    """d(a, b) = d(b, a) to the last bit; with the antipode of b it adds up to half the globe."""
    there, back = sphere.angular_distance(a, b), sphere.angular_distance(b, a)
    assert there == back
    assert_within((there + sphere.angular_distance(a, -b) - math.pi) * R_M, 5e-9)
    assert_within(sphere.angular_distance(a, a), 0.0)
    assert_within((sphere.distance_km(a, b) * 1e3) - there * R_M, 5e-9)


@given(unit_vectors(), unit_vectors(), unit_vectors())
def test_no_way_round_is_shorter(a, b, c):
    """The triangle inequality, to rounding."""
    direct = sphere.angular_distance(a, c)
    assert (direct - sphere.angular_distance(a, b) - sphere.angular_distance(b, c)) * R_M < 5e-9


@given(unit_vectors(), unit_vectors(), quaternions())
def test_distance_does_not_depend_on_where(a, b, q):
    """Two points carried by one rotation keep their distance within 1e-8 m."""
    carried = sphere.angular_distance(so3.rotate(q, a), so3.rotate(q, b))
    assert_within((carried - sphere.angular_distance(a, b)) * R_M, 1e-8)


@given(unit_vectors())
def test_east_north_and_up_are_right_handed(x):
    """The tangent frame is orthonormal, east x north = up, and north points to the pole."""
    east, north = sphere.tangent_frame(x)
    frame = np.stack([east, north, x])
    assert_within(frame @ frame.T - np.eye(3), 1e-15)
    assert_within(np.cross(east, north) - x, 1e-15)
    assert_within(east[2], 0.0)
    assert north[2] >= 0.0


@given(unit_vectors(), azimuths)
def test_an_azimuth_is_measured_clockwise_from_north(x, azimuth):
    """A short step along an azimuth goes sin(azimuth) east and cos(azimuth) north."""
    assume(abs(x[2]) < 0.999)
    angle = 1e-6
    lat, lon = math.radians(sphere.lat_lon(x)[0]), math.radians(sphere.lat_lon(x)[1])
    step = sphere.destination(x, azimuth, angle) - x
    east = np.array([-math.sin(lon), math.cos(lon), 0.0])
    north = np.array([-math.sin(lat) * math.cos(lon), -math.sin(lat) * math.sin(lon), math.cos(lat)])
    turn = math.radians(azimuth)
    assert_within((step @ east - angle * math.sin(turn)) * R_M, 1e-8)
    assert_within((step @ north - angle * math.cos(turn)) * R_M, 1e-8)


@given(st.floats(-1e3, 1e3), st.floats(-1e3, 1e3))
def test_compass_directions_are_in_one_range(east, north):
    """Directions lie in [0, 360): never 360, never minus zero."""
    direction = sphere.compass_deg(east, north)
    assert 0.0 <= direction < 360.0
    assert not np.signbit(direction)


@given(latitudes())
def test_geodetic_and_geocentric_latitudes_undo_each_other(lat):
    """Both round trips come back within 1e-8 m, and the poles and the equator stay fixed."""
    there = kinds.geocentric_from_geodetic(lat)
    assert_within(math.radians(float(kinds.geodetic_from_geocentric(there)) - lat) * R_M, ROUND_TRIP_M)
    other = kinds.geodetic_from_geocentric(lat)
    assert_within(math.radians(float(kinds.geocentric_from_geodetic(other)) - lat) * R_M, ROUND_TRIP_M)
    if lat in {0.0, 90.0, -90.0}:
        assert_within(math.radians(float(there) - lat) * R_M, 1e-9)


@given(latitudes())
def test_geocentric_latitudes_lie_nearer_the_equator(lat):
    """|geocentric| <= |geodetic|, by at most 692.724" (at 45 degrees; GRS80), and odd."""
    there = float(kinds.geocentric_from_geodetic(lat))
    assert abs(there) <= abs(lat) + 1e-14
    assert_within((there - lat) * 3600.0, 692.7245)
    assert kinds.geocentric_from_geodetic(-lat) == -there


@given(latitudes(), st.sampled_from(kinds.KINDS))
def test_a_stated_kind_is_undone_on_the_way_out(lat, kind):
    """Outward undoes inward; `as-given` keeps every bit."""
    stated = kinds.Latitudes(kind)
    back = float(stated.outward(stated.inward(lat)))
    assert_within(math.radians(back - lat) * R_M, 0.0 if kind == "as-given" else ROUND_TRIP_M)
