"""`oncewhere lines`: outputs whole or not there, one clear line for bad input, counts by status."""

import json

import pytest
from command_line.world import DEMO, leftovers

COAST = {
    "type": "FeatureCollection",
    "features": [
        {"type": "Feature", "properties": {"plate": "alba", "name": "long coast", "tags": ["a", {"b": None}]},
         "geometry": {"type": "LineString", "coordinates": [[170, 10], [175, 10.25], [-179, 11, 250.5]]}},
        {"type": "Feature", "properties": {"plate": "gapa", "name": "islet", "oldest_ma": 15},
         "geometry": {"type": "Polygon", "coordinates": [[[0, 0], [0.1, 0], [0, 0.1], [0, 0]]]}},
        {"type": "Feature", "properties": {"name": "nowhere"},
         "geometry": {"type": "Point", "coordinates": [3, 4]}},
    ],
}  # fmt: skip
ASKED = ("--history", "history.csv", "--frame", "deep", "--ages", "0,12,20")


@pytest.fixture
def lines(here, ask):
    """A function that writes a file and restores it."""

    def restoring(content, *options, name="coast.geojson"):
        text = content if isinstance(content, str) else json.dumps(content)
        (here / name).write_text(text, encoding="utf-8")
        return ask("lines", name, *(options or ASKED))

    return restoring


def test_standard_output(lines):
    """GeoJSON with its provenance; by feature, then by age; properties kept; counts on the other stream."""
    answer = lines(COAST)
    assert answer.code == 0
    content = json.loads(answer.out)
    assert content["type"] == "FeatureCollection"
    assert content["provenance"]["settings"]["ages"] == [0, 12, 20]
    assert [i["file"] for i in content["provenance"]["inputs"]] == ["coast.geojson", "history.csv"]
    got = [f["properties"] for f in content["features"]]
    assert [p["name"] for p in got] == [n for n in ("long coast", "islet", "nowhere") for _ in range(3)]
    assert got[0]["tags"] == ["a", {"b": None}]
    assert [p["restored_age_ma"] for p in got] == [0, 12, 20] * 3
    assert [p["status"] for p in got] == [
        *["restored"] * 3,
        *("restored", "gap in history", "crust not yet formed"),
        *["no plate here"] * 3,
    ]
    assert answer.said == ["9 rows: 1 crust not yet formed, 1 gap in history, 3 no plate here, 4 restored"]


def test_geometry(lines):
    """Alba turns eastwards by its age; the date line cuts, and today's vertices keep their digits."""
    today, then, _, islet, gap, *_ = json.loads(lines(COAST).out)["features"]
    east, west = today["geometry"]["coordinates"]
    assert [p for p in (*east, *west) if p in ([170, 10], [175, 10.25], [-179, 11])] == [
        [170, 10],
        [175, 10.25],
        [-179, 11],
    ]
    assert (east[-1][0], west[0][0]) == (180, -180)
    assert then["geometry"]["type"] == "LineString"
    assert then["geometry"]["coordinates"][0] == [-178, 10]
    assert then["geometry"]["coordinates"][-1] == [-167, 11]
    assert islet["geometry"]["coordinates"] == [[[0, 0], [0.1, 0], [0, 0.1], [0, 0]]]
    assert gap["geometry"] is None


def test_out(lines, here):
    """A file holds the same as standard output, but for the command; nothing is left beside it."""
    plain = json.loads(lines(COAST).out)
    assert lines(COAST, *ASKED, "--out", "then.geojson").out == ""
    written = json.loads((here / "then.geojson").read_text(encoding="utf-8"))
    assert written["features"] == plain["features"]
    assert leftovers(here) == []


def test_a_result_restored_again(lines, here):
    """What has been restored is refused as input in clear words, not silently overwritten."""
    lines(COAST, *ASKED, "--out", "then.geojson")
    answer = lines((here / "then.geojson").read_text(encoding="utf-8"), name="again.geojson")
    assert (answer.code, answer.out) == (1, "")
    assert (
        "again.geojson: feature 1: property 'status' has the name of a result; give it another name"
        in answer.err
    )


def test_geopackage(lines, here):
    """A GeoPackage holds the same features; nested properties are JSON."""
    geopandas = pytest.importorskip("geopandas")
    assert lines(COAST, *ASKED, "--out", "then.gpkg").code == 0
    table = geopandas.read_file(here / "then.gpkg")
    assert len(table) == 9
    assert table.geometry.notna().sum() == 4
    assert json.loads(table["tags"][0]) == ["a", {"b": None}]
    again = lines(COAST, *ASKED, "--out", "then.geojson")
    assert again.code == 0
    content = json.loads((here / "then.geojson").read_text(encoding="utf-8"))
    assert list(table["status"]) == [f["properties"]["status"] for f in content["features"]]


def test_geopackage_in(here, ask):
    """Lines come in from a GeoPackage too."""
    geopandas = pytest.importorskip("geopandas")
    from shapely.geometry import LineString

    frame = geopandas.GeoDataFrame(
        {"plate": ["alba"]}, geometry=[LineString([[0, 0], [0.2, 0.2]])], crs="EPSG:4326"
    )
    frame.to_file(here / "in.gpkg", driver="GPKG")
    content = json.loads(ask("lines", "in.gpkg", *ASKED).out)
    assert content["features"][1]["geometry"]["coordinates"][0] == [12, 0]


def test_the_demo(ask):
    """The example of the help: a margin without plates, cut along the demo outlines."""
    answer = ask(
        "lines", DEMO / "margin.geojson", "--history", DEMO / "history.toml", "--frame", "deep",
        "--ages", "0:120:60", "--outlines", DEMO / "outlines.geojson",
    )  # fmt: skip
    assert answer.code == 0
    got = [f["properties"] for f in json.loads(answer.out)["features"]]
    assert {p["plate_from"] for p in got} == {"outlines"}
    assert {p["frame_kind"] for p in got} == {"mantle"}
    assert [p["piece"] for p in got[::3]] == list(range(1, len(got) // 3 + 1))


def test_unknown_plate(lines):
    """A label that the history lacks is said once, with the likely one; --strict makes it a 1."""
    wrong = json.loads(json.dumps(COAST).replace('"alba"', '"albaa"'))
    answer = lines(wrong)
    assert answer.code == 0
    assert answer.said[0] == (
        "warning: coast.geojson: feature 1: plate 'albaa' is not in the history; did you mean 'alba'?"
    )
    assert lines(wrong, *ASKED, "--strict").code == 1


def point(*coordinates):
    return json.dumps({"type": "Point", "coordinates": coordinates})


BAD = {
    "not JSON": ("{", "coast.geojson:1:2: not valid JSON: "),
    "wrong type": ('{"type": "Topology"}', "coast.geojson: type = 'Topology': not GeoJSON (RFC 7946)"),
    "collection of geometries": (
        '{"type": "GeometryCollection", "geometries": []}',
        "coast.geojson: feature 1: geometry 'GeometryCollection': known are ",
    ),
    "off the globe": (point(3, 95), "coast.geojson: feature 1: position 3, 95: longitude in -360..360 and"),
    "text in a position": (point("3", 4), "coast.geojson: feature 1: position ['3', 4] is not two numbers"),
    "no features": (
        '{"type": "FeatureCollection", "features": []}',
        "coast.geojson: holds no feature; at least one is needed",
    ),
    "open ring": (
        '{"type": "Polygon", "coordinates": [[[0, 0], [1, 0], [1, 1], [0, 1]]]}',
        "coast.geojson: feature 1: ring 1 is not closed; its last position repeats its first",
    ),
    "flat ring": (
        '{"type": "Polygon", "coordinates": [[[0, 0], [1, 0], [1, 0], [0, 0]]]}',
        "coast.geojson: feature 1: ring 1 has 2 different vertices; it needs three",
    ),
    "one position": (
        '{"type": "LineString", "coordinates": [[0, 0]]}',
        "coast.geojson: feature 1: a line of 1 positions; it needs two",
    ),
    "half a turn": (
        '{"type": "LineString", "coordinates": [[0, 10], [180, -10]]}',
        "coast.geojson: feature 1: the edge from 0, 10 is half a great circle; put a vertex on it",
    ),
    "age in words": (
        '{"type": "Feature", "properties": {"oldest_ma": "old"}, "geometry": null}',
        "coast.geojson: feature 1: oldest_ma = 'old' is not a number",
    ),
}


@pytest.mark.parametrize(("content", "message"), BAD.values(), ids=BAD)
def test_bad_input(lines, here, content, message):
    """One line, exit 1, nothing written."""
    for out in ((), ("--out", "then.geojson"), ("--out", "then.gpkg")):
        answer = lines(content, *ASKED, *out)
        assert (answer.code, answer.out, len(answer.said)) == (1, "", 1)
        assert answer.err.startswith(f"error: {message}")
        assert leftovers(here) == []
        assert not list(here.glob("then.*"))


ASKING = {
    "missing file": (("none.geojson", *ASKED), 1, "none.geojson: no such file"),
    "unknown ending": (("coast.txt", *ASKED), 1, "coast.txt: cannot tell what it is; known endings are"),
    "unknown frame": (
        ("coast.geojson", "--history", "history.csv", "--frame", "deap", "--ages", "0"),
        1,
        "frame 'deap' is not in the history; did you mean 'deep'?",
    ),
    "no history": (("coast.geojson", "--frame", "deep", "--ages", "0"), 2, "Missing option '--history'"),
    "no ages": (("coast.geojson", *ASKED[:4]), 2, "Missing option '--ages'"),
    "ages of their own": (
        ("coast.geojson", *ASKED[:4], "--ages", "own"), 2, "--ages own has no meaning here: give ages in Ma"
    ),
    "output of another kind": (
        ("coast.geojson", *ASKED, "--out", "then.csv"), 1,
        "then.csv: cannot tell what to write; end the name in .geojson, .json, .gpkg",
    ),
    "no folder": (
        ("coast.geojson", *ASKED, "--out", "no/then.geojson"), 1,
        "no/then.geojson: cannot be written: there is no folder 'no'",
    ),
    "over its input": (
        ("coast.geojson", *ASKED, "--out", "coast.geojson"), 1,
        "coast.geojson: is a file that was read; give another name to write to",
    ),
    "no outlines": (
        ("coast.geojson", *ASKED, "--outlines", "none.geojson"), 1, "none.geojson: no such file"
    ),
}  # fmt: skip


@pytest.mark.parametrize(("args", "code", "message"), ASKING.values(), ids=ASKING)
def test_wrong_questions(here, ask, args, code, message):
    """One line that says what would be right, the exit code of the design, nothing written."""
    text = json.dumps(COAST)
    for name in ("coast.geojson", "coast.txt"):
        (here / name).write_text(text, encoding="utf-8")
    answer = ask("lines", *args)
    assert (answer.code, answer.out) == (code, "")
    assert answer.said[0].startswith(f"error: {message}")
    assert leftovers(here) == []
    assert not list(here.glob("then.*"))
    assert (here / "coast.geojson").read_text(encoding="utf-8") == text
