"""`oncewhere sites --outlines`, its scenario, and `oncewhere check` of outlines."""

import csv
import json
import math

import numpy as np
import pytest
import xarray as xr
from command_line.world import DEMO, SITES, leftovers, rows_of

HEAD = "site,lat_deg,lon_deg,age_ma,plate\n"
KM = 6371.0088


def box(west, south, east, north):
    return [[[west, south], [east, south], [east, north], [west, north], [west, south]]]


def write_outlines(path, *plates, name="plate"):
    features = [
        {
            "type": "Feature",
            "properties": {name: p, **more},
            "geometry": {"type": "Polygon", "coordinates": rings},
        }
        for p, rings, more in plates
    ]
    path.write_text(json.dumps({"type": "FeatureCollection", "features": features}), encoding="utf-8")


@pytest.fixture
def plates(here):
    """`alba` from 0E to 30E, alive 30-0 Ma; `bora` from 60E to 80E without ages; a file by another name."""
    alba, bora = ("alba", box(0, -20, 30, 20), {"oldest_ma": 30}), ("bora", box(60, -20, 80, 20), {})
    write_outlines(here / "o.geojson", alba, bora)
    write_outlines(here / "named.geojson", alba, bora, name="CODE")
    crust = xr.Dataset(
        {
            "age": (
                ("lat", "lon"),
                np.array([[12.0, 12.0, np.nan, 12.0], [12.0, 12.0, np.nan, 12.0]]),
                {"units": "Myr"},
            )
        },
        coords={"lat": [-10.0, 10.0], "lon": [10.0, 30.0, 50.0, 70.0]},
    )
    crust.to_netcdf(here / "crust.nc", engine="netcdf4")
    return here


def column(answer, name):
    return [row[name] for row in answer.rows]


def test_labels_from_outlines(plates, restore):
    """A label is filled where there is none, kept where there is, and a disagreement is said."""
    table = HEAD + "a,1,2,5,\nb,1,70,5,\nc,1,2,5,bora\nd,1,45,5,\ne,1,2,5,alba\nf,1,45,5,alba\n"
    answer = restore(table, "--outlines", "o.geojson")
    assert answer.code == 0
    assert column(answer, "plate") == ["alba", "bora", "bora", "", "alba", "alba"]
    assert column(answer, "plate_from") == ["outlines", "outlines", "given", "", "given", "given"]
    assert column(answer, "status") == ["restored"] * 3 + ["no plate here"] + ["restored"] * 2
    assert column(answer, "restored_note")[2] == "outlines say alba"
    assert answer.said == [
        "warning: sites.csv:4:5: plate 'bora' is given where the outlines say 'alba'; the label that was given is kept",
        "6 rows: 1 no plate here, 5 restored",
    ]
    # alba goes a degree east per Myr about the pole: the label moves the site as a given one would
    assert float(answer.rows[0]["restored_lon_deg"]) == pytest.approx(7.0, abs=1e-9)
    assert "outline_distance_km" not in answer.rows[0]


def test_a_table_without_a_column_of_plates(plates, restore):
    """The column is made; the user's own stay as they are."""
    answer = restore("lat_deg,lon_deg,age_ma,note\n1,2,5,x\n1,45,5,y\n", "--outlines", "o.geojson")
    assert column(answer, "plate") == ["alba", ""]
    assert column(answer, "note") == ["x", "y"]
    assert answer.code == 0


def test_another_property_and_the_nearest(plates, restore):
    """The property is chosen; the nearest outline within a distance, with the distance in the output."""
    options = ("--outlines", "named.geojson", "--plate-property", "CODE", "--within-km", "300")
    answer = restore(HEAD + "a,1,2,5,\nb,0,32,5,\nc,0,45,5,\n", *options)
    assert column(answer, "plate") == ["alba", "alba", ""]
    distance = column(answer, "outline_distance_km")
    assert [distance[0], distance[2]] == ["0", ""]
    assert float(distance[1]) == pytest.approx(math.radians(2.0) * KM, abs=1e-6)


# CASES.md, outlines: alive 30-0 Ma, sample 5 Ma (computed by a separate small program, not published)
LIFE = [("30", "restored"), ("30.001", "crust not yet formed"), ("0", "restored"), ("29.9", "restored")]


@pytest.mark.parametrize(("asked", "status"), LIFE)
def test_asked_beyond_the_crust(plates, restore, asked, status):
    """Asked 30 Ma on crust of 30-0 a site is restored; asked 30.001 it is not, and its row is kept."""
    answer = restore(HEAD + "a,1,2,5,\n", "--outlines", "o.geojson", "--ages", asked)
    assert (answer.code, column(answer, "status")) == (0, [status])
    assert (answer.rows[0]["restored_lat_deg"] == "") == (status != "restored")


def test_a_sample_older_than_its_crust(plates, restore):
    """A sample of 35 Ma on crust of 30-0 is older than its crust, whatever is asked; one of 30 is not."""
    table = HEAD + "a,1,2,35,\nb,1,2,30,\nc,1,70,35,\n"
    answer = restore(table, "--outlines", "o.geojson")
    assert column(answer, "status") == ["older than its crust", "restored", "outside the history"]
    asked = restore(table, "--outlines", "o.geojson", "--ages", "10,31")
    assert column(asked, "status")[:2] == ["older than its crust"] * 2
    assert column(asked, "status")[2:4] == ["restored", "crust not yet formed"]


def test_the_host_age_is_the_column_s_then_the_grid_s_then_the_outline_s(plates, restore):
    """Asked 13 Ma: a column that says 20 lets it pass, a grid that says 12 does not, a gap leaves the outline."""
    table = "site,lat_deg,lon_deg,age_ma,host_age_ma\na,1,2,5,20\nb,1,2,5,\nc,1,70,5,\nd,1,2,5,12.5\n"
    options = ("--outlines", "o.geojson", "--ages", "12,13")
    plain = restore(table, *options)
    late = "crust not yet formed"
    assert column(plain, "status") == ["restored"] * 7 + [late]
    grid = restore(table, *options, "--crust-age", "crust.nc:age")
    assert column(grid, "status") == [
        "restored",
        "restored",
        "restored",
        late,
        "restored",
        late,
        "restored",
        late,
    ]
    alone = restore(SITES + "a,1,2,5,alba\nb,1,50,5,alba\n", "--crust-age", "crust.nc", "--ages", "13")
    assert column(alone, "status") == [late, "restored"]


def test_an_outline_that_ended(plates, restore):
    """A plate that was there from 30 to 10 Ma has no place for a site younger than that."""
    write_outlines(
        plates / "o.geojson", ("alba", box(0, -20, 30, 20), {"oldest_ma": 30, "youngest_ma": 10})
    )
    answer = restore(HEAD + "a,1,2,20,\n", "--outlines", "o.geojson", "--ages", "9.999,10,30,30.001")
    assert column(answer, "status") == ["no plate here", "restored", "restored", "crust not yet formed"]


def test_what_edges_are_is_said(plates, restore):
    """CASES.md: 60.05N 5E is south of the great circle from 60N 0E to 60N 10E, north of the straight line."""
    write_outlines(plates / "o.geojson", ("alba", box(0, 50, 10, 60), {}))
    for edges, plate in (("great-circle", "alba"), ("straight", "")):
        answer = restore(
            HEAD + "a,60.05,5,5,\n", "--outlines", "o.geojson", "--edges", edges, "--out", "out.csv"
        )
        assert answer.code == 0
        (row,) = rows_of((plates / "out.csv").read_text())
        assert row["plate"] == plate
        settings = json.loads((plates / "out.csv.provenance.json").read_text())["settings"]
        assert settings["edges"] == edges
    inputs = json.loads((plates / "out.csv.provenance.json").read_text())["inputs"]
    assert "o.geojson" in [record["file"].rpartition("/")[2] for record in inputs]


def test_the_latitude_kind_binds_outlines_and_sites(plates, restore):
    """A slanting edge parts sites by kind: geodetic numbers of its ends bend it by hundreds of metres."""
    ring = [[[0, 0], [80, 60], [0, 60], [0, 0]]]
    write_outlines(plates / "o.geojson", ("alba", ring, {}))

    def middle(factor):
        # the middle of the arc between two places whose latitudes are t = atan(factor tan)
        top = math.atan(factor * math.tan(math.radians(60)))
        x = 1 + math.cos(top) * math.cos(math.radians(80))
        y, z = math.cos(top) * math.sin(math.radians(80)), math.sin(top)
        return math.degrees(math.atan(z / math.hypot(x, y) / factor)), math.degrees(math.atan2(y, x))

    for kind, factor in (("as-given", 1.0), ("geodetic", 1 - 0.00669438002290)):
        lat, lon = middle(factor)
        table = HEAD + f"a,{lat + 1e-6},{lon},5,\nb,{lat - 1e-6},{lon},5,\n"
        answer = restore(table, "--outlines", "o.geojson", "--latitudes", kind)
        assert column(answer, "plate") == ["alba", ""]


def test_the_demo_world_needs_no_labels(ask):
    """The demo's cores without their labels get them back from its outlines; places stay the same."""
    whole = ask(
        "sites", str(DEMO / "cores.csv"), "--history", str(DEMO / "history.toml"), "--frame", "deep"
    )
    with open(DEMO / "cores.csv", newline="", encoding="utf-8") as stream:
        rows = list(csv.reader(stream))
    at = rows[0].index("plate")
    with open("bare.csv", "w", newline="", encoding="utf-8") as stream:
        csv.writer(stream).writerows([*row[:at], *row[at + 1 :]] for row in rows)
    bare = ask("sites", "bare.csv", "--history", str(DEMO / "history.toml"), "--frame", "deep",
               "--outlines", str(DEMO / "outlines.geojson"))  # fmt: skip
    labels = [(w["plate"], b["plate"]) for w, b in zip(whole.rows, bare.rows, strict=True)]
    given = [(one, other) for one, other in labels if one]
    assert len(given) > 20
    # a label that a site was given may contradict the outline; those are said when both are there
    both = ask("sites", str(DEMO / "cores.csv"), "--history", str(DEMO / "history.toml"), "--frame", "deep",
               "--outlines", str(DEMO / "outlines.geojson"))  # fmt: skip
    said = sum("is given where the outlines say" in line for line in both.said)
    assert sum(one != other for one, other in given if other) == said
    same = [
        n for n, (one, other) in enumerate(labels) if one == other and whole.rows[n]["status"] == "restored"
    ]
    for n in same:
        if bare.rows[n]["status"] == "restored":
            assert bare.rows[n]["restored_lat_deg"] == whole.rows[n]["restored_lat_deg"]
    assert len(same) > 15


# --- rides -------------------------------------------------------------------------------------------

RIDES = "plate,rides_on,youngest_ma,oldest_ma\nterra,bora,0,6\nterra,alba,6,30\n"


def test_rides(plates, restore):
    """A piece that docked at 6 Ma: on bora since, with alba alone before; its ledger names the ride."""
    (plates / "rides.csv").write_text(RIDES, encoding="utf-8")
    table = SITES + "a,0,90,4,terra\nb,0,90,6,terra\nc,0,90,10,terra\n"
    answer = restore(table, "--rides", "rides.csv", "--ledger", "ledger.csv")
    assert answer.code == 0
    # bora turns half a degree per Myr about 0N 0E on alba and lifts the place to 2, then 3 degrees north;
    # before 6 Ma alba carries it east, a degree per Myr about the north pole
    places = [(float(row["restored_lat_deg"]), float(row["restored_lon_deg"])) for row in answer.rows]
    assert np.array(places) == pytest.approx(np.array([(2.0, 94.0), (3.0, 96.0), (3.0, 100.0)]), abs=1e-9)
    ledger = rows_of((plates / "ledger.csv").read_text())
    assert {row["relative_to"] for row in ledger if row["plate"] == "terra"} == {"bora", "alba"}
    assert any("rides" in " ".join(row.values()) for row in ledger)


def test_rides_at_fault(plates, restore):
    """A table of rides with a gap is one line with its place; nothing is written."""
    (plates / "rides.csv").write_text(RIDES.replace("alba,6", "alba,7"), encoding="utf-8")
    answer = restore(SITES + "a,0,90,4,terra\n", "--rides", "rides.csv", "--out", "out.csv")
    assert (answer.code, answer.out) == (1, "")
    assert answer.said == [
        "error: rides.csv:3: terra on alba begins at 7 Ma where 6 Ma is expected; rides follow one another"
    ]
    assert not (plates / "out.csv").exists()


# --- the scenario ------------------------------------------------------------------------------------

SCENARIO = """\
version = 1
[history]
file = "history.csv"
rides = "rides.csv"
[frame]
name = "deep"
kind = "mantle"
[outlines]
file = "named.geojson"
plate_property = "CODE"
within_km = 300.0
[crust]
file = "crust.nc"
[[task]]
name = "cores"
kind = "sites"
file = "sites.csv"
ages = "5,13"
"""


def test_the_same_in_a_scenario(plates, ask, restore):
    """Outlines, crust and rides in a scenario give what the options give, row by row."""
    (plates / "rides.csv").write_text(RIDES, encoding="utf-8")
    (plates / "s.toml").write_text(SCENARIO, encoding="utf-8")
    table = HEAD + "a,1,2,5,\nb,0,32,5,\nc,1,70,5,\nd,1,2,5,bora\ne,0,90,5,terra\nf,50,50,5,\ng,1,2,12.5,\n"
    options = ["--outlines", "named.geojson", "--plate-property", "CODE", "--within-km", "300",
               "--crust-age", "crust.nc", "--rides", "rides.csv", "--ages", "5,13", "--frame-kind", "mantle"]  # fmt: skip
    by_options = restore(table, *options)
    run = ask("run", "s.toml", "--out", "done")
    assert run.code == 0
    assert rows_of((plates / "done" / "cores.csv").read_text()) == by_options.rows
    findings = rows_of((plates / "done" / "findings.csv").read_text())
    assert [f["kind"] for f in findings if f["kind"] == "plate differs"] == ["plate differs"]
    record = json.loads((plates / "done" / "run.json").read_text())
    files = {entry["file"].rpartition("/")[2] for entry in record["tasks"]["cores"]["inputs"]}
    assert {"named.geojson", "crust.nc", "sites.csv", "history.csv"} <= files


# --- check -------------------------------------------------------------------------------------------


def test_check_of_the_demo_s_outlines(ask):
    """A complete tiling: no finding, exit 0, an empty list as JSON."""
    answer = ask("check", str(DEMO / "outlines.geojson"))
    assert (answer.code, answer.out, answer.said) == (0, "", ["0 errors, 0 warnings, 0 notes"])
    answer = ask("check", str(DEMO / "outlines.geojson"), "--json")
    assert (answer.code, json.loads(answer.out)) == (0, [])


def test_check_says_what_is_wrong(here, ask):
    """A ring that crosses itself is an error and exit 1; the JSON names file, kind and remedy."""
    crossed = [[[0, 0], [20, 20], [20, 0], [0, 30], [0, 0]]]
    write_outlines(here / "o.geojson", ("a", crossed, {}), ("b", box(40, 0, 60, 20), {}))
    answer = ask("check", "o.geojson")
    assert answer.code == 1
    assert "error: o.geojson: feature 1: a: the ring crosses itself once near " in answer.out
    found = json.loads(ask("check", "o.geojson", "--json").out)
    assert {"self-crossing", "gap", "total area"} <= {record["kind"] for record in found}
    assert all(
        set(record) >= {"severity", "kind", "file", "line", "what", "km", "remedy"} for record in found
    )


def test_notes_and_warnings_do_not_fail_a_check(here, ask):
    """Gaps, an overlap and a large plate: exit 0."""
    large = [box(0, 0, 30, 30)[0][::-1]]
    write_outlines(here / "o.geojson", ("a", large, {}), ("b", box(40, 0, 60, 20), {}))
    answer = ask("check", "o.geojson", "--json")
    kinds = {record["kind"]: record["severity"] for record in json.loads(answer.out)}
    assert kinds == {"orientation": "warning", "overlap": "warning", "gap": "note", "total area": "note"}
    assert answer.code == 0


def test_check_of_a_scenario_compares_labels(plates, ask):
    """Plates of the history without an outline, and an outline that the history does not move."""
    (plates / "rides.csv").write_text(RIDES, encoding="utf-8")
    write_outlines(
        plates / "named.geojson",
        ("alba", box(0, -20, 30, 20), {}),
        ("xeno", box(60, -20, 80, 20), {}),
        name="CODE",
    )
    (plates / "sites.csv").write_text(SITES, encoding="utf-8")
    (plates / "s.toml").write_text(SCENARIO, encoding="utf-8")
    found = json.loads(ask("check", "s.toml", "--json").out)
    said = [
        record["what"]
        for record in found
        if "outline" in record["kind"] or "without rows" in record["kind"]
    ]
    assert "plate 'xeno' has an outline and no rows in the history" in said
    (bare,) = [what for what in said if what.startswith("plates of the history without an outline: ")]
    assert {"bora", "NA"} <= set(bare.partition(": ")[2].split(", "))
    assert "alba" not in bare.partition(": ")[2].split(", ")
    assert leftovers(plates) == []
