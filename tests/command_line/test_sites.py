"""`oncewhere sites`: columns, statuses, ages, ranges, hosts, and the user's own columns untouched."""

import csv
import io
import math

import pytest
from command_line.world import SITES, header_of, in_a_process, in_order

ADDED = [
    *("restored_age_ma", "restored_lat_deg", "restored_lon_deg"),
    *("ellipse_major_km", "ellipse_minor_km", "ellipse_azimuth_deg", "status"),
]
RANGES = [
    *("restored_young_lat_deg", "restored_young_lon_deg"),
    *("restored_old_lat_deg", "restored_old_lon_deg", "path_km"),
]
DEGREE_KM = math.pi / 180.0 * 6371.0088


def position(row):
    return float(row["restored_lat_deg"]), float(row["restored_lon_deg"])


def test_columns_and_position(restore):
    """Own columns first, then the agreed names in their order; a site goes where it should."""
    answer = restore(SITES + "a,0,0,5,alba\nb,10,170,20,alba\nc,0,90,20,bora\n")
    assert answer.code == 0
    assert answer.said == ["3 rows: 3 restored"]
    header = header_of(answer.out)
    assert header[:6] == ["site", "lat_deg", "lon_deg", "age_ma", "plate", "plate_from"]
    assert in_order(ADDED, header)
    assert position(answer.rows[0]) == pytest.approx((0.0, 5.0), abs=1e-9)
    assert position(answer.rows[1]) == pytest.approx((10.0, -170.0), abs=1e-9)
    # ten degrees about 0N 0E lift 0N 90E to 10N 90E, then alba carries it 20 degrees east
    assert position(answer.rows[2]) == pytest.approx((10.0, 110.0), abs=1e-9)
    assert [row["plate_from"] for row in answer.rows] == ["given"] * 3
    said = [answer.rows[0][name] for name in ("frame", "frame_kind", "latitudes")]
    assert said == ["deep", "plate", "as-given"]


def test_the_kind_of_the_frame_may_be_stated(restore):
    """A table has no place for the frame's kind; the command line has."""
    answer = restore(SITES + "a,0,0,5,alba\n", "--frame-kind", "mantle")
    assert answer.rows[0]["frame_kind"] == "mantle"


def test_ellipses_only_where_errors_are_known(restore):
    """Rows without covariances give empty ellipses; known ones numbers and what is in them."""
    table = SITES + "a,0,0,10,alba\n"
    unknown = restore(table).rows[0]
    assert [unknown[name] for name in ADDED[3:6]] == ["", "", ""]
    assert unknown["errors"] == "not known"
    known = restore(table, history="known.csv").rows[0]
    # at 10 Ma about 90N with variances (2, 3, 4)e-6: at 0N 0E north moves with y, east with z;
    # kappa was estimated with 20 degrees of freedom, k^2 = 2 F(0.95; 2, 20) = nu (0.05^(-2/nu) - 1)
    k = math.sqrt(20.0 * (0.05 ** (-0.1) - 1.0))
    assert float(known["ellipse_dof"]) == pytest.approx(20.0, rel=1e-6)
    assert float(known["ellipse_major_km"]) == pytest.approx(k * math.sqrt(4e-6) * 6371.0088, abs=2e-6)
    assert float(known["ellipse_minor_km"]) == pytest.approx(k * math.sqrt(3e-6) * 6371.0088, abs=2e-6)
    assert float(known["ellipse_azimuth_deg"]) == pytest.approx(90.0, abs=1e-6)
    assert known["errors"] == "rows only"


STATUS_ROWS = """\
a,0,0,5,alba,
b,0,0,5,alba,3
d,0,0,5,,
e,0,0,15,gapa,
f,0,0,50,alba,
g,0,0,5,twin,
h,0,0,,alba,
i,95,0,5,alba,
j,0,0,5,alab,
"""
STATUSES = {
    "a": "restored",
    "b": "older than its crust",
    "d": "no plate here",
    "e": "gap in history",
    "f": "outside the history",
    "g": "two chains",
    "h": "no age",
    "i": "bad coordinate",
    "j": "outside the history",
}


def test_every_status(restore):
    """Each reason why a site has no answer is its row's status, counted on standard error."""
    answer = restore("site,lat_deg,lon_deg,age_ma,plate,host_age_ma\n" + STATUS_ROWS)
    assert {row["site"]: row["status"] for row in answer.rows} == STATUSES
    assert all((row["restored_lat_deg"] == "") == (row["status"] != "restored") for row in answer.rows)
    assert answer.code == 1
    assert answer.said[0] == "error: sites.csv:9:2: lat_deg = 95; a latitude must lie in -90..90"
    assert answer.said[1] == (
        "warning: sites.csv:10:5: plate 'alab' is not in the history; did you mean 'alba'?"
    )
    assert answer.said[2] == (
        "9 rows: 1 bad coordinate, 1 gap in history, 1 no age, 1 no plate here, 1 older than its crust,"
        " 2 outside the history, 1 restored, 1 two chains"
    )


def test_crust_that_was_not_yet_there(restore):
    """Asked beyond its host age a site has no place; younger samples on older crust get a note."""
    table = "site,lat_deg,lon_deg,age_ma,plate,host_age_ma\na,0,0,2,alba,8\n"
    answer = restore(table, "--ages", "1,5,8,9")
    assert answer.code == 0
    assert [row["status"] for row in answer.rows] == ["restored"] * 3 + ["crust not yet formed"]
    note = "sample is younger than the asked age"
    assert [row["restored_note"] for row in answer.rows] == ["", note, note, "its crust is 8 Myr old"]
    assert answer.said == ["4 rows: 1 crust not yet formed, 3 restored"]


@pytest.mark.parametrize(
    ("rows", "plain", "strict"),
    [("a,0,0,5,alba\n", 0, 0), ("a,0,0,50,alba\n", 0, 1), ("a,99,0,5,alba\n", 1, 1), ("", 0, 0)],
)
def test_exit_codes(restore, rows, plain, strict):
    """Domain statuses end with 0, malformed rows with 1; --strict makes any but `restored` a 1."""
    assert restore(SITES + rows).code == plain
    assert restore(SITES + rows, "--strict").code == strict


@pytest.mark.parametrize(
    ("ages", "expected"),
    [
        ("own", [5.0]),
        ("0,10,3.5", [0.0, 10.0, 3.5]),
        ("0:10:5", [0.0, 5.0, 10.0]),
        ("0:0.3:0.1", [0.0, 0.1, 0.2, 0.3]),
    ],
)
def test_ages(restore, ages, expected):
    """Own ages, a list in its order, or start:stop:step with the stop; one row per site and age."""
    answer = restore(SITES + "a,0,0,5,alba\nb,0,0,5,alba\n", "--ages", ages)
    assert answer.code == 0
    got = [(row["site"], float(row["restored_age_ma"])) for row in answer.rows]
    assert got == [(site, age) for site in "ab" for age in expected]
    assert [position(row)[1] for row in answer.rows] == pytest.approx(expected * 2, abs=1e-9)


def test_a_site_without_an_age_at_given_ages(restore):
    """Given ages need no own ages, nor a column of them."""
    answer = restore("lat_deg,lon_deg,plate\n0,0,alba\n", "--ages", "7")
    assert (answer.code, answer.rows[0]["restored_lon_deg"]) == (0, "7")


def test_today_keeps_its_digits(restore):
    """At 0 Ma a site is where it is, to the last digit given; longitudes are written in [-180, 180)."""
    answer = restore(SITES + "a,12.3456789012345,181.5,0,bora\nb,-90,180,0,alba\n")
    assert answer.rows[0]["restored_lat_deg"] == "12.3456789012"
    assert [row["restored_lon_deg"] for row in answer.rows] == ["-178.5", "-180"]


def test_age_ranges_are_path_segments(restore):
    """A range gives its two ends, a place between them and the length of the path."""
    table = "site,lat_deg,lon_deg,age_ma,age_young_ma,age_old_ma,plate\na,0,0,,4,9,alba\nb,0,0,5,4,9,alba\nc,0,0,5,,,alba\n"
    answer = restore(table)
    assert answer.code == 0
    assert in_order(ADDED + RANGES, header_of(answer.out))
    middle, stated, single = answer.rows
    for row, lon in ((middle, 6.5), (stated, 5.0)):
        assert position(row) == pytest.approx((0.0, lon), abs=1e-9)
        assert float(row["restored_young_lon_deg"]) == pytest.approx(4.0, abs=1e-9)
        assert float(row["restored_old_lon_deg"]) == pytest.approx(9.0, abs=1e-9)
        assert float(row["path_km"]) == pytest.approx(5.0 * DEGREE_KM, abs=1e-5)
    assert middle["restored_note"] == "age is the middle of its range"
    assert stated["restored_note"] == ""
    assert [single[name] for name in RANGES] == [""] * 5


@pytest.mark.parametrize(("beyond", "lon"), [("refuse", None), ("hold", 40.0), ("extend", 50.0)])
def test_beyond_the_history(restore, beyond, lon):
    """Past the oldest row a site is refused, held at its last place or carried on, as asked."""
    row = restore(SITES + "a,0,0,50,alba\n", "--beyond", beyond).rows[0]
    assert row["status"] == ("outside the history" if lon is None else "restored")
    if lon is not None:
        assert position(row) == pytest.approx((0.0, lon), abs=1e-8)


def test_geodetic_latitudes(restore):
    """Geodetic latitudes are turned to geocentric and back, and the output says so."""
    row = restore(SITES + "a,0,90,20,bora\n", "--latitudes", "geodetic").rows[0]
    # geocentric 10N; tan(geodetic) = tan(geocentric) / (1 - e2), GRS80
    expected = math.degrees(math.atan(math.tan(math.radians(10.0)) / (1.0 - 0.00669438002290)))
    assert position(row) == pytest.approx((expected, 110.0), abs=1e-9)
    assert row["latitudes"] == "geodetic"


def test_another_radius(restore):
    """Distances follow the stated radius."""
    table = "lat_deg,lon_deg,age_young_ma,age_old_ma,plate\n0,0,4,9,alba\n"
    row = restore(table, "--radius-km", "1000").rows[0]
    assert float(row["path_km"]) == pytest.approx(math.radians(5.0) * 1000.0, abs=1e-6)


OWN = [
    ["site", "lat_deg", "lon_deg", "age_ma", "plate", "code", "remark", "é", ""],
    ["007", "+1.50", "-0.0", "5.000", "alba", "1e5", " padded ", "NA", "x"],
    ["007", "1.5", "0", "05", "alba", "0012", 'says "so", twice', "null", ""],
    ["", " 2 ", "1e1", "5", "NA", "TRUE", "two\nlines", "−3", "1_000"],
]


def own_table(rows):
    stream = io.StringIO()
    csv.writer(stream, lineterminator="\n").writerows(rows)
    return stream.getvalue()


@pytest.mark.parametrize("ages", ["own", "0,5"])
def test_own_columns_are_untouched(restore, ages):
    """Every text of the user's comes out byte for byte, repeated site names and odd texts alike."""
    answer = restore(own_table(OWN), "--ages", ages)
    assert answer.code == 0
    copies = len(ages.split(","))
    records = list(csv.reader(io.StringIO(answer.out, newline="")))
    assert [row[:9] for row in records] == [OWN[0], *(row for row in OWN[1:] for _ in range(copies))]


def test_columns_without_a_name_are_not_lost(restore):
    """Where several columns have no name, as spreadsheets write them, each is called by its number."""
    answer = restore("lat_deg,lon_deg,age_ma,plate,,\n0,0,5,alba,x,y\n")
    assert (answer.rows[0]["5"], answer.rows[0]["6"]) == ("x", "y")


@pytest.mark.parametrize(
    ("name", "column"),
    [("status", 6), ("frame", 6), ("ledger_id", 6), ("plate_from", 6), ("restored_note", 6)],
)
def test_an_own_column_with_the_name_of_a_result(here, restore, name, column):
    """The user's columns are never overwritten: a clash is refused before anything is written."""
    answer = restore(f"site,lat_deg,lon_deg,age_ma,plate,{name}\na,0,0,5,alba,x\n", "--out", "out.csv")
    assert (answer.code, answer.out) == (1, "")
    assert answer.said == [
        f"error: sites.csv:1:{column}: column {name!r} has the name of a result; give it another name"
    ]
    assert not (here / "out.csv").exists()


def test_a_column_map_keeps_the_names_of_the_file(restore):
    """Columns may have any names or numbers, and keep them on the way out."""
    table = "Name;Breite;Länge;Alter;Platte\na;1,5;0;5;alba\n"
    columns = "site=Name,lat_deg=Breite,lon_deg=3,age_ma=Alter,plate=Platte"
    answer = restore(table, "--columns", columns, "--delimiter", "semicolon", "--decimal", ",")
    assert answer.code == 0
    assert header_of(answer.out)[:7] == [
        "Name",
        "Breite",
        "Länge",
        "Alter",
        "Platte",
        "plate",
        "plate_from",
    ]
    assert answer.rows[0]["Breite"] == "1,5"
    assert position(answer.rows[0]) == pytest.approx((1.5, 5.0), abs=1e-9)


def test_a_table_without_a_header(restore):
    """Columns by number; comment lines are passed over where a mark is stated."""
    columns = "lat_deg=2,lon_deg=3,age_ma=4,plate=5"
    options = ("--no-header", "--columns", columns, "--comment", "#", "--delimiter", "whitespace")
    answer = restore("# two cores\na 0 0 5 alba\nb 0 0 6 alba # deep\n", *options)
    assert answer.code == 0
    assert [row["restored_lon_deg"] for row in answer.rows] == ["5", "6"]
    assert answer.rows[1]["1"] == "b"


@pytest.mark.parametrize("ages", ["own", "0,5"])
def test_no_rows(restore, ages):
    """A table of 0 rows gives a table of 0 rows, with all its columns."""
    answer = restore(SITES, "--ages", ages)
    assert (answer.code, answer.said) == (0, ["0 rows"])
    assert answer.rows == []
    assert header_of(answer.out) == header_of(restore(SITES + "a,0,0,5,alba\n", "--ages", ages).out)


def test_a_plate_called_na(restore):
    """A site on NA is on that plate."""
    row = restore(SITES + "a,0,0,5,NA\n").rows[0]
    assert (row["plate"], row["status"]) == ("NA", "restored")
    assert position(row) == pytest.approx((0.0, -10.0), abs=1e-9)


def test_an_unknown_plate_is_said_once_for_all_its_sites(restore):
    """One line per label, with the number of its sites and the nearest known label."""
    answer = restore(SITES + "a,0,0,5,brora\nb,0,0,5,brora\nc,0,0,5,Z9\n")
    assert answer.said[:2] == [
        "warning: sites.csv:4:5: plate 'Z9' is not in the history; known: NA, alba, bora, deep, fara, gapa,"
        " isla, reef, twin",
        "warning: sites.csv:2:5: plate 'brora' is not in the history (2 sites); did you mean 'bora'?",
    ]


def test_a_process_in_a_pipe(here):
    """In a pipe: the table alone on standard output, the counts on standard error, no escape codes."""
    rows = "".join(f"s{i},0,0,5,alba\n" for i in range(300))
    (here / "sites.csv").write_text(SITES + rows, encoding="utf-8")
    answer = in_a_process("sites", "sites.csv", "--history", "history.csv", "--frame", "deep")
    assert (answer.code, answer.err) == (0, "300 rows: 300 restored\n")
    assert len(answer.rows) == 300
    assert "\x1b" not in answer.out + answer.err
