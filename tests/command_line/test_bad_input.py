"""Histories and manifests at fault: one clear line per fault, exit 1, nothing on standard output."""

import pytest
from command_line.world import HEAD, deny, leftovers

ZERO = "alba,deep,0,,,0"
TEN = "alba,deep,10,90,0,10"
COVARIANCE = ",kappa,dof,cov_a,cov_b,cov_c,cov_d,cov_e,cov_f,cov_factor"
NOTED = f"{HEAD},note"
NAMES = HEAD.replace(",", ", ")


def table(*rows, head=HEAD):
    return "\n".join([head, *rows]) + "\n"


def with_covariance(entries):
    return table(ZERO + "," * 9, f"{TEN},{entries}", head=HEAD + COVARIANCE)


HEADERS = {
    "empty": ("", ": is empty; a table needs at least a header line"),
    "comments only": ("# nothing\n\n", ": is empty; a table needs at least a header line"),
    "header only": (
        f"# poles\n{HEAD}\n",
        ":2: the table has a header and no rows; a history needs at least one finite rotation",
    ),
    "missing column": (
        table("alba,10,90,0,10", head=HEAD.replace("relative_to,", "")),
        ":1: column 'relative_to' is missing; the header is plate, age_ma, pole_lat_deg, pole_lon_deg, angle_deg",
    ),
    "misspelt column": (
        table(TEN, head=HEAD.replace("pole_lat_deg", "pole_lat")),
        ":1: column 'pole_lat_deg' is missing; did you mean 'pole_lat'?",
    ),
    "a neighbour is no misspelling": (
        table("alba,deep,10,90,10", head=HEAD.replace("pole_lon_deg,", "")),
        ":1: column 'pole_lon_deg' is missing; the header is plate, relative_to, age_ma, pole_lat_deg, angle_deg",
    ),
    "misspelt angle": (
        table(TEN, head=HEAD.replace("angle", "angel")),
        ":1: column 'angle_deg' is missing; did you mean 'angel_deg'?",
    ),
    "doubled column": (
        table("alba,deep,10,10,90,0,10", head=HEAD.replace("age_ma", "age_ma,age_ma")),
        ":1:4: column 'age_ma' stands twice (also column 3); each name may stand once",
    ),
    "angle and rate": (
        table(TEN + ",1", head=HEAD + ",rate_deg_per_myr"),
        ":1: angles, rates and angular velocities stand side by side; a table gives one of them",
    ),
    "half an angular velocity": (
        "plate,relative_to,omega_x_deg_per_myr,omega_y_deg_per_myr\nalba,deep,1,2\n",
        ":1: column 'omega_z_deg_per_myr' is missing; the header is plate, relative_to,"
        " omega_x_deg_per_myr, omega_y_deg_per_myr",
    ),
    "semicolons": (
        table(TEN).replace(",", ";"),
        ":1: the header is one column, 'plate;relative_to;age_ma;pole_lat_deg;pole_lon_deg;angle_deg': the"
        " table looks semicolon-delimited; state delimiter = 'semicolon' (an option of the command, or a key"
        " of the manifest or scenario)",
    ),
    "tabs, a long header": (
        table(TEN, head=HEAD + ",reference").replace(",", "\t"),
        ":1: the header is one column, 'plate\\trelative_to\\tage_ma\\tpole_lat_deg\\tpole_lon_deg\\tangle_deg...':"
        " the table looks tab-delimited; state delimiter = 'tab' (an option of the command, or a key of the"
        " manifest or scenario)",
    ),
}  # fmt: skip

BYTES = {
    "another encoding": (
        table(ZERO, "Ålba,deep,10,90,0,10").encode("latin-1"),
        ":3: byte 0xc5 is not utf-8 text; save the file as UTF-8 or state its encoding",
    ),
    "another encoding, far down": (
        table(ZERO, *["# note"] * 3000, "Ålba,deep,10,90,0,10").encode("latin-1"),
        ":3003: byte 0xc5 is not utf-8 text; save the file as UTF-8 or state its encoding",
    ),
    "UTF-16 without a mark": (table(TEN).encode("utf-16-le"), ":1: holds zero bytes: not a text table"),
    "zero bytes": (table(ZERO, TEN).encode() + b"\0\0\n", ":4: holds zero bytes: not a text table"),
    "unclosed quote": (
        table(ZERO + ',"open', TEN + ",x", head=NOTED).encode(),
        ":2: a quote that opens here is never closed",
    ),
    "text after a quote": (
        table(ZERO + ',"op"en', head=NOTED).encode(),
        ":2: ',' expected after '\"'; a quote inside a quoted text is written twice",
    ),
}

ROWS = {
    "text in a number": ("alba,deep,ten,90,0,10", "3:3: age_ma = 'ten' is not a number; numbers are written as 12.5 or 3e-7"),
    "latitude 95": ("alba,deep,10,95,0,10", "3:4: pole_lat_deg = 95; a latitude must lie in -90..90"),
    "longitude 1e9": ("alba,deep,10,90,1e9,10", "3:5: pole_lon_deg = 1e+09; must lie in -360..360"),
    "angle 1e9": ("alba,deep,10,90,0,1e9", "3:6: angle_deg = 1e+09; must lie in -360..360 degrees"),
    "age 1e9": ("alba,deep,1e9,90,0,10", "3:3: age_ma = 1e+09; ages lie in 0..4600 Ma, positive into the past"),
    "negative age": ("alba,deep,-10,90,0,10", "3:3: age_ma = -10; ages lie in 0..4600 Ma, positive into the past"),
    "NaN": ("alba,deep,10,nan,0,10", "3:4: pole_lat_deg = 'nan'; a row of a history may not hold NaN or infinity"),
    "infinite": ("alba,deep,10,90,0,-inf", "3:6: angle_deg = '-inf'; a row of a history may not hold NaN or infinity"),
    "decimal comma": (
        'alba,deep,"10,5",90,0,10',
        "3:3: age_ma = '10,5' is not a number; state decimal = ',' in a manifest if decimal commas are meant",
    ),
    "bare decimal comma": (
        "alba,deep,10,5,90,0,10",
        "3: the row has 7 fields where the header has 6; quote texts that hold the delimiter; decimal commas"
        " need another delimiter",
    ),
    "short row": ("alba,deep,10", "3: the row has 3 fields where the header has 6; a missing value still needs its delimiter"),
    "plate on itself": ("alba,alba,10,90,0,10", "3:2: plate 'alba' is relative to itself; name the plate that was held still"),
    "no plate": (",deep,10,90,0,10", "3:1: plate is empty; every row names both plates"),
    "no pole": ("alba,deep,10,,,10", "3:4: pole_lat_deg is empty; only a zero rotation has no pole"),
    "a turn at age 0": (
        "alba,fara,0,90,0,3",
        "3:6: a row of age 0 turns by 3 degrees; a plate is today where it is today: the angle must be 0",
    ),
    "duplicate age": (
        "alba,deep,0,,,0",
        "3: alba relative to deep has a second row at 0 Ma (the first: h.csv:2); keep one of them, or give the"
        " tables different ranks",
    ),
}  # fmt: skip

COVARIANCES = {
    "not positive definite": (
        "1,,1,2,0,1,0,1,1e-6",
        "9: the covariance is not positive definite (smallest eigenvalue -1e-06 rad^2); compare with the paper;"
        " some are misprinted",
    ),
    "half a covariance": ("1,,1,0,0,,0,1,1e-6", "12: cov_d is empty; all six of cov_a..cov_f are needed, or none"),
    "kappa 0": ("0,,1,0,0,1,0,1,1e-6", "7: kappa = 0; must be above 0"),
    "kappa below 0": ("-1,,1,0,0,1,0,1,1e-6", "7: kappa = -1; must be above 0"),
    "dof below 0": ("1,-3,1,0,0,1,0,1,1e-6", "8: dof = -3; degrees of freedom are above 0"),
    "factor 0": ("1,,1,0,0,1,0,1,0", "15: cov_factor = 0; must be above 0"),
}  # fmt: skip


@pytest.fixture
def refused(here, ask):
    """A function that asks a history for a pole and gives the lines it is refused with."""

    def asking(data: str | bytes, name: str = "h.csv") -> list[str]:
        (here / name).write_bytes(data if isinstance(data, bytes) else data.encode("utf-8"))
        answers = [
            ask("pole", "alba", "--relative-to", "deep", "--age", "5", "--history", name, "--json"),
            ask("sites", "none.csv", "--frame", "deep", "--history", name, "--out", "out.csv"),
        ]
        assert [(answer.code, answer.out) for answer in answers] == [(1, "")] * 2
        assert answers[0].err == answers[1].err
        assert leftovers(here) == []
        assert not (here / "out.csv").exists()
        assert all(line.startswith("error: ") for line in answers[0].said)
        return [line.removeprefix("error: ") for line in answers[0].said]

    return asking


@pytest.mark.parametrize(("text", "message"), HEADERS.values(), ids=HEADERS)
def test_headers(refused, text, message):
    """A table that cannot be read as a whole says why, and where its header stands."""
    assert refused(text) == ["h.csv" + message]


@pytest.mark.parametrize(("data", "message"), BYTES.values(), ids=BYTES)
def test_bytes(refused, data, message):
    """Bytes that are no text and quotes that do not fit are found on their line."""
    assert refused(data) == ["h.csv" + message]


@pytest.mark.parametrize(("row", "message"), ROWS.values(), ids=ROWS)
def test_rows(refused, row, message):
    """A row at fault: its line and column, the value, what would be right."""
    assert refused(table(ZERO, row, "bora,alba,10,90,0,10")) == ["h.csv:" + message]


@pytest.mark.parametrize(("entries", "message"), COVARIANCES.values(), ids=COVARIANCES)
def test_covariances(refused, entries, message):
    """A covariance that cannot be one is refused at its place, never dropped."""
    assert refused(with_covariance(entries)) == ["h.csv:3:" + message]


def test_covariance_in_something_else(refused):
    """A covariance stands in coordinates of one of the two plates."""
    text = table(
        TEN + ",1,0,0,1,0,1,mars", head=HEAD + ",cov_a,cov_b,cov_c,cov_d,cov_e,cov_f,covariance_in"
    )
    assert refused(text) == ["h.csv:2:13: covariance_in = 'mars'; must be plate or relative_to"]


def test_all_faults_at_once(refused):
    """Several faults are several lines, in the order of the file, over quoted line ends too."""
    rows = [ZERO + ',"a\nb"', "alba,deep,ten,90,0,10,", "alba,deep,10,95,0,10,", "alba,alba,10,90,0,10,"]
    assert [line.partition(" = ")[0] for line in refused(table(*rows, head=NOTED))] == [
        "h.csv:4:3: age_ma",
        "h.csv:5:4: pole_lat_deg",
        "h.csv:6:2: plate 'alba' is relative to itself; name the plate that was held still",
    ]


GOOD = {
    "as agreed": table(ZERO, TEN).encode(),
    "a mark for UTF-8": b"\xef\xbb\xbf" + table(ZERO, TEN).encode(),
    "UTF-16 with its mark": table(ZERO, TEN).encode("utf-16"),
    "CRLF": table(ZERO, TEN).replace("\n", "\r\n").encode(),
    "CR": table(ZERO, TEN).replace("\n", "\r").encode(),
    "comments, empty lines, no last line end": ("# poles\n\n" + table(ZERO, "", "# x", TEN).rstrip()).encode(),
    "other columns, other order": b"ref,angle_deg,pole_lon_deg,pole_lat_deg,age_ma,relative_to,plate\n"
    b"x,0,,,0,deep,alba\ny,10,0,90,10,deep,alba\n",
    "unsorted ages": table(TEN, ZERO).encode(),
    "a loop that closes": table(ZERO, TEN, "fara,alba,0,,,0", "fara,alba,10,90,0,5", "fara,deep,0,,,0", "fara,deep,10,90,0,15").encode(),
}  # fmt: skip


@pytest.mark.parametrize("data", GOOD.values(), ids=GOOD)
def test_what_is_no_fault(here, ask, data):
    """Byte order marks, line ends, comments, order: none of them changes the answer."""
    (here / "h.csv").write_bytes(data)
    answer = ask("pole", "alba", "--relative-to", "deep", "--age", "5", "--history", "h.csv")
    assert answer.code == 0
    assert answer.out.startswith(
        "alba relative to deep, today to 5 Ma: pole 90.000000 0.000000, angle 5.000000"
    )


def test_unsorted_ages_are_a_warning(here, ask):
    """Rows are read by age, and that they stand in another order is said."""
    (here / "h.csv").write_text(table(TEN, ZERO), encoding="utf-8")
    answer = ask("pole", "alba", "--relative-to", "deep", "--age", "5", "--history", "h.csv")
    assert answer.said == [
        "warning: h.csv:3: alba relative to deep: age 0 Ma stands after 10 Ma; the rows are read by age; check"
        " for a slip of the pen"
    ]


@pytest.mark.parametrize("kind", ["missing", "dangling link", "folder"])
@pytest.mark.parametrize("ending", ["csv", "toml", "nc"])
def test_files_that_are_none(here, ask, kind, ending):
    """What is not there and what is a folder are told apart, whatever the kind of file."""
    name = f"x.{ending}"
    if kind == "folder":
        (here / name).mkdir()
    elif kind == "dangling link":
        (here / name).symlink_to("nowhere")
    reason = "is a folder, not a file" if kind == "folder" else "no such file"
    answer = ask("pole", "alba", "--relative-to", "deep", "--age", "5", "--history", name)
    assert (answer.code, answer.out, answer.said) == (1, "", [f"error: {name}: {reason}"])


def test_a_file_that_may_not_be_read(here, ask, monkeypatch):
    """A file without permission is said to be unreadable."""
    (here / "h.csv").write_text(table(ZERO, TEN), encoding="utf-8")
    deny(here / "h.csv", monkeypatch)
    answer = ask("pole", "alba", "--relative-to", "deep", "--age", "5", "--history", "h.csv")
    assert (answer.code, answer.out) == (1, "")
    assert answer.said == ["error: h.csv: cannot be read: Permission denied"]


@pytest.mark.parametrize("data", [b"", b"hello", b"CDF\x01"])
def test_netcdf_that_is_none(here, ask, data):
    """A file that only ends in .nc is refused by name."""
    (here / "h.nc").write_bytes(data)
    answer = ask("pole", "alba", "--relative-to", "deep", "--age", "5", "--history", "h.nc")
    assert (answer.code, answer.out) == (1, "")
    assert answer.said[0].startswith("error: h.nc: not a readable netCDF file (")
    assert len(answer.said) == 1


def test_netcdf_of_something_else(here, ask):
    """A netCDF file without rotations says that it holds no history."""
    import xarray as xr

    xr.Dataset({"relief": ("x", [1.0, 2.0])}).to_netcdf(here / "h.nc")
    answer = ask("pole", "alba", "--relative-to", "deep", "--age", "5", "--history", "h.nc")
    assert answer.code == 1
    assert answer.said == [
        "error: h.nc: the dataset holds no rotation history (no rotation_history_version)"
    ]
