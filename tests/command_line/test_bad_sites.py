"""Site tables and outputs at fault: a clear line per fault, and the good rows restored all the same."""

import pytest
from command_line.world import HISTORY, SITES, deny, leftovers

GOOD = "good,0,0,5,alba\n"
MALFORMED = {
    "text in a number": ("a,north,0,5,alba", "2:2: lat_deg = 'north' is not a number; leave it empty if there is no value"),
    "latitude 95": ("a,95,0,5,alba", "2:2: lat_deg = 95; a latitude must lie in -90..90"),
    "longitude 1e9": ("a,0,1e9,5,alba", "2:3: lon_deg = 1e9; a longitude must lie in -360..360"),
    "NaN": ("a,nan,0,5,alba", "2:2: lat_deg = nan; a latitude must lie in -90..90"),
    "infinite": ("a,0,-inf,5,alba", "2:3: lon_deg = -inf; a longitude must lie in -360..360"),
    "no coordinate": ("a,,0,5,alba", "2:2: lat_deg is empty; a latitude must lie in -90..90"),
    "a missing value in words": ("a,0,NA,5,alba", "2:3: lon_deg = 'NA' is not a number; leave it empty if there is no value"),
    "negative age": ("a,0,0,-5,alba", "2:4: age_ma = -5; ages lie in 0..4600 Ma, positive into the past"),
    "age 1e9": ("a,0,0,1e9,alba", "2:4: age_ma = 1e9; ages lie in 0..4600 Ma, positive into the past"),
    "infinite age": ("a,0,0,inf,alba", "2:4: age_ma = inf; ages lie in 0..4600 Ma, positive into the past"),
    "decimal comma": (
        'a,"1,5",0,5,alba',
        "2:2: lat_deg = '1,5' is not a number; numbers have a decimal point; state decimal = ',' if commas are meant",
    ),
    "bare decimal comma": (
        "a,1,5,0,5,alba",
        "2: the row has 6 fields where the header has 5; quote texts that hold the delimiter; decimal commas need"
        " another delimiter",
    ),
    "short row": ("a,x", "2: the row has 2 fields where the header has 5; a missing value still needs its delimiter"),
    "digit groups": ("a,1_0,0,5,alba", "2:2: lat_deg = '1_0' is not a number; leave it empty if there is no value"),
}  # fmt: skip
STATUSES = {"bad coordinate", "no age"}

DATED = "site,lat_deg,lon_deg,age_ma,age_sigma_myr,age_young_ma,age_old_ma,position_sigma_km,plate\n"
AGES = {
    "range upside down": ("a,0,0,,,9,4,,alba", "2:6: age_young_ma = 9; must not be above age_old_ma"),
    "half a range": ("a,0,0,,,4,,,alba", "2:7: age_old_ma is empty; a range needs both its ends"),
    "age outside its range": ("a,0,0,20,,4,9,,alba", "2:4: age_ma = 20; must lie between age_young_ma and age_old_ma"),
    "sigma below 0": ("a,0,0,5,-1,,,,alba", "2:5: age_sigma_myr = -1; must be finite and not negative"),
    "position error below 0": ("a,0,0,5,,,,-3,alba", "2:8: position_sigma_km = -3; must be finite and not negative"),
}  # fmt: skip

WHOLE = {
    "empty": ("", ": is empty; a table needs at least a header line"),
    "missing column": ("site,lat,lon_deg,age_ma,plate\n", ":1: column 'lat_deg' is missing; did you mean 'lat'?"),
    "missing column, none near": (
        "site,y,lon_deg,age_ma,plate\n",
        ":1: column 'lat_deg' is missing; the header is site, y, lon_deg, age_ma, plate",
    ),
    "no ages": (
        "site,lat_deg,lon_deg,plate\n",
        ":1: column 'age_ma' is missing; the header is site, lat_deg, lon_deg, plate",
    ),
    "doubled column": (
        "lat_deg,lat_deg,lon_deg,age_ma\n",
        ":1:2: column 'lat_deg' stands twice (also column 1); each name may stand once",
    ),
    "one end of a range": (
        "lat_deg,lon_deg,age_young_ma\n",
        ":1: age_young_ma stands without age_old_ma; an age range needs both",
    ),
    "unclosed quote": (SITES + GOOD + '"a,0,0,5,alba\n', ":3: a quote that opens here is never closed"),
    "zero bytes": (SITES + GOOD + "\0", ":3: holds zero bytes: not a text table"),
    "another encoding": (
        (SITES + GOOD + "Ö,0,0,5,alba\n").encode("latin-1"),
        ":3: byte 0xd6 is not utf-8 text; save the file as UTF-8 or state its encoding",
    ),
}  # fmt: skip


@pytest.mark.parametrize(("row", "message"), MALFORMED.values(), ids=MALFORMED)
def test_malformed_rows(restore, row, message):
    """A malformed row is said once and stays in the table; the good rows are restored; exit 1."""
    answer = restore(SITES + row + "\n" + GOOD)
    assert answer.code == 1
    bad, good = answer.rows
    assert bad["status"] in STATUSES
    assert bad["restored_lat_deg"] == ""
    assert (good["status"], good["restored_lon_deg"]) == ("restored", "5")
    assert answer.said[:-1] == [f"error: sites.csv:{message}"]
    assert answer.said[-1] == f"2 rows: 1 {bad['status']}, 1 restored"


@pytest.mark.parametrize(("row", "message"), AGES.values(), ids=AGES)
def test_malformed_ages_and_errors(restore, row, message):
    """Ranges, sigmas and position errors that cannot be are said at their place."""
    answer = restore(DATED + row + "\nb,0,0,5,,,,,alba\n")
    assert (answer.code, answer.said[:-1]) == (1, [f"error: sites.csv:{message}"])
    assert answer.rows[0]["status"] == ("bad coordinate" if "position" in message else "no age")
    assert answer.rows[1]["status"] == "restored"


def test_several_faults_at_once(restore):
    """Faults of one row and of several come in the order of the file, quoted line ends counted."""
    table = SITES + '"a\nb",95,x,-5,alba\n' + GOOD + "c,0,0,ten,alba\n"
    answer = restore(table)
    assert answer.code == 1
    assert [line.partition(";")[0] for line in answer.said] == [
        "error: sites.csv:2:2: lat_deg = 95",
        "error: sites.csv:2:3: lon_deg = 'x' is not a number",
        "error: sites.csv:2:4: age_ma = -5",
        "error: sites.csv:5:4: age_ma = 'ten' is not a number",
        "3 rows: 1 bad coordinate, 1 no age, 1 restored",
    ]


def test_a_thousand_faults_are_not_a_thousand_lines(restore):
    """Past a hundred lines only the number of the others is said."""
    answer = restore(SITES + "a,99,0,5,alba\n" * 150 + GOOD)
    assert answer.code == 1
    assert len(answer.said) == 102
    assert answer.said[100:] == ["... and 50 more", "151 rows: 150 bad coordinate, 1 restored"]


@pytest.mark.parametrize(("data", "message"), WHOLE.values(), ids=WHOLE)
@pytest.mark.parametrize("kind", ["csv", "json"])
def test_tables_that_cannot_be_read(here, restore, data, message, kind):
    """A table at fault as a whole is one line; no file is written, whole or in part."""
    answer = restore(data, "--out", f"out.{kind}", "--ledger", "ledger.csv")
    assert (answer.code, answer.out, answer.said) == (1, "", [f"error: sites.csv{message}"])
    assert sorted(path.name for path in here.iterdir()) == ["history.csv", "known.csv", "sites.csv"]


def test_another_delimiter(restore):
    """Semicolons are recognised and named, not guessed."""
    answer = restore((SITES + GOOD).replace(",", ";"))
    assert answer.code == 1
    (line,) = answer.said
    assert "the table looks semicolon-delimited; state delimiter = 'semicolon'" in line
    assert restore((SITES + GOOD).replace(",", ";"), "--delimiter", "semicolon").code == 0


@pytest.mark.parametrize(
    "data",
    [
        b"\xef\xbb\xbf" + (SITES + GOOD).encode(),
        (SITES + GOOD).encode("utf-16"),
        (SITES + GOOD).replace("\n", "\r\n").encode(),
        (SITES + GOOD).replace("\n", "\r").encode(),
        (SITES + "\n" + GOOD).rstrip().encode(),
    ],
    ids=["UTF-8 with a mark", "UTF-16", "CRLF", "CR", "no last line end"],
)
def test_what_is_no_fault(restore, data):
    """Marks and line ends of other systems change nothing."""
    answer = restore(data)
    assert (answer.code, answer.out) == (0, restore(SITES + GOOD).out)


def test_a_stated_encoding(restore):
    """Another encoding is read where it is stated; the output is UTF-8."""
    answer = restore((SITES + "Ö,0,0,5,alba\n").encode("latin-1"), "--encoding", "latin-1")
    assert (answer.code, answer.rows[0]["site"]) == (0, "Ö")


@pytest.mark.parametrize(
    ("options", "code", "message"),
    [
        (["--columns", "latt=lat_deg"], 1, "sites.csv: column map: 'latt' is not a column that is read; "),
        (["--columns", "lat_deg=Lat"], 1, "sites.csv:1: column 'Lat' (for lat_deg) is missing; the header is site, "),
        (["--columns", "lat_deg=12"], 1, "sites.csv:1: column 12 was named for lat_deg, but the table has 5 columns"),
        (["--columns", "lat_deg"], 2, "Invalid value for --columns: 'lat_deg': write ours=theirs"),
        (["--delimiter", ";;"], 2, "delimiter = ';;': must be one character, whitespace or one of tab, comma, "),
        (["--decimal", ","], 2, "decimal and delimiter are both ','"),
        (["--encoding", "klingon"], 1, "sites.csv: encoding 'klingon' is not known; for example utf-8, latin-1"),
        (["--no-header"], 1, "sites.csv:1: no column is named for lat_deg; a table without a header is mapped by"),
        (["--ages", "0:10"], 2, "ages '0:10': write start:stop:step, for example 0:120:10"),
        (["--ages", "0,ten"], 2, "ages '0,ten': 'ten' is not a number; write own, 0,10,20 or 0:120:10"),
        (["--ages", "10:0:5"], 2, "ages '10:0:5': the step must be above 0 and stop not below start"),
        (["--ages", "0,-5"], 2, "ages '0,-5': -5: ages are finite, in Ma, positive into the past"),
        (["--radius-km", "0"], 2, "0.0 is not in the range 1.0<=x<=1000000.0"),
        (["--latitudes", "geocentric"], 2, "'geocentric' is not one of 'as-given', 'geodetic'"),
        (["--frame-kind", "core"], 2, "'core' is not one of 'plate', 'mantle', 'spin-axis'"),
        (["--draws", "0"], 2, "0 is not in the range x>=1"),
    ],
)  # fmt: skip
def test_options_that_do_not_fit(restore, options, code, message):
    """What a column map, a layout or an option asks in vain is said before anything is written."""
    answer = restore(SITES + GOOD, *options)
    assert (answer.code, answer.out) == (code, "")
    assert answer.said[0].startswith("error: ")
    assert message in answer.said[0]


@pytest.mark.parametrize(
    ("name", "message"),
    [
        ("no/where/out.csv", "no/where/out.csv: cannot be written: there is no folder 'no/where'"),
        ("no/out.json", "no/out.json: cannot be written: there is no folder 'no'"),
        ("folder.csv", "folder.csv: is a folder; give the name of a file to write"),
        ("folder.json", "folder.json: is a folder; give the name of a file to write"),
        ("out.xls", "out.xls: cannot tell what to write; end the name in .csv, .json, .geojson, .nc, .parquet, .gpkg"),
        ("out", "out: cannot tell what to write; end the name in .csv, .json, .geojson, .nc, .parquet, .gpkg"),
        ("sites.csv", "sites.csv: is a file that was read; give another name to write to"),
        ("./history.csv", "history.csv: is a file that was read; give another name to write to"),
    ],
)  # fmt: skip
def test_outputs_that_cannot_be_written(here, restore, name, message):
    """A place that cannot be written to is refused at once; inputs are never overwritten."""
    (here / "folder.csv").mkdir()
    (here / "folder.json").mkdir()
    answer = restore(SITES + GOOD, "--out", name)
    assert (answer.code, answer.out, answer.said) == (1, "", [f"error: {message}"])
    assert leftovers(here) == []
    assert (here / "sites.csv").read_text(encoding="utf-8") == SITES + GOOD
    assert (here / "history.csv").read_text(encoding="utf-8") == HISTORY
    assert {path.name for path in here.iterdir()} == {
        *("folder.csv", "folder.json", "history.csv", "known.csv", "sites.csv")
    }


def test_a_disk_that_is_full(here, restore, monkeypatch):
    """Where writing fails midway, the reason is said and nothing half-written stays."""

    def full(*_args):
        raise OSError(28, "No space left on device")

    monkeypatch.setattr("os.replace", full)
    answer = restore(SITES + GOOD, "--out", "out.csv")
    assert (answer.code, answer.said) == (1, ["error: out.csv: cannot be written: No space left on device"])
    assert sorted(path.name for path in here.iterdir()) == ["history.csv", "known.csv", "sites.csv"]


@pytest.mark.parametrize("kind", ["missing", "folder", "dangling link"])
def test_tables_that_are_not_there(here, ask, kind):
    """A missing table is named, for sites and for points."""
    if kind == "folder":
        (here / "t.csv").mkdir()
    elif kind == "dangling link":
        (here / "t.csv").symlink_to("nowhere")
    reason = "is a folder, not a file" if kind == "folder" else "no such file"
    for command in (
        ("sites", "t.csv", "--history", "history.csv", "--frame", "deep", "--out", "out.csv"),
        ("rates", "--points", "t.csv", "--pole", "90,0,1", "--out", "out.csv"),
    ):
        answer = ask(*command)
        assert (answer.code, answer.out, answer.said) == (1, "", [f"error: t.csv: {reason}"])
    assert not (here / "out.csv").exists()


def test_a_table_that_may_not_be_read(here, ask, monkeypatch):
    """Permission denied is said as such."""
    (here / "sites.csv").write_text(SITES + GOOD, encoding="utf-8")
    deny(here / "sites.csv", monkeypatch)
    answer = ask("sites", "sites.csv", "--history", "history.csv", "--frame", "deep")
    assert (answer.code, answer.out) == (1, "")
    assert answer.said == ["error: sites.csv: cannot be read: Permission denied"]
