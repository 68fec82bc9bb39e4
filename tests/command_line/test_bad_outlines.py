"""Outlines files at fault: one clear line that names file and feature, exit 1, and nothing half-written."""

import json

import pytest
from command_line.world import HISTORY, SITES, deny, leftovers

SQUARE = [[0, 0], [10, 0], [10, 10], [0, 10], [0, 0]]


def polygon(*rings):
    return {"type": "Polygon", "coordinates": list(rings)}


def feature(geometry=None, **properties):
    return {
        "type": "Feature",
        "properties": {"plate": "alba", **properties},
        "geometry": geometry or polygon(SQUARE),
    }


def second(bad):
    """A collection whose first feature is sound and whose second is at fault."""
    return {"type": "FeatureCollection", "features": [feature(), bad]}


def without(key):
    made = feature()
    del made["properties"][key]
    return made


def ring(*places):
    return feature(polygon([list(place) for place in places]))


IN_A_FEATURE = {
    "no label": (without("plate"), "has no property 'plate'"),
    "label empty": (feature(plate=""), "has an empty property 'plate'"),
    "label null": (feature(plate=None), "has no property 'plate'"),
    "label a list": (feature(plate=["alba"]), "plate = ['alba']: a plate's label is a text"),
    "label true": (feature(plate=True), "plate = True: a plate's label is a text"),
    "label misspelt": ({**feature(), "properties": {"plat": "alba"}}, "has no property 'plate'; did you mean 'plat'?"),
    "no geometry": ({**feature(), "geometry": None}, "geometry None: an outline is a Polygon or a MultiPolygon"),
    "a line": (
        feature({"type": "LineString", "coordinates": SQUARE}),
        "geometry 'LineString': an outline is a Polygon or a MultiPolygon",
    ),
    "unknown geometry": (
        feature({"type": "Sphere", "coordinates": []}),
        "geometry 'Sphere': known are Point, MultiPoint, LineString, MultiLineString, Polygon, MultiPolygon",
    ),
    "no coordinates": (feature({"type": "Polygon"}), "coordinates are not nested as its type asks"),
    "too shallow": (feature({"type": "Polygon", "coordinates": SQUARE}), "position 0 is not two numbers"),
    "too deep": (feature({"type": "Polygon", "coordinates": [[SQUARE]]}), "position [[0, 0], [10, 0], [10, 10], [0, 10], [0, 0]] is not two numbers"),
    "no ring": (feature(polygon()), "a polygon without a ring"),
    "no polygon": (feature({"type": "MultiPolygon", "coordinates": []}), "a MultiPolygon without a polygon"),
    "empty ring": (feature(polygon([])), "ring 1 has 0 different vertices; it needs three"),
    "two vertices": (ring((0, 0), (9, 0), (0, 0)), "ring 1 has 2 different vertices; it needs three"),
    "one vertex four times": (
        ring((5, 5), (5, 5), (5, 5), (5, 5)), "ring 1 has 0 different vertices; it needs three",
    ),
    "no area": (ring((0, 0), (10, 0), (20, 0), (0, 0)), "ring 1 holds no area; its edges lie on one another"),
    "edge to the antipode": (
        ring((10, 5), (-170, -5), (60, 40), (10, 5)),
        "ring 1: the edge from 10, 5 ends at its antipode; put a vertex between",
    ),
    "not closed": (ring(*SQUARE[:-1]), "ring 1 is not closed; its last position repeats its first"),
    "hole not closed": (
        feature(polygon(SQUARE, [[2, 2], [2, 4], [4, 4]])),
        "ring 2 is not closed; its last position repeats its first",
    ),
    "latitude 95": (
        ring((0, 0), (10, 95), (20, 0), (0, 0)),
        "position 10, 95: longitude in -360..360 and then latitude in -90..90 are wanted",
    ),
    "longitude 1000": (
        ring((0, 0), (1000, 5), (20, 0), (0, 0)),
        "position 1000, 5: longitude in -360..360 and then latitude in -90..90 are wanted",
    ),
    "text for a number": (ring((0, 0), ("10", 0), (20, 9), (0, 0)), "position ['10', 0] is not two numbers"),
    "far too deep": (
        feature({"type": "Polygon", "coordinates": [[[[lon, 0] for lon in range(300)]]]}),
        "position [[0, 0], [1, 0], [2, 0], [3, 0], [4, 0], [5, 0], ...] is not two numbers",
    ),
    "one number": (ring((0, 0), (10,), (20, 9), (0, 0)), "position [10] is not two numbers"),
    "null": (ring((0, 0), (10, None), (20, 9), (0, 0)), "position [10, None] is not two numbers"),
    "NaN": (ring((0, 0), (10, float("nan")), (20, 9), (0, 0)), "position [10, nan] is not two numbers"),
    "infinite": (ring((0, 0), (float("inf"), 0), (20, 9), (0, 0)), "position [inf, 0] is not two numbers"),
    "age in words": (feature(oldest_ma="Jurassic"), "oldest_ma = 'Jurassic' is not a number"),
    "age negative": (feature(youngest_ma=-5), "youngest_ma = -5: an age is in Ma, positive into the past"),
    "age NaN": (feature(oldest_ma=float("nan")), "oldest_ma = nan: an age is in Ma, positive into the past"),
    "age a list": (feature(oldest_ma=[30]), "oldest_ma = [30] is not a number"),
    "ages upside down": (feature(oldest_ma=5, youngest_ma=30), "youngest_ma = 30 is above oldest_ma = 5"),
    "rank in words": (feature(rank="first"), "rank = 'first': must be a whole number"),
    "rank and a half": (feature(rank=1.5), "rank = 1.5: must be a whole number"),
    "rank true": (feature(rank=True), "rank = True: must be a whole number"),
    "no Feature": (polygon(SQUARE), "is no Feature"),
    "a number for a feature": (7, "is no Feature"),
    "properties a list": ({**feature(), "properties": ["plate"]}, "its properties are no object of names and values"),
}  # fmt: skip

WHOLE = {
    "empty": (b"", "o.geojson:1:1: not valid JSON: Expecting value"),
    "cut off": (json.dumps(second(feature())).encode()[:-9], "not valid JSON: "),
    "no JSON": (b"plate,lat\n", "o.geojson:1:1: not valid JSON: Expecting value"),
    "a list": (b"[]", "o.geojson: type = None: not GeoJSON (RFC 7946)"),
    "another type": (b'{"type": "Topology"}', "o.geojson: type = 'Topology': not GeoJSON (RFC 7946)"),
    "no list of features": (b'{"type": "FeatureCollection"}', "o.geojson: the FeatureCollection has no list of features"),
    "no feature": (
        b'{"type": "FeatureCollection", "features": []}',
        "o.geojson: holds no feature; outlines need at least one polygon",
    ),
    "a bare geometry": (json.dumps(polygon(SQUARE)).encode(), "o.geojson: feature 1: has no property 'plate'"),
    "nested too deeply": (b"[" * 200_000, "o.geojson: is nested too deeply to be GeoJSON (RFC 7946)"),
    "another encoding": ('{"type": "Ö"}'.encode("latin-1"), "o.geojson"),
}  # fmt: skip


@pytest.fixture
def world(here):
    (here / "sites.csv").write_text(SITES + "a,1,2,5,\n", encoding="utf-8")
    return here


def assert_refused(ask, here, message):
    """One line that holds the message, exit 1, no output of any kind."""
    options = ("--history", "history.csv", "--frame", "deep", "--outlines", "o.geojson", "--out", "out.csv")
    answer = ask("sites", "sites.csv", *options, "--ledger", "ledger.csv")
    assert answer.code == 1
    assert answer.out == ""
    assert len(answer.said) == 1
    assert answer.said[0].startswith("error: o.geojson")
    assert message in answer.said[0]
    assert leftovers(here) == []
    assert not (here / "out.csv").exists()
    assert not (here / "ledger.csv").exists()


@pytest.mark.parametrize(("bad", "message"), IN_A_FEATURE.values(), ids=IN_A_FEATURE)
def test_features_at_fault(world, ask, bad, message):
    """The feature is named by its number; the sound one before it does not hide it."""
    (world / "o.geojson").write_text(json.dumps(second(bad)), encoding="utf-8")
    assert_refused(ask, world, f"o.geojson: feature 2: {message}")


@pytest.mark.parametrize(("content", "message"), WHOLE.values(), ids=WHOLE)
def test_files_at_fault(world, ask, content, message):
    """What is no GeoJSON at all, or holds nothing."""
    (world / "o.geojson").write_bytes(content)
    assert_refused(ask, world, message)


@pytest.mark.parametrize(("bad", "message"), IN_A_FEATURE.values(), ids=IN_A_FEATURE)
def test_check_says_the_same(world, ask, bad, message):
    """`check` makes a finding of it: an error, exit 1, valid JSON."""
    (world / "o.geojson").write_text(json.dumps(second(bad)), encoding="utf-8")
    answer = ask("check", "o.geojson", "--json")
    (found,) = json.loads(answer.out)
    assert answer.code == 1
    assert (found["severity"], found["kind"]) == ("error", "unreadable")
    assert f"feature 2: {message}" in found["what"]


def test_files_that_cannot_be_opened(world, ask, monkeypatch):
    """No such file, a folder, one that may not be read, an ending that nobody knows."""
    assert_refused(ask, world, "o.geojson: no such file")
    (world / "o.geojson").mkdir()
    assert_refused(ask, world, "o.geojson: is a folder")
    (world / "o.geojson").rmdir()
    (world / "o.geojson").write_text(json.dumps(feature()), encoding="utf-8")
    deny(world / "o.geojson", monkeypatch)
    assert_refused(ask, world, "o.geojson: ")


def test_an_unknown_ending(world, ask):
    """The known endings are listed."""
    answer = ask("sites", "sites.csv", "--history", "history.csv", "--frame", "deep", "--outlines", "o.kml")
    assert answer.code == 1
    assert answer.said == [
        "error: o.kml: cannot tell what it is; known endings are .fgb, .geojson, .geoparquet, .gpkg, .json,"
        " .parquet, .shp"
    ]


MISUSED = {
    "nearest without outlines": (["--within-km", "5"], "--within-km needs --outlines"),
    "negative distance": (["--outlines", "o.geojson", "--within-km", "-5"], "--within-km"),
    "unknown edges": (["--outlines", "o.geojson", "--edges", "rhumb"], "'rhumb' is not one of"),
}


@pytest.mark.parametrize(("options", "message"), MISUSED.values(), ids=MISUSED)
def test_options_misused(world, ask, options, message):
    """The command is misused: exit 2."""
    answer = ask("sites", "sites.csv", "--history", "history.csv", "--frame", "deep", *options)
    assert answer.code == 2
    assert message in answer.said[0]


def test_a_crust_grid_at_fault(world, ask):
    """A grid that is not there, and one that is no grid: one line each."""
    for content, message in (
        (None, "crust.nc: no such file"),
        (b"no grid", "crust.nc: not a readable netCDF file"),
    ):
        if content is not None:
            (world / "crust.nc").write_bytes(content)
        options = (
            "--history",
            "history.csv",
            "--frame",
            "deep",
            "--crust-age",
            "crust.nc",
            "--out",
            "out.csv",
        )
        answer = ask("sites", "sites.csv", *options)
        assert answer.code == 1
        assert len(answer.said) == 1
        assert message in answer.said[0]
        assert not (world / "out.csv").exists()


SCENARIO = """\
version = 1
[history]
file = "history.csv"
[frame]
name = "deep"
kind = "mantle"
[outlines]
file = "o.geojson"
[[task]]
name = "cores"
kind = "sites"
file = "sites.csv"
"""


def test_a_scenario_with_outlines_at_fault(world, ask):
    """The run ends before it begins: the same line, exit 1, no result."""
    assert HISTORY.startswith("plate,")
    (world / "s.toml").write_text(SCENARIO, encoding="utf-8")
    (world / "o.geojson").write_text(json.dumps(second(feature(rank="x"))), encoding="utf-8")
    answer = ask("run", "s.toml", "--out", "done")
    assert answer.code == 1
    assert any("feature 2: rank = 'x': must be a whole number" in line for line in answer.said)
    assert leftovers(world) == []
    assert not (world / "done" / "cores.csv").exists()
