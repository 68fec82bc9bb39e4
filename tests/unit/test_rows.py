"""Rows: the one door, its faults, frozen columns."""

import dataclasses
import math

import numpy as np
import pytest

from restore.errors import HistoryError
from restore.geometry.rotations import Rotations
from restore.history.conventions import Table
from restore.history.rows import Row, Rows
from restore.history.store import History

GOOD = Row("ortha", "brena", 10.0, 40.0, 50.0, 5.0)
SPD = np.diag([1e-6, 2e-6, 3e-6])


def changed(**values) -> Row:
    return dataclasses.replace(GOOD, **values)


FAULTS = [
    ({"plate": ""}, "plate", "plate is empty"),
    ({"relative_to": ""}, "relative_to", "relative_to is empty"),
    ({"relative_to": "ortha"}, "relative_to", "plate 'ortha' is relative to itself"),
    ({"age_ma": -1.0}, "age_ma", "age_ma = -1"),
    ({"age_ma": 4601.0}, "age_ma", "age_ma = 4601"),
    ({"age_ma": math.nan}, "age_ma", "age_ma = nan"),
    ({"age_ma": math.inf}, "age_ma", "age_ma = inf"),
    ({"pole_lat_deg": 90.5}, "pole_lat_deg", "pole_lat_deg = 90.5"),
    ({"pole_lat_deg": math.nan}, "pole_lat_deg", "pole_lat_deg = nan"),
    ({"pole_lon_deg": 361.0}, "pole_lon_deg", "pole_lon_deg = 361"),
    ({"pole_lon_deg": math.nan}, "pole_lon_deg", "pole_lon_deg = nan"),
    ({"angle_deg": 361.0}, "angle_deg", "angle_deg = 361"),
    ({"angle_deg": math.nan}, "angle_deg", "angle_deg = nan"),
    ({"age_ma": 0.0}, "angle_deg", "a row of age 0 turns by 5 degrees"),
    ({"covariance": np.full((3, 3), np.nan)}, "cov_a", "the covariance is not finite"),
    ({"covariance": np.diag([1e-6, 1e-6, -1e-9])}, "cov_a", "not positive definite"),
    ({"covariance": np.diag([1e-6, 1e-6, 0.0])}, "cov_a", "not positive definite"),
    ({"dof": 0.0}, "dof", "dof = 0"),
    ({"dof": math.nan}, "dof", "dof = nan"),
]


@pytest.mark.parametrize(("values", "column", "what"), FAULTS)
def test_faults_of_a_row(values, column, what):
    """Each fault names its column, the offending value and a remedy; the door names the row."""
    found = changed(**values).faults()
    assert found[0][0] == column
    assert what in found[0][1]
    assert found[0][2]
    with pytest.raises(HistoryError, match=rf"^row 1: .*{what}"):
        History.from_rows(
            [GOOD, changed(age_ma=20.0, **values) if "age_ma" not in values else changed(**values)]
        )


@pytest.mark.parametrize(
    "values",
    [
        {},
        {"covariance": SPD},
        {"covariance": np.zeros((3, 3))},
        {"angle_deg": -360.0},
        {"pole_lon_deg": 360.0, "pole_lat_deg": -90.0},
        {"angle_deg": 0.0, "pole_lat_deg": math.nan, "pole_lon_deg": math.nan},
        {"age_ma": 0.0, "angle_deg": 0.0},
        {"age_ma": 4600.0},
        {"dof": 3.0},
        {"plate": "NA", "relative_to": "nan"},
    ],
)
def test_rows_without_fault(values):
    """Values at the ends of what is allowed are taken; `NA` is a label, a known error may be 0."""
    row = changed(**values)
    assert row.faults() == []
    assert len(History.from_rows([row])) == 1


@pytest.mark.parametrize(
    "covariance",
    [
        np.zeros(3),
        np.eye(2) * 1e-6,
        np.ones((3, 3, 1)),
        [[1e-6, 5e-7, 0.0], [0.0, 1e-6, 0.0], [0.0, 0.0, 1e-6]],
    ],
)
def test_a_covariance_that_is_no_symmetric_three_by_three(covariance):
    """A covariance of another shape, or that is not symmetric, is a fault like the others."""
    with pytest.raises(HistoryError, match="row 0: the covariance"):
        History.from_rows([changed(covariance=np.asarray(covariance))])


def test_all_faults_at_once():
    """Every row at fault is named, one line each, by its number."""
    with pytest.raises(HistoryError, match=r"row 0: .*\nrow 2: ") as caught:
        History.from_rows([changed(age_ma=-1.0), GOOD, changed(dof=-1.0)])
    assert len(str(caught.value).splitlines()) == 2


def test_two_rows_of_one_age():
    """A pair has one row per age and rank; the later line is named, and where the first stands."""
    rows = [changed(line=5), changed(line=9, angle_deg=7.0), changed(age_ma=20.0, line=10)]
    message = r"t\.csv:9: ortha relative to brena has a second row at 10 Ma \(the first: t\.csv:5\)"
    with pytest.raises(HistoryError, match=message) as caught:
        History.from_rows(rows, [Table(file="t.csv")])
    assert [f.kind for f in caught.value.findings] == ["duplicate age"]
    ranked = [GOOD, changed(table=1, angle_deg=7.0)]
    assert len(History.from_rows(ranked, [Table(), Table(rank=1)])) == 2


def test_rows_out_of_order_are_a_warning():
    """Rows that are not sorted by age are read all the same, with a warning at the later line."""
    history = History.from_rows([changed(age_ma=20.0, line=2), changed(line=3)], [Table(file="t.csv")])
    assert [(f.severity, f.kind, f.place.line) for f in history.findings] == [
        ("warning", "unsorted ages", 3)
    ]


def test_columns_say_what_is_not_known():
    """Zero rotations have a NaN pole, unknown covariances are NaN, those of age 0 exactly zero."""
    rows = Rows.from_rows(
        [
            changed(age_ma=0.0, angle_deg=0.0, covariance=SPD),
            changed(angle_deg=0.0),
            changed(age_ma=20.0, covariance=SPD),
        ]
    )
    assert np.isnan(rows.pole_lat_deg).tolist() == [True, True, False]
    assert np.isnan(rows.pole_lon_deg).tolist() == [True, True, False]
    assert not rows.covariance[0].any()
    assert np.isnan(rows.covariance[1]).all()
    assert np.array_equal(rows.covariance[2], SPD)
    assert np.isinf(rows.dof).all()


def test_a_row_comes_back_as_it_went_in():
    """Every field of a row is kept; an unknown covariance comes back as None."""
    row = Row("a", "b", 7.5, -3.0, 4.0, 5.5, SPD, 12.0, "C3n(o)", "Paper 1999", "n", 0, 4, "p")
    back = Rows.from_rows([row, GOOD]).row(0)
    for field in dataclasses.fields(Row):
        mine, theirs = getattr(row, field.name), getattr(back, field.name)
        assert np.array_equal(mine, theirs), field.name
    assert Rows.from_rows([GOOD]).row(0).covariance is None


COLUMNS = [field.name for field in dataclasses.fields(Rows)]


@pytest.mark.parametrize("name", COLUMNS)
def test_columns_refuse_writing(name):
    """No column of a history can be written to, before or after a choice of rows."""
    rows = Rows.from_rows([GOOD, changed(age_ma=20.0)])
    for frozen in (rows, rows.take([1, 0])):
        with pytest.raises(ValueError, match="read-only"):
            getattr(frozen, name)[0] = getattr(frozen, name)[1]
    with pytest.raises(dataclasses.FrozenInstanceError, match="cannot assign"):
        setattr(rows, name, None)


def test_a_row_kept_by_the_caller_is_not_the_history():
    """Writing to a covariance that was passed in does not change the history."""
    mine = SPD.copy()
    rows = Rows.from_rows([changed(covariance=mine)])
    mine[:] = 7.0
    assert np.array_equal(rows.covariance[0], SPD)


def test_choosing_rows():
    """`take` gives the rows asked in that order, repeats included, with all their columns."""
    rows = Rows.from_rows([changed(age_ma=float(a), line=a) for a in (10, 20, 30)])
    assert rows.take([2, 0, 0]).age_ma.tolist() == [30.0, 10.0, 10.0]
    assert rows.take([2, 0, 0]).line.tolist() == [30, 10, 10]
    assert len(rows.take([])) == 0


def test_same_as_sees_every_column():
    """Rows are the same only if every column is, to the last bit; NaN equals NaN."""
    rows = Rows.from_rows([GOOD, changed(age_ma=20.0, angle_deg=0.0)])
    assert rows.same_as(Rows.from_rows([GOOD, changed(age_ma=20.0, angle_deg=0.0)]))
    assert not rows.same_as(rows.take([0]))
    other = {
        "plate": "x", "relative_to": "x", "age_ma": np.nextafter(10.0, 11.0), "pole_lat_deg": 41.0,
        "pole_lon_deg": 51.0, "angle_deg": 6.0, "covariance": SPD, "dof": 5.0, "chron": "x",
        "reference": "x", "note": "x", "table": 1, "line": 1, "printed": "x",
    }  # fmt: skip
    assert sorted(other) == sorted(COLUMNS)
    for name, value in other.items():
        differs = Rows.from_rows([changed(**{name: value}), changed(age_ma=20.0, angle_deg=0.0)])
        assert not rows.same_as(differs), name


def test_rotations_of_rows():
    """Each row's rotation is its pole's; zero rows give the zero rotation."""
    rows = Rows.from_rows([changed(pole_lat_deg=90.0, angle_deg=90.0), changed(age_ma=20.0, angle_deg=0.0)])
    turned = rows.rotations().apply([1.0, 0.0, 0.0])
    assert np.allclose(turned, [[0, 1, 0], [1, 0, 0]], rtol=0.0, atol=1e-15)
    assert isinstance(rows.rotations(), Rotations)
