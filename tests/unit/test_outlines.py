"""Outlines: points given to plates, against an independent library, by rank, by nearness, with ages."""

import json
import math

import numpy as np
import pytest
from benchmarks.outlines import scattered, tiling

from restore.errors import InputError
from restore.geometry.polygons import Polygon, Ring, SortedPoints
from restore.geometry.sphere import lat_lon, unit_vectors
from restore.outlines import Outline, Outlines

KM = 6371.0088


def box(west, south, east, north):
    return [[west, south], [east, south], [east, north], [west, north], [west, south]]


def feature(plate, *rings, **properties):
    return {
        "type": "Feature",
        "properties": {"plate": plate, **properties},
        "geometry": {"type": "Polygon", "coordinates": list(rings)},
    }


def outlines_of(tmp_path, *features, **options):
    path = tmp_path / "outlines.geojson"
    path.write_text(json.dumps({"type": "FeatureCollection", "features": features}), encoding="utf-8")
    return Outlines.read(path, **options)


def plate_at(outlines, *places, **options):
    lat, lon = np.array(places, dtype=float).T
    names = [*(outline.plate for outline in outlines.outlines), None]
    return [names[number] for number in outlines.plate_at(lat, lon, **options).outline]


# --- against spherely --------------------------------------------------------------------------------


def star(rng, lat, lon, least, most, corners):
    """A star-shaped, mostly concave ring of (lon, lat) about a place, anticlockwise; radii in degrees."""
    centre = unit_vectors(lat, lon)
    east = np.cross([0.0, 0.0, 1.0] if abs(lat) < 80 else [0.0, 1.0, 0.0], centre)
    east /= np.linalg.norm(east)
    north = np.cross(centre, east)
    turn = 2 * np.pi * (np.arange(corners) + rng.uniform(0.1, 0.9, corners)) / corners
    radius = np.deg2rad(rng.uniform(least, most, corners))[:, None]
    heading = np.cos(turn)[:, None] * east + np.sin(turn)[:, None] * north
    lats, lons = lat_lon(np.cos(radius) * centre + np.sin(radius) * heading)
    return np.stack([lons, lats], axis=1)


def fifty_plates(seed=11):
    """Plates as lists of polygons, each a list of rings of (lon, lat): the outer one, then holes."""
    rng = np.random.default_rng(seed)
    plates = [
        [[star(rng, 87, 40, 15, 40, 90)]],  # over the north pole
        [[star(rng, -84, 0, 10, 30, 90)]],  # over the south pole
        [[star(rng, 5, 179, 10, 35, 90)]],  # across the date line
        [[star(rng, -20, 60, 30, 60, 90)[::-1]]],  # all but a star: larger than a hemisphere
        [[star(rng, 89, 0, 30, 60, 90), star(rng, 89, 0, 4, 25, 40)[::-1]]],  # a hole with the pole in it
    ]
    while len(plates) < 50:
        lat, lon = (float(v[0]) for v in scattered(1, int(rng.integers(1 << 30))))
        size = rng.uniform(4, 40)
        parts = [[star(rng, lat, lon, 0.4 * size, size, int(rng.integers(12, 120)))]]
        if len(plates) % 3 == 0:  # two holes, one beside the other
            parts[0].append(star(rng, lat, lon, 0.02 * size, 0.15 * size, 12)[::-1])
            beside = lat + 0.25 * size if lat < 0 else lat - 0.25 * size
            parts[0].append(star(rng, beside, lon, 0.01 * size, 0.05 * size, 9)[::-1])
        if len(plates) % 4 == 0:  # a second part on the other side of the globe
            parts.append([star(rng, -lat, lon + 180.0, 2, 20, 30)])
        plates.append(parts)
    return plates


def ours(plate):
    polygons = [Polygon.of(tuple(Ring.of(ring[:, 1], ring[:, 0]) for ring in part)) for part in plate]
    return Outline("one", tuple(polygons))


def theirs(spherely, plate):
    made = []
    for outer, *holes in plate:
        shell = [tuple(map(float, place)) for place in outer]
        inner = [[tuple(map(float, place)) for place in hole] for hole in holes]
        made.append(spherely.create_polygon(shell=shell, holes=inner or None, oriented=True))
    return made[0] if len(made) == 1 else spherely.create_multipolygon(made)


def wrong_points(count, seed):
    """How many (point, plate) answers differ from S2's, of all 50 plates."""
    spherely = pytest.importorskip("spherely", reason="spherely has no wheel for this machine")
    lat, lon = scattered(count, seed)
    points, places = SortedPoints(lat, lon), spherely.points(lon, lat)
    wrong, held = 0, []
    for plate in fifty_plates():
        one = theirs(spherely, plate)
        spherely.prepare(one)
        expected = np.asarray(spherely.contains(one, places))
        found = np.zeros(count, dtype=bool)
        for polygon in ours(plate).polygons:
            found |= points.inside(polygon)
        wrong += int((points.unsorted(found) != expected).sum())
        held.append(expected.mean())
    assert max(held) > 0.5, "one plate is larger than a hemisphere"
    assert min(held) > 0.0
    return wrong


def test_none_of_two_hundred_thousand_points_is_wrong():
    """Against S2 (spherely, oriented): no point is left out, however near to an edge it may lie."""
    assert wrong_points(200_000, 21) == 0


@pytest.mark.long
def test_none_of_a_million_points_is_wrong():
    """The same with a million points: 50 million answers, none left out."""
    assert wrong_points(1_000_000, 22) == 0


def test_areas_are_those_of_the_other_library():
    """Areas of all fifty plates against S2's."""
    spherely = pytest.importorskip("spherely", reason="spherely has no wheel for this machine")
    for plate in fifty_plates():
        expected = float(spherely.area(theirs(spherely, plate), radius=1.0))
        assert ours(plate).area_sr() == pytest.approx(expected, rel=1e-9)


# --- rank and order ----------------------------------------------------------------------------------


def test_overlaps_by_rank_then_by_order(tmp_path):
    """The lowest rank is taken, among equals the first in the file; how many more hold it is said."""
    found = outlines_of(
        tmp_path,
        feature("late", box(0, 0, 10, 10), rank=2),
        feature("first", box(5, 0, 15, 10), rank=1),
        feature("second", box(8, 0, 20, 10), rank=1),
        feature("third", box(9, 0, 12, 10), rank=1),
        feature("best", box(9, 4, 10, 6), rank=-3),
    )
    lon = np.array([2.0, 6.0, 8.5, 9.5, 9.5, 14.0, 17.0, 30.0])
    lat = np.array([5.0, 5.0, 5.0, 2.0, 5.0, 5.0, 5.0, 5.0])
    assigned = found.plate_at(lat, lon)
    assert assigned.outline.tolist() == [0, 1, 1, 1, 4, 1, 2, -1]
    assert assigned.overlaps.tolist() == [0, 0, 1, 2, 0, 1, 0, 0]


def test_no_rank_is_rank_0(tmp_path):
    """An outline without a rank stands before one of rank 1 and beside one of rank 0."""
    found = outlines_of(
        tmp_path,
        feature("one", box(0, 0, 10, 10), rank=1),
        feature("plain", box(0, 0, 10, 10)),
        feature("nought", box(0, 0, 10, 10), rank=0),
    )
    assigned = found.plate_at(np.array([5.0]), np.array([5.0]))
    assert (assigned.outline.tolist(), assigned.overlaps.tolist()) == ([1], [1])


def test_parts_of_one_outline_do_not_overlap_it(tmp_path):
    """Two parts of one plate that lie on one another are one outline."""
    two = feature("one", box(0, 0, 10, 10))
    two["geometry"] = {"type": "MultiPolygon", "coordinates": [[box(0, 0, 10, 10)], [box(5, 0, 15, 10)]]}
    assigned = outlines_of(tmp_path, two).plate_at(np.array([5.0, 5.0]), np.array([7.0, 12.0]))
    assert (assigned.outline.tolist(), assigned.overlaps.tolist()) == ([0, 0], [0, 0])


# --- the nearest within a distance -------------------------------------------------------------------


def brute_distance_km(vertices, place, pieces=4000):
    """Least distance to a closed line by thousands of places on each of its arcs."""
    least = math.inf
    for a, b in zip(vertices, np.roll(vertices, -1, axis=0), strict=True):
        w = math.atan2(np.linalg.norm(np.cross(a, b)), a @ b)
        share = np.linspace(0.0, 1.0, pieces + 1)[:, None]
        arc = (np.sin((1 - share) * w) * a + np.sin(share * w) * b) / math.sin(w)
        away = np.arctan2(np.linalg.norm(np.cross(arc, place), axis=1), arc @ place)
        least = min(least, float(away.min()))
    return least * KM


def test_nearest_outline_against_a_search_by_brute_force(tmp_path):
    """Places on no outline go to the one whose edge a dense search finds nearest, if near enough."""
    rings = {
        "a": box(0, 0, 20, 10), "b": box(170, -20, 190, 0), "c": box(60, 50, 100, 80), "d": box(-80, -70, -60, -40),
    }  # fmt: skip
    found = outlines_of(tmp_path, *(feature(name, ring) for name, ring in rings.items()))
    lat, lon = scattered(60, 5)
    assigned = found.plate_at(lat, lon, within_km=2500.0)
    inside = found.plate_at(lat, lon)
    for row, place in enumerate(unit_vectors(lat, lon)):
        away = []
        for ring in rings.values():
            corners = np.array(ring[:-1], dtype=float)
            away.append(brute_distance_km(unit_vectors(corners[:, 1], corners[:, 0]), place))
        if inside.outline[row] >= 0:
            assert (assigned.outline[row], assigned.distance_km[row]) == (inside.outline[row], 0.0)
        elif min(away) <= 2500.0:
            assert assigned.outline[row] == int(np.argmin(away))
            assert assigned.distance_km[row] == pytest.approx(min(away), abs=2e-3)
        else:
            assert assigned.outline[row] == -1
            assert np.isnan(assigned.distance_km[row])
    assert (assigned.outline >= 0).sum() > (inside.outline >= 0).sum() > 0
    assert (assigned.outline < 0).any()


def test_the_distance_is_to_the_edge_not_to_its_ends(tmp_path):
    """A place 1 degree off the middle of a long edge on the equator; beyond its end, off the corner."""
    found = outlines_of(tmp_path, feature("a", box(-40, -10, 40, 0)))
    away = found.plate_at(np.array([1.0, 0.0]), np.array([0.0, 41.0]), within_km=200.0).distance_km
    assert away == pytest.approx([math.radians(1.0) * KM] * 2, rel=1e-12)
    near = found.plate_at(np.array([1.0]), np.array([0.0]), within_km=111.19)
    assert near.outline.tolist() == [-1]


def test_a_hole_is_off_the_plate_and_its_edge_is_near(tmp_path):
    """A place in a hole is on no plate; its distance is that to the hole's edge."""
    hole = [[-5, -5], [-5, 5], [5, 5], [5, -5], [-5, -5]]
    found = outlines_of(tmp_path, feature("a", box(-20, -20, 20, 20), hole))
    assert plate_at(found, (0, 0), (10, 0)) == [None, "a"]
    taken = found.plate_at(np.array([0.0]), np.array([4.0]), within_km=150.0)
    # the hole's edge bulges nowhere on its meridian 5E
    expected = math.asin(math.sin(math.radians(1.0))) * KM
    assert taken.distance_km == pytest.approx([expected], rel=1e-9)


@pytest.mark.parametrize(("lat", "lon"), [(math.nan, 0.0), (0.0, math.nan), (0.0, math.inf), (91.0, 0.0)])
def test_what_is_no_place_is_on_no_plate(lat, lon):
    """NaN and what lies off the globe: -1, no distance, even where the nearest is asked for."""
    outlines, _ = tiling(12, 100, 1)
    for within_km in (0.0, 1e5):
        assigned = outlines.plate_at(np.array([lat, 5.0]), np.array([lon, 5.0]), within_km)
        assert assigned.outline[0] == -1
        assert np.isnan(assigned.distance_km[0])
        assert assigned.outline[1] >= 0


def test_order_of_points_and_company_do_not_matter():
    """Each point gets the same outline alone, among others, and in any order."""
    outlines, _ = tiling(30, 2000, 4)
    lat, lon = scattered(400, 6)
    together = outlines.plate_at(lat, lon).outline
    alone = [outlines.plate_at(lat[i : i + 1], lon[i : i + 1]).outline[0] for i in range(400)]
    turned = outlines.plate_at(lat[::-1], lon[::-1]).outline[::-1]
    assert together.tolist() == alone == turned.tolist()
    assert outlines.plate_at(lat[:0], lon[:0]).outline.tolist() == []


def test_many_and_few_points_are_held_against_edges_alike():
    """Long edges with many points and short ones with few go two ways that must agree."""
    outlines, _ = tiling(6, 60, 8)
    lat, lon = scattered(60_000, 9)
    whole = outlines.plate_at(lat, lon).outline
    parts = np.concatenate([outlines.plate_at(lat[i::40], lon[i::40]).outline for i in range(40)])
    order = np.concatenate([np.arange(60_000)[i::40] for i in range(40)])
    assert np.array_equal(whole[order], parts)


# --- what a file says --------------------------------------------------------------------------------


def test_lifetimes(tmp_path):
    """Ages between which a plate is there; from today and for ever if nothing is said."""
    found = outlines_of(
        tmp_path,
        feature("a", box(0, 0, 9, 9), oldest_ma=30, youngest_ma=2.5),
        feature("b", box(20, 0, 29, 9)),
    )
    young, old = found.lifetimes(np.array([0, 1, -1]))
    assert young.tolist() == [2.5, 0.0, 0.0]
    assert old.tolist() == [30.0, math.inf, math.inf]


def test_edges_great_circle_or_straight(tmp_path):
    """CASES.md: 60.05N 5E lies south of the great circle (60.0945N) and north of the straight line."""
    ring = feature("a", box(0, 50, 10, 60))
    arcs = outlines_of(tmp_path, ring)
    straight = outlines_of(tmp_path, ring, edges="straight")
    assert (arcs.edges, straight.edges) == ("great-circle", "straight")
    places = [(60.0944, 5), (60.0946, 5), (60.05, 5), (59.9998, 5), (60.0003, 5)]
    assert plate_at(arcs, *places) == ["a", None, "a", "a", "a"]
    # densified to within 10 m, which is 0.0001 degrees
    assert plate_at(straight, *places) == [None, None, None, "a", None]
    with pytest.raises(InputError, match=r"edges = 'rhumb': must be one of great-circle, straight"):
        outlines_of(tmp_path, ring, edges="rhumb")


def test_straight_tilings_share_their_edges(tmp_path):
    """A tiling of boxes with straight edges, some read east to west: no gap, no overlap, the whole sphere."""
    features = []
    for west in range(-180, 180, 60):
        for south in (-90, -30, 30):
            ring = box(west, south, west + 60, south + 60)
            turn = (west // 60 + south // 30) % 4
            ring = ring[turn:-1] + ring[:turn] + [ring[turn]]
            features.append(feature(f"{west} {south}", ring))
    found = outlines_of(tmp_path, *features, edges="straight")
    lat, lon = scattered(20_000, 2)
    lat[:2000], lon[2000:4000] = 30.0, 60.0
    assigned = found.plate_at(lat, lon)
    west, south = np.floor(lon / 60) * 60, np.floor((lat - 30) / 60) * 60 + 30
    expected = [f"{int(w)} {int(s)}" for w, s in zip(west, south, strict=True)]
    near = np.abs(np.abs(lat) - 30.0) < 1e-4
    names = [found.outlines[number].plate for number in assigned.outline]
    assert near.sum() == 2000
    assert [n for n, skip in zip(names, near, strict=True) if not skip] == [
        e for e, skip in zip(expected, near, strict=True) if not skip
    ]
    assert not assigned.overlaps.any()
    assert (assigned.outline >= 0).all()
    assert sum(o.area_sr() for o in found.outlines) == pytest.approx(4 * math.pi, rel=1e-12)


def test_the_latitude_kind_binds_outlines(tmp_path):
    """Geodetic outlines hold geodetic points; an edge between two parallels bulges a little otherwise."""
    ring = feature("a", box(0, 40, 60, 50))
    given = outlines_of(tmp_path, ring)
    geodetic = outlines_of(tmp_path, ring, latitudes="geodetic")
    # tan of geocentric = (1 - e2) tan of geodetic (GRS80), and along the great circle tan / cos(30)
    factor = 1 - 0.00669438002290
    bulge = math.degrees(math.atan(math.tan(math.radians(50)) / math.cos(math.radians(30))))
    middle = math.degrees(
        math.atan(
            math.tan(math.atan(factor * math.tan(math.radians(50)))) / math.cos(math.radians(30)) / factor
        )
    )
    assert middle == pytest.approx(
        bulge, abs=1e-12
    )  # great circles through two points of one latitude agree
    assert plate_at(geodetic, (49.999, 0.01), (50.01, 0.001), (bulge - 1e-6, 30), (bulge + 1e-6, 30)) == [
        *("a", None, "a", None)
    ]  # fmt: skip
    # a slanting edge parts the two: at its middle they differ by hundreds of metres
    slanting = feature("b", [[0, 0], [80, 60], [0, 60], [0, 0]])
    spherical = np.sum(unit_vectors(np.array([0.0, 60.0]), np.array([0.0, 80.0])), axis=0)
    geocentric = math.degrees(math.atan(factor * math.tan(math.radians(60))))
    turned = np.sum(unit_vectors(np.array([0.0, geocentric]), np.array([0.0, 80.0])), axis=0)
    plain = float(np.ravel(lat_lon(spherical)[0])[0]), float(np.ravel(lat_lon(spherical)[1])[0])
    lat, lon = (float(np.ravel(v)[0]) for v in lat_lon(turned))
    other = math.degrees(math.atan(math.tan(math.radians(lat)) / factor)), lon
    as_given = outlines_of(tmp_path, slanting)
    bound = outlines_of(tmp_path, slanting, latitudes="geodetic")
    for outlines, (lat, lon) in ((as_given, plain), (bound, other)):
        assert plate_at(outlines, (lat + 1e-6, lon), (lat - 1e-6, lon)) == ["b", None]
    assert given.latitudes.kind == "as-given"
    assert geodetic.latitudes.kind == "geodetic"
    with pytest.raises(ValueError, match="latitudes = 'geographic': must be one of as-given, geodetic"):
        outlines_of(tmp_path, ring, latitudes="geographic")


def test_nearness_does_not_depend_on_how_far_is_looked():
    """What is found within 400 km is found within 20 000 km too, by the same distance, and no more than that."""
    whole, _ = tiling(24, 400, 5)
    some = Outlines(whole.outlines[::3])
    lat, lon = scattered(2000, 12)
    near, far = some.plate_at(lat, lon, 400.0), some.plate_at(lat, lon, 20_037.0)
    assert (far.outline >= 0).all()
    within = far.distance_km <= 400.0
    assert np.array_equal(near.outline[within], far.outline[within])
    assert near.distance_km[within].tolist() == far.distance_km[within].tolist()
    assert (near.outline[~within] == -1).all()
    assert 300 < within.sum() < 1900
