"""`oncewhere run`: the folder of results, its record, going on, and faults that stay where they are."""

import hashlib
import json
import re
import shutil

import pytest
from command_line.world import DEMO, SITES, in_a_process, leftovers, rows_of

FILES = ["cores.csv", "cores-by-twenty.csv", "ridge-rates.csv"]
INPUTS = ["history.toml", "rotations_poles.csv", "rotations_rim.csv"]


def sha256(path):
    return hashlib.sha256(path.read_bytes()).hexdigest()


def record_of(folder):
    return json.loads((folder / "run.json").read_text(encoding="utf-8"))


def table(folder, name):
    return rows_of((folder / name).read_text(encoding="utf-8"))


def whole(folder):
    """Every file of a folder but the record, which holds times."""
    return {path.name: path.read_bytes() for path in folder.iterdir() if path.name != "run.json"}


@pytest.fixture
def demo(here):
    """A copy of the demo world in the working folder."""
    for path in DEMO.iterdir():
        if path.suffix in {".toml", ".csv", ".geojson"}:
            shutil.copy(path, here / path.name)
    return here


def test_the_demo_runs(demo, ask):
    """One file per task with its provenance, the findings, the ledger and the record; nothing else."""
    answer = ask("run", "demo.toml", "--out", "results")
    assert answer.code == 0
    folder = demo / "results"
    names = {path.name for path in folder.iterdir()}
    made = {*FILES, *(f"{name}.provenance.json" for name in FILES)}
    assert made | {"findings.csv", "ledger.csv", "run.json"} <= names
    assert leftovers(demo) == []
    lines = answer.out.splitlines()
    assert lines[0].startswith("cores: done (")
    assert lines[-1] == "results in results"
    assert "... cores: sites" in answer.said
    assert len(table(folder, "cores.csv")) == 60
    assert len(table(folder, "cores-by-twenty.csv")) == 60 * 7


def test_the_record(demo, ask):
    """`run.json`: versions, the command, every input with its SHA-256, settings, the state of each task."""
    ask("run", "demo.toml", "--out", "results")
    record = record_of(demo / "results")
    assert {"oncewhere", "python", "numpy"} <= set(record["made_by"])
    assert record["command"].startswith("oncewhere")
    assert record["scenario"] == {"file": "demo.toml", "sha256": sha256(demo / "demo.toml")}
    assert [entry["file"] for entry in record["inputs"]] == INPUTS
    assert record["frame"] == {"name": "deep", "kind": "mantle"}
    assert record["conventions"]["latitudes"] == "as-given"
    assert "not in them" in record["errors"]
    assert {name.removesuffix(".csv") for name in FILES} <= set(record["tasks"])
    for name, task in record["tasks"].items():
        assert task["state"] == "done"
        assert set(INPUTS) <= {entry["file"] for entry in task["inputs"]}
        for entry in task["inputs"]:
            assert entry["sha256"] == sha256(demo / entry["file"])
        for made, digest in task["files"].items():
            assert digest == sha256(demo / "results" / made)
        assert task["settings"]["task"]["name"] == name
    rows = record["tasks"]["cores"]["rows"]
    assert sum(rows.values()) == 60
    assert rows["restored"] > 50


def test_the_evidence_of_a_run(demo, ask):
    """`ledger.csv` holds the entries that all tasks' rows name, each with its rows' files and lines."""
    ask("run", "demo.toml", "--out", "results")
    ledger = table(demo / "results", "ledger.csv")
    entries = {entry["ledger_id"] for entry in ledger}
    used = {row["ledger_id"] for name in FILES[:2] for row in table(demo / "results", name)} - {""}
    assert used
    assert used <= entries
    for entry in ledger:
        for side in ("younger", "older"):
            if not entry[f"{side}_line"]:
                assert float(entry[f"{side}_age_ma"]) == 0.0
                continue
            lines = (demo / entry[f"{side}_file"]).read_text(encoding="utf-8").splitlines()
            line = lines[int(entry[f"{side}_line"]) - 1]
            assert float(re.split("[,;]", line)[2]) == float(entry[f"{side}_age_ma"])


def test_findings_of_a_run(demo, ask):
    """`findings.csv` is there without findings too, with its columns."""
    ask("run", "demo.toml", "--out", "results")
    text = (demo / "results" / "findings.csv").read_text(encoding="utf-8")
    header = text.splitlines()[0].split(",")
    assert header == ["severity", "kind", "file", "line", "column", "what", "km", "remedy"]


def test_the_default_folder(demo, ask):
    """Without --out results go beside the scenario, and files are found beside it, wherever one stands."""
    answer = in_a_process("run", str(demo / "demo.toml"), folder=demo.parent)
    assert answer.code == 0
    assert (demo / "demo-results" / "run.json").is_file()
    ask("run", "demo.toml", "--out", "here")
    assert table(demo / "here", "cores.csv") == table(demo / "demo-results", "cores.csv")


def test_a_folder_that_is_there_already(demo, ask):
    """Results are never mixed with other files: the folder must be new, empty, or continued."""
    (demo / "empty").mkdir()
    assert ask("run", "demo.toml", "--out", "empty").code == 0
    before = whole(demo / "empty")
    again = ask("run", "demo.toml", "--out", "empty")
    assert (again.code, again.out) == (1, "")
    assert again.said == ["error: empty: is there already; name another with --out, or --continue"]
    assert whole(demo / "empty") == before
    onto = ask("run", "demo.toml", "--out", "cores.csv")
    assert (onto.code, onto.said) == (1, ["error: cores.csv: is a file; results go into a folder"])


def test_only_an_earlier_run_is_continued(demo, ask):
    """--continue writes into no folder that holds something else, nor on a record it cannot read."""
    (demo / "mine").mkdir()
    (demo / "mine" / "cores.csv").write_text("my own\n", encoding="utf-8")
    answer = ask("run", "demo.toml", "--out", "mine", "--continue")
    assert answer.code == 1
    assert answer.said == ["error: mine: holds no run.json of an earlier run; name a new folder"]
    assert (demo / "mine" / "cores.csv").read_text(encoding="utf-8") == "my own\n"
    (demo / "mine" / "run.json").write_text("{}", encoding="utf-8")
    answer = ask("run", "demo.toml", "--out", "mine", "--continue")
    assert answer.said == ["error: mine/run.json: is no record of a run; name a new folder"]


def kept(answer):
    return [line for line in answer.said if line.endswith(": kept")]


def test_going_on_keeps_what_is_unchanged(demo, ask):
    """A second run with --continue does nothing again and changes no byte."""
    ask("run", "demo.toml", "--out", "results")
    before = whole(demo / "results")
    times = {name: (demo / "results" / name).stat().st_mtime_ns for name in FILES}
    answer = ask("run", "demo.toml", "--out", "results", "--continue")
    assert answer.code == 0
    assert len(kept(answer)) == len(record_of(demo / "results")["tasks"])
    assert whole(demo / "results") == before
    assert {name: (demo / "results" / name).stat().st_mtime_ns for name in FILES} == times


def test_going_on_redoes_what_has_changed(demo, ask):
    """A changed input, a changed setting, a changed or lost result: each redoes its own task only."""
    ask("run", "demo.toml", "--out", "results")
    text = (demo / "ridge.csv").read_text(encoding="utf-8")
    (demo / "ridge.csv").write_text(text + "ridge-99,1,2\n", encoding="utf-8")
    answer = ask("run", "demo.toml", "--out", "results", "--continue")
    assert "... ridge-rates: rates" in answer.said
    assert {"... cores: kept", "... cores-by-twenty: kept"} <= set(kept(answer))
    assert table(demo / "results", "ridge-rates.csv")[-1]["start"] == "ridge-99"
    scenario = (demo / "demo.toml").read_text(encoding="utf-8")
    (demo / "demo.toml").write_text(scenario.replace('"0:120:20"', '"0:120:40"'), encoding="utf-8")
    (demo / "results" / "cores.csv").unlink()
    answer = ask("run", "demo.toml", "--out", "results", "--continue")
    assert {"... cores: sites", "... cores-by-twenty: sites"} <= set(answer.said)
    assert "... ridge-rates: kept" in answer.said
    assert len(table(demo / "results", "cores-by-twenty.csv")) == 60 * 4


def test_going_on_comes_to_the_same(demo, ask):
    """A folder that was continued after a change is what a fresh run gives, but for older evidence."""
    ask("run", "demo.toml", "--out", "results")
    lines = (demo / "cores.csv").read_text(encoding="utf-8").splitlines(keepends=True)
    (demo / "cores.csv").write_text("".join(lines[:30]), encoding="utf-8")
    ask("run", "demo.toml", "--out", "results", "--continue")
    ask("run", "demo.toml", "--out", "fresh")
    for name in FILES:
        assert (demo / "results" / name).read_bytes() == (demo / "fresh" / name).read_bytes()
    continued = {tuple(row.values()) for row in table(demo / "results", "ledger.csv")}
    assert continued >= {tuple(row.values()) for row in table(demo / "fresh", "ledger.csv")}


JOB = """\
version = 1
[history]
file = "history.csv"
[frame]
name = "deep"
kind = "plate"
"""
TASK = """\
[[task]]
name = "{name}"
kind = "{kind}"
file = "{file}"
"""
OF_ALBA = 'plate = "alba"\nrelative_to = "deep"\nage_ma = {age}\n'


@pytest.fixture
def mixed(here):
    """A scenario of which two tasks cannot be done, one has a malformed row and one is good."""
    (here / "good.csv").write_text(SITES + "a,0,0,5,alba\n", encoding="utf-8")
    (here / "rows.csv").write_text(SITES + "a,0,0,5,alba\nb,95,0,5,alba\n", encoding="utf-8")
    (here / "whole.csv").write_text("site,y,x\n", encoding="utf-8")
    (here / "points.csv").write_text("lat_deg,lon_deg\n0,0\n", encoding="utf-8")
    tasks = [
        TASK.format(name=f"sites-{name}", kind="sites", file=f"{name}.csv")
        for name in ("whole", "rows", "good")
    ]
    tasks += [TASK.format(name="old", kind="rates", file="points.csv") + OF_ALBA.format(age=99)]
    tasks += [TASK.format(name="new", kind="rates", file="points.csv") + OF_ALBA.format(age=5)]
    (here / "job.toml").write_text(JOB + "".join(tasks), encoding="utf-8")
    return here


def test_a_task_that_fails_does_not_stop_the_others(mixed, ask):
    """Each failure is said with its task's place; the others are done; exit 1."""
    answer = ask("run", "job.toml", "--out", "results")
    assert answer.code == 1
    no_column = "whole.csv:1: column 'lat_deg' is missing; the header is site, y, x"
    outside = "alba relative to deep at 99 Ma: outside the history; the chain holds at 0..40 Ma"
    assert answer.out.splitlines()[:5] == [
        f"sites-whole: failed: {no_column}",
        "sites-rows: done (1 bad coordinate, 1 restored) sites-rows.csv",
        "sites-good: done (1 restored) sites-good.csv",
        f"old: failed: {outside}",
        "new: done new.csv",
    ]
    errors = [line for line in answer.said if line.startswith("error: ")]
    assert errors == [
        f"error: job.toml:7:1: sites-whole: {no_column}",
        "error: rows.csv:3:2: lat_deg = 95; a latitude must lie in -90..90",
        f"error: job.toml:19:1: old: {outside}",
    ]
    states = {name: task["state"] for name, task in record_of(mixed / "results")["tasks"].items()}
    assert states == {
        "sites-whole": "failed", "sites-rows": "done", "sites-good": "done", "old": "failed", "new": "done",
    }  # fmt: skip
    assert not (mixed / "results" / "old.csv").exists()
    assert leftovers(mixed) == []


def test_all_findings_are_written_down(mixed, ask):
    """`findings.csv` holds the audit's findings and every task's, as they were said."""
    answer = ask("run", "job.toml", "--out", "results")
    found = table(mixed / "results", "findings.csv")
    said = [line for line in answer.said if not line.startswith("... ")]
    assert len(found) == len(said)
    for row, line in zip(found, said, strict=True):
        assert line.startswith(f"{row['severity']}: {row['file']}:{row['line']}")
        assert row["what"] in line
    assert {row["kind"] for row in found} >= {"two chains", "task failed", "bad value"}


def test_going_on_after_failures(mixed, ask):
    """Failed tasks are tried again; what was found in kept ones is still found, and still ends with 1."""
    first = ask("run", "job.toml", "--out", "results")
    found = (mixed / "results" / "findings.csv").read_bytes()
    again = ask("run", "job.toml", "--out", "results", "--continue")
    assert kept(again) == ["... sites-rows: kept", "... sites-good: kept", "... new: kept"]
    assert (again.code, again.out) == (first.code, first.out)
    assert (mixed / "results" / "findings.csv").read_bytes() == found
    (mixed / "whole.csv").write_text(SITES + "a,0,0,5,alba\n", encoding="utf-8")
    (mixed / "rows.csv").write_text(SITES + "a,0,0,5,alba\n", encoding="utf-8")
    text = (mixed / "job.toml").read_text(encoding="utf-8").replace("= 99", "= 39")
    (mixed / "job.toml").write_text(text, encoding="utf-8")
    mended = ask("run", "job.toml", "--out", "results", "--continue")
    assert mended.code == 0
    assert kept(mended) == ["... sites-good: kept", "... new: kept"]
    assert [row for row in table(mixed / "results", "findings.csv") if row["severity"] == "error"] == []


def test_settings_reach_the_results(mixed, ask):
    """Conventions, layouts and draws of a scenario decide its results and are recorded."""
    (mixed / "good.csv").write_text(
        "Platz;Breite;lon_deg;age_ma;plate\na;0,5;0;50;alba\n", encoding="utf-8"
    )
    job = JOB + '[conventions]\nlatitudes = "geodetic"\nbeyond = "hold"\nradius_km = 1000\n'
    job += TASK.format(name="one", kind="sites", file="good.csv") + "ages = [5, 50]\ndraws = 3\n"
    job += '[task.table]\ndelimiter = ";"\ndecimal = ","\n[task.table.columns]\nlat_deg = "Breite"\n'
    (mixed / "job.toml").write_text(job, encoding="utf-8")
    assert ask("run", "job.toml", "--out", "results").code == 0
    rows = table(mixed / "results", "one.csv")
    assert [float(row["restored_lon_deg"]) for row in rows] == pytest.approx([5.0, 40.0], abs=1e-9)
    assert [float(row["restored_lat_deg"]) for row in rows] == pytest.approx([0.5, 0.5], abs=1e-9)
    assert rows[0]["latitudes"] == "geodetic"
    assert "draws_radius_95_km" in rows[0]
    record = record_of(mixed / "results")
    assert record["conventions"] == {"latitudes": "geodetic", "radius_km": 1000.0, "beyond": "hold"}
    assert record["tasks"]["one"]["settings"]["task"]["table"]["columns"] == {"lat_deg": "Breite"}
