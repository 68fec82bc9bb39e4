"""The plain doors: files and columns in memory give the same as the makers behind them."""

from pathlib import Path

import numpy as np
import pytest

from restore import History, flowlines, trails
from restore.errors import InputError

WORLD = Path(__file__).parents[2] / "scenario_files"


@pytest.fixture(scope="module")
def history():
    return History.read(WORLD / "history.toml")


def test_flowlines_from_a_file_and_from_memory(history):
    """The worked law a = R^-1 b holds, and memory gives what the file gives."""
    between = ("ovrath", "quemmel")
    from_file = flowlines(WORLD / "ridge.csv", history, between, "0:60:20")
    rows = [line.split(",") for line in (WORLD / "ridge.csv").read_text().splitlines()[1:]]
    columns = {"start": [r[0] for r in rows], "lat_deg": [float(r[1]) for r in rows],
               "lon_deg": [float(r[2]) for r in rows]}  # fmt: skip
    from_memory = flowlines(columns, history, between, [0.0, 20.0, 40.0, 60.0])
    np.testing.assert_array_equal(from_file.lat_deg, from_memory.lat_deg)
    np.testing.assert_array_equal(from_file.axes, from_memory.axes)
    assert from_file.lat_deg.shape == (len(rows), 2, 4)


def test_trails_from_a_file_and_from_memory(history):
    """At 0 Ma the trail begins at the hotspot itself; memory gives what the file gives."""
    from_file = trails(WORLD / "hotspots.csv", history, "ovrath", "deep", "0:40:20").columns()
    rows = [line.split(",") for line in (WORLD / "hotspots.csv").read_text().splitlines()[1:]]
    columns = {"hotspot": [r[0] for r in rows], "lat_deg": [float(r[1]) for r in rows],
               "lon_deg": [float(r[2]) for r in rows]}  # fmt: skip
    from_memory = trails(columns, history, "ovrath", "deep", [0.0, 20.0, 40.0]).columns()
    np.testing.assert_array_equal(from_file["lat_deg"], from_memory["lat_deg"])
    np.testing.assert_allclose(np.asarray(from_file["lat_deg"])[::3], columns["lat_deg"], atol=1e-12)


def test_a_missing_column_is_named(history):
    """Columns in memory are checked as those of a file are."""
    with pytest.raises(InputError, match="column 'lon_deg' is missing; the columns are lat_deg"):
        flowlines({"lat_deg": [1.0]}, history, ("ovrath", "quemmel"), "10")
    with pytest.raises(InputError, match="column 'hotspot' is missing"):
        trails({"lat_deg": [1.0], "lon_deg": [2.0]}, history, "ovrath", "deep", "10")
