"""`check`, `redate`, `closure`, `differences`, `draws`, and the clocks of `sites` and of a scenario.

Chron ages are those of the published scales: CK95 and GTS2004 (both read).
"""

import json
import math

import numpy as np
import pytest
from command_line.world import HEAD, HISTORY, KNOWN, in_order, leftovers, rows_of
from published.support import DATA

from restore.history.store import History

DEGREE_KM = math.pi / 180.0 * 6371.0088
FINDING = ["severity", "kind", "file", "line", "column", "what", "km", "remedy"]

MANIFEST = """\
version = 1
title = "Two papers"

[frames]
deep = "mantle"

[[table]]
file = "young.csv"
title = "Younger part"
citation = "Author 1999"
turns = "to-present"
{young}

[[table]]
file = "old.csv"
citation = "Author 2005"
{old}

[[table]]
file = "near.csv"
citation = "Author 2010"
{near}
"""
YOUNG = """\
plate,relative_to,age_ma,pole_lat_deg,pole_lon_deg,angle_deg,chron
alba,near,0,,,0,
alba,near,20.1,90,0,-20,C6n(o)
"""
OLD = f"{HEAD}\nalba,deep,20.1,90,0,20\nalba,deep,60,90,0,60\n"
NEAR = f"{HEAD}\nnear,deep,0,,,0\nnear,deep,70,,,0\n"


@pytest.fixture
def papers(here):
    """A function that writes the manifest of three tables with more keys in each."""
    for name, text in (("young.csv", YOUNG), ("old.csv", OLD), ("near.csv", NEAR)):
        (here / name).write_text(text, encoding="utf-8")

    def writing(young="", old="", near=""):
        text = MANIFEST.format(young=young, old=old, near=near)
        (here / "papers.toml").write_text(text, encoding="utf-8")
        return "papers.toml"

    return writing


CK95 = dict.fromkeys(("young", "old", "near"), 'time_scale = "ck95"')


def klitgord(here, flip=False):
    """Klitgord & Schouten 1986 (from memory) and its manifest, one sign flipped if asked."""
    text = (DATA / "finite_rotations.csv").read_text(encoding="utf-8")
    if flip:
        assert ",76.55,-20.73,-29.6," in text
        text = text.replace(",76.55,-20.73,-29.6,", ",76.55,-20.73,29.6,")
    (here / "finite_rotations.csv").write_text(text, encoding="utf-8")
    (here / "klitgord.toml").write_bytes((DATA / "klitgord_schouten.toml").read_bytes())
    return "klitgord.toml"


def test_check_shows_what_was_read(papers, ask):
    """A manifest is listed: title, citation, conventions, each row as printed beside as meant."""
    answer = ask("check", papers())
    assert answer.code == 0
    lines = answer.out.splitlines()
    assert lines[0] == "young.csv: Younger part"
    assert lines[1] == "  Author 1999"
    assert "turns to-present" in lines[2]
    row = next(line for line in lines if "age_ma 20.1" in line and "alba relative to near" in line)
    # turned to the present about the north pole by -20: to the past by 20
    assert "angle_deg -20 " in row
    assert row.split("alba relative to near")[1].split() == ["20.1", "90", "0", "20", "?", "C6n(o)"]
    assert ask("check", papers(), "--no-rows").out.count("alba relative to near") == 0
    assert "as printed" not in ask("check", "history.csv").out
    assert "as printed" in ask("check", "history.csv", "--rows").out


def test_check_of_published_rows(here, ask):
    """Klitgord & Schouten 1986 (from memory) as they stand: no error, exit code 0."""
    answer = ask("check", klitgord(here))
    assert answer.code == 0
    assert answer.err.splitlines()[-1].startswith("0 errors, 0 warnings")


def test_check_of_a_flipped_sign(here, ask):
    """An34 with its sign flipped: one error, at its line, about 6594 km off; exit code 1.

    Rows of Klitgord & Schouten 1986 (from memory); the distance was computed by a separate small
    program, not published.
    """
    answer = ask("check", klitgord(here, flip=True), "--json")
    assert (answer.code, answer.err) == (1, "")
    findings = json.loads(answer.out)
    assert all(in_order(FINDING, list(finding)) for finding in findings)
    (error,) = [finding for finding in findings if finding["severity"] == "error"]
    assert (error["file"], error["line"]) == ("finite_rotations.csv", 10)
    assert error["km"] == pytest.approx(6594.0, abs=0.5)
    assert "sign" in error["what"]
    said = ask("check", "klitgord.toml", "--no-rows").out
    assert "error: finite_rotations.csv:10: " in said
    assert "(6594 km)" in said


def test_warnings_and_notes_do_not_fail(here, ask):
    """Only an error gives exit code 1: the small world has warnings and notes of many kinds."""
    answer = ask("check", "history.csv", "--json")
    severities = {finding["severity"] for finding in json.loads(answer.out)}
    assert answer.code == 0
    assert severities == {"warning", "note"}


def test_check_writes_one_file(papers, ask, here):
    """--out writes the history as netCDF, which reads back the same and is as good as the manifest."""
    answer = ask("check", papers(**CK95), "--no-rows", "--out", "one.nc")
    assert answer.code == 0
    assert answer.said[-1] == "6 rows in one.nc"
    assert History.read("one.nc").same_as(History.read("papers.toml"))
    asked = ("pole", "alba", "--relative-to", "deep", "--age", "40", "--json", "--history")
    one, other = (json.loads(ask(*asked, file).out) for file in ("papers.toml", "one.nc"))
    assert one["quaternion_wxyz"] == other["quaternion_wxyz"]
    assert ask("check", "one.nc", "--json").out == ask("check", "papers.toml", "--json").out
    assert leftovers(here) == []


def test_check_writes_nothing_of_a_history_at_fault(here, ask):
    """A history with an error is not written; one that was there stays as it was."""
    (here / "one.nc").write_bytes(b"before")
    answer = ask("check", klitgord(here, flip=True), "--no-rows", "--out", "one.nc")
    assert answer.code == 1
    assert (here / "one.nc").read_bytes() == b"before"
    assert leftovers(here) == []


def test_redate_a_history(papers, ask, here):
    """What moved, in Myr and in km, and how; rows that touch move together, by the chron.

    C6n(o) is 19.722 Ma in GTS2004; 60 Ma of CK95 lies between C26n(o) 57.911 (58.737) and C27n(y)
    60.920 (61.650).
    """
    answer = ask("redate", papers(**CK95), "--to", "gts2004", "--out", "new.nc")
    assert (answer.code, answer.err) == (0, "")
    names = [
        "plate",
        "relative_to",
        "chron",
        "age_before_ma",
        "age_ma",
        "moved_myr",
        "moved_km",
        "how",
        "loose",
    ]
    assert in_order(names, list(answer.rows[0]))
    assert [row["how"] for row in answer.rows] == [
        *("unchanged", "chron", "with its neighbour"),
        *("interpolated", "unchanged", "interpolated"),
    ]
    assert [float(row["age_ma"]) for row in answer.rows[:3]] == [0.0, 19.722, 19.722]
    expected = 58.737 + (60.0 - 57.911) / (60.92 - 57.911) * (61.65 - 58.737)
    assert float(answer.rows[3]["age_ma"]) == pytest.approx(expected, abs=1e-9)
    assert answer.rows[1]["moved_myr"] == "-0.378"
    # the stage that begins there turns 40 degrees in 39.9 Myr
    assert float(answer.rows[2]["moved_km"]) == pytest.approx(0.378 * 40.0 / 39.9 * DEGREE_KM, rel=1e-6)
    assert answer.rows[1]["row"] == "young.csv:3"
    new = History.read("new.nc")
    assert {table.time_scale for table in new.tables} == {"gts2004"}
    assert new.rows.age_ma[1] == new.rows.age_ma[2] == 19.722
    asked = ("pole", "alba", "--relative-to", "deep", "--json", "--history")
    for age in ("19.7", "19.722", "19.8"):
        assert ask(*asked, "new.nc", "--age", age).code == 0
    assert leftovers(here) == []


def test_redate_a_history_without_a_clock(papers, ask, here):
    """Where tables name none, --from says it for all; without it each row is an error with its line."""
    assert ask("redate", papers(), "--from", "ck95", "--to", "gts2004").code == 0
    answer = ask("redate", papers(), "--to", "gts2004", "--out", "new.nc")
    assert (answer.code, answer.out) == (1, "")
    assert [line.split(": ")[:2] for line in answer.said] == [
        ["error", "old.csv:2"],
        ["error", "old.csv:3"],
        ["error", "near.csv:3"],
    ]
    assert not (here / "new.nc").exists()


def test_redate_a_table_of_sites(here, ask):
    """Ages by chron or by interpolation, own columns kept; a row at fault gives exit code 1."""
    (here / "sites.csv").write_text(
        "core,depth_m,age_ma,chron\na,1.0,20.131,\nb,2.0,,C6n(0.5)\nc,3.0,90,\n", encoding="utf-8"
    )
    answer = ask("redate", "sites.csv", "--from", "ck95", "--to", "gts2004", "--out", "new.csv")
    assert (answer.code, answer.out) == (1, "")
    assert answer.said == [
        "error: sites.csv:4:3: age_ma = 90 cannot be restated to gts2004; only 0..83 Ma of ck95 can"
    ]
    rows = rows_of((here / "new.csv").read_text(encoding="utf-8"))
    assert [row["age_ma"] for row in rows] == ["19.722", "19.235", ""]
    assert [row["redated_by"] for row in rows] == ["interpolated", "chron", ""]
    assert [row["depth_m"] for row in rows] == ["1.0", "2.0", "3.0"]
    assert (here / "new.csv.provenance.json").exists() or (here / "new.provenance.json").exists()
    (here / "good.csv").write_text("core,age_ma\na,20.131\n", encoding="utf-8")
    answer = ask("redate", "good.csv", "--from", "ck95", "--to", "gts2004")
    assert (answer.code, answer.rows[0]["age_ma"]) == (0, "19.722")
    assert leftovers(here) == []


SITES = "site,lat_deg,lon_deg,age_ma,plate,chron\na,0,10,20.131,alba,\nb,0,10,,alba,C6n(o)\n"


def restored(answer):
    return [(row["restored_age_ma"], float(row["restored_lon_deg"])) for row in answer.rows]


def test_sites_on_the_run_s_clock(papers, ask, here):
    """A history on CK95 and a table on CK95, asked on GTS2004: both are restated, with a note.

    alba turns about the pole; at C6n(o) it has turned 20 degrees on any clock.
    """
    (here / "sites.csv").write_text(SITES, encoding="utf-8")
    asked = ("sites", "sites.csv", "--history", papers(**CK95), "--frame", "deep")
    answer = ask(*asked, "--time-scale", "gts2004", "--table-time-scale", "ck95")
    assert answer.code == 0
    assert [age for age, _ in restored(answer)] == ["19.722", "19.722"]
    np.testing.assert_allclose([lon for _, lon in restored(answer)], 30.0, atol=1e-9)
    notes = [line for line in answer.said if line.startswith("note: ")]
    assert len(notes) == 4
    assert "sites.csv: ages restated from ck95 to gts2004: up to 0.409 Myr" in notes[-1]
    assert notes[0].startswith("note: young.csv:3: restated from ck95 to gts2004: up to 0.378 Myr")
    assert " km)" in notes[0]


def test_sites_on_the_history_s_own_clock(papers, ask, here):
    """Where all tables name one clock it is the run's: chrons need no option, ages are on it."""
    (here / "sites.csv").write_text(SITES, encoding="utf-8")
    answer = ask("sites", "sites.csv", "--history", papers(**CK95), "--frame", "deep")
    assert (answer.code, [line for line in answer.said if "note" in line]) == (0, [])
    # the row typed 20.1 Ma is at 20 degrees; C6n(o) of CK95 is 20.131 Ma
    assert restored(answer)[0][0] == restored(answer)[1][0] == "20.131"


def test_clocks_that_are_missing_or_mixed(papers, ask, here):
    """Two clocks and none named for the run is an error; a table on a clock needs the run's too."""
    (here / "sites.csv").write_text(SITES, encoding="utf-8")
    mixed = papers(young='time_scale = "ck95"', old='time_scale = "gts2004"')
    asked = ("sites", "sites.csv", "--frame", "deep", "--history")
    answer = ask(*asked, mixed)
    assert (answer.code, answer.out) == (1, "")
    assert "2 clocks (ck95, gts2004)" in answer.err
    assert "--time-scale" in answer.err or "name one time scale" in answer.err
    answer = ask(*asked, papers(), "--table-time-scale", "ck95")
    assert (answer.code, answer.out) == (2, "")
    assert "--table-time-scale needs --time-scale" in answer.err


def test_check_finds_mixed_clocks(papers, ask):
    """A mixture is a finding with its place and its size in km, and no error."""
    mixed = papers(young='time_scale = "ck95"', old='time_scale = "gts2004"')
    answer = ask("check", mixed, "--json")
    assert answer.code == 0
    found = [finding for finding in json.loads(answer.out) if finding["kind"] == "clocks mixed"]
    assert {finding["file"] for finding in found} == {"old.csv", "near.csv"}
    (old,) = [finding for finding in found if finding["file"] == "old.csv"]
    assert old["km"] > 10.0
    assert "gts2004" in old["what"]


SCENARIO = """\
version = 1
title = "Clocks"
[history]
file = "papers.toml"
{clock}
[frame]
name = "deep"
kind = "mantle"
[[task]]
name = "own"
kind = "sites"
file = "sites.csv"
{task}
"""


def scenario(here, clock="", task=""):
    (here / "sites.csv").write_text(SITES, encoding="utf-8")
    text = SCENARIO.format(clock=clock, task=task)
    (here / "job.toml").write_text(text, encoding="utf-8")


def test_a_scenario_has_one_clock(papers, ask, here):
    """history.time_scale restates the history, the task's time_scale its table; the run says so."""
    papers(**CK95)
    scenario(here, 'time_scale = "gts2004"', 'time_scale = "ck95"')
    assert ask("run", "job.toml", "--out", "results").code == 0
    rows = rows_of((here / "results" / "own.csv").read_text(encoding="utf-8"))
    assert [row["restored_age_ma"] for row in rows] == ["19.722", "19.722"]
    np.testing.assert_allclose([float(row["restored_lon_deg"]) for row in rows], 30.0, atol=1e-9)
    findings = rows_of((here / "results" / "findings.csv").read_text(encoding="utf-8"))
    notes = [row for row in findings if row["kind"] == "restated"]
    assert [row["line"] for row in notes] == ["3", "3", "3", ""]
    assert all(float(row["km"]) >= 0.0 for row in notes[:3])


@pytest.mark.parametrize(
    ("tables", "clock", "task", "place", "what"),
    [
        (CK95, "", "", "3:1", "history.time_scale is missing, and a table names ck95; name the run's one clock"),
        ({}, "", 'time_scale = "ck95"', "3:1", "history.time_scale is missing, and a table names ck95"),
        (CK95, 'time_scale = "ck59"', "", "5:1", "time scale 'ck59' is neither known nor a file; did you mean 'ck95'?"),
        (CK95, 'time_scale = "ck95"', 'time_scale = "holo.csv"', "13:1", "time scale 'holo.csv' is neither known nor a file"),
    ],
)  # fmt: skip
def test_a_scenario_whose_clock_is_missing(papers, ask, here, tables, clock, task, place, what):
    """A missing or unknown clock is an error at its key, before anything is done."""
    papers(**tables)
    scenario(here, clock, task)
    answer = ask("run", "job.toml", "--out", "results")
    assert answer.code == 1
    (line,) = [said for said in answer.said if said.startswith("error: ")]
    assert line.startswith(f"error: job.toml:{place}: {what}")
    assert not (here / "results").exists()
    assert ask("check", "job.toml").out.splitlines()[0] == line


LOOP = f"""\
{HEAD}
alba,bora,0,,,0
alba,bora,10,90,0,10
bora,cara,0,,,0
bora,cara,10,90,0,5
alba,cara,0,,,0
alba,cara,10,90,0,14
"""


def test_closure_of_a_loop(here, ask):
    """10 and 5 degrees one way, 14 the other: one degree is left over, 111 km, its errors not known."""
    (here / "loop.csv").write_text(LOOP, encoding="utf-8")
    answer = ask("closure", "alba,bora,cara", "--ages", "0,5,10", "--history", "loop.csv")
    assert (answer.code, answer.err) == (0, "")
    names = ["loop", "age_ma", "pole_lat_deg", "pole_lon_deg", "angle_deg", "greatest_km", "statistic"]
    assert in_order([*names, "probability", "errors"], list(answer.rows[0]))
    assert [row["loop"] for row in answer.rows] == ["alba > bora > cara > alba"] * 3
    assert [float(row["angle_deg"]) for row in answer.rows] == pytest.approx([0.0, 0.5, 1.0], abs=1e-9)
    assert float(answer.rows[2]["greatest_km"]) == pytest.approx(DEGREE_KM, rel=1e-6)
    assert float(answer.rows[2]["pole_lat_deg"]) == pytest.approx(90.0, abs=1e-6)
    assert [row["probability"] for row in answer.rows[1:]] == ["", ""]


@pytest.mark.parametrize(
    ("loop", "ages", "code", "said"),
    [
        ("alba,bora", "10", 1, "name at least three different plates"),
        ("alba,bora,dora", "10", 1, "bora and dora are no pair of this history"),
        ("alba,bora,cara", "11", 1, "the pair holds at 0..10 Ma"),
        ("alba,bora,cara", "own", 2, "--ages own has no meaning here"),
    ],
)
def test_loops_without_an_answer(here, ask, loop, ages, code, said):
    """One line on standard error says why, and nothing comes out."""
    (here / "loop.csv").write_text(LOOP, encoding="utf-8")
    answer = ask("closure", loop, "--ages", ages, "--history", "loop.csv")
    assert (answer.code, answer.out) == (code, "")
    assert said in answer.said[0]


def test_differences_of_two_histories(here, ask):
    """Rows of one history only, and rotations that differ, with places and km."""
    other = HISTORY.replace("bora,alba,20,0,0,10", "bora,alba,20,0,0,11").replace(
        "NA,deep,10,90,0,-20\n", ""
    )
    (here / "other.csv").write_text(other, encoding="utf-8")
    answer = ask("differences", "history.csv", "other.csv")
    assert (answer.code, answer.err) == (0, "")
    said = [(row["plate"], row["what"], row["first_row"], row["second_row"]) for row in answer.rows]
    assert said == [
        ("bora", "rotation", "history.csv:6", "other.csv:6"),
        ("NA", "only in the first", "history.csv:18", ""),
    ]
    assert float(answer.rows[0]["km"]) == pytest.approx(DEGREE_KM, rel=1e-6)
    same = ask("differences", "history.csv", "history.csv")
    assert (same.code, same.rows) == (0, [])


def test_draws_are_histories(here, ask):
    """Every drawn file is a history that any command takes; the same seed draws the same."""
    (here / "known.csv").write_text(KNOWN, encoding="utf-8")
    answer = ask("draws", "known.csv", "--count", "3", "--out", "drawn")
    assert (answer.code, answer.said[-1]) == (0, "3 histories in drawn")
    names = sorted(path.name for path in (here / "drawn").iterdir())
    assert names == ["draw-001.nc", "draw-002.nc", "draw-003.nc"]
    poles = set()
    for name in names:
        file = f"drawn/{name}"
        assert ask("check", file).code == 0
        found = ask("pole", "alba", "--relative-to", "deep", "--age", "10", "--json", "--history", file)
        assert found.code == 0
        poles.add(tuple(json.loads(found.out)["quaternion_wxyz"]))
        sites = "site,lat_deg,lon_deg,age_ma,plate\na,0,10,15,bora\n"
        (here / "sites.csv").write_text(sites, encoding="utf-8")
        site = ask("sites", "sites.csv", "--history", file, "--frame", "deep")
        assert site.rows[0]["status"] == "restored"
    assert len(poles) == 3
    ask("draws", "known.csv", "--count", "3", "--out", "again")
    ask("draws", "known.csv", "--count", "3", "--seed", "2", "--out", "other")
    for name in names:
        drawn, again, other = (History.read(here / f / name) for f in ("drawn", "again", "other"))
        assert drawn.same_as(again)
        assert not drawn.rows.same_as(other.rows)
    assert leftovers(here) == []


def test_draws_say_what_cannot_be_drawn(here, ask):
    """Rows without a covariance are the same in every draw, and that is said; a folder is never reused."""
    answer = ask("draws", "history.csv", "--count", "1", "--out", "drawn")
    assert answer.code == 0
    assert answer.said[0].startswith("warning: history.csv:3: 11 of 19 rows have no covariance")
    answer = ask("draws", "history.csv", "--count", "1", "--out", "drawn")
    assert (answer.code, answer.said[-1]) == (1, "error: drawn: is there already; name a new folder")
