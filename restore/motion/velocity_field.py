"""A field of velocities on a grid of today's positions, each cell on its own plate, age by age."""

from __future__ import annotations

import functools
import json
import os
from collections.abc import Mapping
from dataclasses import dataclass
from typing import Any

import numpy as np

from restore.errors import InputError
from restore.files.atomic import whole_file
from restore.geometry.sphere import (
    EARTH_RADIUS_KM,
    Floats,
    unit_vectors,
)
from restore.history.circuit import REACHED, Circuit
from restore.history.velocity import angular_velocity
from restore.outlines import Outlines

FILL = np.float32(-9999.0)


@dataclass(frozen=True, eq=False)
class VelocityGrid:
    """Cell centres, degrees: `lat_deg` (n,), `lon_deg` (m,), and the plate of each cell (n, m): its number
    in the Circuit, -1 for none.
    """

    lat_deg: Floats
    lon_deg: Floats
    codes: np.ndarray

    @functools.cached_property
    def members(self) -> dict[int, tuple[np.ndarray, Floats]]:
        """Of each plate its cells, by flat number, and their unit vectors (3, cells)."""
        lats, lons = (a.ravel() for a in np.meshgrid(self.lat_deg, self.lon_deg, indexing="ij"))
        xyz = unit_vectors(lats, lons)
        flat = self.codes.ravel()
        cells = {code: np.flatnonzero(flat == code) for code in np.unique(flat[flat >= 0]).tolist()}
        return {code: (own, np.ascontiguousarray(xyz[own].T)) for code, own in cells.items()}


FIELDS = ("east_mm_yr", "north_mm_yr", "then_lat_deg", "then_lon_deg")


def grid_on_plates(circuit: Circuit, outlines: Outlines, step_deg: float) -> VelocityGrid:
    """A global grid of cell centres at a step (degrees) that divides 180, each on its plate.

    Raises InputError for a step that does not.
    """
    rows = round(180.0 / step_deg) if step_deg > 0.0 else 0
    if rows < 1 or abs(rows * step_deg - 180.0) > 1e-9:
        raise InputError(f"grid step {step_deg:g} degrees: must be above 0 and divide 180")
    lat = -90.0 + (np.arange(rows) + 0.5) * 180.0 / rows
    lon = -180.0 + (np.arange(2 * rows) + 0.5) * 180.0 / rows
    lats, lons = (a.ravel() for a in np.meshgrid(lat, lon, indexing="ij"))
    found = outlines.plate_at(lats, lons).outline
    labels = circuit.codes([outline.plate for outline in outlines.outlines])
    codes = np.append(labels, -1)[found].reshape(len(lat), len(lon))
    return VelocityGrid(lat, lon, codes)


def velocities_at(
    circuit: Circuit, grid: VelocityGrid, age_ma: float, radius_km: float
) -> dict[str, Floats]:
    """East and north velocity (mm/yr, in the frame, forward in time) of the material of each cell at an
    age (Ma), and where it then was (degrees); (n, m), NaN where there is no plate or no chain.

    With v = omega x r at a unit vector (x, y, z), east is `(x vy - y vx) / h` and north `vz h - z (x vx +
    y vy) / h`, h = hypot(x, y); at a pole the longitude counts as 0.
    """
    parts = {name: np.full(grid.codes.size, np.nan) for name in FIELDS}
    members = grid.members
    codes = np.array(sorted(members), dtype=np.int64)
    found = circuit.rotations_by_code(codes, np.full(len(codes), age_ma))
    omegas = found.rotations.apply(angular_velocity(found)) * radius_km
    for number, code in enumerate(codes.tolist()):
        if found.status[number] != REACHED:
            continue
        cells, start = members[code]
        x, y, z = found.rotations[number].as_matrices() @ start
        wx, wy, wz = omegas[number]
        vx, vy, vz = wy * z - wz * y, wz * x - wx * z, wx * y - wy * x
        level = np.sqrt(x * x + y * y)
        at_pole = level == 0.0
        safe = np.where(at_pole, 1.0, level)
        cos_lon, sin_lon = np.where(at_pole, 1.0, x / safe), y / safe
        parts["east_mm_yr"][cells] = cos_lon * vy - sin_lon * vx
        parts["north_mm_yr"][cells] = vz * level - z * (cos_lon * vx + sin_lon * vy)
        parts["then_lat_deg"][cells] = np.rad2deg(np.arctan2(z, level))
        lon = np.rad2deg(np.arctan2(y, x))
        parts["then_lon_deg"][cells] = np.where(lon >= 180.0, -180.0, lon)
    return {name: values.reshape(grid.codes.shape) for name, values in parts.items()}


def write_velocity_field(
    path: str | os.PathLike[str],
    circuit: Circuit,
    grid: VelocityGrid,
    ages: tuple[float, ...],
    frame_kind: str,
    provenance: Mapping[str, Any],
    radius_km: float = EARTH_RADIUS_KM,
) -> None:
    """Write velocities (mm/yr) at ages (Ma) to a CF netCDF file, one age in memory at a time.

    Raises InputError for a name that does not end in .nc, DomainError for an age at which no plate has a
    chain to the frame.
    """
    if not os.fspath(path).lower().endswith(".nc"):
        raise InputError(f"{os.fspath(path)}: a field is written as netCDF; end the name in .nc")
    codes = np.array(sorted(grid.members), dtype=np.int64)
    for age in ages:
        _, status, _ = circuit.find(codes, np.full(len(codes), age))
        if len(codes) and not np.any(status == REACHED):
            raise circuit.no_answer(circuit.plates[int(codes[0])], age, int(status[0]))
    from netCDF4 import Dataset

    with whole_file(path) as part, Dataset(part, "w") as file:
        _describe(file, circuit, grid, ages, frame_kind, provenance)
        for number, age in enumerate(ages):
            for name, values in velocities_at(circuit, grid, age, radius_km).items():
                file[name][number] = np.where(np.isnan(values), FILL, values).astype(np.float32)


def _describe(
    file: Any,
    circuit: Circuit,
    grid: VelocityGrid,
    ages: tuple[float, ...],
    frame_kind: str,
    provenance: Mapping[str, Any],
) -> None:
    file.setncatts(
        {
            "Conventions": "CF-1.11",
            "title": f"velocities relative to {circuit.frame} ({frame_kind})",
            "comment": "Of the material at today's latitude and longitude, at each age, where it then was.",
            "provenance": json.dumps(provenance),
        }
    )
    axes = (
        ("restored_age", np.array(ages), {"units": "Myr", "long_name": "age before present"}),
        ("lat", grid.lat_deg, {"units": "degrees_north", "standard_name": "latitude"}),
        ("lon", grid.lon_deg, {"units": "degrees_east", "standard_name": "longitude"}),
    )
    for name, values, attributes in axes:
        file.createDimension(name, len(values))
        file.createVariable(name, "f8", (name,))[:] = values
        file[name].setncatts(attributes)
    plates = file.createVariable("plate", "i4", ("lat", "lon"), zlib=True, fill_value=-1)
    plates[:] = grid.codes
    plates.setncatts(
        {
            "long_name": "plate on which the cell lies today",
            "flag_values": np.arange(len(circuit.plates), dtype=np.int32),
            "flag_meanings": " ".join(label.replace(" ", "_") for label in circuit.plates),
        }
    )
    for name, units, words in (
        ("east_mm_yr", "mm year-1", "velocity eastward where the material then was"),
        ("north_mm_yr", "mm year-1", "velocity northward where the material then was"),
        ("then_lat_deg", "degrees_north", "latitude of the material at that age"),
        ("then_lon_deg", "degrees_east", "longitude of the material at that age"),
    ):
        chunk = (1, len(grid.lat_deg), len(grid.lon_deg))
        variable = file.createVariable(
            name, "f4", ("restored_age", "lat", "lon"), zlib=True, fill_value=FILL, chunksizes=chunk
        )
        variable.setncatts({"units": units, "long_name": words})
