"""What is wrong with manifests, time scales and calls to restate: one line each, with its place.

Every line says what, where (file:line:column), the value, and what would be right; nothing is
written, and no traceback is shown.
"""

import re

import pytest
from command_line.world import HEAD, leftovers

TABLE = f"{HEAD}\nafra,deep,0,,,0\nafra,deep,10,90,0,10\n"
CHRONS = "plate,relative_to,chron,pole_lat_deg,pole_lon_deg,angle_deg\n"
FILES = {
    "a.csv": TABLE,
    "semi.csv": TABLE.replace(",", ";"),
    "comma.csv": TABLE.replace(",", ";").replace("10", "10,5"),
    "empty.csv": "",
    "header.csv": f"{HEAD}\n",
    "bare.csv": TABLE.partition("\n")[2],
    "picks.csv": CHRONS + "afra,deep,An5,90,0,10\n",
    "unknown.csv": CHRONS + "afra,deep,C5x(y),90,0,10\n",
    "old.csv": CHRONS + "afra,deep,C34n(o),90,0,10\n",
    "latin.csv": f"{HEAD},reference\nafra,deep,10,90,0,10,M\xfcller\n".encode("latin-1"),
    "scale.csv": "chron,young_ma,old_ma\nA,5,2\n",
}


def manifest(more="", top="version = 1\n", file="a.csv"):
    return f'{top}[[table]]\nfile = "{file}"\n{more}'


MANIFESTS = {
    "not TOML": ("version = 1\n[[table]\n", r"h\.toml:2:8: not valid TOML: expected '\]\]'"),
    "a key twice": (manifest("rank = 1\nrank = 2\n"), r"h\.toml:5:9: not valid TOML: cannot overwrite"),
    "a later version": (manifest(top="version = 2\n"), r"h\.toml:1:1: version = 2; this release reads version = 1"),
    "a version in words": (manifest(top='version = "1"\n'), r"h\.toml:1:1: version = '1'; must be a whole number"),
    "an unknown key": (manifest(top='version = 1\ntitel = "x"\n'), r"h\.toml:2:1: unknown key 'titel'; did you mean 'title'\?"),
    "a title that is a number": (manifest(top="version = 1\ntitle = 5\n"), r"h\.toml:2:1: title = 5; must be a text"),
    "no table": ("version = 1\n", r"h\.toml: no \[\[table\]\] is named; a history needs one"),
    "one table in single brackets": ('version = 1\n[table]\nfile = "a.csv"\n', r"h\.toml:2:1: \[table\] is one table; write \[\[table\]\]"),
    "a table without a file": ("version = 1\n[[table]]\nrank = 1\n", r"h\.toml:2:1: the table names no file; add file ="),
    "a file that is not there": (manifest(file="b.csv"), r".*b\.csv: no such file"),
    "a folder": (manifest(file="."), r".*: is a folder, not a file"),
    "an unknown key of a table": (manifest('turn = "to-past"\n'), r"h\.toml:4:1: unknown key 'turn'; did you mean 'turns'\?"),
    "an unknown turn": (manifest('turns = "back"\n'), r"h\.toml:4:1: turns = 'back'; must be one of to-past, to-present"),
    "an unknown side": (manifest('holds = "both"\n'), r"h\.toml:4:1: holds = 'both'; must be one of plate, relative_to"),
    "an unknown sense": (manifest('positive_angle = "left"\n'), r"h\.toml:4:1: positive_angle = 'left'; must be one of anticlockwise"),
    "unknown latitudes": (manifest('latitudes = "geodetc"\n'), r"h\.toml:4:1: latitudes = 'geodetc'; must be one of as-given, geodetic"),
    "unknown coordinates": (manifest('covariance_in = "frame"\n'), r"h\.toml:4:1: covariance_in = 'frame'; must be one of plate"),
    "a rank in words": (manifest('rank = "first"\n'), r"h\.toml:4:1: rank = 'first'; must be a whole number"),
    "from_present in words": (manifest('from_present = "yes"\n'), r"h\.toml:4:1: from_present = 'yes'; must be true or false"),
    "a negative join": (manifest("join_within_myr = -1\n"), r"h\.toml:4:1: join_within_myr = -1; must not be negative"),
    "an endless join": (manifest("join_within_myr = inf\n"), r"h\.toml:4:1: join_within_myr = inf; must be finite"),
    "rates that never hold": (manifest("rates_hold_to_ma = 0\n"), r"h\.toml:4:1: rates_hold_to_ma = 0; must be above 0"),
    "an age with a unit": (manifest('valid_to_ma = "118 Ma"\n'), r"h\.toml:4:1: valid_to_ma = '118 Ma'; must be a number"),
    "an unknown clock": (manifest('time_scale = "ck94"\n'), r"h\.toml:4:1: time_scale = 'ck94' is neither .* did you mean 'ck95'\?"),
    "a clock at fault": (manifest('time_scale = "scale.csv"\n'), r"scale\.csv:2:3: old_ma = 2 of A with young_ma = 5; the old edge"),
    "a long delimiter": (manifest('delimiter = "::"\n'), r"h\.toml:2:1: delimiter = '::': must be one character, whitespace or"),
    "an odd decimal mark": (manifest('decimal = ";"\n'), r"h\.toml:2:1: decimal = ';': must be '\.' or ','"),
    "one mark for two things": (manifest('decimal = ","\n'), r"h\.toml:2:1: decimal and delimiter are both ','"),
    "an unknown encoding": (manifest('encoding = "utf-9"\n'), r".*encoding 'utf-9' is not known; for example utf-8, latin-1"),
    "the wrong encoding": (manifest(file="latin.csv"), r"latin\.csv:2: byte 0xfc is not utf-8 text; save the file as UTF-8 or state"),
    "a column that is not read": (manifest('columns = { pole_latitude = "x" }\n'), r"h\.toml:4:13: 'pole_latitude' is not a column .* 'pole_lat_deg'\?"),
    "a column that is not there": (manifest('columns = { angle_deg = "Angle" }\n'), r"a\.csv:1: column 'Angle' \(for angle_deg\) is missing; the header is"),
    "a column beyond the last": (manifest("columns = { angle_deg = 9 }\n"), r"a\.csv:1: column 9 was named for angle_deg, but the table has 6"),
    "a column that is neither": (manifest("columns = { angle_deg = true }\n"), r"h\.toml:4:13: angle_deg = True; must be a name or a whole number"),
    "a label that is a number": (manifest("plates = { afra = 1 }\n"), r"h\.toml:4:12: afra = 1; must be a text"),
    "an unknown kind of frame": (manifest(top='version = 1\n[frames]\ndeep = "mantel"\n'), r"h\.toml:3:1: frame kind 'mantel'; must be one of plate, mantle"),
    "frames in one word": (manifest(top='version = 1\nframes = "deep"\n'), r"h\.toml:2:1: frames = 'deep'; must be a table"),
    "a constant that cannot be one": (manifest('constants = { age_ma = "5" }\n'), r"h\.toml:4:15: unknown key 'age_ma'; known: chron"),
    "rows chosen by a column that is not there": (manifest('only = { Source = "x" }\n'), r"a\.csv:1: only: column 'Source' is missing; known"),
    "none of the rows asked for": (manifest('only = { plate = "x" }\n'), r"a\.csv:1: the table has a header and no rows of those asked for"),
    "no header and no map": (manifest("header = false\n", file="bare.csv"), r"bare\.csv:1: no column is named for plate; a table without a header"),
    "another delimiter": (manifest(file="semi.csv"), r"semi\.csv:1: .* the table looks semicolon-delimited; state delimiter"),
    "decimal commas": (manifest('delimiter = ";"\n', file="comma.csv"), r"comma\.csv:3:3: age_ma = '10,5' is not a number; state decimal = ','"),
    "an empty file": (manifest(file="empty.csv"), r".*empty\.csv: is empty; a table needs at least a header line"),
    "a header and no rows": (manifest(file="header.csv"), r"header\.csv:1: the table has a header and no rows"),
    "an anomaly without a pick": (manifest('time_scale = "ck95"\n', file="picks.csv"), r"picks\.csv:2:3: chron 'An5': say which edge, .* \[table\.chrons\]"),
    "a pick without an edge": (
        manifest('time_scale = "ck95"\nchrons = { An5 = "C5n.2n" }\n', file="picks.csv"),
        r"picks\.csv:2:3: chron 'C5n\.2n': say which edge, C5n\.2n\(y\)",
    ),
    "a pick that is a number": (manifest("chrons = { An5 = 5 }\n", file="picks.csv"), r"h\.toml:4:12: An5 = 5; must be a text"),
    "a chron that the scale lacks": (manifest('time_scale = "ck95"\n', file="unknown.csv"), r"unknown\.csv:2:3: chron 'C5x' is not in time scale ck95"),
    "an edge that the scale lacks": (manifest('time_scale = "ck95"\n', file="old.csv"), r"old\.csv:2:3: time scale ck95 has no age for that edge of C34n"),
    "chrons without a clock": (manifest(file="picks.csv"), r"picks\.csv:1: chrons stand instead of ages, and no time scale is named"),
}  # fmt: skip


def lay_out(here, **more):
    for name, text in {**FILES, **more}.items():
        (here / name).write_bytes(text if isinstance(text, bytes) else text.encode("utf-8"))


def one_clear_line(lines, pattern):
    """Whether there is one line, it is an error, and it says what the pattern asks."""
    assert len(lines) == 1, lines
    assert re.match(f"error: {pattern}", lines[0]), lines[0]
    assert "internal fault" not in lines[0]
    assert "Traceback" not in lines[0]


@pytest.mark.parametrize("case", MANIFESTS)
def test_manifests_at_fault(here, ask, case):
    """`check` names the fault in one line and fails; nothing is written."""
    text, pattern = MANIFESTS[case]
    lay_out(here, **{"h.toml": text})
    answer = ask("check", "h.toml", "--out", "out.nc")
    assert answer.code == 1
    one_clear_line(answer.out.splitlines(), pattern)
    assert answer.said == ["1 error, 0 warnings, 0 notes"]
    assert not (here / "out.nc").exists()
    assert leftovers(here) == []


@pytest.mark.parametrize(
    "case", ["an unknown turn", "a column that is not there", "an anomaly without a pick"]
)
def test_other_commands_say_the_same(here, ask, case):
    """A history at fault stops any command with the same line, on standard error."""
    text, pattern = MANIFESTS[case]
    lay_out(here, **{"h.toml": text})
    for command in (
        ("pole", "afra", "--relative-to", "deep", "--age", "5", "--history", "h.toml"),
        ("redate", "h.toml", "--to", "gts2004", "--out", "out.nc"),
        ("differences", "h.toml", "a.csv"),
        ("draws", "h.toml", "--count", "2", "--out", "drawn"),
        ("closure", "a,b,c", "--ages", "5", "--history", "h.toml"),
    ):
        answer = ask(*command)
        assert (answer.code, answer.out) == (1, "")
        one_clear_line(answer.said, pattern)
    assert not (here / "drawn").exists()
    assert not (here / "out.nc").exists()


def test_all_faults_of_a_manifest_at_once(here, ask):
    """One line per fault, each at its own key."""
    lay_out(here, **{"h.toml": manifest('turns = "back"\nrank = "first"\ntile = "x"\n')})
    answer = ask("check", "h.toml")
    assert answer.code == 1
    places = [re.match(r"error: h\.toml:(\d+):1: ", line)[1] for line in answer.out.splitlines()]
    assert sorted(places) == ["4", "5", "6"]


SCALE_HEAD = "chron,young_ma,old_ma\n"
SCALES = {
    "no chrons": (SCALE_HEAD, r"s\.csv: no chrons; a time scale needs at least one"),
    "a text for an age": (SCALE_HEAD + "A,0,x\n", r"s\.csv:2:3: old_ma = 'x'; an age is a finite number, in Ma"),
    "an infinite age": (SCALE_HEAD + "A,0,inf\n", r"s\.csv:2:3: old_ma = 'inf'; an age is a finite number, in Ma"),
    "no young edge": (SCALE_HEAD + "A,,1\n", r"s\.csv:2:2: young_ma is empty; only old_ma may be"),
    "no name": (SCALE_HEAD + ",0,1\n", r"s\.csv:2:1: chron is empty; every row names one"),
    "a name twice": (SCALE_HEAD + "A,0,1\nA,2,3\n", r"s\.csv:3:1: chron 'A' stands twice; keep one row"),
    "edges the wrong way round": (SCALE_HEAD + "A,2,1\n", r"s\.csv:2:3: old_ma = 1 of A with young_ma = 2; the old edge"),
    "a negative age": (SCALE_HEAD + "A,-1,1\n", r"s\.csv:2:2: young_ma = -1 of A after 0 Ma; ages are not negative"),
    "chrons out of order": (SCALE_HEAD + "A,0,3\nB,2,4\n", r"s\.csv:3:2: young_ma = 2 of B after 3 Ma; ages .* rise down the table"),
    "a short row": (SCALE_HEAD + "A,0\n", r"s\.csv:2: the row has 2 fields where the header has 3"),
    "a long row": (SCALE_HEAD + "A,0,1,2\n", r"s\.csv:2: the row has 4 fields where the header has 3"),
    "no column of old edges": ("chron,young_ma\nA,1\n", r"s\.csv:1: column 'old_ma' is missing"),
    "another delimiter": (SCALE_HEAD.replace(",", ";"), r"s\.csv:1: .* the table looks semicolon-delimited"),
    "nothing at all": ("", r"s\.csv: is empty; a table needs at least a header line"),
    "zero bytes": ("chron\x00", r"s\.csv:1: holds zero bytes: not a text table"),
}  # fmt: skip


@pytest.mark.parametrize("case", SCALES)
def test_time_scales_at_fault(here, ask, case):
    """A table of chrons at fault is named in one line, whether a history is restated to it or is on it."""
    text, pattern = SCALES[case]
    lay_out(here, **{"s.csv": text, "h.toml": manifest('time_scale = "s.csv"\n')})
    answer = ask("redate", "a.csv", "--from", "ck95", "--to", "s.csv", "--out", "out.nc")
    assert (answer.code, answer.out) == (1, "")
    one_clear_line(answer.said, pattern)
    listed = ask("check", "h.toml", "--json")
    assert listed.code == 1
    assert '"severity": "error"' in listed.out
    assert not (here / "out.nc").exists()


NO_CLOCK = (
    r"a\.csv:3: age 10 Ma has no chron and its table names no time scale; name time_scale for the table"
)
CALLS = {
    "no scale to go to": (("a.csv", "--from", "ck95"), 2, r"[Mm]issing option '--to'"),
    "an unknown scale": (("a.csv", "--from", "ck95", "--to", "gts2013"), 1, r"time scale 'gts2013' is neither .* 'gts2012'\?"),
    "an unknown scale to come from": (("a.csv", "--from", "x", "--to", "ck95"), 1, r"time scale 'x' is neither known nor a file; known: cent94"),
    "no clock": (("a.csv", "--to", "gts2004"), 1, NO_CLOCK),
    "scales that share nothing": (("a.csv", "--from", "ck95", "--to", "kg86"), 1, r"time scales ck95 and kg86 share 0 reversals"),
    "an age that is too old": (("ancient.csv", "--from", "ck95", "--to", "gts2004"), 1,
                               r"ancient\.csv:2: age 90 Ma cannot be restated from ck95 to gts2004; only 0\.\.83 Ma"),
    "rows that change their order": (("order.toml", "--from", "ck95", "--to", "gts2004"), 1,
                                     r"order\.csv:3: afra relative to deep: restated, this row is at 19\.722 Ma .*; give both rows"),
    "two chrons at one change": (("touch.csv", "--from", "ck95", "--to", "gts2004"), 1,
                                 r"touch\.csv:3: afra changes its partner at 20\.1 Ma, where two chrons say .*; give both rows"),
    "a history into a table": (("a.csv", "--from", "ck95", "--to", "gts2004", "--out", "o.csv"), 1, r"o\.csv: .* end the name in \.nc"),
    "a folder that is not there": (("a.csv", "--from", "ck95", "--to", "gts2004", "--out", "no/o.nc"), 1, r"no/o\.nc: cannot be written: there is no folder"),
    "a file that is not there": (("b.csv", "--to", "gts2004"), 1, r"b\.csv: no such file"),
    "a manifest that is not there": (("b.toml", "--to", "gts2004"), 1, r"b\.toml: no such file"),
    "a netCDF file that is none": (("x.nc", "--to", "gts2004"), 1, r"x\.nc: not a readable netCDF file"),
    "sites without ages": (("places.csv", "--from", "ck95", "--to", "gts2004"), 1, r"places\.csv:1: column 'age_ma' is missing"),
    "sites without a clock": (("sites.csv", "--to", "gts2004"), 1, r"sites\.csv:2:2: age_ma = 20 has no chron and the table names no"),
    "sites into nothing known": (("sites.csv", "--from", "ck95", "--to", "gts2004", "--out", "o.xyz"), 1, r"o\.xyz: cannot tell what to write"),
    "sites into themselves": (("sites.csv", "--from", "ck95", "--to", "gts2004", "--out", "sites.csv"), 1, r"sites\.csv: is a file that was read"),
    "a column map without a column": (("sites.csv", "--from", "ck95", "--to", "gts2004", "--columns", "age=age_ma"), 1, r"sites\.csv: column map: 'age' is not a column"),
    "a column map of one word": (("sites.csv", "--from", "ck95", "--to", "gts2004", "--columns", "age_ma"), 2, r".*'age_ma': write ours=theirs"),
}  # fmt: skip
ORDER = f"{HEAD},chron\nafra,deep,20,90,0,20,C6An.1n(y)\nafra,deep,20.131,90,0,20.131,\n"
TOUCH = (
    f"{HEAD},chron\nafra,near,20.1,90,0,20,C6n(o)\nafra,deep,20.1,90,0,20,C6n(0.9)\nafra,deep,30,90,0,30,\n"
)


@pytest.mark.parametrize("case", CALLS)
def test_calls_to_restate_at_fault(here, ask, case):
    """One line, the right exit code, no table on standard output and no file."""
    args, code, pattern = CALLS[case]
    lay_out(
        here,
        **{
            "ancient.csv": f"{HEAD}\nafra,deep,90,90,0,9\n",
            "order.csv": ORDER,
            "order.toml": manifest(file="order.csv"),
            "touch.csv": TOUCH,
            "x.nc": b"not netCDF",
            "places.csv": "core,lat_deg\na,1\n",
            "sites.csv": "core,age_ma\na,20\n",
        },
    )
    before = {path.name: path.read_bytes() for path in here.iterdir() if path.is_file()}
    answer = ask("redate", *args)
    assert answer.code == code
    if case not in {"sites without a clock"}:
        assert answer.out == ""
    lines = answer.said if code == 1 else answer.said[:1]
    one_clear_line(lines, pattern)
    assert {path.name: path.read_bytes() for path in here.iterdir() if path.is_file()} == before


@pytest.mark.parametrize(
    ("args", "code", "pattern"),
    [
        (("draws", "a.csv", "--count", "0", "--out", "d"), 2, r".*0 is not in the range x>=1"),
        (
            ("draws", "a.csv", "--count", "2", "--out", "a.csv"),
            1,
            r"a\.csv: is there already; name a new folder",
        ),
        (
            ("draws", "a.csv", "--count", "2", "--seed", "-1", "--out", "d"),
            2,
            r".*-1 is not in the range x>=0",
        ),
        (("differences", "a.csv", "b.csv"), 1, r"b\.csv: no such file"),
        (("differences", "a.csv", "a.csv", "--out", "o.xyz"), 1, r"o\.xyz: cannot tell what to write"),
        (
            ("check", "a.csv", "--out", "o.csv"),
            1,
            r"o\.csv: a history is written as netCDF; end the name in \.nc",
        ),
        (
            ("check", "a.csv", "--out", "no/o.nc"),
            1,
            r"no/o\.nc: cannot be written: there is no folder 'no'",
        ),
        (("check",), 2, r"Missing argument"),
    ],
)
def test_other_calls_at_fault(here, ask, args, code, pattern):
    """Misuse is exit code 2, data at fault exit code 1; nothing is left behind."""
    lay_out(here)
    before = sorted(path.name for path in here.iterdir())
    answer = ask(*args)
    assert answer.code == code
    errors = [line for line in answer.said if line.startswith("error: ")]
    one_clear_line(errors, pattern)
    assert sorted(path.name for path in here.iterdir()) == before


def test_there_are_enough_kinds():
    """At least 25 kinds of malformed manifests, tables and time scales."""
    assert len(MANIFESTS) + len(SCALES) + len(CALLS) >= 25
