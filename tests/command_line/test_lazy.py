"""What a command does not need it does not load: help and misuses answer at once."""

import json
import subprocess
import sys

import pytest
from command_line.world import DEMO, SITES, in_a_process, rows_of

from restore.commands import COMMANDS

HEAVY = ("numpy", "scipy", "xarray", "pandas", "pydantic", "netCDF4", "matplotlib", "pyarrow")
PROBE = """\
import contextlib, io, json, sys
from restore.commands import call
heavy = json.loads(sys.argv[1])
for args in json.loads(sys.argv[2]):
    with contextlib.redirect_stdout(io.StringIO()) as out, contextlib.redirect_stderr(io.StringIO()) as err:
        code = call(args)
    loaded = sorted(name for name in heavy if name in sys.modules)
    print(json.dumps([args, code, loaded, out.getvalue(), err.getvalue()]))
"""


def probe(runs, heavy=HEAVY):
    """What each of some command lines, one after the other in a fresh process, gives and has loaded."""
    done = subprocess.run(
        [sys.executable, "-c", PROBE, json.dumps(heavy), json.dumps(runs)],
        capture_output=True, text=True, timeout=120, check=True,
    )  # fmt: skip
    return [json.loads(line) for line in done.stdout.splitlines()]


def test_help_loads_nothing_heavy():
    """`--help` of the group and of every command says what there is, with one real example."""
    answers = probe([["--help"], *([name, "--help"] for name in COMMANDS)])
    assert len(answers) == len(COMMANDS) + 1
    for args, code, loaded, out, err in answers:
        assert (args, code, loaded, err) == (args, 0, [], "")
        assert out.startswith("Usage: oncewhere")
    assert all(name in answers[0][3] for name in COMMANDS)
    for args, *_, out, _ in answers[1:]:
        assert f"\n  oncewhere {args[0]} " in out


MISUSED = [
    ["sitse"], ["--what"], [], ["pole"], ["pole", "a", "--relative-to", "b", "--age", "-5", "--history", "h"],
    ["stage", "a", "--relative-to", "b", "--from", "1", "--to", "2", "--history", "h"],
    ["sites", "t", "--history", "h", "--frame", "f", "--ages", "0:10"],
    ["sites", "t", "--history", "h"], ["rates", "--at", "95,0", "--pole", "1,2,3"], ["rates"],
    ["run"], ["check"], ["draws", "h", "--count", "0", "--out", "d"], ["compare", "a"],
]  # fmt: skip


def test_misuses_load_nothing_heavy():
    """A misused command says so without loading what it would have computed with."""
    for args, code, loaded, out, err in probe(MISUSED):
        assert (args, code, loaded, out) == (args, 2, [], "")
        assert err


def test_importing_the_package_is_free():
    """`import restore` loads no heavy package; a name loads when it is asked for."""
    script = "import sys, restore; print([m for m in sys.argv[1:] if m in sys.modules]); restore.History"
    done = subprocess.run(
        [sys.executable, "-c", script, *HEAVY], capture_output=True, text=True, timeout=60, check=True
    )
    assert done.stdout == "[]\n"


def test_import_times_of_help():
    """Python's own list of imports shows no heavy package behind `python -m restore --help`."""
    done = subprocess.run(
        [sys.executable, "-X", "importtime", "-m", "restore", "--help"],
        capture_output=True, text=True, timeout=60, check=True,
    )  # fmt: skip
    loaded = {line.rpartition("|")[2].strip().partition(".")[0] for line in done.stderr.splitlines()}
    assert {"click", "restore"} <= loaded
    assert loaded.isdisjoint(HEAVY)


NOT_FOR_SITES = [name for name in HEAVY if name != "numpy"]
DEMO_SITES = ["sites", str(DEMO / "cores.csv"), "--history", str(DEMO / "history.toml"), "--frame", "deep"]


@pytest.mark.parametrize(
    "options",
    [
        [],
        ["--ages", "0:60:20", "--latitudes", "geodetic"],
        ["--out", "o.json", "--ledger", "l.json"],
        ["--draws", "3"],
    ],
)
def test_sites_need_numpy_only(here, options):
    """Restoring sites, estimated errors, ledger and draws included, loads numpy and nothing larger."""
    ((_, code, loaded, _, err),) = probe([[*DEMO_SITES, *options]], NOT_FOR_SITES)
    assert (code, loaded) == (0, [])
    assert err.endswith(" restored\n")


def test_ten_thousand_sites(here):
    """1e4 sites go through the command line, from file to file."""
    rows = "".join(f"{i},{i % 180 - 90},{i % 360 - 180},{i % 40},alba\n" for i in range(10_000))
    (here / "sites.csv").write_text(SITES + rows, encoding="utf-8")
    answer = in_a_process(
        "sites", "sites.csv", "--history", "known.csv", "--frame", "deep", "--out", "out.csv", "--ledger", "l.csv"
    )  # fmt: skip
    assert (answer.code, answer.out, answer.err) == (0, "", "10000 rows: 10000 restored\n")
    found = rows_of((here / "out.csv").read_text(encoding="utf-8"))
    assert [row["site"] for row in found] == [str(i) for i in range(10_000)]
    for i in (1, 1234, 9999):
        lon = (i % 360 - 180 + i % 40 + 180) % 360 - 180
        assert float(found[i]["restored_lon_deg"]) == pytest.approx(lon, abs=1e-9)
    assert len(rows_of((here / "l.csv").read_text(encoding="utf-8"))) == 2
