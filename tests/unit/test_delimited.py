"""Delimited text of every kind: columns, places, and faults that say what would be right."""

import math

import pytest

from restore.errors import TableError
from restore.files.delimited import (
    Chunk,
    DelimitedReader,
    Layout,
    parse_number,
    parse_numbers,
)


@pytest.fixture
def read(tmp_path):
    """A function that writes a text to `t.csv`, reads it and gives (reader, its only chunk)."""

    def reading(text: str | bytes, size: int = 50_000, **layout) -> tuple[DelimitedReader, Chunk]:
        data = text if isinstance(text, bytes) else text.encode("utf-8")
        (tmp_path / "t.csv").write_bytes(data)
        with DelimitedReader(tmp_path / "t.csv", Layout(**layout)) as reader:
            chunks = list(reader.chunks(size))
        assert len(chunks) == 1
        return reader, chunks[0]

    return reading


MARKS = [
    (",", ","),
    ("comma", ","),
    ("semicolon", ";"),
    (";", ";"),
    ("tab", "\t"),
    ("\t", "\t"),
    ("bar", "|"),
    ("|", "|"),
    ("space", " "),
    (" ", " "),
    (":", ":"),
]


@pytest.mark.parametrize(("named", "mark"), MARKS)
def test_delimiters(read, named, mark):
    """Every delimiter, by name or by itself, gives the same columns; empty fields count."""
    text = f"a{mark}b{mark}c\n1{mark}{mark}3\n4{mark}5{mark}\n"
    reader, chunk = read(text, delimiter=named)
    assert reader.header == chunk.header == ["a", "b", "c"]
    assert chunk.columns == [["1", "4"], ["", "5"], ["3", ""]]
    assert chunk.lines == [2, 3]


def test_whitespace(read):
    """Runs of blanks and tabs are one delimiter; leading and trailing ones do not count."""
    _, chunk = read("  a \t b\n1   2  \n\t3\t4\n\n", delimiter="whitespace")
    assert chunk.header == ["a", "b"]
    assert chunk.columns == [["1", "3"], ["2", "4"]]
    assert chunk.lines == [2, 3]


def test_whitespace_with_trailing_comments(read):
    """In a whitespace table a comment mark also ends a line."""
    text = "# poles\na b # names\n1 2 # first\n  # between\n3 4\n"
    _, chunk = read(text, delimiter="whitespace", comment="#")
    assert chunk.columns == [["1", "3"], ["2", "4"]]
    assert chunk.lines == [3, 5]


@pytest.mark.parametrize("comment", ["#", "%", "//", "REM"])
def test_comment_lines(read, comment):
    """Comment lines and empty lines are passed over anywhere, and lines count as in the file."""
    text = f"{comment} top\n\na,b\n{comment} 9,9\n1,2\n  {comment} 8,8\n   \n3,4\n"
    reader, chunk = read(text, comment=comment)
    assert reader.header_line == 3
    assert chunk.columns == [["1", "3"], ["2", "4"]]
    assert chunk.lines == [5, 8]


def test_without_a_comment_mark_nothing_is_passed_over(read):
    """A number sign is data unless the layout says that it begins comments."""
    _, chunk = read("a,b\n#1,2\n")
    assert chunk.columns[0] == ["#1"]


def test_trailing_comments(read):
    """Where stated, a comment mark ends a line, CRLF or not; else it is part of the text."""
    text = "a,b\r\n1,2 # why\r\n3,4\r\n"
    assert read(text, comment="#", trailing_comments=True)[1].columns[1] == ["2", "4"]
    assert read(text, comment="#")[1].columns[1] == ["2 # why", "4"]


def test_a_comment_mark_inside_quotes_is_text(read):
    """A quoted text may hold the comment mark, also where comments may trail."""
    text = 'a,b\n"core #3",2 # why\n'
    _, chunk = read(text, comment="#", trailing_comments=True)
    assert chunk.columns[0] == ["core #3"]


def test_comment_marks_inside_a_quoted_text_of_several_lines(read):
    """A line inside a quoted text is text, whatever it begins with, even if it is empty."""
    _, chunk = read('a,b\n"x\n# y\n\nz",2\n# c\n3,4\n', comment="#")
    assert chunk.columns[0] == ["x\n# y\n\nz", "3"]
    assert chunk.lines == [2, 7]


def test_quoted_newlines_keep_the_line_numbers_right(read):
    """A row is placed at the line it begins on, after texts that run over lines too."""
    text = 'site,note\n"a, b","one\ntwo\r\nthree"\nc,"say ""yes"""\nd,plain\n'
    _, chunk = read(text)
    assert chunk.columns == [["a, b", "c", "d"], ["one\ntwo\r\nthree", 'say "yes"', "plain"]]
    assert chunk.lines == [2, 5, 6]
    assert str(chunk.place(1, 1)).endswith("t.csv:5:2")
    assert str(chunk.place(2)).endswith("t.csv:6")


@pytest.mark.parametrize("end", ["\n", "\r\n", "\r"])
@pytest.mark.parametrize("last", [True, False])
def test_line_ends(read, end, last):
    """LF, CRLF and CR, with or without one at the end of the file, give the same rows and lines."""
    text = end.join(["a,b", "1,2", "", "3,4"]) + (end if last else "")
    _, chunk = read(text)
    assert chunk.columns == [["1", "3"], ["2", "4"]]
    assert chunk.lines == [2, 4]


@pytest.mark.parametrize("delimiter", [",", "whitespace"])
def test_a_byte_order_mark_is_no_part_of_the_header(read, delimiter):
    """UTF-8 with a BOM reads like UTF-8 without."""
    mark = " " if delimiter == "whitespace" else ","
    reader, _ = read(b"\xef\xbb\xbf" + f"a{mark}b\n1{mark}2\n".encode(), delimiter=delimiter)
    assert reader.header == ["a", "b"]


@pytest.mark.parametrize("encoding", ["utf-16", "utf-16-le", "latin-1", "cp1252", "utf-8"])
def test_encodings(read, encoding):
    """Stated encodings are read; UTF-16 with a BOM is told by it."""
    text = "plate,note\nfjörd,Åland\n"
    data = text.encode(encoding)
    layout = {} if encoding in {"utf-16", "utf-8"} else {"encoding": encoding}
    if encoding == "utf-16-le":
        data, layout = b"\xff\xfe" + data, {}
    _, chunk = read(data, **layout)
    assert chunk.columns == [["fjörd"], ["Åland"]]


def test_the_wrong_encoding_is_named(read):
    """Bytes that are no UTF-8 are refused with the line, the byte and what would help."""
    with pytest.raises(TableError, match=r"t\.csv:\d+: byte 0xfc .*not utf-8 text; .*encoding"):
        read("a,b\n1,Zürich\n".encode("latin-1"))


def test_an_encoding_that_does_not_exist(read):
    """An unknown encoding is named, with ones that are known."""
    with pytest.raises(TableError, match=r"encoding 'utf-9' is not known; for example utf-8"):
        read("a,b\n", encoding="utf-9")


@pytest.mark.parametrize("data", [b"a,b\n1,\x002\n", b"PK\x03\x04\x00\x00"])
def test_binary_files(read, data):
    """A file with zero bytes is no text table."""
    with pytest.raises(TableError, match="holds zero bytes: not a text table"):
        read(data)


def test_files_that_are_not_there(tmp_path):
    """A missing file and a folder are told apart."""
    with pytest.raises(TableError, match=r"nothing\.csv: no such file"):
        DelimitedReader(tmp_path / "nothing.csv").__enter__()
    with pytest.raises(TableError, match="is a folder, not a file"):
        DelimitedReader(tmp_path).__enter__()


@pytest.mark.parametrize("text", ["", "\n\n", "# only\n"])
def test_an_empty_file(read, text):
    """A file without a header is empty, comments or not."""
    with pytest.raises(TableError, match="is empty; a table needs at least a header line"):
        read(text, comment="#")


def test_a_header_without_rows(read):
    """A table may have no rows: one chunk with empty columns."""
    _, chunk = read("a,b,c\n")
    assert len(chunk) == 0
    assert chunk.columns == [[], [], []]


def test_a_name_that_stands_twice(read):
    """Two columns of one name are refused with both places; empty names do not count."""
    with pytest.raises(TableError, match=r"t\.csv:1:3: column 'a' stands twice \(also column 1\)"):
        read("a,b, a \n1,2,3\n")
    assert read("a,,\n1,2,3\n")[0].header == ["a", "", ""]


def test_names_are_trimmed_and_values_are_not(read):
    """Blanks about names do not count; values stay as they stand in the file."""
    reader, chunk = read(" a , b\n 1 , x y \n")
    assert reader.header == ["a", "b"]
    assert chunk.columns == [[" 1 "], [" x y "]]


def test_rows_of_another_length(read):
    """Surplus and missing fields are kept apart and are a finding with both counts and a remedy."""
    reader, chunk = read("a,b,c\n1,2,3\n1,2\n1,2,3,4,5\n\n1\n")
    assert chunk.lines == [2, 3, 4, 6]
    assert chunk.columns == [["1"] * 4, ["2", "2", "2", ""], ["3", "", "3", ""]]
    assert chunk.surplus == {2: ["4", "5"]}
    assert chunk.short == {1: 2, 3: 1}
    findings = [reader.length_fault(chunk, row) for row in range(4)]
    assert findings[0] is None
    said = [f.line() for f in findings if f is not None]
    assert "t.csv:3: the row has 2 fields where the header has 3; a missing" in said[0]
    assert "t.csv:4: the row has 5 fields where the header has 3; quote texts" in said[1]
    assert "decimal commas need another delimiter" in said[1]
    assert {f.severity for f in findings if f is not None} == {"error"}


@pytest.mark.parametrize("size", [1, 2, 3, 4, 5, 100])
def test_chunks(tmp_path, size):
    """Chunks of any size hold together the same rows, lines, surplus and short fields."""
    path = tmp_path / "t.csv"
    path.write_text("a,b\n1,2\n3\n5,6,7\n8,9\n", encoding="utf-8")
    with DelimitedReader(path) as reader:
        chunks = list(reader.chunks(size))
    assert [len(c) for c in chunks[:-1]] == [size] * (len(chunks) - 1)
    assert [line for c in chunks for line in c.lines] == [2, 3, 4, 5]
    assert [v for c in chunks for v in c.columns[0]] == ["1", "3", "5", "8"]
    surplus = [c.lines[row] for c in chunks for row in c.surplus]
    short = [c.lines[row] for c in chunks for row in c.short]
    assert (surplus, short) == ([4], [3])


def test_a_table_without_a_header(read):
    """Without a header columns are numbered, and the first line is data."""
    reader, chunk = read("1,2\n3,4\n", header=False, columns={"lat": 2, "lon": 1})
    assert reader.header == ["1", "2"]
    assert chunk.columns == [["1", "3"], ["2", "4"]]
    assert chunk.lines == [1, 2]
    assert (reader.column("lat"), reader.column("lon")) == (1, 0)
    with pytest.raises(TableError, match=r"no column is named for age; .*mapped by number"):
        reader.column("age")
    assert reader.column("age", required=False) is None
    assert reader.column("1", required=False) is None


def test_the_column_map(read):
    """Our names are found by the file's name or by number; the map goes before the header."""
    columns = {"lat_deg": "Breite", "lon_deg": 3, "age_ma": "Alter"}
    reader, _ = read("age_ma,Breite,x,Alter\n1,2,3,4\n", columns=columns)
    assert [reader.column(n) for n in columns] == [1, 2, 3]
    assert reader.column("x") == 2
    assert reader.column("missing", required=False) is None


@pytest.mark.parametrize("number", [0, 5, -1])
def test_a_column_number_that_is_not_there(read, number):
    """A mapped number outside the table is refused, also for a column that is not required."""
    reader, _ = read("a,b,c,d\n", columns={"age_ma": number})
    with pytest.raises(TableError, match=rf"t\.csv:1: column {number} was named for age_ma, but .* 4 "):
        reader.column("age_ma", required=False)


def test_a_missing_column_is_placed_and_a_near_name_is_offered(read):
    """The message names the column, the header's line, and what was probably meant."""
    reader, _ = read("# c\nsite,lat_dg,lon_deg\n", comment="#")
    message = r"t\.csv:2: column 'lat_deg' is missing; did you mean 'lat_dg'\?"
    with pytest.raises(TableError, match=message):
        reader.column("lat_deg")
    mapped, _ = read("site,Breite\n", columns={"lat_deg": "breite"})
    with pytest.raises(TableError, match=r"'breite' \(for lat_deg\) is missing; did you mean 'Breite'"):
        mapped.column("lat_deg", required=False)


@pytest.mark.parametrize(
    ("header", "name"),
    [
        ("site;lat;lon", "semicolon"),
        ("site\tlat", "tab"),
        ("site|lat", "bar"),
        ("site lat", "white"),
    ],
)
def test_another_delimiter_is_recognised(read, header, name):
    """A header that is one column says which delimiter the table looks to have."""
    reader, _ = read(header + "\n")
    with pytest.raises(TableError, match=f"looks {name}.*state delimiter = '{name}"):
        reader.column("lat")


@pytest.mark.parametrize("text", ['a,b\n1,2\n"open,3\n4,5\n', 'a,b\n1,2\n3,"open\n'])
def test_a_quote_that_is_never_closed(read, text):
    """The line where the quote opens is named."""
    with pytest.raises(TableError, match=r"t\.csv:3: a quote that opens here is never closed"):
        read(text)


def test_text_after_a_closing_quote(read):
    """A quoted field that goes on after its quote is refused at its line."""
    with pytest.raises(TableError, match=r"t\.csv:2: .*expected after"):
        read('a,b\n"1"x,2\n')


@pytest.mark.parametrize(
    ("layout", "message"),
    [
        ({"delimiter": "::"}, "delimiter = '::': must be one character, whitespace or one of tab"),
        ({"delimiter": ""}, "delimiter = '': must be one character"),
        ({"delimiter": '"'}, "must be one character"),
        ({"decimal": ";"}, r"decimal = ';': must be '\.' or ','"),
        ({"decimal": ","}, "decimal and delimiter are both ','"),
    ],
)
def test_layouts_that_cannot_be(layout, message):
    """A layout that cannot be read is refused when it is made, saying what may be."""
    with pytest.raises(TableError, match=message):
        Layout(**layout)


@pytest.mark.parametrize(
    ("text", "decimal", "number"),
    [
        ("1.5", ".", 1.5),
        (" -2e3 ", ".", -2000.0),
        ("1,5", ",", 1.5),
        ("-0,25", ",", -0.25),
        ("17", ",", 17.0),
        ("\u22123.5", ".", -3.5),
        ("\u22123,5", ",", -3.5),
        ("+4", ".", 4.0),
        ("inf", ".", math.inf),
    ],
)
def test_numbers(text, decimal, number):
    """Numbers with a decimal point or, where stated, a comma; a typeset minus sign is a minus."""
    assert parse_number(text, decimal) == number


@pytest.mark.parametrize("text", ["", "  ", "nan", "NaN", "NAN"])
def test_no_number(text):
    """Nothing and NaN say that there is no value."""
    assert math.isnan(parse_number(text))


@pytest.mark.parametrize(
    ("text", "decimal"),
    [
        ("1,5", "."),
        ("1_000", "."),
        ("1.000,5", ","),
        ("1 000", "."),
        ("ten", "."),
        ("٣", "."),
        ("1,2,3", ","),
    ],
)
def test_what_is_not_a_number(text, decimal):
    """Digit groups, other scripts and the other decimal mark are refused, never guessed."""
    with pytest.raises(ValueError, match=r"."):
        parse_number(text, decimal)


def test_a_column_of_numbers_with_faults(read):
    """Each text that is no number is a finding at its place; its value is NaN; the rest is read."""
    _, chunk = read('a,b\n1,2\n3,x\n5,\n7,"8,5"\n')
    numbers, faults = parse_numbers(chunk, 1, "depth")
    assert numbers[0] == 2.0
    assert [math.isnan(n) for n in numbers] == [False, True, True, True]
    said = [f.line() for f in faults]
    assert len(said) == 2
    assert "t.csv:3:2: depth = 'x' is not a number; leave it empty" in said[0]
    assert "t.csv:5:2: depth = '8,5' is not a number; " in said[1]
    assert "state decimal = ','" in said[1]
    numbers, faults = parse_numbers(chunk, None, "age")
    assert [math.isnan(n) for n in numbers] == [True] * 4
    assert faults == []


def test_decimal_commas(read):
    """With decimal commas stated, a semicolon table reads as numbers."""
    _, chunk = read("a;b\n1,5;2\n", delimiter="semicolon", decimal=",")
    assert parse_numbers(chunk, 0, "a", ",")[0] == [1.5]
