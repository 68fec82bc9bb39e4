"""`oncewhere rates`: velocities at points, from a history or a pole."""

import json
import math

import pytest
from command_line.world import header_of

RATES = [
    *("lat_deg", "lon_deg", "then_lat_deg", "then_lon_deg", "age_ma"),
    *("east_mm_yr", "north_mm_yr", "speed_mm_yr", "azimuth_deg", "pole_distance_deg"),
    *("speed_sigma_mm_yr", "azimuth_sigma_deg"),
]
KM_PER_DEGREE = math.pi / 180.0 * 6371.0088
ALBA = ("--plate", "alba", "--relative-to", "deep")
BORA = ("--plate", "bora", "--relative-to", "alba")


def numbers(row, *names):
    return [float(row[name]) for name in names]


def test_from_a_pole(ask):
    """v = omega R sin(delta), anticlockwise positive; errors are not known."""
    answer = ask("rates", "--pole", "90,0,1", "--at", "60,20")
    assert (answer.code, answer.err) == (0, "")
    assert header_of(answer.out)[: len(RATES)] == RATES
    (row,) = answer.rows
    assert numbers(row, *RATES[:5]) == [60.0, 20.0, 60.0, 20.0, 0.0]
    speed = KM_PER_DEGREE * math.sin(math.radians(30.0))
    assert numbers(row, "east_mm_yr", "north_mm_yr", "speed_mm_yr") == pytest.approx(
        [speed, 0.0, speed], abs=1e-6
    )
    assert numbers(row, "azimuth_deg", "pole_distance_deg") == pytest.approx([90.0, 30.0], abs=1e-9)
    assert [row[name] for name in RATES[-2:]] == ["", ""]
    assert (row["errors"], row["latitudes"]) == ("not known", "as-given")


def test_the_sense_of_a_pole(ask):
    """A negative rate turns clockwise: about the opposite pole."""
    (row,) = ask("rates", "--pole", "90,0,-1", "--at", "60,20").rows
    assert numbers(row, "azimuth_deg", "pole_distance_deg") == pytest.approx([270.0, 150.0], abs=1e-9)


def test_at_the_pole_nothing_moves(ask):
    """Where the speed is 0 there is no direction: empty, not 0."""
    (row,) = ask("rates", "--pole", "90,0,0", "--at", "60,20").rows
    assert (row["speed_mm_yr"], row["azimuth_deg"]) == ("0", "")


def test_from_a_history(ask):
    """`alba` moved west by 1 degree per Myr, so forward in time its velocity points west."""
    answer = ask("rates", *ALBA, "--at", "0,20", "--history", "history.csv")
    (row,) = answer.rows
    assert numbers(row, "east_mm_yr", "north_mm_yr") == pytest.approx([-KM_PER_DEGREE, 0.0], abs=1e-6)
    assert (row["plate"], row["relative_to"], row["errors"]) == ("alba", "deep", "not known")
    assert [row[name] for name in RATES[-2:]] == ["", ""]


def test_today_s_point_is_carried_back(ask):
    """A point asked at a past age is today's on the plate; `then` is where it was."""
    at = ("--at", "0,90", "--age", "20", "--history", "history.csv")
    (row,) = ask("rates", *BORA, *at).rows
    assert numbers(row, *RATES[:5]) == pytest.approx([0.0, 90.0, 10.0, 90.0, 20.0], abs=1e-9)
    # it rose towards the north into the past, so forward in time it sinks
    half = KM_PER_DEGREE / 2.0
    assert numbers(row, "east_mm_yr", "north_mm_yr") == pytest.approx([0.0, -half], abs=1e-6)
    assert float(row["azimuth_deg"]) == pytest.approx(180.0, abs=1e-9)
    (row,) = ask("rates", *BORA, *at, "--at-on", "relative-to").rows
    assert numbers(row, *RATES[:5]) == [0.0, 90.0, 0.0, 90.0, 20.0]


def test_sigmas(ask):
    """The error of a rate between 0 and a row is that of the row over its age."""
    (row,) = ask("rates", *ALBA, "--at", "0,0", "--history", "known.csv").rows
    # variances (2, 3, 4)e-6 at 10 Ma: along the motion that of z, across it that of y
    sigma = math.sqrt(4e-6) / 10.0 * 6371.0088
    assert float(row["speed_sigma_mm_yr"]) == pytest.approx(sigma, abs=1e-6)
    # d log = Jr^-1 u: across a rotation of 10 degrees, w = 5, y has w cot(w) u_y and w u_x
    w = math.radians(5.0)
    variance = (w / math.tan(w)) ** 2 * 3e-6 + w**2 * 2e-6
    across = math.degrees(math.sqrt(variance) / 10.0 * 6371.0088 / KM_PER_DEGREE)
    assert float(row["azimuth_sigma_deg"]) == pytest.approx(across, abs=1e-9)


def test_points(here, ask):
    """A table of points keeps its columns; one with a result's name goes on as `own_`."""
    table = "name,lon_deg,lat_deg,age_ma\nP,20,60,007\nP,20,-60,\n"
    (here / "points.csv").write_text(table, encoding="utf-8")
    answer = ask("rates", "--points", "points.csv", "--pole", "90,0,1")
    assert (answer.code, answer.err) == (0, "")
    assert header_of(answer.out)[: len(RATES) + 2] == ["name", "own_age_ma", *RATES]
    assert [row["own_age_ma"] for row in answer.rows] == ["007", ""]
    assert [row["age_ma"] for row in answer.rows] == ["0", "0"]
    assert answer.rows[0]["east_mm_yr"] == answer.rows[1]["east_mm_yr"]


def test_no_points(here, ask):
    """A table without rows gives a table without rows."""
    (here / "points.csv").write_text("lat_deg,lon_deg\n", encoding="utf-8")
    for source in (("--pole", "90,0,1"), (*ALBA, "--history", "history.csv")):
        answer = ask("rates", "--points", "points.csv", *source)
        assert (answer.code, answer.rows) == (0, [])
        assert header_of(answer.out)[: len(RATES)] == RATES


def test_geodetic_latitudes_are_said(ask):
    """Geodetic latitudes stand as asked in the output; the speed is that of the geocentric one."""
    (row,) = ask("rates", "--pole", "90,0,1", "--at", "60,20", "--latitudes", "geodetic").rows
    assert (row["lat_deg"], row["latitudes"]) == ("60", "geodetic")
    geocentric = math.atan((1.0 - 0.00669438002290) * math.tan(math.radians(60.0)))
    assert float(row["speed_mm_yr"]) == pytest.approx(KM_PER_DEGREE * math.cos(geocentric), abs=1e-6)


def test_another_radius(ask):
    """Speeds follow the stated radius."""
    (row,) = ask("rates", "--pole", "90,0,1", "--at", "0,0", "--radius-km", "1000").rows
    assert float(row["speed_mm_yr"]) == pytest.approx(math.radians(1.0) * 1000.0, abs=1e-6)


def test_as_json_with_settings(here, ask):
    """A file carries where its numbers come from: every setting that decides them."""
    at = ("--at", "0,20", "--age", "50", "--beyond", "extend", "--history", "history.csv")
    assert ask("rates", *ALBA, *at, "--out", "r.json").code == 0
    found = json.loads((here / "r.json").read_text(encoding="utf-8"))
    settings = {
        "plate": "alba",
        "relative_to": "deep",
        "age_ma": 50.0,
        "at_on": "plate",
        "beyond": "extend",
    }
    assert settings.items() <= found["provenance"]["settings"].items()
    assert found["rows"][0]["then_lon_deg"] == pytest.approx(70.0, abs=1e-9)
    assert found["rows"][0]["speed_sigma_mm_yr"] is None


@pytest.mark.parametrize(
    ("args", "code", "message"),
    [
        (["--at", "1,2"], 2, "give either --history FILE or --pole LAT,LON,DEG_PER_MYR"),
        (["--pole", "1,2,3"], 2, "give either --at LAT,LON or --points FILE"),
        (["--at", "1,2", "--points", "p", "--pole", "1,2,3"], 2, "give either --at LAT,LON or --points FILE"),
        (["--at", "1", "--pole", "1,2,3"], 2, "Invalid value for '--at': '1': write LAT,LON"),
        (["--at", "95,2", "--pole", "1,2,3"], 2, "'95,2': a latitude must lie in -90..90"),
        (["--at", "1,2", "--pole", "1,2"], 2, "'1,2': write LAT,LON,DEG_PER_MYR"),
        (["--at", "1,2", "--history", "history.csv"], 2, "with --history give --plate and --relative-to"),
        (["--at", "1,2", *ALBA, "--age", "50", "--history", "history.csv"], 1,
         "alba relative to deep at 50 Ma: outside the history; the chain holds at 0..40 Ma"),
        (["--points", "none.csv", "--pole", "1,2,3"], 1, "none.csv: no such file"),
    ],
)  # fmt: skip
def test_refusals(ask, args, code, message):
    """What cannot be answered is one line, with nothing on standard output."""
    answer = ask("rates", *args)
    assert (answer.code, answer.out) == (code, "")
    assert answer.said[0].startswith("error: ")
    assert answer.said[0].endswith(message)


def test_points_off_the_globe(here, ask):
    """Every point at fault is a line with its place, in the order of the file, and none is guessed."""
    table = "lat_deg,lon_deg\n95,0\n0,x\n,3\n1,2,3\n0,1e9\nnan,4\n"
    (here / "p.csv").write_text(table, encoding="utf-8")
    answer = ask("rates", "--points", "p.csv", "--pole", "90,0,1", "--out", "r.csv")
    assert (answer.code, answer.out) == (1, "")
    assert [line.partition("; ")[0] for line in answer.said] == [
        "error: p.csv:2:1: lat_deg = 95",
        "error: p.csv:3:2: lon_deg = 'x' is not a number",
        "error: p.csv:4:1: lat_deg is empty",
        "error: p.csv:5: the row has 3 fields where the header has 2",
        "error: p.csv:6:2: lon_deg = 1e9",
        "error: p.csv:7:1: lat_deg = nan",
    ]
    assert sorted(path.name for path in here.iterdir()) == ["history.csv", "known.csv", "p.csv"]
