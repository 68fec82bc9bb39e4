"""The audit of outlines: each kind of finding provoked, and silent where nothing is wrong."""

import json
import math
import re

import numpy as np
import pytest
from benchmarks.outlines import tiling

from restore.geometry.polygons import Ring
from restore.history.rows import Row
from restore.history.store import History
from restore.outlines import Outlines
from restore.outlines.audit import audit_outlines, self_crossings

KM = 6371.0088
SPHERE = 4 * math.pi * KM**2
STEP = SPHERE / 400_000


def ring_of(*places):
    return [list(place) for place in (*places, places[0])]


def box(west, south, east, north):
    return ring_of((west, south), (east, south), (east, north), (west, north))


def audited(tmp_path, features, history=None, **options):
    """Findings of outlines given as (plate, rings or parts, properties)."""
    members = []
    for plate, rings, *more in features:
        kind = "Polygon" if isinstance(rings[0][0][0], (int, float)) else "MultiPolygon"
        geometry = {"type": kind, "coordinates": rings}
        members.append(
            {
                "type": "Feature",
                "properties": {"plate": plate, **(more[0] if more else {})},
                "geometry": geometry,
            }
        )
    path = tmp_path / "o.geojson"
    path.write_text(json.dumps({"type": "FeatureCollection", "features": members}), encoding="utf-8")
    return audit_outlines(Outlines.read(path, **options), history)


def of_kind(findings, kind):
    return [finding for finding in findings if finding.kind == kind]


def boxes():
    """A tiling of twelve boxes with straight edges; the plates at the poles are caps of three sides."""
    return [
        (f"{west} {south}", [box(west, south, west + 90, south + 60)])
        for west in (-180, -90, 0, 90)
        for south in (-90, -30, 30)
    ]


def test_a_tiling_has_no_finding(tmp_path):
    """Nothing to say of the whole sphere cut in boxes, nor of one cut in uneven cells."""
    assert audited(tmp_path, boxes(), edges="straight") == []
    assert audit_outlines(tiling(40, 1000, 3)[0]) == []


def area_said(finding):
    return float(re.search(r"([0-9.e+]+) km2", finding.what)[1])


def test_a_gap_is_said_with_its_area(tmp_path):
    """Without one box its area, in closed form, lies on no outline, to the counted precision."""
    findings = audited(tmp_path, boxes()[1:], edges="straight")
    (gap,) = of_kind(findings, "gap")
    area = math.pi / 2 * (1 - math.sin(math.radians(30))) * KM**2
    assert area_said(gap) == pytest.approx(area, rel=0.006)
    assert gap.severity == "note"
    assert gap.what.endswith(f"(counted in steps of {STEP:.0f} km2)")
    lat, lon = map(float, re.search(r"such as (-?[0-9.]+), (-?[0-9.]+)", gap.what).groups())
    assert lat < -30
    assert -180 <= lon < -90
    (total,) = of_kind(findings, "total area")
    assert f"({-area:+.4g} km2)" in total.what
    assert {finding.kind for finding in findings} == {"gap", "total area"}


@pytest.mark.parametrize(("rank", "severity"), [(0, "warning"), (1, "note")])
def test_an_overlap_is_said_with_its_area_and_its_two_plates(tmp_path, rank, severity):
    """A box of 20 by 10 degrees besides: a warning if nobody says which is meant."""
    features = [*boxes(), ("island", [box(10, 40, 30, 50)], {"rank": rank})]
    findings = audited(tmp_path, features, edges="straight")
    (overlap,) = of_kind(findings, "overlap")
    area = math.radians(20) * (math.sin(math.radians(50)) - math.sin(math.radians(40))) * KM**2
    # the lattice counts a region of perimeter 4000 km to a few steps
    assert area_said(overlap) == pytest.approx(area, abs=12 * STEP)
    assert overlap.what.startswith("0 30 and island overlap by ")
    assert overlap.severity == severity
    assert overlap.place.file.endswith("o.geojson: feature 13")
    (total,) = of_kind(findings, "total area")
    # edges straight to within 10 m leave a few square kilometres
    assert float(re.search(r"\(([+-][0-9.e+]+) km2\)", total.what)[1]) == pytest.approx(
        area, abs=1e-3 * area
    )
    assert of_kind(findings, "gap") == []


def test_small_gaps_show_in_the_total(tmp_path):
    """A gap too small to be counted is still in the sum of areas."""
    hole = [*box(40, 40, 40.05, 40.05)][::-1]
    features = [(n, [*rings, hole] if n == "0 30" else rings) for n, rings in boxes()]
    findings = audited(tmp_path, features, edges="straight")
    assert of_kind(findings, "gap") == []
    (total,) = of_kind(findings, "total area")
    area = math.radians(0.05) * (math.sin(math.radians(40.05)) - math.sin(math.radians(40))) * KM**2
    assert float(re.search(r"\(([+-][0-9.e+]+) km2\)", total.what)[1]) == pytest.approx(-area, rel=2e-3)


CROSSED = {
    "bow tie": ([(0, 0), (20, 20), (20, 0), (0, 20)], 1),
    "bow tie on the date line": ([(170, 0), (-170, 20), (-170, 0), (170, 20)], 1),
    "bow tie over the pole": ([(0, 80), (180, 80), (90, 80), (-90, 70)], 1),
    "pentagram": ([(0, 20), (12, -16), (-19, 6), (19, 6), (-12, -16)], 5),
    "hourglass of long edges": ([(0, 0), (100, 0), (0, 30), (100, 30)], 1),
}
SOUND = {
    "square": [(0, 0), (20, 0), (20, 20), (0, 20)],
    "touches itself at a vertex": [(0, 0), (10, 10), (20, 0), (20, 20), (10, 10), (0, 20)],
    "round the pole": [(lon, 60) for lon in range(-180, 180, 10)],
    "up the side of the map": [*((lon, 60) for lon in range(-180, 181, 10)), (180, 90), (-180, 90)],
    "great triangle": [(0, 0), (120, 0), (-120, 0)],
    "hemisphere": [(0, 0), (0, -90), (180, 0), (0, 90)][::-1],
    "long edges on opposite sides": [(0, 40), (100, 40), (180, 45), (180, -40), (100, -40), (0, -41)],
    "larger than a hemisphere": [(lon, -50 + 10 * (lon // 10 % 2)) for lon in range(0, 360, 10)],
}


@pytest.mark.parametrize(("places", "times"), CROSSED.values(), ids=CROSSED)
def test_rings_that_cross_themselves(tmp_path, places, times):
    """An error, with how often and where first."""
    findings = of_kind(audited(tmp_path, [("a", [ring_of(*places)])]), "self-crossing")
    assert [finding.severity for finding in findings] == ["error"]
    said = "once near " if times == 1 else f"{times} times, first near "
    assert f"a: the ring crosses itself {said}" in findings[0].what


@pytest.mark.parametrize("places", SOUND.values(), ids=SOUND)
def test_rings_that_do_not_cross(tmp_path, places):
    """Corners that touch, rings round poles and great rings are no crossings."""
    findings = audited(tmp_path, [("a", [ring_of(*places)])])
    assert of_kind(findings, "self-crossing") == []


def test_where_edges_cross():
    """Diagonals of a box about 0N 10E cross there; hundreds of edges elsewhere do not hide it."""
    lat, lon = self_crossings(Ring.of(np.array([-10.0, 10, -10, 10]), np.array([0.0, 20, 20, 0])))[0]
    assert (lat, lon) == pytest.approx((0.0, 10.0), abs=1e-12)
    turn = np.linspace(0, 2 * np.pi, 800, endpoint=False)
    lats, lons = 40 * np.sin(turn), 60 * np.cos(turn)
    assert self_crossings(Ring.of(lats, lons)) == []
    lats[[100, 101]], lons[[100, 101]] = lats[[101, 100]], lons[[101, 100]]
    ((lat, lon),) = self_crossings(Ring.of(lats, lons))
    assert (lat, lon) == pytest.approx((lats[100], lons[100]), abs=0.6)


def test_holes_are_looked_at_too(tmp_path):
    """A hole that crosses itself, and one that runs the wrong way."""
    outer = box(0, 0, 60, 60)
    crossed = audited(tmp_path, [("a", [outer, ring_of((10, 10), (20, 20), (20, 10), (10, 20))])])
    assert [f.kind for f in crossed if f.severity == "error"] == ["self-crossing"]
    wrong = audited(tmp_path, [("a", [outer, box(10, 10, 20, 20)])])
    (finding,) = of_kind(wrong, "orientation")
    assert finding.what == "a: a hole runs anticlockwise"
    right = audited(tmp_path, [("a", [outer, box(10, 10, 20, 20)[::-1]])])
    assert of_kind(right, "orientation") == []


def test_orientation(tmp_path):
    """A clockwise ring holds the rest of the globe: a warning that says how much and which part."""
    parts = [[box(0, 0, 20, 20)], [box(40, 0, 60, 20)[::-1]]]
    (finding,) = of_kind(audited(tmp_path, [("a", parts)]), "orientation")
    assert finding.severity == "warning"
    assert finding.what.startswith("a, part 2: the ring holds 505.")
    assert "anticlockwise" in finding.remedy


def test_repeated_vertices(tmp_path):
    """Neighbours that are one are counted; a ring's closing position is none of them."""
    doubled = [[0, 0], [0, 0], [20, 0], [20, 20], [20, 20], [20, 20], [0, 20], [0, 0]]
    (finding,) = of_kind(audited(tmp_path, [("a", [doubled])]), "repeated vertices")
    assert finding.what == "a: 3 vertices repeat their neighbour"
    assert of_kind(audited(tmp_path, [("a", [box(0, 0, 20, 20)])]), "repeated vertices") == []


def history(*pairs, frames=None):
    rows = [
        Row(p, r, age, math.nan if not age else 90.0, math.nan if not age else 0.0, age)
        for p, r in pairs
        for age in (0.0, 10.0)
    ]
    return History.from_rows(rows, frames=frames or {})


def test_labels_both_ways(tmp_path):
    """Outlines that the history does not move, and plates that have none; frames need none."""
    known = history(("0 30", "deep"), ("north", "0 30"), frames={"deep": "mantle"})
    features = [(name if name == "0 30" else "0 30", rings) for name, rings in boxes()]
    features[0] = ("alien", features[0][1])
    findings = audited(tmp_path, features, known, edges="straight")
    (one,) = of_kind(findings, "plate without rows")
    assert (one.severity, one.what) == (
        "warning",
        "plate 'alien' has an outline and no rows in the history",
    )
    assert one.place.file.endswith("feature 1")
    (other,) = of_kind(findings, "plate without outline")
    assert other.what == "plates of the history without an outline: north"
    assert len(findings) == 2
    whole = [("north", boxes()[0][1]), *features[1:]]
    assert audited(tmp_path, whole, known, edges="straight") == []
    assert of_kind(audited(tmp_path, features, edges="straight"), "plate without rows") == []
