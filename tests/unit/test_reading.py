"""Rotation tables on disk: conventions as described, forms of rows, faults in their places."""

import itertools
import math

import numpy as np
import pytest
from scipy.spatial.transform import Rotation
from strategies import assert_within, place_of, turn_of, vector_of

from restore.errors import HistoryError, TableError
from restore.files.delimited import Layout
from restore.history.conventions import Conventions, Table
from restore.history.reading import read_table
from restore.history.store import History

HEAD = "plate,relative_to,age_ma,pole_lat_deg,pole_lon_deg,angle_deg"
COVARIANCE = np.array([[4e-7, 1e-8, -2e-8], [1e-8, 2e-7, 5e-9], [-2e-8, 5e-9, 1e-7]])


@pytest.fixture
def table(tmp_path):
    """A function that writes `t.csv` and reads its rows as described."""

    def reading(text: str, **described):
        path = tmp_path / "t.csv"
        path.write_text(text, encoding="utf-8")
        return read_table(str(path), Table(file=str(path), **described), 0)

    return reading


@pytest.fixture
def refused(tmp_path):
    """A function that writes `t.csv` and gives the lines of the error that reading it raises."""

    def reading(text: str, match: str = ".") -> list[str]:
        path = tmp_path / "t.csv"
        path.write_text(text, encoding="utf-8")
        with pytest.raises(HistoryError, match=match) as caught:
            History.read(path)
        return [line.removeprefix(f"{tmp_path}/") for line in str(caught.value).splitlines()]

    return reading


WAYS = list(
    itertools.product(
        ["to-past", "to-present"],
        ["relative_to", "plate"],
        ["anticlockwise", "clockwise"],
        ["plate", "relative_to", ""],
        [False, True],
    )
)


@pytest.mark.parametrize(("turns", "holds", "sense", "covariance_in", "antipode"), WAYS)
def test_every_way_to_print_a_row_is_read_as_meant(table, turns, holds, sense, covariance_in, antipode):
    """A rotation and its covariance, printed in any convention that is described, read alike.

    Rotation to 1e-14 rad (the print has 17 digits), covariance to 1e-12 of its size.
    """
    meant = Rotation.from_rotvec(math.radians(55.0) * vector_of(66.0, -20.0))
    printed, inverted = meant, (turns == "to-present") != (holds == "plate")
    if inverted:
        printed = meant.inv()
    vector = printed.as_rotvec()
    angle = math.degrees(np.linalg.norm(vector)) * (1.0 if sense == "anticlockwise" else -1.0)
    lat, lon = place_of(-vector if antipode else vector)
    angle = -angle if antipode else angle
    side = covariance_in or ("plate" if holds == "relative_to" else "relative_to")
    matrix = meant.as_matrix()
    c = COVARIANCE if side == "plate" else matrix @ COVARIANCE @ matrix.T
    entries = [c[0, 0], c[0, 1], c[0, 2], c[1, 1], c[1, 2], c[2, 2]]
    numbers = ",".join(repr(float(v)) for v in (12.5, lat, lon, angle, *entries))
    text = f"{HEAD},cov_a,cov_b,cov_c,cov_d,cov_e,cov_f\nA,B,{numbers}\n"
    conventions = Conventions(turns, holds, sense, "as-given", covariance_in)
    (row,), findings = table(text, conventions=conventions)
    assert findings == []
    assert (row.plate, row.relative_to, row.age_ma) == ("A", "B", 12.5)
    assert_within((turn_of(row).inv() * meant).magnitude(), 1e-14)
    assert row.covariance is not None
    assert_within(row.covariance - COVARIANCE, 1e-12 * np.abs(COVARIANCE).max())


def test_a_row_may_state_the_side_of_its_covariance(table):
    """A column `covariance_in` goes before the table's convention, row by row."""
    turn = Rotation.from_rotvec(math.radians(90.0) * np.array([0.0, 0.0, 1.0]))
    text = f"{HEAD},cov_a,cov_b,cov_c,cov_d,cov_e,cov_f,covariance_in\n"
    text += "A,B,10,90,0,90,4e-7,0,0,2e-7,0,1e-7,relative_to\n"
    text += "A,B,20,90,0,90,4e-7,0,0,2e-7,0,1e-7,\n"
    (stated, default), _ = table(text)
    diagonal = np.diag([4e-7, 2e-7, 1e-7])
    assert_within(stated.covariance - turn.as_matrix().T @ diagonal @ turn.as_matrix(), 1e-21)
    assert_within(default.covariance - diagonal, 1e-22)


def test_published_covariances_are_scaled(table):
    """C = (1/kappa) [[a,b,c],[b,d,e],[c,e,f]] cov_factor; dof stands with kappa."""
    text = f"{HEAD},kappa,dof,cov_a,cov_b,cov_c,cov_d,cov_e,cov_f,cov_factor\n"
    text += "A,B,10,40,50,5,2,11,3,-1,0.5,4,0.25,6,1e-7\n"
    (row,), _ = table(text)
    truth = np.array([[3, -1, 0.5], [-1, 4, 0.25], [0.5, 0.25, 6]]) * 1e-7 / 2
    assert_within(row.covariance - truth, 1e-21)
    assert row.dof == 11.0


def test_geodetic_poles_are_turned_to_geocentric(table):
    """A pole at geodetic 45N is at geocentric 44.8075767831 (table of GRS80), to its last digit."""
    text = f"{HEAD}\nA,B,10,45,50,5\n"
    (row,), _ = table(text, conventions=Conventions(latitudes="geodetic"))
    assert_within(row.pole_lat_deg - 44.8075767831, 5.1e-11)
    assert table(text)[0][0].pole_lat_deg == 45.0


@pytest.mark.parametrize(
    ("holds", "sense", "sign"),
    [
        ("relative_to", "anticlockwise", -1.0),
        ("relative_to", "clockwise", 1.0),
        ("plate", "anticlockwise", 1.0),
        ("plate", "clockwise", -1.0),
    ],
)
@pytest.mark.parametrize("turns", ["to-past", "to-present"])
def test_rates_turn_back_in_time(table, holds, sense, sign, turns):
    """0.5 deg/Myr held for 2 Myr is a zero row today and 1 degree backwards at 2 Ma.

    A rate has its own direction in time, so that `turns` has no say.
    """
    text = "plate,relative_to,pole_lat_deg,pole_lon_deg,rate_deg_per_myr\nA,B,40,50,0.5\n"
    conventions = Conventions(turns, holds, sense)
    rows, _ = table(text, conventions=conventions, rates_hold_to_ma=2.0)
    assert [(r.age_ma, r.pole_lat_deg, r.angle_deg) for r in rows[1:]] == [(2.0, 40.0, sign)]
    assert (rows[0].age_ma, rows[0].angle_deg) == (0.0, 0.0)


@pytest.mark.parametrize(
    ("unit", "size"),
    [("_deg_per_myr", 1.0), ("_rad_per_myr", 0.017453292519943295), ("_mas_per_yr", 3.6)],
)
def test_angular_velocities(table, unit, size):
    """Components of 1 deg/Myr in any unit: 3.6 mas/yr and 0.01745 rad/Myr are the same rate."""
    text = f"plate,relative_to,omega_x{unit},omega_y{unit},omega_z{unit}\n"
    text += f"A,B,0,{-0.6 * size!r},{0.8 * size!r}\nC,B,0,0,0\n"
    rows, findings = table(text)
    assert findings == []
    assert_within((turn_of(rows[1]).as_rotvec() + np.radians([0.0, -0.6, 0.8])), 1e-16)
    assert [r.angle_deg for r in rows[2:]] == [0.0, 0.0]


def test_a_pole_ellipse_is_an_error(table):
    """A 95 % ellipse of 2 x 1 deg, azimuth 90, at a pole 0N 0E and an angle of 0.01 deg, sigma 0.1.

    For so small an angle u = dv: sigma^2 along x, and angle^2 (axis / 2.4477)^2 along y and z, to
    the square of half the angle (8e-9).
    """
    text = f"{HEAD},pole_ellipse_major_deg,pole_ellipse_minor_deg,"
    text += "pole_ellipse_azimuth_deg,angle_sigma_deg\nA,B,10,0,0,0.01,2,1,90,0.1\n"
    (row,), _ = table(text)
    angle = math.radians(0.01)
    k2 = 5.991464547107979
    truth = [
        math.radians(0.1) ** 2,
        (angle * math.radians(2.0)) ** 2 / k2,
        (angle * math.radians(1.0)) ** 2 / k2,
    ]
    assert row.covariance is not None
    assert_within(np.diag(row.covariance) / truth - 1.0, 1e-7)


def test_zero_rows_need_no_pole(table):
    """A zero rotation may leave its pole empty; other rows may not."""
    rows, findings = table(f"{HEAD}\nA,B,0,,,0\nA,B,10,,50,5\nA,B,20,40,50,6\n")
    assert [r.age_ma for r in rows] == [0.0, 20.0]
    assert [f.line().rpartition("/")[2] for f in findings] == [
        "t.csv:3:4: pole_lat_deg is empty; only a zero rotation has no pole"
    ]


def test_rows_know_their_place_and_what_was_printed(table):
    """Line, reference and note are kept, and the numbers as they stood in the file."""
    text = f"# c\n{HEAD},reference,note\nA,B,10.0,+40.00,50,5,Paper,n\n"
    (row,), _ = table(text)
    assert (row.line, row.reference, row.note) == (3, "Paper", "n")
    assert row.printed == (
        "plate A; relative_to B; age_ma 10.0; pole_lat_deg +40.00; pole_lon_deg 50; angle_deg 5"
    )


def test_labels_are_restated(table):
    """Printed labels become the history's; others stay; labels are text, `NA` and `007` too."""
    text = f"{HEAD}\nAF,007,10,40,50,5\nNA,AF,10,40,50,5\n"
    rows, _ = table(text, plates=(("AF", "afra"),))
    assert [(r.plate, r.relative_to) for r in rows] == [("afra", "007"), ("NA", "afra")]


def test_a_headerless_table_by_number(table):
    """Columns by number, decimal commas, another delimiter and comment mark."""
    columns = {"plate": 2, "relative_to": 1, "age_ma": 6, "angle_deg": 5, "pole_lat_deg": 3}
    layout = Layout("whitespace", "%", header=False, decimal=",", columns={**columns, "pole_lon_deg": 4})
    rows, findings = table("% c\nB A 40,5 -50 5,25 10 % end\n", layout=layout)
    assert findings == []
    assert [(r.plate, r.pole_lat_deg, r.angle_deg, r.age_ma) for r in rows] == [("A", 40.5, 5.25, 10.0)]


ROW_FAULTS = [
    ("A,B,ten,40,50,5", ":3: age_ma = 'ten' is not a number", ""),
    ("A,B,,40,50,5", ":3: age_ma is empty", "every row needs"),
    ("A,B,10,40,50,", ":6: angle_deg is empty", "every row needs"),
    ("A,B,10,40,,5", ":5: pole_lon_deg is empty", "only a zero rotation has no pole"),
    ("A,B,10,95,50,5", ":4: pole_lat_deg = 95", "-90..90"),
    ("A,B,10,40,400,5", ":5: pole_lon_deg = 400", "-360..360"),
    ("A,B,nan,40,50,5", ":3: age_ma = 'nan'", "may not hold NaN"),
    ("A,B,10,40,50,inf", ":6: angle_deg = 'inf'", "may not hold NaN or infinity"),
    ("A,B,-10,40,50,5", ":3: age_ma = -10", "0..4600 Ma, positive into the past"),
    ("A,B,10,40,50,500", ":6: angle_deg = 500", "-360..360"),
    (",B,10,40,50,5", ":1: plate is empty", "names both plates"),
    ("A,A,10,40,50,5", ":2: plate 'A' is relative to itself", "name the plate that was held"),
    ("A,B,0,40,50,5", ":6: a row of age 0 turns by 5 degrees", "must be 0"),
    ("A,B,10,40,50", ": the row has 5 fields where the header has 6", "needs its delimiter"),
    ("A,B,10,40,50,5,6", ": the row has 7 fields where the header has 6", "quote texts"),
    ('A,B,"10,5",40,50,5', ":3: age_ma = '10,5' is not a number", "decimal"),
]


@pytest.mark.parametrize(("row", "said", "remedy"), ROW_FAULTS)
def test_faults_of_a_row_have_places(refused, row, said, remedy):
    """One line: file:line:column, the offending value and what would be right."""
    (line,) = refused(f"{HEAD}\n{row}\n")
    assert line.startswith(f"t.csv:2{said}; ")
    right = line.removeprefix(f"t.csv:2{said}; ")
    assert remedy in right
    assert len(right) > 10


def test_all_faults_of_a_table_at_once(refused):
    """Every row at fault is named at its own line, after comments and quoted newlines too."""
    text = f'# c\n{HEAD},note\nA,B,x,1,2,3,\nA,B,5,1,2,3,"two\nlines"\n# c\nA,B,6,99,2,3,\n'
    text += "A,B,5,1,2,4,\n"
    said = refused(text)
    assert [line.partition(": ")[0] for line in said] == ["t.csv:3:3", "t.csv:7:4", "t.csv:8"]
    assert "second row at 5 Ma (the first: " in said[2]


COVARIANCE_FAULTS = [
    ("1e-7,0,0,1e-7,,1e-7,1,1", "t.csv:2:11: cov_e is empty; all six of cov_a..cov_f are needed"),
    ("1e-7,0,0,-1e-7,0,1e-7,1,1", "t.csv:2:7: the covariance is not positive definite"),
    ("1e-7,0,0,1e-7,0,1e-7,0,1", "t.csv:2:13: kappa = 0; must be above 0"),
    ("1e-7,0,0,1e-7,0,1e-7,1,-1", "t.csv:2:14: dof = -1; degrees of freedom are above 0"),
]


@pytest.mark.parametrize(("numbers", "said"), COVARIANCE_FAULTS)
def test_faults_of_covariances(refused, numbers, said):
    """Half a covariance, one that is no covariance, and impossible kappa and dof are refused."""
    head = f"{HEAD},cov_a,cov_b,cov_c,cov_d,cov_e,cov_f,kappa,dof"
    (line,) = refused(f"{head}\nA,B,10,40,50,5,{numbers}\n")
    assert line.startswith(said)


HEADER_FAULTS = [
    (
        "plate,relative_to,age_ma,pole_lat_deg,pole_lon_deg,angle",
        "column 'angle_deg' is missing; did you mean 'angle'",
    ),
    (
        "plate,relativ_to,age_ma,pole_lat_deg,pole_lon_deg,angle_deg",
        "column 'relative_to' is missing; did you mean 'relativ_to'",
    ),
    ("plate,relative_to,age_ma,pole_lon_deg,angle_deg", "column 'pole_lat_deg' is missing"),
    ("plate,relative_to,pole_lat_deg,pole_lon_deg,angle_deg", "column 'age_ma' is missing"),
    (f"{HEAD},rate_deg_per_myr", "angles, rates and angular velocities stand side by side"),
    (
        "plate,relative_to,omega_x_deg_per_myr,omega_y_deg_per_myr",
        "'omega_z_deg_per_myr' is missing",
    ),
    (HEAD.replace(",", ";"), "looks semicolon-delimited; state delimiter = 'semicolon'"),
]


@pytest.mark.parametrize(("header", "said"), HEADER_FAULTS)
def test_faults_of_the_header(table, header, said):
    """A table that lacks a column says which, at the header's line, and what was probably meant."""
    with pytest.raises(TableError, match=r"t\.csv:1: .*") as caught:
        table(f"{header}\n")
    assert said in str(caught.value)


def test_a_column_map_with_a_name_that_is_not_ours(table):
    """The map's left side is our name; a misspelt one is refused with the near one."""
    layout = Layout(columns={"pole_lat": "lat"})
    with pytest.raises(TableError, match=r"column map: 'pole_lat' is .*did you mean 'pole_lat_deg'"):
        table(f"{HEAD}\n", layout=layout)


def test_a_table_without_rows(refused):
    """A header alone is no history."""
    (line,) = refused(f"{HEAD}\n# nothing\n")
    assert (
        line == "t.csv:1: the table has a header and no rows; a history needs at least one finite rotation"
    )
