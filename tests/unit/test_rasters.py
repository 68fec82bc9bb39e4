"""Grids of one variable: read by their coordinates, sampled in the cell where a point lies."""

import numpy as np
import pytest
import xarray as xr

from restore.errors import InputError
from restore.files.rasters import Field, read_field


def save(path, lat, lon, values=None, names=("lat", "lon"), units="Ma", attributes=True, **more):
    lat, lon = np.asarray(lat, dtype=float), np.asarray(lon, dtype=float)
    values = (
        np.arange(lat.size * lon.size, dtype=float).reshape(lat.size, lon.size)
        if values is None
        else values
    )
    coords = {names[0]: (names[0], lat), names[1]: (names[1], lon)}
    data = xr.Dataset({"age": (names, values, {"units": units}), **more}, coords=coords)
    if attributes:
        data[names[0]].attrs["units"], data[names[1]].attrs["units"] = "degrees_north", "degrees_east"
    data.to_netcdf(path, engine="netcdf4")
    return path


LATS, LONS = np.arange(-85.0, 90.0, 10.0), np.arange(5.0, 360.0, 10.0)


def by_hand(lat, lon):
    """The value of a global grid of 10 degree cells that counts its cells from 85S 5E."""
    return int((lat + 90.0) // 10) * 36 + int(np.mod(lon, 360.0) // 10)


PLACES = [
    (0.1, 0.1),
    (-89.0, 359.9),
    (89.9, -0.1),
    (45.0, 180.0),
    (45.0, -180.0),
    (12.3, -123.4),
    (-0.1, 540.0 - 360),
]


@pytest.mark.parametrize("turn", ["as is", "north first", "from -180"])
def test_cells_of_a_global_grid(tmp_path, turn):
    """The same cells whichever way the axes run and from where longitudes are counted."""
    values = np.arange(18 * 36, dtype=float).reshape(18, 36)
    lats, lons = LATS, LONS
    if turn == "north first":
        lats, values = lats[::-1], values[::-1]
    if turn == "from -180":
        lons, values = np.arange(-175.0, 180.0, 10.0), np.roll(values, 18, axis=1)
    field = read_field(save(tmp_path / "a.nc", lats, lons, values))
    lat, lon = np.array(PLACES).T
    assert field.nearest(lat, lon).tolist() == [by_hand(*place) for place in PLACES]
    assert (field.name, field.units) == ("age", "Ma")


def test_points_on_nodes_and_round_the_globe(tmp_path):
    """A grid whose nodes stand at 0, 10, ... 350: half a cell before 0 belongs to 0."""
    field = read_field(save(tmp_path / "a.nc", [-10, 0, 10], np.arange(0.0, 360.0, 10.0)))
    assert field.nearest([0, 0, 0, 0, 0], [0, 4.9, 355.1, -4.9, 354.9]).tolist() == [36, 36, 36, 36, 71]
    doubled = read_field(save(tmp_path / "b.nc", [0], np.arange(-180.0, 181.0, 60.0)))
    assert doubled.nearest([0, 0, 0], [-179.0, 90.5, 149.0]).tolist() == [0, 5, 5]


def test_nothing_outside_the_grid(tmp_path):
    """Half a cell beyond the outer nodes there is no value; a gap in the grid is no value; NaN neither."""
    values = np.array([[1.0, 2.0], [3.0, np.nan]])
    field = read_field(save(tmp_path / "a.nc", [10, 20], [100, 110], values))
    lat, lon = [10, 24.9, 25.1, 4.9, 12, 12, 12, 20], [100, 100, 100, 100, 94.9, 95.1, 115.1, 110]
    found = field.nearest(lat, lon)
    assert found[[0, 1, 5]].tolist() == [1.0, 3.0, 1.0]
    assert np.isnan(found[[2, 3, 4, 6, 7]]).all()
    assert np.isnan(field.nearest([np.nan, 10.0], [100.0, np.nan])).all()


def test_uneven_nodes():
    """A cell reaches half way to the next node, whatever the spacing."""
    field = Field("a", np.array([0.0]), np.array([0.0, 1.0, 5.0]), np.array([[7.0, 8.0, 9.0]]))
    assert field.nearest([0, 0, 0, 0], [0.4, 0.6, 2.9, 3.1]).tolist() == [7.0, 8.0, 8.0, 9.0]


@pytest.mark.parametrize("names", [("lat", "lon"), ("latitude", "longitude"), ("y", "x")])
def test_coordinates_by_name_or_by_units(tmp_path, names):
    """CF units name an axis whatever it is called; without them the usual names do."""
    field = read_field(save(tmp_path / "a.nc", [0, 1], [0, 1], names=names, attributes=names == ("y", "x")))
    assert field.values.tolist() == [[0.0, 1.0], [2.0, 3.0]]


def test_variables_on_other_axes_do_not_count(tmp_path):
    """One variable on the two axes needs no name; a transposed one is turned."""
    path = tmp_path / "a.nc"
    data = xr.Dataset(
        {"age": (("lon", "lat"), [[1.0, 2.0], [3.0, 4.0], [5.0, 6.0]]), "n": ("lat", [1, 2])},
        coords={"lat": [0.0, 1.0], "lon": [0.0, 1.0, 2.0]},
    )
    data.to_netcdf(path, engine="netcdf4")
    assert read_field(path).values.tolist() == [[1.0, 3.0, 5.0], [2.0, 4.0, 6.0]]


FAULTS = {
    "no such variable": ({}, "agee", r"no variable 'agee' on lat and lon; did you mean 'age'\?"),
    "two variables": (
        {"depth": (("lat", "lon"), np.zeros((2, 2)))}, None, "name one variable on lat and lon; there are: age, depth",
    ),
    "beyond the pole": ({"lat": [80, 100]}, None, "coordinate lat goes beyond 90 degrees"),
    "unsorted": ({"lat": [0, 1, 0.5]}, None, "coordinate lat neither rises nor falls all along"),
    "doubled": ({"lon": [0, 0]}, None, "coordinate lon neither rises nor falls all along"),
    "no latitude": ({"names": ("y", "lon"), "attributes": False}, None, "no coordinate is a latitude"),
}  # fmt: skip


@pytest.mark.parametrize(("change", "variable", "message"), FAULTS.values(), ids=FAULTS)
def test_grids_at_fault(tmp_path, change, variable, message):
    """What a grid lacks is said in one line that names the file."""
    path = save(tmp_path / "a.nc", **{"lat": [0, 1], "lon": [0, 1], **change})
    with pytest.raises(InputError, match=rf"a\.nc: {message}") as caught:
        read_field(path, variable)
    assert "\n" not in str(caught.value)


def test_files_that_are_no_grids(tmp_path):
    """A missing file, a folder, a text."""
    with pytest.raises(InputError, match=r"none\.nc: no such file"):
        read_field(tmp_path / "none.nc")
    with pytest.raises(InputError, match="is a folder, not a file"):
        read_field(tmp_path)
    (tmp_path / "text.nc").write_text("no grid", encoding="utf-8")
    with pytest.raises(InputError, match=r"text\.nc: not a readable netCDF file"):
        read_field(tmp_path / "text.nc")
