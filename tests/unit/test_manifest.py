"""`history.toml`: several tables in one history, and all its faults at their places."""

import math

import numpy as np
import pytest
from strategies import assert_within, turn_of, vector_of

from restore.errors import HistoryError
from restore.history.circuit import Circuit
from restore.history.conventions import Conventions
from restore.history.manifest import read_manifest
from restore.history.store import History

MANIFEST = """\
version = 1
title = "Two tables"

[frames]
deep = "mantle"

[[table]]
file = "a.csv"
title = "First"
citation = "Author 1999"
turns = "to-present"
holds = "plate"
from_present = true

[[table]]
file = "sub/b.txt"
delimiter = "whitespace"
comment = "%"
header = false
decimal = ","
rank = 3
join_within_myr = 2
latitudes = "geodetic"
columns = { plate = 1, relative_to = 2, age_ma = 3, \
pole_lat_deg = 4, pole_lon_deg = 5, angle_deg = 6 }
[table.plates]
AF = "afra"
"""

A = "plate,relative_to,age_ma,pole_lat_deg,pole_lon_deg,angle_deg\nafra,norda,10,40,50,5\n"
B = "% old table\nAF deep 20,5 45 -10 7,25\n"


def lay_out(folder, manifest=MANIFEST):
    (folder / "sub").mkdir()
    (folder / "a.csv").write_text(A, encoding="utf-8")
    (folder / "sub" / "b.txt").write_text(B, encoding="utf-8")
    path = folder / "history.toml"
    path.write_text(manifest, encoding="utf-8")
    return path


def test_a_manifest_is_read_as_it_says(tmp_path):
    """Files are found beside the manifest, each read in its own conventions, layout and labels."""
    history = History.read(lay_out(tmp_path))
    assert history.title == "Two tables"
    assert history.kind_of("deep") == "mantle"
    first, second = history.tables
    assert (first.title, first.citation, first.from_present) == ("First", "Author 1999", True)
    assert first.conventions == Conventions("to-present", "plate")
    assert (second.rank, second.join_within_myr, second.layout.decimal) == (3, 2.0, ",")
    rows = [history.rows.row(i) for i in range(2)]
    assert (rows[1].plate, rows[1].relative_to, rows[1].age_ma) == ("afra", "deep", 20.5)
    # held plate and turned to the present: two inversions, so the row is as printed
    meant = math.radians(5.0) * vector_of(40.0, 50.0)
    assert_within(turn_of(rows[0]).as_rotvec() - meant, 1e-15)
    assert_within(rows[1].pole_lat_deg - 44.8075767831, 5.1e-11)
    assert history.place_of(1).endswith("b.txt:2")


def test_a_manifest_keeps_its_meaning_in_netcdf(tmp_path):
    """A history of several tables written to netCDF and read has the same tables and rows."""
    history = History.read(lay_out(tmp_path))
    history.write(tmp_path / "h.nc")
    assert History.read(tmp_path / "h.nc").same_as(history)


def test_from_present_holds_down_to_today(tmp_path):
    """`from_present` puts the zero rotation at 0 Ma; else the pair begins at its first row."""
    text = MANIFEST.partition('\n[[table]]\nfile = "sub')[0]
    history = History.read(lay_out(tmp_path, text))
    circuit = Circuit(history, "norda")
    assert circuit.covered("afra") == [(0.0, 10.0)]
    assert_within(np.radians(circuit.at("afra", 5.0).rotations.angle_deg()) - math.radians(2.5), 1e-15)
    (tmp_path / "history.toml").write_text(text.replace("from_present = true\n", ""))
    later = Circuit(History.read(tmp_path / "history.toml"), "norda")
    assert later.covered("afra") == [(10.0, 10.0)]


FAULTS = [
    ("version = 1", "version = 2", r"toml:1:1: version = 2; this release reads version = 1"),
    ("version = 1\n", "", r"history\.toml: version = None; this release reads version = 1"),
    (
        'title = "Two tables"',
        "titel = 'x'",
        r"toml:2:1: unknown key 'titel'; did you mean 'title'\?",
    ),
    (
        'deep = "mantle"',
        'deep = "hotspot"',
        r"toml:5:1: frame kind 'hotspot'; must be one of plate, m",
    ),
    ('file = "a.csv"\n', "", r"toml:7:1: the table names no file; add file = "),
    (
        'turns = "to-present"',
        'turns = "back"',
        r"toml:11:1: turns = 'back'; must be one of to-past, to-p",
    ),
    ("rank = 3", "rank = 'x'", r"toml:21:1: rank = 'x'; must be a whole number"),
    ("rank = 3", "rank = true", r"toml:21:1: rank = True; must be a whole number"),
    ("header = false", "header = 0", r"toml:19:1: header = 0; must be true or false"),
    (
        "from_present = true",
        "from_present = 'yes'",
        r"toml:13:1: from_present = 'yes'; must be true or",
    ),
    (
        "join_within_myr = 2",
        "join_within_myr = -2",
        r"toml:22:1: join_within_myr = -2; must not be neg",
    ),
    (
        "join_within_myr = 2",
        "join_within_myr = '2'",
        r"toml:22:1: join_within_myr = '2'; must be a number",
    ),
    ('decimal = ","', 'decimal = ";"', r"toml:15:1: decimal = ';': must be '\.' or ','"),
    ("[table.plates]", "[table.plate]", r"toml:25:1: unknown key 'plate'; did you mean 'plates'\?"),
    (
        'latitudes = "geodetic"',
        'latitude = "geodetic"',
        r"toml:23:1: unknown key 'latitude'; did you mean",
    ),
]


@pytest.mark.parametrize(("old", "new", "message"), FAULTS)
def test_faults_have_places(tmp_path, old, new, message):
    """Each fault is one line with file:line:column, the value, and what would be right."""
    assert old in MANIFEST
    path = lay_out(tmp_path, MANIFEST.replace(old, new, 1))
    with pytest.raises(HistoryError, match=message) as caught:
        read_manifest(path)
    assert len(str(caught.value).splitlines()) == 1


def test_all_faults_at_once(tmp_path):
    """A manifest with several faults names them all, in the order of the file within each table."""
    text = MANIFEST.replace("rank = 3", "rnk = 3").replace("version = 1", "version = 9")
    text = text.replace('turns = "to-present"', "turns = 7")
    with pytest.raises(HistoryError, match="version = 9") as caught:
        read_manifest(lay_out(tmp_path, text))
    places = [
        line.partition("history.toml:")[2].partition(": ")[0] for line in str(caught.value).splitlines()
    ]
    assert places == ["1:1", "11:1", "21:1"]


@pytest.mark.parametrize("text", ["version = 1\n", "version = 1\ntable = []\n"])
def test_a_manifest_without_tables(tmp_path, text):
    """A history needs at least one table."""
    with pytest.raises(HistoryError, match=r"no \[\[table\]\] is named; a history needs one"):
        read_manifest(lay_out(tmp_path, text))


@pytest.mark.parametrize("text", ["version = 1\ntable = 3\n", "version = 1\ntable = [3]\n"])
def test_tables_that_are_no_tables(tmp_path, text):
    """`table` as a number or an array of numbers is refused, not read."""
    with pytest.raises(HistoryError, match=r"toml:2:\d+: (table = 3; must be an array|table is not a)"):
        read_manifest(lay_out(tmp_path, text))


def test_a_table_that_is_not_there(tmp_path):
    """A file that the manifest names and that is missing is named."""
    path = lay_out(tmp_path, MANIFEST.replace("a.csv", "nothing.csv"))
    with pytest.raises(HistoryError, match=r"nothing\.csv: no such file"):
        History.read(path)


def test_faults_of_all_tables_at_once(tmp_path):
    """Rows at fault in different tables are named together, each in its own file."""
    path = lay_out(tmp_path)
    (tmp_path / "a.csv").write_text(A + "afra,norda,x,1,2,3\n", encoding="utf-8")
    (tmp_path / "sub" / "b.txt").write_text(B + "AF deep 30 95 0 1\n", encoding="utf-8")
    with pytest.raises(HistoryError, match=r"a\.csv:3:3: .*\n.*b\.txt:3:4: pole_lat_deg = 95"):
        History.read(path)
