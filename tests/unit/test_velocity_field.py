"""The velocity field against rates at points, and its file against xarray."""

import json

import numpy as np
import pytest
import xarray as xr

from restore.errors import InputError, OutsideHistoryError
from restore.history.circuit import Circuit
from restore.history.store import History
from restore.motion.rates import rates
from restore.motion.velocity_field import grid_on_plates, velocities_at, write_velocity_field
from restore.outlines import Outlines

ROOT = __import__("pathlib").Path(__file__).parents[2] / "scenario_files"


@pytest.fixture(scope="module")
def world():
    history = History.read(ROOT / "history.toml")
    return history, Circuit(history, "deep"), Outlines.read(ROOT / "outlines.geojson")


def test_cells_move_as_their_plates_do(world):
    """Every cell has the velocity that `rates` gives for its plate, to 1e-9 mm/yr."""
    history, circuit, outlines = world
    grid = grid_on_plates(circuit, outlines, 30.0)
    field = velocities_at(circuit, grid, 35.0, 6371.0088)
    assert grid.codes.min() >= 0
    for i, j in ((0, 0), (2, 5), (5, 11), (3, 7)):
        plate = circuit.plates[grid.codes[i, j]]
        one = rates(history, plate, "deep", grid.lat_deg[i], grid.lon_deg[j], 35.0)
        assert field["east_mm_yr"][i, j] == pytest.approx(one.east_mm_yr[0], abs=1e-9)
        assert field["north_mm_yr"][i, j] == pytest.approx(one.north_mm_yr[0], abs=1e-9)
        assert field["then_lat_deg"][i, j] == pytest.approx(one.then_lat_deg[0], abs=1e-9)


def test_the_file_is_cf_and_holds_every_age(world, tmp_path):
    """Opened by xarray: axes, units, flags, provenance; values those of the field."""
    _, circuit, outlines = world
    grid = grid_on_plates(circuit, outlines, 45.0)
    write_velocity_field(tmp_path / "v.nc", circuit, grid, (0.0, 35.0), "mantle", {"made": "here"})
    with xr.open_dataset(tmp_path / "v.nc", decode_times=False) as data:
        assert data.restored_age.attrs["units"] == "Myr"
        assert data.sizes == {"restored_age": 2, "lat": 4, "lon": 8}
        assert json.loads(data.attrs["provenance"]) == {"made": "here"}
        expected = velocities_at(circuit, grid, 35.0, 6371.0088)["east_mm_yr"]
        np.testing.assert_allclose(data.east_mm_yr[1], expected, rtol=1e-6)
        words = data.plate.attrs["flag_meanings"].split()
        assert words[int(data.plate[0, 0])] == "glufta"
    assert [p.name for p in tmp_path.iterdir()] == ["v.nc"]


def test_a_field_that_would_be_empty_is_refused(world, tmp_path):
    """An age at which no plate has a chain, and a name that is no netCDF: one clear error, no file."""
    _, circuit, outlines = world
    grid = grid_on_plates(circuit, outlines, 45.0)
    with pytest.raises(OutsideHistoryError, match="at 130 Ma: outside the history"):
        write_velocity_field(tmp_path / "v.nc", circuit, grid, (0.0, 130.0), "mantle", {})
    with pytest.raises(InputError, match=r"a field is written as netCDF; end the name in \.nc"):
        write_velocity_field(tmp_path / "v.csv", circuit, grid, (0.0,), "mantle", {})
    assert list(tmp_path.iterdir()) == []


def test_a_step_that_does_not_divide_the_globe(world):
    """The cells must fit between the poles."""
    _, circuit, outlines = world
    with pytest.raises(InputError, match="grid step 7 degrees: must be above 0 and divide 180"):
        grid_on_plates(circuit, outlines, 7.0)
