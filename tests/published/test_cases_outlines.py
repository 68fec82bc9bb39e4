"""The worked cases for outlines: computed by a separate small program, not published.

Closed forms stand beside them where there are any.
"""

import json
import math

import numpy as np
import pytest

from restore.history.circuit import Circuit
from restore.history.rows import Row
from restore.history.store import History
from restore.motion.ground import Ground
from restore.motion.site_table import table_from_columns
from restore.motion.sites import SiteJob, restore_table
from restore.outlines import Outlines

KM = 6371.0088


def read(tmp_path, ring, edges="great-circle", **properties):
    feature = {
        "type": "Feature",
        "properties": {"plate": "a", **properties},
        "geometry": {"type": "Polygon", "coordinates": [ring]},
    }
    path = tmp_path / "o.geojson"
    path.write_text(json.dumps(feature), encoding="utf-8")
    return Outlines.read(path, edges=edges)


def on(outlines, lat, lon):
    return bool(outlines.plate_at(np.array([lat]), np.array([lon])).outline[0] == 0)


@pytest.mark.parametrize("edges", ["great-circle", "straight"])
def test_a_cap_of_100_degrees(tmp_path, edges):
    """5S inside, 15S outside, 299.32e6 km2; its complement 210.75e6 km2 (not published)."""
    if edges == "straight":
        ring = [[-180, -10], [180, -10], [180, 90], [-180, 90], [-180, -10]]
    else:
        ring = [[lon / 20, -10] for lon in range(-3600, 3600)] + [[-180, -10]]
    cap = read(tmp_path, ring, edges)
    assert on(cap, -5.0, 77.0)
    assert not on(cap, -15.0, 77.0)
    km2 = cap.outlines[0].area_sr() * KM**2
    assert km2 / 1e6 == pytest.approx(299.32, abs=0.005)
    assert km2 == pytest.approx(2 * math.pi * (1 - math.cos(math.radians(100))) * KM**2, rel=1e-6)
    other = read(tmp_path, ring[::-1], edges)
    assert other.outlines[0].area_sr() * KM**2 / 1e6 == pytest.approx(210.75, abs=0.005)
    assert on(other, -15.0, 77.0)
    assert not on(other, -5.0, 77.0)


def test_an_edge_along_a_parallel(tmp_path):
    """60.05N 5E lies south of the great circle from 60N 0E to 60N 10E (60.0945N), north of the straight line."""
    ring = [[0, 50], [10, 50], [10, 60], [0, 60], [0, 50]]
    circle, straight = read(tmp_path, ring), read(tmp_path, ring, "straight")
    assert on(circle, 60.05, 5.0)
    assert not on(straight, 60.05, 5.0)
    assert on(circle, 60.09445, 5.0)
    assert not on(circle, 60.09455, 5.0)
    top = math.degrees(math.atan(math.tan(math.radians(60)) / math.cos(math.radians(5))))
    assert round(top, 4) == 60.0945
    assert on(circle, top - 1e-10, 5.0)
    assert not on(circle, top + 1e-10, 5.0)


@pytest.mark.parametrize(
    ("age", "asked", "status"),
    [(5.0, 30.0, "restored"), (5.0, 30.001, "crust not yet formed"), (35.0, 20.0, "older than its crust")],
)
def test_crust_of_30_to_0(tmp_path, age, asked, status):
    """Asked 30: restored; asked 30.001: not yet formed, the row kept; a sample of 35: older than its crust."""
    ring = [[0, -20], [30, -20], [30, 20], [0, 20], [0, -20]]
    outlines = read(tmp_path, ring, oldest_ma=30, youngest_ma=0)
    rows = [Row("a", "deep", t, *((math.nan, math.nan) if t == 0 else (90.0, 0.0)), t) for t in (0.0, 60.0)]
    job = SiteJob(Circuit(History.from_rows(rows), "deep"), (asked,), ground=Ground(outlines))
    results = restore_table(
        table_from_columns({"lat_deg": [1.0], "lon_deg": [2.0], "age_ma": [age]}, False), job
    )
    assert len(results) == 1
    assert results.columns["status"] == [status]
    assert np.isnan(results.columns["restored_lon_deg"][0]) == (status != "restored")
    if status == "restored":
        assert results.columns["restored_lon_deg"][0] == pytest.approx(32.0, abs=1e-12)
