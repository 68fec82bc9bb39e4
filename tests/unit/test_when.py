"""Questions about time, against closed forms on single stages and a fine search on chains."""

import numpy as np
import pytest

from restore.errors import InputError, OutsideHistoryError
from restore.geometry.sphere import angular_distance, lat_lon, unit_vectors
from restore.history.circuit import Circuit
from restore.history.rows import Row
from restore.history.store import History
from restore.motion.separation import Site
from restore.motion.when import crosses_latitude, near_lines, near_point, near_site

R = 6371.0088


def spinning(covariance=None):
    """Plate A turns about 0N 90E by 1 degree per Myr back in time: along the meridian of 0E."""
    rows = [Row("A", "F", 0.0, 0, 0, 0.0), Row("A", "F", 60.0, 0.0, 90.0, 60.0, covariance)]
    return Circuit(History.from_rows(rows), "F")


def place_at(circuit, site, age):
    return circuit.at(site.plate, age).rotations.apply(unit_vectors(site.lat_deg, site.lon_deg))


def test_a_latitude_is_crossed_at_the_age_that_the_angle_says():
    """A site 20 degrees from a latitude along the meridian is there 20 Myr ago."""
    site = Site(30.0, 0.0, "A")
    south = lat_lon(place_at(spinning(), site, 1.0))[0] < 30.0
    wanted = 10.0 if south else 50.0
    (event,) = crosses_latitude(spinning(), site, wanted, 0.0, 60.0)
    assert event.age_ma == pytest.approx(20.0, abs=1e-9)
    assert event.what == ("goes north" if south else "goes south")
    assert event.lat_deg == pytest.approx(wanted, abs=1e-8)
    assert np.isnan(event.distance_km)


def test_the_sigma_of_a_crossing_is_the_error_over_the_speed():
    """A row of 5 km at 60 Ma: a third of the stage has a third of it; 111.195 km per Myr."""
    circuit = spinning(np.eye(3) * (5.0 / R) ** 2)
    (event,) = crosses_latitude(circuit, Site(30.0, 0.0, "A"), 10.0, 0.0, 60.0) or crosses_latitude(
        circuit, Site(30.0, 0.0, "A"), 50.0, 0.0, 60.0
    )
    # 1-sigma northward: u about the stage axis, so f * 5 km exactly
    assert event.age_sigma_myr == pytest.approx(5.0 / 3.0 / (np.deg2rad(1.0) * R), rel=1e-6)


def test_both_crossings_of_a_passage_over_the_top_are_found():
    """A site that climbs over its highest latitude crosses a little lower one twice, grazing or not."""
    rows = [Row("A", "F", 0.0, 0, 0, 0.0), Row("A", "F", 120.0, 60.0, 0.0, 120.0)]
    circuit = Circuit(History.from_rows(rows), "F")
    site = Site(0.0, 100.0, "A")
    ages = np.linspace(0.0, 120.0, 200_001)
    turned = circuit.rotations("A", ages).rotations.apply(unit_vectors(0.0, 100.0))
    lat = lat_lon(turned)[0]
    top = int(np.argmax(lat))
    assert 0 < top < len(ages) - 1
    for below in (5.0, 0.1, 1e-4):
        level = float(lat[top]) - below
        events = crosses_latitude(circuit, site, level, 0.0, 120.0)
        signs = np.flatnonzero(np.diff(np.sign(lat - level)))
        assert len(events) == len(signs) == 2
        np.testing.assert_allclose([e.age_ma for e in events], ages[signs], atol=120.0 / 200_000 * 1.01)
        assert {e.what for e in events} == {"goes north", "goes south"}
    assert crosses_latitude(circuit, site, float(lat[top]) + 0.1, 0.0, 120.0) == []


def test_a_fixed_point_is_approached_and_left():
    """Along a great circle through the point the distance is the angle; nearest is zero."""
    circuit, site = spinning(), Site(30.0, 0.0, "A")
    target = lat_lon(place_at(circuit, site, 25.0))
    point = (float(target[0]), float(target[1]))
    (nearest,) = [e for e in near_point(circuit, site, point, 0.0, 60.0) if e.distance_km < 1.0]
    assert nearest.age_ma == pytest.approx(25.0, abs=1e-4)
    events = near_point(circuit, site, point, 0.0, 60.0, within_km=np.deg2rad(5.0) * R)
    assert [e.age_ma for e in events] == pytest.approx([20.0, 30.0], abs=1e-8)
    assert [e.what for e in events] == ["goes beyond", "comes within"]


def test_two_moving_sites_meet_when_a_fine_search_says():
    """Distances of sites on two plates against 200 000 ages."""
    rows = []
    for plate, lat, lon, rate in (("A", 50.0, 20.0, 0.9), ("B", -40.0, 100.0, 0.7)):
        rows.append(Row(plate, "F", 0.0, 0, 0, 0.0))
        rows += [Row(plate, "F", t, lat + t / 5.0, lon, rate * t) for t in (15.0, 40.0, 80.0)]
    circuit = Circuit(History.from_rows(rows), "F")
    one, other = Site(0.0, 10.0, "A"), Site(5.0, 30.0, "B")
    ages = np.linspace(0.0, 80.0, 200_001)
    places = [
        circuit.rotations(s.plate, ages).rotations.apply(unit_vectors(s.lat_deg, s.lon_deg))
        for s in (one, other)
    ]
    distance = angular_distance(*places) * R
    limit = float(0.5 * (distance.min() + distance.max()))
    expected = ages[np.flatnonzero(np.diff(np.sign(distance - limit)))]
    events = near_site(circuit, one, other, 0.0, 80.0, within_km=limit)
    assert len(expected) >= 1
    np.testing.assert_allclose([e.age_ma for e in events], expected, atol=80.0 / 200_000 * 1.01)
    nearest = min(near_site(circuit, one, other, 0.0, 80.0), key=lambda e: e.distance_km)
    assert nearest.distance_km == pytest.approx(distance.min(), abs=1e-3)


def test_how_near_is_given_with_its_error():
    """Abeam of a fixed point the distance has the error across the path: 5 km rows, half way 2.5 km."""
    circuit = spinning(np.eye(3) * (5.0 / R) ** 2)
    site = Site(30.0, 0.0, "A")
    abeam = lat_lon(place_at(circuit, site, 30.0))
    # the path runs along the meridian of 0E: a point due east of it is nearest abeam
    point = (float(abeam[0]), 5.0)
    nearest = min(near_point(circuit, site, point, 0.0, 60.0), key=lambda e: e.distance_km)
    assert np.isnan(nearest.age_sigma_myr)
    # across the path a row's small rotation acts with sin(15)/sin(30) of itself at half of 60 degrees
    across = 5.0 * np.sin(np.deg2rad(15.0)) / np.sin(np.deg2rad(30.0))
    assert nearest.distance_sigma_km == pytest.approx(across, rel=0.02)


def test_a_line_carried_by_its_plate():
    """A line on the frame itself is met when the site's path crosses it."""
    circuit, site = spinning(), Site(30.0, 0.0, "A")
    target = lat_lon(place_at(circuit, site, 25.0))
    line = (np.array([float(target[0])] * 2), np.array([float(target[1]) - 0.01, float(target[1]) + 0.01]))
    events = near_lines(circuit, site, [line], "F", 0.0, 60.0)
    best = min(events, key=lambda e: e.distance_km)
    assert best.age_ma == pytest.approx(25.0, abs=1e-3)
    assert best.distance_km < 0.1


def test_what_cannot_be_asked():
    """Ages the wrong way, a latitude off the globe, a distance of nothing, ages beyond the history."""
    circuit, site = spinning(), Site(30.0, 0.0, "A")
    with pytest.raises(InputError, match="the first must be the younger one"):
        crosses_latitude(circuit, site, 10.0, 60.0, 0.0)
    with pytest.raises(InputError, match=r"latitude 95: must lie in -90\.\.90"):
        crosses_latitude(circuit, site, 95.0, 0.0, 60.0)
    with pytest.raises(InputError, match="within 0 km: must be above 0"):
        near_point(circuit, site, (0.0, 0.0), 0.0, 60.0, within_km=0.0)
    with pytest.raises(OutsideHistoryError, match="outside the history"):
        crosses_latitude(circuit, site, 10.0, 0.0, 61.0)
