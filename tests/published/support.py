"""What the checks against published values share: the tables beside them, plain geometry.

Nothing here is computed by the package under test: only file names and rows are handed to it.
"""

from __future__ import annotations

import csv
import re
from pathlib import Path

import numpy as np

DATA = Path(__file__).parent / "data"
RADIUS_KM = 6371.0088
"""Mean radius R1 of GRS80, km: Moritz 2000, J. Geodesy 74, 128-133 (from memory; constants.csv)."""


def records(name: str) -> list[dict[str, str]]:
    """The rows of a table in the data folder, as texts by column name."""
    with (DATA / name).open(encoding="utf-8", newline="") as stream:
        return list(csv.DictReader(stream))


def worked_example(number: str) -> dict[str, str]:
    """One row of worked_examples.csv by its id."""
    return next(row for row in records("worked_examples.csv") if row["id"] == number)


def numbers_in(text: str) -> list[float]:
    """All numbers that stand in a text."""
    return [float(found) for found in re.findall(r"-?\d+(?:\.\d+)?", text)]


def with_column(name: str, folder: Path, column: str, value: str) -> Path:
    """A copy of a table of the data folder with one more column, the same in every row."""
    header, *lines = (DATA / name).read_text(encoding="utf-8").splitlines()
    longer = [f"{header},{column}", *(f"{line},{value}" for line in lines)]
    path = folder / name
    path.write_text("\n".join(longer) + "\n", encoding="utf-8")
    return path


def write_manifest(folder: Path, *tables: str, name: str = "history.toml") -> Path:
    """A manifest of tables, each given as the TOML text under its `[[table]]` line."""
    path = folder / name
    parts = ["version = 1", *(f"[[table]]\n{table}" for table in tables)]
    path.write_text("\n".join(parts) + "\n", encoding="utf-8")
    return path


def unit(lat_deg: float, lon_deg: float) -> np.ndarray:
    """Unit vector of a place: x to 0N 0E, y to 0N 90E, z to the north pole."""
    lat, lon = np.deg2rad(lat_deg), np.deg2rad(lon_deg)
    return np.array([np.cos(lat) * np.cos(lon), np.cos(lat) * np.sin(lon), np.sin(lat)])


def lat_lon(vector: np.ndarray) -> tuple[float, float]:
    """Latitude and longitude in degrees of a vector of any length."""
    x, y, z = vector
    return float(np.rad2deg(np.arctan2(z, np.hypot(x, y)))), float(np.rad2deg(np.arctan2(y, x)))


def east_north(lat_deg: float, lon_deg: float) -> tuple[np.ndarray, np.ndarray]:
    """Unit vectors east and north at a place on the sphere."""
    lat, lon = np.deg2rad(lat_deg), np.deg2rad(lon_deg)
    east = np.array([-np.sin(lon), np.cos(lon), 0.0])
    north = np.array([-np.sin(lat) * np.cos(lon), -np.sin(lat) * np.sin(lon), np.cos(lat)])
    return east, north


def arc_deg(a: np.ndarray, b: np.ndarray) -> float:
    """Angle in degrees between two vectors."""
    return float(np.rad2deg(np.arctan2(np.linalg.norm(np.cross(a, b)), a @ b)))


def apart_km(lat_a: float, lon_a: float, lat_b: float, lon_b: float) -> float:
    """Great-circle distance in km between two places in degrees."""
    return float(np.deg2rad(arc_deg(unit(lat_a, lon_a), unit(lat_b, lon_b))) * RADIUS_KM)


def angular_velocity(lat_deg: float, lon_deg: float, rate_deg_per_myr: float) -> np.ndarray:
    """Angular velocity in rad/Myr from a pole and a rate."""
    return unit(lat_deg, lon_deg) * np.deg2rad(rate_deg_per_myr)
