"""Gridded fields: CF netCDF read by coordinates, and sampled where points are."""

from __future__ import annotations

import os
from dataclasses import dataclass
from pathlib import Path
from typing import TYPE_CHECKING

import numpy as np
from numpy.typing import ArrayLike, NDArray

from restore.errors import InputError
from restore.findings import did_you_mean
from restore.geometry.sphere import Floats

if TYPE_CHECKING:
    import xarray as xr

AXES = {
    "lat": ("latitude", {"degrees_north", "degree_north", "degreen", "degrees_n", "degree_n"}),
    "lon": ("longitude", {"degrees_east", "degree_east", "degreee", "degrees_e", "degree_e"}),
}


@dataclass(frozen=True, eq=False)
class Field:
    """One variable on latitudes `(n,)` and longitudes `(m,)`, degrees, both rising; values (n, m).

    NaN where there is no value.
    """

    name: str
    lat_deg: Floats
    lon_deg: Floats
    values: Floats
    units: str = ""

    def nearest(self, lat_deg: ArrayLike, lon_deg: ArrayLike) -> Floats:
        """The value of the cell in which each point (degrees) lies; NaN outside the grid."""
        lat = np.asarray(lat_deg, dtype=np.float64)
        lon = np.asarray(lon_deg, dtype=np.float64)
        row, in_rows = _cell(self.lat_deg, lat)
        wrapped = self.lon_deg[0] + np.mod(lon - self.lon_deg[0], 360.0)
        # a point just west of the first centre belongs to the first cell, or to the last round the globe
        step = (self.lon_deg[-1] - self.lon_deg[0]) / max(len(self.lon_deg) - 1, 1)
        wrapped = np.where(wrapped >= self.lon_deg[0] + 360.0 - step / 2.0, wrapped - 360.0, wrapped)
        column, in_columns = _cell(self.lon_deg, wrapped)
        return np.where(in_rows & in_columns, self.values[row, column], np.nan)


def _cell(centres: Floats, x: Floats) -> tuple[NDArray[np.int64], NDArray[np.bool_]]:
    """The cell of each value among rising centres, and whether it is within half a cell of one."""
    if len(centres) == 1:
        return np.zeros(x.shape, dtype=np.int64), np.isfinite(x)
    middles = 0.5 * (centres[1:] + centres[:-1])
    at = np.searchsorted(middles, x, side="right")
    first, last = centres[1] - centres[0], centres[-1] - centres[-2]
    inside = (x >= centres[0] - first / 2.0) & (x <= centres[-1] + last / 2.0)
    return at, inside


def read_field(path: str | os.PathLike[str], variable: str | None = None) -> Field:
    """Read one two-dimensional variable of a netCDF file; `variable` may be left out if there is one.

    Raises InputError, in one line, for a file that is no netCDF, a variable that is not there, and
    coordinates that are missing, doubled, unsorted or off the globe.
    """
    import xarray as xr

    name = os.fspath(path)
    if not Path(path).is_file():
        raise InputError(f"{name}: {'is a folder, not a file' if Path(path).is_dir() else 'no such file'}")
    try:
        with xr.open_dataset(path, engine="netcdf4", decode_times=False) as dataset:
            return _field(name, dataset, variable)
    except (OSError, ValueError, RuntimeError) as exc:
        if isinstance(exc, InputError):
            raise
        raise InputError(f"{name}: not a readable netCDF file ({exc})") from exc


def _field(name: str, dataset: xr.Dataset, variable: str | None) -> Field:
    lat, lon = (_axis(name, dataset, axis) for axis in ("lat", "lon"))
    fields = [str(v) for v in dataset.data_vars if set(dataset[v].dims) == {lat, lon}]
    if variable is None:
        if len(fields) != 1:
            found = ", ".join(fields) or "none"
            raise InputError(f"{name}: name one variable on {lat} and {lon}; there are: {found}")
        variable = fields[0]
    if variable not in fields:
        hint = did_you_mean(variable, fields)
        raise InputError(f"{name}: no variable {variable!r} on {lat} and {lon}; {hint}")
    array = dataset[variable].transpose(lat, lon).sortby([lat, lon])
    return Field(
        variable,
        array[lat].values.astype(np.float64),
        array[lon].values.astype(np.float64),
        array.values.astype(np.float64),
        str(array.attrs.get("units", "")),
    )


def _axis(name: str, dataset: xr.Dataset, axis: str) -> str:
    """The name of the latitude or longitude coordinate: by standard name, units, or its own name."""
    standard, units = AXES[axis]
    found = [
        str(c)
        for c in dataset.coords
        if dataset[c].attrs.get("standard_name") == standard
        or str(dataset[c].attrs.get("units", "")).lower() in units
        or str(c).lower() in {axis, standard}
    ]
    if len(found) != 1:
        said = "no" if not found else "more than one"
        raise InputError(f"{name}: {said} coordinate is a {standard} (CF: units {min(units, key=len)})")
    values = dataset[found[0]]
    limit = 90.0 if axis == "lat" else 540.0
    if values.ndim != 1:
        raise InputError(f"{name}: coordinate {found[0]} has {values.ndim} dimensions; it needs one")
    steps = np.diff(values.values.astype(np.float64))
    if not (np.all(steps > 0.0) or np.all(steps < 0.0)):
        raise InputError(f"{name}: coordinate {found[0]} neither rises nor falls all along")
    if not np.all(np.abs(values.values) <= limit):
        raise InputError(f"{name}: coordinate {found[0]} goes beyond {limit:g} degrees")
    return found[0]
