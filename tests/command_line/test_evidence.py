"""The ledger and the draws: anybody can work out the printed position from the printed evidence."""

import json
import math

import numpy as np
import pytest
from command_line.world import DEMO, SITES, rows_of
from scipy.spatial.transform import Rotation, Slerp

DEMO_SITES = ("sites", str(DEMO / "cores.csv"), "--history", str(DEMO / "history.toml"), "--frame", "deep")
DEMO_PLATES = ["glufta", "ibbun", "ovrath", "quemmel", "wirrum"]


def vector(lat_deg, lon_deg):
    lat, lon = math.radians(lat_deg), math.radians(lon_deg)
    return np.array([math.cos(lat) * math.cos(lon), math.cos(lat) * math.sin(lon), math.sin(lat)])


def turn(lat_deg, lon_deg, angle_deg):
    """A finite rotation; one without a pole is none."""
    if lat_deg in (None, "") or float(angle_deg) == 0.0:
        return Rotation.identity()
    return Rotation.from_rotvec(math.radians(float(angle_deg)) * vector(float(lat_deg), float(lon_deg)))


def apart_deg(one, other):
    return math.degrees(math.atan2(np.linalg.norm(np.cross(one, other)), one @ other))


def restored(row):
    return vector(float(row["restored_lat_deg"]), float(row["restored_lon_deg"]))


def today(row):
    return vector(float(row["lat_deg"]), float(row["lon_deg"]))


@pytest.mark.parametrize("ages", ["own", "0:120:40"])
def test_the_links_multiplied_by_hand_give_the_position(here, ask, ages):
    """JSON: each result's links, turned one after the other, take today's place to the restored one."""
    answer = ask(*DEMO_SITES, "--ages", ages, "--ledger", "ledger.json")
    results = json.loads((here / "ledger.json").read_text(encoding="utf-8"))["results"]
    rows = answer.rows
    assert [r["row"] for r in results] == [i for i, row in enumerate(rows) if row["status"] == "restored"]
    longest = 0
    for result in results:
        row = rows[result["row"]]
        assert (result["site"], result["ledger_id"]) == (row["site"], row["ledger_id"])
        assert result["restored_age_ma"] == float(row["restored_age_ma"])
        place = today(row)
        for link in result["links"]:
            moved = turn(link["pole_lat_deg"], link["pole_lon_deg"], link["angle_deg"]).apply(place)
            assert link["moved_km"] == pytest.approx(
                math.radians(apart_deg(place, moved)) * 6371.0088, abs=1e-6
            )
            place = moved
        assert apart_deg(place, restored(row)) < 1e-8
        longest = max(longest, len(result["links"]))
    assert longest >= 3


def test_the_links_lie_between_their_rows(here, ask):
    """JSON: each link is the interpolation of its two rows at the printed fraction, Slerp as oracle."""
    ask(*DEMO_SITES, "--ledger", "ledger.json")
    for result in json.loads((here / "ledger.json").read_text(encoding="utf-8"))["results"]:
        for link in result["links"]:
            ends = [
                turn(*(link[side][n] for n in ("pole_lat_deg", "pole_lon_deg", "angle_deg")))
                for side in ("younger", "older")
            ]
            between = Slerp([0.0, 1.0], Rotation.concatenate(ends))(link["fraction"])
            between = between.inv() if link["turned_round"] else between
            acting = turn(link["pole_lat_deg"], link["pole_lon_deg"], link["angle_deg"])
            assert (acting * between.inv()).magnitude() < 1e-12


def test_the_shares_of_a_result_add_up(here, ask):
    """JSON: where all errors are known the rows' shares of the variance add up to one."""
    (here / "sites.csv").write_text(SITES + "a,10,50,15,bora\n", encoding="utf-8")
    ask("sites", "sites.csv", "--history", "known.csv", "--frame", "deep", "--ledger", "l.json")
    found = json.loads((here / "l.json").read_text(encoding="utf-8"))
    (result,) = found["results"]
    rows = [link[side] for link in result["links"] for side in ("younger", "older")]
    assert sum(row["variance_share"] for row in rows) == pytest.approx(1.0, abs=1e-12)
    assert [(row["file"], row["line"], row["reference"]) for row in rows] == [
        ("known.csv", 5, ""), ("known.csv", 6, "Log 9"), ("known.csv", 3, "Log 7"), ("known.csv", 4, "Log 8"),
    ]  # fmt: skip
    assert "angle_deg 10" in rows[1]["printed"]
    assert found["provenance"]["inputs"][1]["file"] == "known.csv"


def test_the_table_of_entries_gives_every_position(here, ask):
    """CSV: rows looked up by `ledger_id` and interpolated by hand give each printed position."""
    answer = ask(*DEMO_SITES, "--ledger", "ledger.csv")
    entries: dict[str, list[dict[str, str]]] = {}
    for entry in rows_of((here / "ledger.csv").read_text(encoding="utf-8")):
        entries.setdefault(entry["ledger_id"], []).append(entry)
    done = [row for row in answer.rows if row["status"] == "restored"]
    assert len(done) > 50
    for row in done:
        place, links = today(row), entries[row["ledger_id"]]
        assert [int(link["link"]) for link in links] == list(range(1, len(links) + 1))
        assert (links[0]["plate"], links[-1]["relative_to"]) == (row["plate"], "deep")
        for link in links:
            place = by_hand(link, float(row["restored_age_ma"])).apply(place)
        assert apart_deg(place, restored(row)) < 1e-8


def by_hand(entry, age):
    """One link of an entry at an age, from its two rows as meant."""
    sides = [
        {name: entry[f"{side}_{name}"] for name in ("age_ma", "pole_lat_deg", "pole_lon_deg", "angle_deg")}
        for side in ("younger", "older")
    ]
    ages = [float(side["age_ma"]) for side in sides]
    ends = Rotation.concatenate([turn(*list(side.values())[1:]) for side in sides])
    between = Slerp(ages, ends)(age) if ages[0] < ages[1] else ends[0]
    return between.inv() if entry["turned_round"] == "True" else between


def test_rows_without_an_answer_have_no_entry(restore):
    """A row that is not restored names no evidence."""
    answer = restore(SITES + "a,0,0,5,alba\nb,0,0,50,alba\nc,0,0,5,\n")
    assert [bool(row["ledger_id"]) for row in answer.rows] == [True, False, False]


def test_many_sites_share_a_small_ledger(here, ask):
    """Thousands of sites at their own ages need one entry per chain and stage, not one per site."""
    random = np.random.default_rng(5)
    ages = np.round(random.uniform(0.0, 120.0, 3000), 4)
    lines = [f"{i},10,20,{age},{DEMO_PLATES[i % 5]}\n" for i, age in enumerate(ages)]
    (here / "many.csv").write_text(SITES + "".join(lines), encoding="utf-8")
    demo = ("--history", str(DEMO / "history.toml"), "--frame", "deep")
    answer = ask("sites", "many.csv", *demo, "--ledger", "ledger.csv", "--out", "out.csv")
    assert answer.code == 0
    assert sum(row["status"] == "restored" for row in rows_of((here / "out.csv").read_text())) > 2500
    entries = rows_of((here / "ledger.csv").read_text(encoding="utf-8"))
    # a stage of a chain ends where one of its rows does: at most one per row and plate
    assert 5 < len({entry["ledger_id"] for entry in entries}) <= 60 * len(DEMO_PLATES)
    ages_by_id: dict[str, list[float]] = {}
    for entry in entries:
        span = [float(entry["younger_age_ma"]), float(entry["older_age_ma"])]
        kept = ages_by_id.setdefault(entry["ledger_id"], span)
        ages_by_id[entry["ledger_id"]] = [max(kept[0], span[0]), min(kept[1], span[1])]
    assert all(younger < older for younger, older in ages_by_id.values())


def test_the_same_evidence_has_the_same_id(restore):
    """Ids are made from the rows: the same in every run, whatever else is asked."""
    one = restore(SITES + "a,0,0,5,alba\n").rows[0]
    two = restore(SITES + "x,9,9,50,alba\na,8,7,6,alba\nc,1,1,30,alba\n").rows
    assert two[1]["ledger_id"] == one["ledger_id"] != two[2]["ledger_id"]


def test_only_the_first_results_are_written_out(here, ask, monkeypatch):
    """JSON: the first rows have their links in full, whatever the chunks; the others name their entry."""
    monkeypatch.setattr("restore.motion.site_files.MOST_WRITTEN_OUT", 10)
    found = []
    for size in (50_000, 7, 4):
        monkeypatch.setattr("restore.motion.site_files.CHUNK", size)
        ask(*DEMO_SITES, "--ledger", "ledger.json")
        found.append(json.loads((here / "ledger.json").read_text(encoding="utf-8")))
    assert found[0] == found[1] == found[2]
    assert all(("links" in result) == (result["row"] < 10) for result in found[0]["results"])
    entries = {entry["ledger_id"] for entry in found[0]["entries"]}
    assert {result["ledger_id"] for result in found[0]["results"]} == entries


@pytest.mark.parametrize(
    ("name", "message"),
    [
        ("ledger.pdf", "ledger.pdf: a ledger is written as .csv, .json, .txt"),
        ("no/ledger.csv", "no/ledger.csv: cannot be written: there is no folder 'no'"),
        ("sites.csv", "sites.csv: is a file that was read; give another name to write to"),
        ("out.csv", "out.csv: the ledger and the sites cannot be one file"),
    ],
)
def test_a_ledger_that_cannot_be_written(here, restore, name, message):
    """It is refused before the sites are restored, so that nothing is written."""
    answer = restore(SITES + "a,0,0,5,alba\n", "--ledger", name, "--out", "out.csv")
    assert (answer.code, answer.out, answer.said) == (1, "", [f"error: {message}"])
    assert sorted(path.name for path in here.iterdir()) == ["history.csv", "known.csv", "sites.csv"]


DATED = "site,lat_deg,lon_deg,age_ma,age_sigma_myr,position_sigma_km,plate\n"
DRAWN = [
    *("draws_mean_lat_deg", "draws_mean_lon_deg", "draws_radius_95_km"),
    *("draws_south_deg", "draws_middle_lat_deg", "draws_north_deg"),
    *("draws_west_deg", "draws_middle_lon_deg", "draws_east_deg"),
]


def drawn(row):
    return [row[name] for name in DRAWN]


def test_draws_are_repeatable(restore):
    """The same seed gives the same answers, another seed others; the linear answer is untouched."""
    table = DATED + "a,10,20,9,1,30,alba\nb,5,6,15,,,bora\n"
    one, again, other = (
        restore(table, "--draws", "40", "--seed", seed, history="known.csv").rows
        for seed in ("7", "7", "8")
    )
    assert one == again
    plain = restore(table, history="known.csv").rows
    for row, fresh, linear in zip(one, other, plain, strict=True):
        assert all(drawn(row))
        assert drawn(row) != drawn(fresh)
        assert {name: row[name] for name in linear} == linear
        south, middle, north = (float(row[name]) for name in DRAWN[3:6])
        assert south < middle < north
        assert abs(float(row["draws_mean_lat_deg"]) - float(row["restored_lat_deg"])) < 1.0


def test_draws_of_a_row_do_not_depend_on_the_others(restore):
    """Other sites, good or bad, in the other rows change nothing."""
    mine = "b,5,6,9,2,10,alba\n"
    tables = ["a,10,20,9,1,30,alba\n" + mine, "x,99,0,,,,\n" + mine + "y,0,0,30,3,,bora\n"]
    one, other = (restore(DATED + table, "--draws", "30", history="known.csv").rows[1] for table in tables)
    assert drawn(one) == drawn(other)


def test_draws_where_errors_are_not_known(restore):
    """Nothing is drawn from an unknown error: empty, never a spread of zero."""
    (row,) = restore(DATED + "a,10,20,9,,,alba\n", "--draws", "20").rows
    assert drawn(row) == [""] * len(DRAWN)
