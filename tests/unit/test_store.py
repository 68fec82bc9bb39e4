"""A history as a value: to and from datasets and netCDF without loss, frozen, with its places."""

import math

import netCDF4
import numpy as np
import pytest
import xarray as xr

from restore.errors import HistoryError, InputError
from restore.files.delimited import Layout
from restore.history.conventions import Conventions, Table
from restore.history.rows import Row
from restore.history.store import History, check_frame_kind

SPD = np.array([[3e-7, 1e-8, -2e-8], [1e-8, 2e-7, 5e-9], [-2e-8, 5e-9, 1e-7]])


def full_history() -> History:
    """Every kind of column: errors known, unknown, zero, kappa estimated, odd texts, two tables."""
    tables = (
        Table(
            file="däta/a.csv",
            title="First, with ünicode",
            citation='Author (1999), "Quoted", J. 1, 2-3',
            conventions=Conventions("to-present", "plate", "clockwise", "geodetic", "relative_to"),
            rank=2,
            from_present=True,
            join_within_myr=0.1,
            rates_hold_to_ma=3.3,
            layout=Layout("semicolon", "%", True, False, ",", "latin-1", {"age_ma": 3, "plate": "P"}),
            plates=(("NA", "norda"), ("AF", "afra")),
        ),
        Table(),
    )
    rows = [
        Row("norda", "afra", 0.0, 0.0, 0.0, 0.0),
        Row(
            "norda",
            "afra",
            10.1,
            41.7,
            -170.123456789012345,
            1 / 3,
            SPD,
            9.5,
            "C5n.2n(o)",
            "Å 1999",
        ),
        Row(
            "norda",
            "afra",
            np.nextafter(10.1, 11.0),
            -90.0,
            360.0,
            -360.0,
            note="line one\nline two",
        ),
        Row("norda", "afra", 20.0, 1e-300, -0.0, 5e-324, np.zeros((3, 3)), table=1, line=7),
        Row("NA", "nan", 4600.0, 12.0, 13.0, 14.0, printed="plate NA; age 4600", table=1, line=8),
        Row("p q", "x", 5.0, 1.0, 2.0, 0.0, table=1),
    ]
    frames = {"afra": "mantle", "x": "spin-axis"}
    return History.from_rows(rows, tables, frames, "A title, ünicode")


def test_netcdf_round_trip(tmp_path):
    """Written to netCDF and read, a history is the same to the last bit in every column."""
    history = full_history()
    path = tmp_path / "h.nc"
    history.write(path)
    back = History.read(path)
    assert back.same_as(history)
    assert history.same_as(back)
    assert back.tables == history.tables
    assert np.signbit(back.rows.pole_lon_deg).tolist() == np.signbit(history.rows.pole_lon_deg).tolist()
    assert sorted(p.name for p in tmp_path.iterdir()) == ["h.nc"]


def test_a_second_round_trip_changes_nothing(tmp_path):
    """What was read from netCDF writes the same again, over the old file too."""
    path = tmp_path / "h.nc"
    full_history().write(path)
    once = History.read(path)
    once.write(path)
    assert History.read(path).same_as(full_history())


def test_dataset_round_trip():
    """Through an xarray.Dataset nothing is lost, and its arrays are not the history's own."""
    history = full_history()
    dataset = history.to_dataset()
    assert History.from_dataset(dataset).same_as(history)
    assert dataset.sizes["row"] == len(history)
    dataset["angle_deg"][:] = 1.0
    dataset["plate"][:] = "x"
    assert history.same_as(full_history())


def test_an_empty_history_round_trips(tmp_path):
    """A history without rows is written and read like any other."""
    empty = History.from_rows([])
    empty.write(tmp_path / "h.nc")
    back = History.read(tmp_path / "h.nc")
    assert len(back) == 0
    assert back.same_as(empty)


def test_units_are_written(tmp_path):
    """The file is CF: units that UDUNITS reads, Myr for ages, and what the rotations mean."""
    full_history().write(tmp_path / "h.nc")
    with netCDF4.Dataset(tmp_path / "h.nc") as data:
        assert data.Conventions == "CF-1.11"
        units = {n: getattr(data[n], "units", None) for n in ("age_ma", "angle_deg", "covariance")}
        assert units == {"age_ma": "Myr", "angle_deg": "degree", "covariance": "rad2"}
        assert "anticlockwise" in data.comment


def test_histories_that_differ():
    """Rows, tables, frames and title all count; the warnings of the reading do not."""
    rows = [Row("a", "b", 1.0, 2.0, 3.0, 4.0), Row("a", "b", 2.0, 2.0, 3.0, 5.0)]
    history = History.from_rows(rows)
    assert history.same_as(History.from_rows(list(rows)))
    assert not history.same_as(History.from_rows(rows[:1]))
    assert not history.same_as(History.from_rows(rows, [Table(rank=1)]))
    assert not history.same_as(History.from_rows(rows, frames={"b": "mantle"}))
    assert not history.same_as(History.from_rows(rows, title="t"))


def test_read_arrays_refuse_writing(tmp_path):
    """Columns that come from a file are as frozen as those made in Python."""
    full_history().write(tmp_path / "h.nc")
    back = History.read(tmp_path / "h.nc")
    for name in ("age_ma", "covariance", "plate", "line"):
        with pytest.raises(ValueError, match="read-only"):
            getattr(back.rows, name)[0] = getattr(back.rows, name)[1]


@pytest.mark.parametrize(
    ("change", "message"),
    [
        ({"rotation_history_version": None}, "holds no rotation history"),
        ({"rotation_history_version": 2}, "rotation_history_version = 2: this release reads 1"),
    ],
)
def test_other_datasets_are_refused(change, message):
    """A dataset that is something else, or of a later layout, is refused with the reason."""
    dataset = full_history().to_dataset()
    for name, value in change.items():
        dataset.attrs.pop(name)
        if value is not None:
            dataset.attrs[name] = value
    with pytest.raises(HistoryError, match=message):
        History.from_dataset(dataset)


def test_a_dataset_without_a_column():
    """A missing variable is named."""
    with pytest.raises(HistoryError, match="the dataset has no variable 'dof'"):
        History.from_dataset(full_history().to_dataset().drop_vars("dof"))


def test_netcdf_files_that_cannot_be_read(tmp_path):
    """A missing file, a folder, another file and netCDF of something else are told apart."""
    with pytest.raises(HistoryError, match=r"nothing\.nc: no such file"):
        History.read(tmp_path / "nothing.nc")
    (tmp_path / "folder.nc").mkdir()
    with pytest.raises(HistoryError, match=r"folder\.nc: is a folder, not a file"):
        History.read(tmp_path / "folder.nc")
    (tmp_path / "text.nc").write_text("plate,age\n")
    with pytest.raises(HistoryError, match=r"text\.nc: not a readable netCDF file"):
        History.read(tmp_path / "text.nc")
    xr.Dataset({"x": ("row", [1.0])}).to_netcdf(tmp_path / "other.nc", engine="netcdf4")
    with pytest.raises(HistoryError, match=r"other\.nc: the dataset holds no rotation history"):
        History.read(tmp_path / "other.nc")


@pytest.mark.parametrize("name", ["h.csv", "h", "h.toml"])
def test_other_endings_are_refused(tmp_path, name):
    """A history is written as netCDF only, and the message says so."""
    with pytest.raises(InputError, match=rf"{name}: a history is written as netCDF; end the name in"):
        full_history().write(tmp_path / name)
    assert list(tmp_path.iterdir()) == []


def test_a_failed_writing_leaves_nothing_behind(tmp_path):
    """A folder that is not there is named, and no half file stays."""
    with pytest.raises(InputError, match=r"missing.*h\.nc: cannot be written"):
        full_history().write(tmp_path / "missing" / "h.nc")
    assert list(tmp_path.iterdir()) == []


def test_plates_frames_and_places():
    """Labels of both sides are listed; frames have kinds; rows know file and line."""
    history = full_history()
    assert history.plates() == ["NA", "afra", "nan", "norda", "p q", "x"]
    assert [history.kind_of(f) for f in ("afra", "x", "norda")] == ["mantle", "spin-axis", "plate"]
    tables = [Table(file="a.csv"), Table(file="b.csv")]
    placed = History.from_rows([Row("a", "b", 1.0, 2.0, 3.0, 4.0, table=1, line=7)], tables)
    assert placed.place_of(0) == "b.csv:7"


def test_errors_of_rows():
    """Unknown covariances are not known and count as zero; degrees of freedom are kept."""
    errors = full_history().row_errors()
    assert errors.known.tolist() == [True, True, False, True, False, False]
    assert np.array_equal(errors.covariance[1], SPD)
    assert not errors.covariance[2].any()
    assert errors.dof[1] == 9.5
    assert math.isinf(errors.dof[0])


def test_kinds_of_frames():
    """The three kinds are taken; another is refused, naming all three."""
    assert [check_frame_kind(k) for k in ("plate", "mantle")] == ["plate", "mantle"]
    with pytest.raises(InputError, match="frame kind 'moon': must be one of plate, mantle, spin-axis"):
        check_frame_kind("moon")
