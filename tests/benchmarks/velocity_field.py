"""A global velocity field at many ages against a loop by hand over plates and ages, in one process.

Run it: `python tests/benchmarks/velocity_field.py`, `--quick` for a check that it runs. Nothing is
asserted about time, only that both sides agree; the peak of memory is printed.
"""

from __future__ import annotations

import argparse
import os
import resource
import tempfile
import time
from pathlib import Path

os.environ.setdefault("OPENBLAS_NUM_THREADS", "1")

import numpy as np
from scipy.spatial.transform import Rotation

from restore.history.circuit import Circuit
from restore.history.store import History
from restore.motion.velocity_field import grid_on_plates, velocities_at, write_velocity_field
from restore.outlines import Outlines

WORLD = Path(__file__).parents[2] / "scenario_files"
STEP_MYR = 1e-4


def by_hand(circuit: Circuit, grid, age: float) -> tuple[np.ndarray, np.ndarray]:
    """East and north by plate, from two rotations a little apart in age, with scipy."""
    lats, lons = np.meshgrid(np.deg2rad(grid.lat_deg), np.deg2rad(grid.lon_deg), indexing="ij")
    xyz = np.stack([np.cos(lats) * np.cos(lons), np.cos(lats) * np.sin(lons), np.sin(lats)], axis=-1)
    east, north = np.full(lats.shape, np.nan), np.full(lats.shape, np.nan)
    for code in np.unique(grid.codes):
        if code < 0:
            continue
        cells = grid.codes == code
        plate = circuit.plates[code]
        turns = circuit.rotations(plate, [age, age - STEP_MYR]).rotations.quaternions
        older, younger = (Rotation.from_quat(q, scalar_first=True) for q in turns)
        then = older.apply(xyz[cells])
        moving = (younger.apply(xyz[cells]) - then) / STEP_MYR * 6371.0088
        lon = np.arctan2(then[:, 1], then[:, 0])
        lat = np.arctan2(then[:, 2], np.hypot(then[:, 0], then[:, 1]))
        east[cells] = -np.sin(lon) * moving[:, 0] + np.cos(lon) * moving[:, 1]
        north[cells] = (
            -np.sin(lat) * (np.cos(lon) * moving[:, 0] + np.sin(lon) * moving[:, 1])
            + np.cos(lat) * moving[:, 2]
        )
    return east, north


def main() -> None:
    parser = argparse.ArgumentParser()
    parser.add_argument("--quick", action="store_true", help="small sizes")
    quick = parser.parse_args().quick
    step, count = (5.0, 5) if quick else (0.5, 50)
    circuit = Circuit(History.read(WORLD / "history.toml"), "deep")
    grid = grid_on_plates(circuit, Outlines.read(WORLD / "outlines.geojson"), step)
    ages = tuple(float(a) for a in np.linspace(1.0, 118.0, count))
    east, north = by_hand(circuit, grid, ages[1])
    field = velocities_at(circuit, grid, ages[1], 6371.0088)
    # the hand's difference of two near positions has about 1e-2 mm/yr of noise
    assert np.nanmax(np.hypot(field["east_mm_yr"] - east, field["north_mm_yr"] - north)) < 0.05
    cells = grid.codes.size * len(ages)
    began = time.process_time()
    for age in ages:
        by_hand(circuit, grid, age)
    hand = time.process_time() - began
    began = time.process_time()
    for age in ages:
        velocities_at(circuit, grid, age, 6371.0088)
    own = time.process_time() - began
    before = resource.getrusage(resource.RUSAGE_SELF).ru_maxrss
    began = time.process_time()
    with tempfile.TemporaryDirectory() as folder:
        write_velocity_field(Path(folder) / "v.nc", circuit, grid, ages, "mantle", {})
        size = (Path(folder) / "v.nc").stat().st_size
    written = time.process_time() - began
    after = resource.getrusage(resource.RUSAGE_SELF).ru_maxrss
    print(f"{grid.codes.shape} cells, {len(ages)} ages")
    print(f"  by hand            {hand / cells * 1e9:8.0f} ns per cell and age")
    print(f"  velocities_at      {own / cells * 1e9:8.0f} ns   x{hand / own:5.2f}")
    print(f"  written to netCDF  {written / cells * 1e9:8.0f} ns   {size / 1e6:.1f} MB")
    print(f"  peak memory {after / 1024:.0f} MB, {(after - before) / 1024:.0f} MB more while writing")


if __name__ == "__main__":
    main()
