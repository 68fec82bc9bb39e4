"""`oncewhere flowlines`, `isochrons`, `trails`, `circles`: columns, answers, files, and bad input.

In the small world `alba` turns eastwards into the past about the north pole, 1 degree per Myr relative
to `deep`: of new crust between the two half stays half a degree per Myr west, half goes east.
"""

import json
import math

import pytest
from command_line.world import DEMO, header_of, rows_of

FLOWLINES = [
    *("start", "plate", "age_ma", "lat_deg", "lon_deg", "asked"),
    *("ellipse_major_km", "ellipse_minor_km", "ellipse_azimuth_deg"),
]
TRAILS = ["hotspot", "plate", *FLOWLINES[2:5], *FLOWLINES[6:]]
BETWEEN = ("--between", "alba,deep")
HISTORY = ("--history", "history.csv")
KM_PER_DEGREE = math.radians(1.0) * 6371.0088


@pytest.fixture
def spread(here, ask):
    """A function that asks for flowlines from two start points."""
    (here / "ridge.csv").write_text("start,lat_deg,lon_deg,note\nP,0,20,x\nQ,30,-170,y\n", encoding="utf-8")

    def asking(*args, pair=BETWEEN, history="history.csv"):
        return ask("flowlines", "ridge.csv", *pair, "--history", history, *args)

    return asking


def numbers(rows, name):
    return [float(row[name]) for row in rows]


def test_flowlines(spread):
    """Long form: by start point, plate, age; own columns go on behind; the start keeps its digits."""
    answer = spread("--ages", "0,20")
    assert (answer.code, answer.err) == (0, "")
    assert header_of(answer.out)[:9] == FLOWLINES
    assert [row["start"] for row in answer.rows] == ["P"] * 4 + ["Q"] * 4
    assert [row["plate"] for row in answer.rows[:4]] == ["alba", "alba", "deep", "deep"]
    assert numbers(answer.rows, "lon_deg") == pytest.approx([20, 10, 20, 30, -170, 180 - 360, -170, -160])
    assert (answer.rows[0]["lat_deg"], answer.rows[0]["lon_deg"]) == ("0", "20")
    assert {row["asked"] for row in answer.rows} == {"true"}
    assert answer.rows[5]["note"] == "y"
    assert answer.rows[0]["ellipse_major_km"] == ""


def test_ages_cut_no_stages(spread):
    one, many = (spread("--ages", ages).rows for ages in ("40", "0:40:1"))
    last = {(row["start"], row["plate"]): row for row in many if row["age_ma"] == "40"}
    for row in one:
        assert row == last[row["start"], row["plate"]]


def test_a_swapped_pair(spread):
    one = spread("--ages", "10,40", "--share", "0.2").rows
    other = spread("--ages", "10,40", "--share", "0.8", pair=("--between", "deep,alba")).rows

    def key(row):
        return row["start"], row["plate"], row["age_ma"]

    for row, same in zip(sorted(one, key=key), sorted(other, key=key), strict=True):
        for name in ("lat_deg", "lon_deg"):
            assert float(row[name]) == pytest.approx(float(same[name]), abs=1e-10)


def test_a_table_of_shares(here, spread):
    (here / "shares.csv").write_text("younger_ma,older_ma,share\n0,10,0.5\n10,40,0\n", encoding="utf-8")
    answer = spread("--ages", "30", "--share", "shares.csv")
    assert numbers(answer.rows[:2], "lon_deg") == pytest.approx([15.0, 45.0])
    (here / "shares.csv").write_text("younger_ma,older_ma,share\n0,10,0.5\n", encoding="utf-8")
    answer = spread("--ages", "30", "--share", "shares.csv")
    assert (answer.code, answer.out) == (1, "")
    assert answer.said[0].startswith("error: shares.csv: share: says nothing for 10..30 Ma")


def test_ellipses(spread):
    """Half of the row's error, at its age: the covariance's sigma along z is 2e-3 rad."""
    row = spread("--ages", "10", history="known.csv").rows[0]
    east = 2.0e-3 / 2.0 * 6371.0088
    dof10 = math.sqrt(20 / 2 * (0.05 ** (-2 / 20) - 1) * 2)
    assert float(row["ellipse_major_km"]) == pytest.approx(dof10 * east, rel=2e-3)
    assert (row["ellipse_dof"], row["errors"]) == ("20", "rows only")
    assert float(row["ellipse_azimuth_deg"]) == pytest.approx(90.0, abs=1.0)


def test_drawing_and_frames(spread):
    answer = spread("--ages", "15", "--every-myr", "10", "--frame", "deep")
    mine = answer.rows[:3]
    assert [(row["age_ma"], row["asked"]) for row in mine] == [
        ("0", "false"),
        ("10", "false"),
        ("15", "true"),
    ]
    # in the frame of `deep` the ridge went east by half a degree per Myr, on both arms
    assert numbers(answer.rows[:6], "lon_deg") == pytest.approx([20.0, 25.0, 27.5] * 2)
    assert (mine[0]["coordinates"], mine[0]["frame_kind"]) == ("deep", "plate")
    then = spread("--ages", "15", "--frame", "deep", "--restored-age", "5").rows
    assert numbers(then[:2], "lon_deg") == pytest.approx([17.5, 27.5])


def test_extinct_ridges_and_jumps(here, ask):
    (here / "old.csv").write_text(
        "start,lat_deg,lon_deg,age_ma,on_plate\nX,0,5,20,alba\nJ,0,0,,\n", encoding="utf-8"
    )
    (here / "jumps.csv").write_text("start,age_ma,lat_deg,lon_deg\nJ,20,0,18\n", encoding="utf-8")
    answer = ask("flowlines", "old.csv", *BETWEEN, *HISTORY, "--ages", "10,20,30", "--jumps", "jumps.csv")
    assert answer.code == 0
    assert answer.said == ["12 rows: 10 restored, 2 younger than its start"]
    assert answer.rows[0]["lat_deg"] == ""
    assert answer.rows[1]["lon_deg"] == "5"
    assert numbers(answer.rows[4:6], "lon_deg") == pytest.approx([25.0, 30.0])
    assert numbers(answer.rows[6:], "lon_deg") == pytest.approx([-5.0, -10.0, -7.0, 5.0, 10.0, 23.0])


def test_rates_along(spread):
    rows = spread("--ages", "40", "--rates", history="known.csv").rows
    assert [(row["plate"], row["younger_ma"], row["older_ma"]) for row in rows[:4]] == [
        *(("alba", "0", "10"), ("alba", "10", "40")),
        *(("deep", "0", "10"), ("deep", "10", "40")),
    ]
    assert numbers(rows[:2], "full_rate_mm_yr") == pytest.approx([KM_PER_DEGREE] * 2, abs=1e-6)
    assert numbers(rows[:2], "half_rate_mm_yr") == pytest.approx([KM_PER_DEGREE / 2] * 2, abs=1e-6)
    assert numbers(rows[:4], "azimuth_deg") == pytest.approx([270.0, 270.0, 90.0, 90.0], abs=1e-9)
    # sigma about z at 10 Ma is 2e-3 rad
    assert float(rows[0]["full_rate_sigma_mm_yr"]) == pytest.approx(2e-4 * 6371.0088, abs=1e-6)


def test_ages_at_distances(spread):
    rows = spread("--ages", "40", "--at-km", "0:3000:1000").rows
    expected = [0.0, *(km / (KM_PER_DEGREE / 2.0) for km in (1000, 2000))]
    assert numbers(rows[:3], "age_ma") == pytest.approx(expected)
    assert rows[3]["age_ma"] == ""


def test_observed_points(here, spread):
    (here / "seen.csv").write_text("plate,lat_deg,lon_deg\ndeep,0.1,25\nalba,0.1,14\n", encoding="utf-8")
    rows = spread("--ages", "40", "--observed", "seen.csv").rows
    assert numbers(rows, "distance_km") == pytest.approx(
        [-0.1 * KM_PER_DEGREE, 0.1 * KM_PER_DEGREE], abs=1e-3
    )
    assert numbers(rows, "age_ma") == pytest.approx([10.0, 12.0], abs=1e-3)
    rows = spread("--ages", "40", "--observed", "seen.csv", "--by-stage").rows
    assert numbers(rows, "rms_km") == pytest.approx([0.1 * KM_PER_DEGREE] * 4, abs=1e-3)


@pytest.mark.parametrize(
    ("args", "code", "message"),
    [
        (("--ages", "own"), 2, "--ages own has no meaning"),
        (("--ages", "10", "--share", "1.5"), 2, "lies in 0..1"),
        (("--ages", "10", "--share", "nothing.csv"), 1, "nothing.csv: no such file"),
        (("--ages", "10", "--restored-age", "5"), 2, "--restored-age needs --frame"),
        (("--ages", "10", "--by-stage"), 2, "--by-stage needs --observed"),
        (("--ages", "10", "--rates", "--at-km", "5"), 2, "are different tables"),
        (("--ages", "10", "--rates", "--frame", "deep"), 2, "leave out"),
        (("--ages", "10", "--at-km", "x"), 2, "write distances in km"),
        (("--ages", "10", "--frame", "dep"), 1, "frame 'dep' is not in the history"),
        (("--ages", "10", "--tolerance-m", "0"), 2, "--tolerance-m"),
        (("--ages", "50"), 1, "4 rows: 4 outside the history"),
    ],
)
def test_flowlines_at_fault(spread, args, code, message):
    answer = spread(*args)
    assert answer.code == code
    assert message in answer.err
    assert len([line for line in answer.said if line.startswith("error")]) <= 1


@pytest.mark.parametrize("pair", ["alba", "alba,alba", "alba,", "alba,deep,bora"])
def test_pairs_at_fault(spread, pair):
    answer = spread("--ages", "10", pair=("--between", pair))
    assert (answer.code, answer.out) == (2, "")


def test_off_the_boundary_is_allowed_but_said(ask):
    """In the demo world a ridge point lies on the boundary of its pair, and far from that of another."""
    files = (str(DEMO / "ridge.csv"), "--history", str(DEMO / "history.toml"))
    common = ("--ages", "10", "--outlines", str(DEMO / "outlines.geojson"))
    on = ask("flowlines", *files, "--between", "ovrath,quemmel", *common)
    off = ask("flowlines", *files, "--between", "wirrum,zobbet", *common)
    assert (on.code, on.err, off.code) == (0, "", 0)
    assert "note:" in off.said[0]
    assert "start 'ridge-01' lies off the boundary of wirrum and zobbet" in off.said[0]


@pytest.fixture
def ridge(here):
    """A ridge line along 20E with a transform."""
    line = {"type": "LineString", "coordinates": [[20, -10], [20, 0], [22, 0], [22, 10]]}
    (here / "ridge.geojson").write_text(json.dumps(line), encoding="utf-8")
    return "ridge.geojson"


def test_isochrons(here, ask, ridge):
    """Lines in GeoJSON, points in a table; both say that the ridge's shape is assumed."""
    answer = ask("isochrons", ridge, *BETWEEN, *HISTORY, "--ages", "20", "--out", "iso.geojson")
    assert (answer.code, answer.err) == (0, "")
    content = json.loads((here / "iso.geojson").read_text())
    lines = [feature["geometry"]["coordinates"] for feature in content["features"]]
    assert [[lon for lon, _ in line] for line in lines] == [
        pytest.approx([10, 10, 12, 12]),
        pytest.approx([30, 30, 32, 32]),
    ]
    assumes = content["features"][0]["properties"]["assumes"]
    assert (
        assumes
        == content["provenance"]["settings"]["assumes"]
        == "the ridge had today's shape at every age"
    )
    rows = ask("isochrons", ridge, *BETWEEN, *HISTORY, "--ages", "20").rows
    assert numbers(rows, "lon_deg") == pytest.approx([10, 10, 12, 12, 30, 30, 32, 32])
    assert {row["assumes"] for row in rows} == {assumes}


def test_isochrons_of_chrons(ask, ridge):
    """C5n.2n(o) is 10.949 Ma in Cande & Kent 1995, Table 2 (read)."""
    more = ("--chrons", "C5n.2n(o)", "--time-scale", "ck95")
    rows = ask("isochrons", ridge, *BETWEEN, *HISTORY, *more).rows
    assert {(row["age_ma"], row["chron"]) for row in rows} == {("10.949", "C5n.2n(o)")}
    assert float(rows[0]["lon_deg"]) == pytest.approx(20.0 - 10.949 / 2.0)


def test_picks(here, ask, ridge):
    (here / "picks.csv").write_text("plate,lat_deg,lon_deg,age_ma\ndeep,-5,30.2,20\n", encoding="utf-8")
    (row,) = ask("isochrons", ridge, *BETWEEN, *HISTORY, "--observed", "picks.csv").rows
    level = math.asin(math.cos(math.radians(5.0)) * math.sin(math.radians(0.2)))
    assert float(row["distance_km"]) == pytest.approx(level * 6371.0088, abs=1e-6)


@pytest.mark.parametrize(
    ("args", "code", "message"),
    [
        ((), 2, "give either --ages or --chrons"),
        (("--chrons", "C5n.2n(o)"), 2, "--chrons needs --time-scale"),
        (("--ages", "10", "--ridge-age", "5"), 2, "--ridge-age needs --on-plate"),
        (("--ages", "10", "--longest-km", "0"), 2, "--longest-km"),
        (("--ages", "10", "--by-stage"), 2, "--by-stage needs --observed"),
    ],
)
def test_isochrons_at_fault(ask, ridge, args, code, message):
    answer = ask("isochrons", ridge, *BETWEEN, *HISTORY, *args)
    assert (answer.code, answer.out) == (code, "")
    assert message in answer.err


def test_lines_at_fault(here, ask):
    """One point is no line; a repeated point is said and kept."""
    (here / "one.csv").write_text("lat_deg,lon_deg\n1,2\n", encoding="utf-8")
    answer = ask("isochrons", "one.csv", *BETWEEN, *HISTORY, "--ages", "10")
    assert (answer.code, answer.out) == (1, "")
    assert answer.said == ["error: one.csv: line '1' has 1 point; a line needs two different ones"]
    (here / "two.csv").write_text("lat_deg,lon_deg\n1,2\n1,2\n3,2\n", encoding="utf-8")
    answer = ask("isochrons", "two.csv", *BETWEEN, *HISTORY, "--ages", "10")
    assert (answer.code, len(answer.rows)) == (0, 6)
    assert "1 point repeats the one before it" in answer.err


@pytest.fixture
def trail(here, ask):
    """A function that asks for the trail of one hotspot on `alba`."""
    (here / "hotspots.csv").write_text("hotspot,lat_deg,lon_deg\nh,10,5\n", encoding="utf-8")
    fixed = ("--plate", "alba", "--frame", "deep", *HISTORY)

    def asking(*args):
        return ask("trails", "hotspots.csv", *fixed, *args)

    return asking


def test_trails(trail):
    answer = trail("--ages", "0:40:20")
    assert (answer.code, answer.err) == (0, "")
    assert header_of(answer.out)[: len(TRAILS)] == TRAILS
    assert numbers(answer.rows, "lon_deg") == pytest.approx([5.0, -15.0, -35.0])
    assert (answer.rows[0]["frame"], answer.rows[0]["shown"]) == ("deep", "crust")
    passage = trail("--ages", "0:40:20", "--shown", "passage").rows
    assert numbers(passage, "lon_deg") == pytest.approx([5.0, 25.0, 45.0])


def test_moving_hotspots_and_samples(here, trail):
    (here / "paths.csv").write_text(
        "hotspot,age_ma,lat_deg,lon_deg\nh,0,0,0\nh,20,0,-10\n", encoding="utf-8"
    )
    answer = trail("--ages", "20,30", "--paths", "paths.csv")
    assert answer.said == ["2 rows: 1 outside the hotspot's path, 1 restored"]
    assert float(answer.rows[0]["lon_deg"]) == pytest.approx(-30.0)
    (here / "samples.csv").write_text("lat_deg,lon_deg,age_ma\n0.5,-15,12\n", encoding="utf-8")
    (row,) = trail("--ages", "20", "--paths", "paths.csv", "--samples", "samples.csv").rows
    assert float(row["predicted_age_ma"]) == pytest.approx(10.0, abs=1e-6)
    assert float(row["age_difference_myr"]) == pytest.approx(2.0, abs=1e-6)
    assert float(row["across_km"]) == pytest.approx(0.5 * KM_PER_DEGREE, abs=1e-4)


@pytest.mark.parametrize(
    ("args", "code", "message"),
    [
        (("--ages", "own"), 2, "--ages own"),
        (("--ages", "50"), 1, "1 row: 1 outside the history"),
        (("--ages", "10", "--shown", "passage", "--samples", "s.csv"), 2, "leave out --shown passage"),
        (("--ages", "10", "--paths", "p.csv"), 1, "p.csv: no such file"),
    ],
)
def test_trails_at_fault(trail, args, code, message):
    answer = trail(*args)
    assert answer.code == code
    assert message in answer.err


def test_circles(here, ask, spread):
    answer = ask("circles", "ridge.csv", "--pole", "90,0", "--arc", "-10,10", "--step-deg", "10")
    assert (answer.code, answer.err) == (0, "")
    assert [row["circle"] for row in answer.rows] == ["P"] * 3 + ["Q"] * 3
    assert numbers(answer.rows, "lon_deg") == pytest.approx([10, 20, 30, -180, -170, -160])
    assert ask("circles", "ridge.csv", "--pole", "90,0", "--out", "c.geojson").code == 0
    first = json.loads((here / "c.geojson").read_text())["features"][0]
    assert first["geometry"]["type"] == "MultiLineString"
    assert first["properties"]["radius_deg"] == 90.0


def test_circles_about_a_stage_pole(ask, spread):
    stage = ("--plate", "alba", "--relative-to", "deep", "--from", "40", "--to", "10", *HISTORY)
    answer = ask("circles", "ridge.csv", *stage, "--step-deg", "90")
    # forward in time it turned clockwise: about the south pole
    assert numbers(answer.rows[:1], "pole_lat_deg") == pytest.approx([-90.0])
    assert {round(lat, 9) for lat in numbers(answer.rows[:5], "lat_deg")} == {0.0}


@pytest.mark.parametrize(
    ("args", "code", "message"),
    [
        ((), 2, "give either --history FILE or --pole"),
        (HISTORY, 2, "give --plate, --relative-to and --from"),
        (("--pole", "90,0", "--arc", "10,10"), 2, "must lie above the start"),
        (("--plate", "twin", "--relative-to", "twin", "--from", "5", *HISTORY), 1, "no pole"),
    ],
)
def test_circles_at_fault(ask, spread, args, code, message):
    answer = ask("circles", "ridge.csv", *args)
    assert (answer.code, answer.out) == (code, "")
    assert message in answer.err


def test_files_carry_their_origin(here, spread):
    """Beside a CSV file its provenance; in JSON `asked` is a yes or no."""
    assert spread("--ages", "20", "--out", "out.csv").code == 0
    record = json.loads((here / "out.csv.provenance.json").read_text())
    assert record["settings"]["between"] == ["alba", "deep"]
    assert [entry["file"] for entry in record["inputs"]] == ["ridge.csv", "history.csv"]
    assert rows_of((here / "out.csv").read_text())[0]["asked"] == "true"
    assert spread("--ages", "20", "--out", "out.json").code == 0
    assert json.loads((here / "out.json").read_text())["rows"][0]["asked"] is True
