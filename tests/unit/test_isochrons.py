"""Isochrons: shape kept, both sides meet, lines in and out, chrons, bad input."""

import json

import numpy as np
import pytest
from strategies import R_M

from restore.errors import InputError
from restore.geometry.sphere import angular_distance, unit_vectors
from restore.history.circuit import Circuit
from restore.history.rows import Row
from restore.history.store import History
from restore.history.timescale import TimeScale
from restore.motion.flowlines import Spreading
from restore.motion.isochrons import (
    ASSUMES,
    RidgeLine,
    chron_ages,
    densified_line,
    isochrons,
    read_ridge,
    repeated_points,
)

NONE = (float("nan"), float("nan"), 0.0)
PAIR = ("A", "B")
ROWS = [
    Row("A", "B", 0.0, *NONE),
    Row("A", "B", 20.0, 60.0, -30.0, 9.0),
    Row("A", "B", 40.0, 50.0, 20.0, 25.0),
]
# two segments with a transform between them
RIDGE = RidgeLine("r", np.array([-10.0, 0.0, 0.0, 12.0]), np.array([1.0, 1.0, 4.0, 4.0]))


def spreading(ages=(10.0, 30.0), share=0.4, **more):
    return Spreading.between(History.from_rows(ROWS), PAIR, ages, share, **more)


def vectors(arm, side, k):
    return unit_vectors(arm.lat_deg[:, side, k], arm.lon_deg[:, side, k])


def test_restored_together_they_meet():
    """At its age the isochron of A, turned by R, is that of B: a micrometre."""
    arm = isochrons(spreading(), [RIDGE]).arms[0]
    turns = Circuit(History.from_rows(ROWS), "B").rotations("A", arm.age_ma).rotations
    for k in range(2):
        apart = angular_distance(turns[k].apply(vectors(arm, 0, k)), vectors(arm, 1, k))
        assert np.max(apart) * R_M < 1e-6


def test_segments_and_transforms_are_kept():
    """Every length between two points of the line is what it is on the ridge."""
    arm = isochrons(spreading(), [RIDGE]).arms[0]
    ridge = RIDGE.vectors(spreading().latitudes)
    own = angular_distance(ridge[:, None], ridge[None])
    for side in (0, 1):
        line = vectors(arm, side, 1)
        assert np.max(np.abs(angular_distance(line[:, None], line[None]) - own)) * R_M < 1e-6


def test_columns_and_features():
    """A row per point, a feature per line, plate and age; both say what is assumed."""
    found = isochrons(spreading(), [RIDGE], {10.0: "X(o)"})
    columns = found.columns()
    assert {len(values) for values in columns.values()} == {16}
    assert columns["vertex"][:5].tolist() == [1, 2, 3, 4, 1]
    assert columns["plate"] == ["A"] * 8 + ["B"] * 8
    assert columns["chron"][:8] == ["X(o)"] * 4 + [""] * 4
    assert set(columns["assumes"]) == {ASSUMES}
    features = found.features()
    assert [(p["plate"], p["age_ma"], p["chron"]) for _, p in features] == [
        *(("A", 10.0, "X(o)"), ("A", 30.0, "")),
        *(("B", 10.0, "X(o)"), ("B", 30.0, "")),
    ]
    geometry, properties = features[3]
    assert (geometry["type"], properties["assumes"]) == ("LineString", ASSUMES)
    assert geometry["coordinates"][2] == pytest.approx(
        [float(columns["lon_deg"][14]), float(columns["lat_deg"][14])]
    )


def test_outside_the_history_there_is_no_line():
    geometry, properties = isochrons(spreading((50.0,)), [RIDGE]).features()[0]
    assert (geometry, properties["status"]) == (None, "outside the history")


def test_an_extinct_ridge():
    """At its own age the line lies where it is given."""
    arm = isochrons(spreading((20.0, 30.0)), [RIDGE], ridge_ma=20.0, on_plate="A").arms[0]
    assert arm.lat_deg[:, 0, 0].tolist() == RIDGE.lat_deg.tolist()
    with pytest.raises(InputError, match="on_plate is empty"):
        isochrons(spreading((20.0, 30.0)), [RIDGE], ridge_ma=20.0)


def geojson(tmp_path, *geometries):
    path = tmp_path / "ridge.geojson"
    features = [{"type": "Feature", "properties": {}, "geometry": geometry} for geometry in geometries]
    path.write_text(json.dumps({"type": "FeatureCollection", "features": features}), encoding="utf-8")
    return path


def test_lines_of_a_file(tmp_path):
    """Every part of a MultiLineString is a line; a table has one line, or those of its column."""
    parts = [[[0, 0], [0, 5]], [[2, 5], [2, 9]]]
    path = geojson(
        tmp_path,
        {"type": "LineString", "coordinates": parts[0]},
        {"type": "MultiLineString", "coordinates": parts},
    )
    assert [line.name for line in read_ridge(path)] == ["1", "2/1", "2/2"]
    table = tmp_path / "ridge.csv"
    table.write_text("lat_deg,lon_deg,line\n0,0,a\n1,1,b\n2,0,a\n3,1,b\n", encoding="utf-8")
    lines = read_ridge(table)
    assert [(line.name, line.lat_deg.tolist()) for line in lines] == [("a", [0.0, 2.0]), ("b", [1.0, 3.0])]


@pytest.mark.parametrize(
    ("geometry", "message"),
    [
        ({"type": "LineString", "coordinates": [[1, 2]]}, "line '1' has 1 point; a line needs two"),
        ({"type": "LineString", "coordinates": [[1, 2], [1, 2]]}, "one point repeated 2 times"),
        ({"type": "Point", "coordinates": [1, 2]}, "feature 1: geometry 'Point'"),
    ],
)
def test_lines_at_fault(tmp_path, geometry, message):
    with pytest.raises(InputError, match=message):
        read_ridge(geojson(tmp_path, geometry))


def test_repeated_points_are_kept():
    """They are said, and come out as they came in."""
    line = RidgeLine("r", np.array([0.0, 0.0, 5.0]), np.array([1.0, 1.0, 1.0]))
    assert (repeated_points(line), repeated_points(RIDGE)) == (1, 0)
    arm = isochrons(spreading(), [line]).arms[0]
    assert arm.lat_deg[0].tolist() == arm.lat_deg[1].tolist()


def test_densified_lines():
    """Own points keep their digits; no two neighbours are farther apart than asked."""
    dense = densified_line(RIDGE, 100.0, spreading())
    places = dense.vectors(spreading().latitudes)
    assert np.max(angular_distance(places[:-1], places[1:])) * R_M <= 100_000.0 * (1.0 + 1e-12)
    kept = set(zip(dense.lat_deg.tolist(), dense.lon_deg.tolist(), strict=True))
    assert set(zip(RIDGE.lat_deg.tolist(), RIDGE.lon_deg.tolist(), strict=True)) <= kept
    with pytest.raises(InputError, match="longest_km = 0"):
        densified_line(RIDGE, 0.0, spreading())


def test_chrons_have_the_ages_of_the_scale():
    """C5n.2n(o) is 10.949 Ma in Cande & Kent 1995, Table 2 (read)."""
    assert chron_ages(["C5n.2n(o)"], TimeScale.read("ck95")) == {10.949: "C5n.2n(o)"}
    with pytest.raises(InputError, match="is not in time scale"):
        chron_ages(["C99n(o)"], TimeScale.read("ck95"))
