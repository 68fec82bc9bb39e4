"""Manifests and scenarios at fault: all faults at once, each with file:line:column and what would be right."""

import pytest
from command_line.world import HISTORY, SITES

MANIFEST = """\
version = 1
[frames]
deep = "mantle"
[[table]]
file = "history.csv"
turns = "to-past"
"""
ONE_OF = "must be one of"
MANIFESTS = {
    "syntax": (MANIFEST + "rank = \n", ["7:8: not valid TOML: invalid value"]),
    "a key twice": (MANIFEST + 'turns = "to-past"\n', ["7:18: not valid TOML: cannot overwrite a value"]),
    "unknown keys": (
        MANIFEST.replace("turns", "turn").replace("[frames]", 'titel = "x"\n[frames]'),
        ["2:1: unknown key 'titel'; did you mean 'title'?", "7:1: unknown key 'turn'; did you mean 'turns'?"],
    ),
    "wrong types": (
        MANIFEST.replace("version = 1", 'version = "1"') + 'rank = 1.5\nfrom_present = "yes"\n',
        [
            "1:1: version = '1'; must be a whole number",
            "7:1: rank = 1.5; must be a whole number",
            "8:1: from_present = 'yes'; must be true or false",
        ],
    ),
    "a later version": (MANIFEST.replace("= 1", "= 2"), ["1:1: version = 2; this release reads version = 1"]),
    "no tables": ("version = 1\n", [" no [[table]] is named; a history needs one"]),
    "one table": (MANIFEST.replace("[[table]]", "[table]"), ["4:1: [table] is one table; write [[table]]"]),
    "no file": (
        MANIFEST.replace('file = "history.csv"\n', ""),
        ["4:1: the table names no file; add file = '...'"],
    ),
    "choices": (
        MANIFEST.replace("to-past", "back").replace("mantle", "core") + 'holds = "both"\n',
        [
            f"3:1: frame kind 'core'; {ONE_OF} plate, mantle, spin-axis",
            f"6:1: turns = 'back'; {ONE_OF} to-past, to-present",
            f"7:1: holds = 'both'; {ONE_OF} plate, relative_to",
        ],
    ),
    "numbers": (
        MANIFEST + "join_within_myr = -1\nrates_hold_to_ma = 0\n",
        ["7:1: join_within_myr = -1; must not be negative", "8:1: rates_hold_to_ma = 0; must be above 0"],
    ),
    "no numbers": (
        MANIFEST + "join_within_myr = nan\nrates_hold_to_ma = inf\n",
        ["7:1: join_within_myr = nan; must be finite", "8:1: rates_hold_to_ma = inf; must be finite"],
    ),
    "column map": (
        MANIFEST + '[table.columns]\npole_latt = "Lat"\nangle_deg = 9.5\n',
        [
            "8:1: 'pole_latt' is not a column that is read; did you mean 'pole_lat_deg'?",
            "9:1: angle_deg = 9.5; must be a name or a whole number",
        ],
    ),
    "plate map": (MANIFEST + "[table.plates]\nalba = 9\n", ["8:1: alba = 9; must be a text"]),
}  # fmt: skip

IN_TABLES = {
    "a column that is not there": (
        '[table.columns]\npole_lat_deg = "Lat"\n',
        "history.csv:1: column 'Lat' (for pole_lat_deg) is missing; the header is plate, relative_to, age_ma,"
        " pole_lat_deg, pole_lon_deg, angle_deg",
    ),
    "a number too high": (
        "[table.columns]\npole_lat_deg = 9\n",
        "history.csv:1: column 9 was named for pole_lat_deg, but the table has 6 columns",
    ),
    "an encoding": (
        'encoding = "klingon"\n',
        "history.csv: encoding 'klingon' is not known; for example utf-8, latin-1",
    ),
    "another delimiter": (
        'delimiter = "tab"\n',
        "history.csv:1: the header is one column, 'plate,relative_to,age_ma,pole_lat_deg,pole_lon_deg,angle_deg'",
    ),
}  # fmt: skip


@pytest.mark.parametrize(("text", "messages"), MANIFESTS.values(), ids=MANIFESTS)
def test_manifests(here, ask, text, messages):
    """Each fault of a manifest is a line; `check` and every other command say the same."""
    (here / "m.toml").write_text(text, encoding="utf-8")
    expected = [f"m.toml:{message}" for message in messages]
    answer = ask("pole", "alba", "--relative-to", "deep", "--age", "5", "--history", "m.toml")
    assert (answer.code, answer.out) == (1, "")
    assert answer.said == [f"error: {line}" for line in expected]
    audit = ask("check", "m.toml")
    assert audit.code == 1
    assert audit.out.splitlines() == [f"error: {line}" for line in expected]


@pytest.mark.parametrize(("more", "message"), IN_TABLES.values(), ids=IN_TABLES)
def test_tables_of_manifests(here, ask, more, message):
    """What does not fit between a manifest and its table is said at the table."""
    (here / "m.toml").write_text(MANIFEST + more, encoding="utf-8")
    answer = ask("pole", "alba", "--relative-to", "deep", "--age", "5", "--history", "m.toml")
    assert (answer.code, answer.out) == (1, "")
    assert answer.err.startswith(f"error: {message}")
    assert len(answer.said) == 1


def test_the_manifest_itself_is_good(here, ask):
    """The text that the cases above start from is read."""
    (here / "m.toml").write_text(MANIFEST, encoding="utf-8")
    assert ask("pole", "alba", "--relative-to", "deep", "--age", "5", "--history", "m.toml").code == 0


SCENARIO = """\
version = 1
title = "Cores"
[history]
file = "history.csv"
[frame]
name = "deep"
kind = "mantle"
[[task]]
name = "cores"
kind = "sites"
file = "sites.csv"
ages = "own"
"""
RATES = """\
[[task]]
name = "ridge"
kind = "rates"
file = "points.csv"
plate = "alba"
relative_to = "deep"
"""


def changed(*pairs, more=""):
    text = SCENARIO
    for old, new in pairs:
        assert old in text
        text = text.replace(old, new)
    return text + more


SCENARIOS = {
    "syntax": (changed(more="ages =\n"), ["13:7: not valid TOML: invalid value"]),
    "empty": (
        "",
        [
            " the key 'version' is missing; add version = 1",
            " the key 'history' is missing; add [history] with file = '...'",
            " the key 'frame' is missing; add [frame] with a name and a kind",
            " the key 'task' is missing; add a [[task]]",
        ],
    ),
    "unknown keys": (
        changed(("title", "titel"), ("kind = \"mantle\"", "kind = \"mantle\"\nknd = 3"), more='age = "own"\n[frme]\nx = 1\n'),
        [
            "2:1: unknown key 'titel'; did you mean 'title'?",
            "8:1: unknown key 'knd'; did you mean 'kind'?",
            "14:1: unknown key 'age'; did you mean 'ages'?",
            "15:1: unknown key 'frme'; did you mean 'frame'?",
        ],
    ),
    "wrong types": (
        changed(("version = 1", 'version = "1"'), ('"Cores"', "3"), ('"deep"', "4"), ('"sites.csv"', "7")),
        [
            "1:1: version = '1'; must be a whole number",
            "2:1: title = 3; must be a text",
            "6:1: frame.name = 4; must be a text",
            "11:1: file = 7; must be a text",
        ],
    ),
    "true is no version": (changed(("version = 1", "version = true")), ["1:1: version = True; must be a whole number"]),
    "a later version": (changed(("version = 1", "version = 2")), ["1:1: version = 2; this release reads version = 1"]),
    "kinds": (
        changed(('"mantle"', '"mantel"'), ('"sites"', '"site"')),
        [
            "7:1: frame.kind = 'mantel'; must be 'plate', 'mantle' or 'spin-axis'; did you mean 'mantle'?",
            "10:1: kind = 'site'; did you mean 'sites'?",
        ],
    ),
    "no frame": (
        changed(('[frame]\nname = "deep"\nkind = "mantle"\n', "")),
        [" the key 'frame' is missing; add [frame] with a name and a kind"],
    ),
    "no name": (changed(('name = "cores"\n', "")), ["8:1: the key 'name' is missing; it names the result's file"]),
    "one task": (changed(("[[task]]", "[task]")), ["8:1: no [[task]] is named; a scenario needs at least one"]),
    "a name twice": (
        SCENARIO + RATES.replace('"ridge"', '"Cores"'),
        ["14:1: name = 'Cores' stands twice; the first is on line 9"],
    ),
    "a name with a path": (
        changed(('"cores"', '"../cores"')),
        ["9:1: name = '../cores'; a task's name is the name of its file: letters, digits, - and _"],
    ),
    "a name of the run's own": (
        changed(('"cores"', '"findings"')),
        ["9:1: name = 'findings'; findings.csv is a file of the run itself; give the task another name"],
    ),
    "ages": (changed(('"own"', '"0:10"')), ["12:1: ages = '0:10'; write start:stop:step, for example 0:120:10"]),
    "negative ages": (changed(('"own"', "[0, -5]")), ["12:1: ages = [0, -5]; -5: ages are finite, in Ma, positive into the past"]),
    "ages of another type": (
        changed(('"own"', '[0, "x"]')),
        ["12:1: ages = [0, 'x']; must be 'own', '0:120:10', an age or a list of ages, Ma"],
    ),
    "draws": (
        changed(more="draws = 0\nseed = 1.5\n"),
        ["13:1: draws = 0; must be at least 1", "14:1: seed = 1.5; must be a whole number"],
    ),
    "conventions": (
        changed(more='[conventions]\nlatitudes = "geocentric"\nradius_km = -1\nbeyond = 1\n'),
        [
            "14:1: conventions.latitudes = 'geocentric'; must be 'as-given' or 'geodetic'; did you mean 'geodetic'?",
            "15:1: conventions.radius_km = -1; must be above 0",
            "16:1: conventions.beyond = 1; must be 'refuse', 'hold' or 'extend'",
        ],
    ),
    "a layout": (
        changed(more='[task.table]\ndelimiter = ";;"\n'),
        ["14:1: delimiter = ';;'; must be one character, whitespace or one of tab, comma, semicolon, space, bar"],
    ),
    "a column map": (
        changed(more="[task.table.columns]\nlat_deg = 1.5\n"),
        ["14:1: lat_deg = 1.5; must be the name or the number of a column"],
    ),
    "rates": (
        SCENARIO + RATES.replace('relative_to = "deep"', 'age_ma = -3\nat_on = "both"'),
        [
            "13:1: the key 'relative_to' is missing; name the plate or frame held still",
            "18:1: age_ma = -3; must be at least 0",
            "19:1: at_on = 'both'; must be 'plate' or 'relative-to'",
        ],
    ),
    "missing files": (
        changed(("history.csv", "histroy.csv"), ("sites.csv", "data/site.csv")),
        [
            "4:1: file = 'histroy.csv': no such file; did you mean 'history.csv'?",
            "11:1: file = 'data/site.csv': no such file; did you mean 'sites.csv'?",
        ],
    ),
    "a folder for a file": (
        changed(("sites.csv", ".")),
        ["11:1: file = '.': is a folder; names are relative to the scenario's folder"],
    ),
    "labels": (
        changed(('"deep"', '"depe"')) + RATES.replace('"alba"', '"alab"'),
        [
            "6:1: frame.name = 'depe' is not in the history; did you mean 'deep'?",
            "17:1: plate = 'alab' is not in the history; did you mean 'alba'?",
        ],
    ),
}  # fmt: skip


@pytest.fixture
def inputs(here):
    """The files that the scenarios name."""
    (here / "sites.csv").write_text(SITES + "a,0,0,5,alba\n", encoding="utf-8")
    (here / "points.csv").write_text("lat_deg,lon_deg\n0,0\n", encoding="utf-8")
    return here


@pytest.mark.parametrize(("text", "messages"), SCENARIOS.values(), ids=SCENARIOS)
def test_scenarios(inputs, ask, text, messages):
    """All faults of a scenario at once, before a folder is made; `check` finds the same."""
    (inputs / "job.toml").write_text(text, encoding="utf-8")
    expected = [f"job.toml:{message}" for message in messages]
    answer = ask("run", "job.toml", "--out", "results")
    assert (answer.code, answer.out) == (1, "")
    assert answer.said == [f"error: {line}" for line in expected]
    assert not (inputs / "results").exists()
    audit = ask("check", "job.toml")
    if "history" in text:
        assert (audit.code, audit.out.splitlines()) == (1, [f"error: {line}" for line in expected])


def test_a_history_at_fault(inputs, ask):
    """The faults of a scenario's history are its own lines."""
    (inputs / "history.csv").write_text(
        HISTORY.replace("alba,deep,10,90", "alba,deep,10,95"), encoding="utf-8"
    )
    (inputs / "job.toml").write_text(SCENARIO, encoding="utf-8")
    for command in (("run", "job.toml", "--out", "results"), ("check", "job.toml")):
        answer = ask(*command)
        assert answer.code == 1
        lines = (answer.out + answer.err).splitlines()
        assert lines[0] == "error: history.csv:3:4: pole_lat_deg = 95; a latitude must lie in -90..90"
    assert not (inputs / "results").exists()


def test_a_frame_that_is_something_else(inputs, ask):
    """Where the history says what kind its frame is, the scenario cannot say another."""
    (inputs / "m.toml").write_text(MANIFEST, encoding="utf-8")
    (inputs / "job.toml").write_text(
        changed(("history.csv", "m.toml"), ('"mantle"', '"plate"')), encoding="utf-8"
    )
    answer = ask("run", "job.toml", "--out", "results")
    assert answer.said == [
        "error: job.toml:7:1: frame.kind = 'plate'; the history says that deep is of kind mantle"
    ]


@pytest.mark.parametrize(
    ("name", "message"),
    [
        ("none.toml", "none.toml: no such file"),
        (".", ".: is a folder, not a file"),
        ("sites.csv", "sites.csv:1:5: not valid TOML: expected '=' after a key in a key/value pair"),
    ],
)
def test_scenarios_that_are_none(inputs, ask, name, message):
    """A missing file, a folder and another file are no scenarios."""
    answer = ask("run", name, "--out", "results")
    assert (answer.code, answer.out, answer.said) == (1, "", [f"error: {message}"])
    assert not (inputs / "results").exists()
