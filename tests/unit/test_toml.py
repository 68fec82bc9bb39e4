"""TOML with places: every key's line and column, and faults in one line."""

import textwrap
from pathlib import Path

import pytest

from restore.errors import HistoryError, InputError
from restore.files.toml import TomlDocument, read_toml
from restore.findings import Place


def read(folder: Path, text: str, **how: str) -> TomlDocument:
    path = folder / "job.toml"
    path.write_text(text, **{"encoding": "utf-8", "newline": "", **how})
    return read_toml(path)


def where(document: TomlDocument, *path: str | int) -> tuple[int | None, int | None]:
    place = document.place(*path)
    return place.line, place.column


SCENARIO = textwrap.dedent("""\
    # a comment with a = sign
    version = 1
    title = "one # two"   # not part of the title

    [history]
    file = 'h.csv'
      indented = true
    a.b = 3

    [[task]]
    name = "cores"
    ages = [0, 10,
            20]
    [task.look]
    colour = "red"

    [[task]]
    name = "ridge"
    kind = { depth = 1, inner = { deep = 2 } }
    [[task.part]]
    x = 1
    [[task.part]]
    x = 2
    """)


@pytest.mark.parametrize(
    ("path", "place"),
    [
        (("version",), (2, 1)),
        (("title",), (3, 1)),
        (("history",), (5, 1)),
        (("history", "file"), (6, 1)),
        (("history", "indented"), (7, 3)),
        (("history", "a", "b"), (8, 1)),
        (("task", 0), (10, 1)),
        (("task", 0, "name"), (11, 1)),
        (("task", 0, "ages"), (12, 1)),
        (("task", 0, "ages", 0), (12, 9)),
        (("task", 0, "ages", 2), (13, 9)),
        (("task", 0, "look"), (14, 1)),
        (("task", 0, "look", "colour"), (15, 1)),
        (("task", 1), (17, 1)),
        (("task", 1, "name"), (18, 1)),
        (("task", 1, "kind", "depth"), (19, 10)),
        (("task", 1, "kind", "inner", "deep"), (19, 31)),
        (("task", 1, "part", 0, "x"), (21, 1)),
        (("task", 1, "part", 1), (22, 1)),
        (("task", 1, "part", 1, "x"), (23, 1)),
    ],
)
def test_every_key_has_its_place(tmp_path, path, place):
    """Keys of tables, arrays of tables, inline tables and array members know line and column."""
    assert where(read(tmp_path, SCENARIO), *path) == place


@pytest.mark.parametrize(
    ("path", "place"),
    [
        (("task", 1, "colour"), (17, 1)),
        (("task", 0, "look", "size"), (14, 1)),
        (("history", "file", "deeper", 3), (6, 1)),
        (("nothing",), (None, None)),
        ((), (None, None)),
    ],
)
def test_a_missing_key_is_placed_at_the_table_above(tmp_path, path, place):
    """A key that is not there is placed where it would go: at the nearest table above."""
    assert where(read(tmp_path, SCENARIO), *path) == place


TRICKY = [
    ('a = """x\n[fake]\nb = 2\n"""\nb = 1\n', ("b",), (5, 1)),
    ("a = '''x\nb = 2 # \"\n'''\nb = 1\n", ("b",), (4, 1)),
    ('a = """say "yes\\""""\nb = 1\n', ("b",), (2, 1)),
    ('a = """one quote at the end""""\nb = 1\n', ("b",), (2, 1)),
    ('a = """two quotes at the end"""""\nb = 1\n', ("b",), (2, 1)),
    ("a = '''one quote at the end''''\nb = 1\n", ("b",), (2, 1)),
    ('a = "" \nb = 1\n', ("b",), (2, 1)),
    ("a = ''\nb = 1\n", ("b",), (2, 1)),
    ('a = "esc \\" ] }"\nb = 1\n', ("b",), (2, 1)),
    ("a = 'C:\\'\nb = 1\n", ("b",), (2, 1)),
    ("a = [ # why ]\n 1, # and ]\n [2, 3], ]\nb = 1\n", ("b",), (4, 1)),
    ("a = [ # why ]\n 1, # and ]\n [2, 3], ]\nb = 1\n", ("a", 1, 1), (3, 6)),
    ('a = ["x]", \'y]\', """z]"""]\nb = 1\n', ("b",), (2, 1)),
    ("a = [{x = 1}, {x = 2}]\nb = 1\n", ("a", 1, "x"), (1, 16)),
    ("a = 1979-05-27 07:32:00Z\nb = 1\n", ("b",), (2, 1)),
    ("a = 1_000.5e-3 # c\nb = 1\n", ("b",), (2, 1)),
    ("a = {}\nb = []\nc = 1\n", ("c",), (3, 1)),
    ("\"quoted key\" = 1\n'other.key' = 2\nb = 1\n", ("other.key",), (2, 1)),
    ('[x."y.z".w]\nb = 1\n', ("x", "y.z", "w", "b"), (2, 1)),
    ("[ x . y ]\n  b  =  1\n", ("x", "y", "b"), (2, 3)),
    ("x . y = 1\nb=2", ("b",), (2, 1)),
    ("a = 1\r\n\r\n[t]\r\nb = 'c'\r\n", ("t", "b"), (4, 1)),
    ("\ufeffa = 1\nb = 2\n", ("b",), (2, 1)),
    ("\ufeffa = 1\nb = 2\n", ("a",), (1, 1)),
    ('a = "Ö"\nö = 1\nb = 1\n'.replace("\nö", '\n"ö"'), ("ö",), (2, 1)),
    ('"tab\\tkey" = 1\nb = 2\n', ("tab\tkey",), (1, 1)),
    ("[[p]]\n[[p.q]]\na = 1\n[[p]]\n[[p.q]]\na = 2\n", ("p", 1, "q", 0, "a"), (6, 1)),
]


@pytest.mark.parametrize(("text", "path", "place"), TRICKY)
def test_places_in_tricky_texts(tmp_path, text, path, place):
    """Strings of all kinds, comments, dates, quoted keys, CRLF, a BOM do not mislead."""
    assert where(read(tmp_path, text), *path) == place


def test_values_are_those_of_the_file(tmp_path):
    """The document holds the values, its name, and places print as file:line:column."""
    document = read(tmp_path, SCENARIO)
    assert document.values["title"] == "one # two"
    assert document.values["task"][1]["part"] == [{"x": 1}, {"x": 2}]
    assert str(document.place("task", 0, "ages")) == f"{tmp_path / 'job.toml'}:12:1"


@pytest.mark.parametrize(
    ("text", "message"),
    [
        ("a = 1\nb = = 2\n", r"job\.toml:2:5: not valid TOML: invalid value"),
        ("a = 1\na = 2\n", r"job\.toml:2:\d+: not valid TOML: cannot overwrite a value"),
        ("[t\n", r"job\.toml:1:3: not valid TOML: expected ']'"),
        ('a = "open\n', r"job\.toml:1:\d+: not valid TOML: illegal character"),
    ],
)
def test_faults_are_one_line_with_a_place(tmp_path, text, message):
    """What is not TOML is refused in one line: file, line, column and what is wrong."""
    with pytest.raises(InputError, match=message) as caught:
        read(tmp_path, text)
    assert "\n" not in str(caught.value)


def test_files_that_cannot_be_read(tmp_path):
    """A missing file, a folder, another encoding and a binary file are told apart."""
    with pytest.raises(HistoryError, match=r"nothing\.toml: no such file"):
        read_toml(tmp_path / "nothing.toml", HistoryError)
    with pytest.raises(InputError, match="is a folder, not a file"):
        read_toml(tmp_path)
    latin = tmp_path / "latin.toml"
    latin.write_bytes("a = 1\nb = 'Zürich'\n".encode("latin-1"))
    with pytest.raises(InputError, match=r"latin\.toml:2: byte 0xfc is not utf-8 text"):
        read_toml(latin)
    binary = tmp_path / "binary.toml"
    binary.write_bytes(b"a = 1\n\x00\x01")
    with pytest.raises(InputError, match=r"binary\.toml:2: holds a zero byte"):
        read_toml(binary)


def test_places_print():
    """A place prints what it knows: file, line, column."""
    assert str(Place("a.toml", 3, 7)) == "a.toml:3:7"
    assert str(Place("a.toml", 3)) == "a.toml:3"
    assert str(Place("a.toml")) == "a.toml"
    assert str(Place()) == "<input>"
