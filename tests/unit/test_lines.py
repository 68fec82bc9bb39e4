"""Lines and polygons restored: against scipy point by point, lengths and areas kept, cuts found again.

The oracles are scipy's Rotation fed with the rows of a small history, Girard's area of a regular
polygon, and a point-in-polygon that sums the angles under which a ring is seen.
"""

import json
import math
from itertools import pairwise
from pathlib import Path

import numpy as np
import pytest
from scipy.spatial.transform import Rotation

from restore.errors import InputError, UnknownPlateError
from restore.files.vectors import Feature
from restore.geometry.polygons import Ring
from restore.history.store import History
from restore.motion.lines import restore_lines
from restore.outlines import Outlines

DEMO = Path(__file__).parents[2] / "scenario_files"
HEAD = "plate,relative_to,age_ma,pole_lat_deg,pole_lon_deg,angle_deg"
ROWS = "alba,deep,0,,,0\nalba,deep,40,90,0,40\nbora,alba,0,,,0\nbora,alba,20,0,0,10\n"
AGES = (0.0, 3.0, 10.0, 20.0)


@pytest.fixture
def history(tmp_path):
    (tmp_path / "history.csv").write_text(f"{HEAD}\n{ROWS}", encoding="utf-8")
    return History.read(tmp_path / "history.csv")


@pytest.fixture(scope="module")
def world():
    return History.read(DEMO / "history.toml"), Outlines.read(DEMO / "outlines.geojson")


def turned(plate, age):
    """The rotation of a plate to an age, from the rows as they are printed."""
    about_pole = Rotation.from_rotvec([0, 0, math.radians(age)])
    return (
        about_pole if plate == "alba" else about_pole * Rotation.from_rotvec([math.radians(age / 2), 0, 0])
    )


def vectors(positions):
    lon, lat = np.radians(np.asarray(positions, dtype=float)).T
    return np.stack([np.cos(lat) * np.cos(lon), np.cos(lat) * np.sin(lon), np.sin(lat)], axis=-1)


def angles(a, b):
    return np.arctan2(np.linalg.norm(np.cross(a, b), axis=-1), np.sum(a * b, axis=-1))


def line_rad(positions):
    v = vectors(positions)
    return angles(v[:-1], v[1:]).sum()


def cap(lat, lon, radius_deg, count=24, clockwise=False):
    """A regular polygon about a point, closed: positions as GeoJSON has them."""
    turn = np.arange(count) * 2 * np.pi / count
    r = math.radians(radius_deg)
    v = np.stack([np.sin(r) * np.cos(turn), np.sin(r) * np.sin(turn), np.full(count, np.cos(r))], axis=-1)
    x, y, z = Rotation.from_euler("yz", [90 - lat, lon], degrees=True).apply(v).T
    ring = np.degrees(np.stack([np.arctan2(y, x), np.arctan2(z, np.hypot(x, y))], axis=-1))
    ring = ring[::-1] if clockwise else ring
    return [*ring.tolist(), ring[0].tolist()]


def regular_area(radius_deg, count=24):
    half = math.atan(1 / (math.cos(math.radians(radius_deg)) * math.tan(math.pi / count)))
    return 2 * count * half - (count - 2) * math.pi


def feature(kind, coordinates, number=1, **properties):
    geometry = None if kind is None else {"type": kind, "coordinates": coordinates}
    return Feature("a.geojson", number, geometry, properties)


def members(geometry):
    """The lines or polygons of a geometry, single or many."""
    many = geometry["type"].startswith("Multi")
    return geometry["coordinates"] if many else [geometry["coordinates"]]


def positions(polygons):
    return {tuple(p) for polygon in polygons for ring in polygon for p in ring}


def area_sr(geometry):
    """The area of a polygon geometry, each ring's angles summed, modulo the sphere."""
    total = 0.0
    for outer, *holes in members(geometry):
        total += Ring.of(*np.array(outer[:-1]).T[::-1]).area_sr()
        total -= sum(Ring.of(*np.array(hole[:0:-1]).T[::-1]).area_sr() for hole in holes)
    return total % (4 * math.pi)


def assert_rfc_7946(geometry):
    """Positions on the globe, rings closed and rightly turned, no edge over 180 degrees of longitude."""
    kind = geometry["type"].removeprefix("Multi")
    if kind == "Point":
        return
    for member in members(geometry):
        for number, ring in enumerate(member if kind == "Polygon" else [member]):
            places = np.array(ring)
            assert np.all(np.abs(places).max(axis=0) <= [180, 90])
            assert np.abs(np.diff(places[:, 0])).max() <= 180
            if kind == "Polygon":
                assert ring[0] == ring[-1]
                x, y = places.T
                assert (np.sum(x[:-1] * y[1:] - x[1:] * y[:-1]) > 0) == (number == 0)


def seen_from(place, ring):
    """Whether a ring with its inside on the left holds a place: the angles under which its edges are seen.

    They add up to a turn, to a turn the other way if it holds the antipode instead, else to nothing.
    """
    v = vectors(ring)
    v = v - place * (v @ place)[:, np.newaxis]
    turning = np.arctan2(np.cross(v[:-1], v[1:]) @ place, np.sum(v[:-1] * v[1:], axis=1))
    return turning.sum() > math.pi


# ---- moving ----


@pytest.mark.parametrize("plate", ["alba", "bora"])
def test_against_scipy(history, plate):
    """Every original vertex is where scipy's Rotation puts it, at every age, to 1e-9 degrees."""
    line = [[10.0, -20.0], [10.2, -20.1], [10.4, -20.3], [10.6, -19.9]]
    (*_,) = restored = list(
        restore_lines([feature("LineString", line, plate=plate)], history, "deep", AGES).features()
    )
    assert [p["restored_age_ma"] for _, p in restored] == list(AGES)
    for geometry, properties in restored:
        wanted = turned(plate, properties["restored_age_ma"]).apply(vectors(line))
        assert np.degrees(angles(vectors(geometry["coordinates"]), wanted)).max() < 1e-9


def test_digits_of_today(history):
    """At 0 Ma vertices keep their digits, among the new ones too; 180 and -180 are one meridian."""
    line = [[179.1234567891, 1.23], [-170.0000000001, 40.7], [-170.0, 41.0]]
    ((geometry, _),) = restore_lines(
        [feature("LineString", line, plate="bora")], history, "deep", 0
    ).features()
    drawn = [position for part in members(geometry) for position in part]
    assert [position for position in drawn if position in line] == line
    assert len(drawn) > 80


@pytest.mark.parametrize("longest", [0.5, 5.0])
def test_densified(history, longest):
    """New vertices lie on the great circle of the old ones, none further apart than asked."""
    ends = [[0.0, 10.0], [90.0, 50.0]]
    ((geometry, _),) = restore_lines(
        [feature("LineString", ends, plate="alba")], history, "deep", 0, longest_deg=longest
    ).features()
    v = vectors(geometry["coordinates"])
    normal = np.cross(*vectors(ends))
    assert np.abs(v @ normal).max() < 1e-11
    steps = np.degrees(angles(v[:-1], v[1:]))
    assert longest / 2 < steps.min()
    assert steps.max() <= longest + 1e-9


def test_straight_edges(history):
    """Straight edges keep to their parallel, which turning about the pole leaves alone."""
    ends = [[0.0, 60.0], [40.0, 60.0]]
    restored = restore_lines(
        [feature("LineString", ends, plate="alba")], history, "deep", [0, 10], edges="straight"
    )
    for geometry, properties in restored.features():
        lon, lat = np.array(geometry["coordinates"]).T
        assert np.abs(lat - 60).max() < 1e-9
        assert [lon[0], lon[-1]] == pytest.approx(
            [properties["restored_age_ma"], properties["restored_age_ma"] + 40]
        )
        assert properties["edges"] == "straight"


def test_geodetic_latitudes(history):
    """A turn about the pole leaves geodetic latitudes as they are, along great circles too."""
    line = [[0.0, 45.0], [0.3, 45.3]]
    ((geometry, properties),) = restore_lines(
        [feature("LineString", line, plate="alba")], history, "deep", 10, latitudes="geodetic"
    ).features()
    assert geometry["coordinates"] == [pytest.approx([10, 45]), pytest.approx([10.3, 45.3])]
    assert properties["latitudes"] == "geodetic"


POLYGONS = {
    "small": [cap(10, 20, 3)],
    "tiny": [cap(10, 20, 1e-4)],
    "on the date line": [cap(5, 178, 9)],
    "on a pole": [cap(88, 0, 10)],
    "pole in the middle": [cap(-90, 0, 20)],
    "with a hole": [cap(0, 170, 20), cap(0, 172, 6, clockwise=True)],
    "with a hole that turns wrong": [cap(0, 170, 20), cap(0, 172, 6)],
    "belt": [cap(90, 0, 60), cap(90, 0, 30, clockwise=True)],
    "hemisphere": [cap(30, 100, 89.99)],
}


@pytest.mark.parametrize("rings", POLYGONS.values(), ids=POLYGONS)
def test_areas_are_kept(history, rings):
    """A polygon's area is Girard's at every age, and what is written is RFC 7946."""
    radii = [np.degrees(angles(vectors(r)[:12], vectors(r)[12:24])).max() / 2 for r in rings]
    wanted = regular_area(radii[0]) - sum(regular_area(radius) for radius in radii[1:])
    ages = [0, 1, 2, 5, 8, 10, 13, 20]
    for geometry, _ in restore_lines(
        [feature("Polygon", rings, plate="bora")], history, "deep", ages
    ).features():
        assert_rfc_7946(geometry)
        assert area_sr(geometry) == pytest.approx(wanted, rel=1e-9 if wanted > 1e-6 else 1e-4)


def test_lengths_are_kept(history):
    """A line over the date line and past the pole is as long at every age, in whatever pieces."""
    line = [[170.0, -40.0], [-160.0, 10.0], [-100.0, 80.0], [60.0, 85.0]]
    wanted = line_rad(line)
    for geometry, _ in restore_lines(
        [feature("LineString", line, plate="bora")], history, "deep", AGES
    ).features():
        assert_rfc_7946(geometry)
        assert sum(line_rad(part) for part in members(geometry)) == pytest.approx(wanted, rel=1e-10)


def test_larger_than_a_hemisphere(history):
    """The inside is to the left, and a remark says how large it is; on request it is the smaller side."""
    ring = cap(10, 20, 30, clockwise=True)
    left = restore_lines([feature("Polygon", [ring], plate="bora")], history, "deep", AGES)
    smaller = restore_lines(
        [feature("Polygon", [ring], plate="bora")], history, "deep", AGES, interior="smaller"
    )
    assert [finding.kind for finding in left.findings] == ["large polygon"]
    assert smaller.findings == []
    for restored, wanted in ((left, 4 * math.pi - regular_area(30)), (smaller, regular_area(30))):
        for geometry, _ in restored.features():
            assert_rfc_7946(geometry)
            assert area_sr(geometry) == pytest.approx(wanted, rel=1e-9)


SOUTH = [[-90, -72], [0, -71], [90, -73], [180, -70]]
CUT = {
    "to the pole and back": (
        [[[[-180, -70], *SOUTH, [180, -90], [-180, -90], [-180, -70]]]],
        [[[[180, -70], *SOUTH]]],
    ),
    "in two": (
        [[[[174.8, 0], [180, 0], [180, 9], [174.8, 0]]], [[[-180, 0], [-170, 3], [-180, 9], [-180, 0]]]],
        [[[[174.8, 0], [180, 0], [-170, 3], [180, 9], [174.8, 0]]]],
    ),
}  # fmt: skip


@pytest.mark.parametrize(("cut", "whole"), CUT.values(), ids=CUT)
def test_cut_for_a_map_is_sewn(history, cut, whole):
    """Polygons cut along the 180th meridian move as if they had not been, no seam in them."""
    for ours, theirs in zip(
        *(
            restore_lines([feature("MultiPolygon", p, plate="bora")], history, "deep", AGES).features()
            for p in (cut, whole)
        ),
        strict=True,
    ):
        lengths = [sorted(len(p[0]) for p in members(geometry)) for geometry in (ours[0], theirs[0])]
        assert lengths[0] == lengths[1]
        assert area_sr(ours[0]) == pytest.approx(area_sr(theirs[0]), rel=1e-9)


# ---- kinds, statuses, properties ----


def test_points_and_parts(history):
    """Points and many-part geometries keep their kind and their order."""
    features = [
        feature("Point", [1.0, 2.0], 1, plate="alba"),
        feature("MultiPoint", [[1.0, 2.0], [3.0, 4.0]], 2, plate="alba"),
        feature("MultiLineString", [[[0, 0], [0.1, 0]], [[5, 5], [5, 5.1]]], 3, plate="alba"),
        feature("MultiPolygon", [[cap(0, 0, 0.1, 4)], [cap(30, 0, 0.1, 4)]], 4, plate="alba"),
    ]
    got = [g for g, _ in restore_lines(features, history, "deep", 10).features()]
    assert got[0] == {"type": "Point", "coordinates": pytest.approx([11, 2], abs=1e-9)}
    assert got[1]["coordinates"] == [pytest.approx([11, 2], abs=1e-9), pytest.approx([13, 4], abs=1e-9)]
    assert [g["type"] for g in got] == ["Point", "MultiPoint", "MultiLineString", "MultiPolygon"]
    assert [len(g["coordinates"]) for g in got[2:]] == [2, 2]


def test_statuses_and_order(history):
    """Nothing is dropped: each feature at each age, its properties kept, with the reason if not restored."""
    features = [
        feature("Point", [0, 0], 1, plate="alba", name="old", oldest_ma=10),
        feature("Point", [0, 0], 2, name="lost"),
        feature(None, None, 3, plate="alba", name="empty"),
        feature("Point", [0, 0], 4, plate="bora", name="late"),
        feature("Point", [0, 0], 5, plate="albo", name="misspelt"),
    ]
    restored = restore_lines(features, history, "deep", [10, 10.5, 30])
    got = list(restored.features())
    assert [p["feature"] for _, p in got] == [n for n in range(1, 6) for _ in range(3)]
    assert [p["status"] for _, p in got] == [
        *("restored", "crust not yet formed", "crust not yet formed"),
        *["no plate here"] * 3,
        *["bad coordinate"] * 3,
        *("restored", "restored", "outside the history"),
        *["outside the history"] * 3,
    ]
    assert [g is None for g, _ in got] == [p["status"] != "restored" for _, p in got]
    assert [p["name"] for _, p in got[::3]] == ["old", "lost", "empty", "late", "misspelt"]
    assert got[0][1] | {"frame": "deep", "frame_kind": "plate"} == got[0][1]
    assert (got[0][1]["plate_from"], got[3][1]["plate_from"], got[3][1]["plate"]) == ("given", "", None)
    assert [f.line() for f in restored.findings] == [
        "a.geojson: feature 5: plate 'albo' is not in the history; did you mean 'alba'?"
    ]


def test_another_property(history):
    """The label may stand in any property, and be a number."""
    point = [feature("Point", [0, 0], code=7)]
    ((_, properties),) = restore_lines(point, history, "deep", 0, plate_property="code").features()
    assert (properties["code"], properties["plate"], properties["status"]) == (
        7,
        "7",
        "outside the history",
    )


def test_wrong_questions(history):
    """Unknown frames, ages of their own and unknown choices are refused."""
    point = [feature("Point", [0, 0], plate="alba")]
    with pytest.raises(UnknownPlateError, match="did you mean 'deep'"):
        restore_lines(point, history, "deap", 0)
    with pytest.raises(InputError, match="no meaning for lines"):
        restore_lines(point, history, "deep", "own")
    with pytest.raises(InputError, match="interior = 'right'"):
        restore_lines(point, history, "deep", 0, interior="right")
    with pytest.raises(InputError, match="longest_deg = 0"):
        restore_lines(point, history, "deep", 0, longest_deg=0)
    with pytest.raises(InputError, match="holds no feature"):
        restore_lines([], history, "deep", 0)


# ---- cut along outlines ----


def test_a_line_is_split_at_outlines(world):
    """A line round the demo world: pieces follow each other, each on the plate that holds its middle."""
    history, outlines = world
    line = [[-179.0, 10.0], [-90.0, 35.0], [0.0, -20.0], [100.0, 15.0], [179.5, -30.0], [-100.0, -60.0]]
    restored = restore_lines([feature("LineString", line)], history, "deep", 0, outlines=outlines)
    pieces = list(restored.features())
    assert len(pieces) > 6
    assert [p["piece"] for _, p in pieces] == list(range(1, len(pieces) + 1))
    assert {p["plate_from"] for _, p in pieces} == {"outlines"}
    drawn = [members(g) for g, _ in pieces]
    assert sum(line_rad(part) for parts in drawn for part in parts) == pytest.approx(
        line_rad(line), rel=1e-10
    )
    for before, after in pairwise(drawn):
        assert before[-1][-1] == after[0][0]
    for parts, (_, properties) in zip(drawn, pieces, strict=True):
        for part in parts:
            for one, other in pairwise(part):
                middle = vectors([one, other]).sum(axis=0)
                assert plate_seen_from(middle / np.linalg.norm(middle)) == properties["plate"]


def plate_seen_from(place):
    """The plate of the demo outlines that holds a place, by the winding of their rings as printed."""
    found = []
    for entry in json.loads((DEMO / "outlines.geojson").read_text(encoding="utf-8"))["features"]:
        geometry = entry["geometry"]
        for polygon in members(geometry):
            if seen_from(place, polygon[0]):
                found.append(entry["properties"]["plate"])
    assert len(found) == 1
    return found[0]


def test_cut_points_are_on_both(world):
    """Where two pieces meet the point lies on an edge of the outlines, to 1e-9 radians."""
    history, outlines = world
    line = [[-60.0, 0.0], [30.0, 5.0]]
    pieces = list(
        restore_lines([feature("LineString", line)], history, "deep", 0, outlines=outlines).features()
    )
    edges = []
    for entry in json.loads((DEMO / "outlines.geojson").read_text(encoding="utf-8"))["features"]:
        for polygon in members(entry["geometry"]):
            v = vectors(polygon[0])
            edges.append(np.stack([v[:-1], v[1:]], axis=1))
    start, end = np.concatenate(edges).transpose(1, 0, 2)
    normal = np.cross(start, end)
    size = np.linalg.norm(normal, axis=1)
    for geometry, _ in pieces[:-1]:
        place = vectors([geometry["coordinates"][-1]])[0]
        off = np.abs(normal @ place) / np.where(size > 0, size, np.inf)
        between = angles(start, place) + angles(end, place) - angles(start, end)
        assert np.min(np.where((size > 0) & (between < 1e-7), off, 1.0)) < 1e-9


SPREAD = {
    "small": ([cap(0, -15, 4)], regular_area(4)),
    "three plates and more": ([cap(10, -60, 50)], regular_area(50)),
    "over the south pole": ([cap(-85, 0, 15)], regular_area(15)),
    "on the date line": ([cap(0, 180, 8)], regular_area(8)),
    "with a hole": ([cap(0, -15, 20), cap(0, -15, 5, clockwise=True)], regular_area(20) - regular_area(5)),
    "hemisphere": ([cap(20, 40, 89.9)], regular_area(89.9)),
    "all but a cap": ([cap(20, 40, 80, clockwise=True)], 4 * math.pi - regular_area(80)),
}


@pytest.mark.parametrize(("rings", "wanted"), SPREAD.values(), ids=SPREAD)
def test_polygons_cut_by_outlines(world, rings, wanted):
    """Pieces add up to the whole to 1e-9, each on its plate, their own vertices unmoved."""
    history, outlines = world
    pieces = list(
        restore_lines([feature("Polygon", rings)], history, "deep", [0], outlines=outlines).features()
    )
    plates = [p["plate"] for _, p in pieces]
    assert None not in plates
    assert len(set(plates)) == len(plates)
    total, corners = 0.0, set()
    for geometry, _ in pieces:
        assert_rfc_7946(geometry)
        total += area_sr(geometry)
        corners |= positions(members(geometry))
    assert total == pytest.approx(wanted, rel=1e-9)
    own = {(round(lon, 10), round(lat, 10)) for ring in rings for lon, lat in ring}
    assert {p for p in own if abs(abs(p[0]) - 180) > 1e-9} <= corners


def test_outside_of_all_outlines(world):
    """What no outline holds is a piece without plate and without geometry; crust has its age."""
    history, outlines = world
    some = Outlines(tuple(o for o in outlines.outlines if o.plate == "ovrath"), "o.geojson")
    oldest = some.outlines[0].oldest_ma
    features = [
        feature("Polygon", [cap(0, -15, 4)], 1),
        feature("LineString", [[-40.0, 0.0], [20.0, 0.0]], 2),
        feature("MultiPoint", [[60.0, 0.0], [-50.0, 0.0]], 3),
        feature("Polygon", [cap(0, 80, 4)], 4),
        feature("Point", [80, 0], 5, plate="quemmel"),
    ]
    restored = list(
        restore_lines(features, history, "deep", [0, oldest, oldest + 1], outlines=some).features()
    )
    today = [p for _, p in restored if p["restored_age_ma"] == 0]
    assert [(p["feature"], p["plate"]) for p in today] == [
        (1, "ovrath"), (1, None), (2, "ovrath"), (2, None), (3, None), (3, "ovrath"), (4, None), (5, "quemmel"),
    ]  # fmt: skip
    assert {p["status"] for _, p in restored if p["plate"] is None} == {"no plate here"}
    late = [p["status"] for _, p in restored if p["plate"] == "ovrath" and p["restored_age_ma"] > oldest]
    assert set(late) == {"crust not yet formed"}


def test_overlaps_go_by_rank(world, tmp_path):
    """Where outlines overlap the lower rank takes it all."""
    history, _ = world
    squares = [("ovrath", 1, [[0, 0], [20, 0], [20, 10], [0, 10], [0, 0]]),
               ("quemmel", 0, [[10, 0], [30, 0], [30, 10], [10, 10], [10, 0]])]  # fmt: skip
    collection = {
        "type": "FeatureCollection",
        "features": [
            {"type": "Feature", "properties": {"plate": plate, "rank": rank},
             "geometry": {"type": "Polygon", "coordinates": [ring]}}
            for plate, rank, ring in squares
        ],
    }  # fmt: skip
    (tmp_path / "o.geojson").write_text(json.dumps(collection), encoding="utf-8")
    (ours, theirs) = restore_lines(
        [feature("Polygon", [cap(5, 10, 2)])], history, "deep", 0, outlines=tmp_path / "o.geojson"
    ).features()
    assert (ours[1]["plate"], theirs[1]["plate"]) == ("ovrath", "quemmel")
    half = regular_area(2) / 2
    assert [area_sr(g) for g, _ in (ours, theirs)] == pytest.approx([half, half], rel=1e-6)


def test_a_line_along_an_edge(world):
    """A line along a shared edge is one piece, on the plate to its left, whichever way it runs."""
    history, outlines = world
    ring = outlines.outlines[0].polygons[0].rings[0]
    edge = [[ring.lon_deg[i], ring.lat_deg[i]] for i in range(5, 11)]
    forth, back = (
        [
            p["plate"]
            for _, p in restore_lines(
                [feature("LineString", e)], history, "deep", 0, outlines=outlines
            ).features()
        ]
        for e in (edge, edge[::-1])
    )
    assert forth == [outlines.outlines[0].plate]
    assert len(back) == 1
    assert back != forth
