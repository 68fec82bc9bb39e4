"""Trails: still and moving hotspots, passages, dated samples, bad input."""

import math

import numpy as np
import pytest
from published.support import RADIUS_KM
from strategies import R_M

from restore.errors import InputError, OutsideHistoryError, TableError, UnknownPlateError
from restore.geometry.sphere import angular_distance, unit_vectors
from restore.history.rows import Row
from restore.history.store import History
from restore.motion.trails import STATUSES, Hotspots, TrailMaker, compare_samples, read_samples, trails

NONE = (float("nan"), float("nan"), 0.0)
KM_PER_DEGREE = math.radians(1.0) * RADIUS_KM


def maker(rate=1.0, oldest=40.0, **more):
    """P turns about the north pole, eastwards into the past: its trails lead west."""
    rows = [Row("P", "F", 0.0, *NONE), Row("P", "F", oldest, 90.0, 0.0, rate * oldest)]
    return TrailMaker(History.from_rows(rows), "P", "F", **more)


def still(lat=0.0, lon=0.0, paths=None):
    return Hotspots(["h"], np.array([lat]), np.array([lon]), paths or {})


def test_a_trail_leads_where_the_crust_went():
    """The crust that was over the hotspot t Ma ago has gone t degrees west since."""
    trail = maker().make(still(10.0, 5.0), "0:40:10")
    assert trail.lon_deg[0] == pytest.approx([5.0, -5.0, -15.0, -25.0, -35.0], abs=1e-12)
    assert trail.lat_deg[0] == pytest.approx([10.0] * 5, abs=1e-12)


def test_a_passage_is_the_path_in_the_frame():
    """The crust over the hotspot today was t degrees east of it, t Ma ago."""
    trail = maker().make(still(10.0, 5.0), "0:40:10", "passage")
    assert trail.lon_deg[0] == pytest.approx([5.0, 15.0, 25.0, 35.0, 45.0], abs=1e-12)


def test_a_moving_hotspot():
    """It moves along great circles between the places of its path: along the equator here."""
    path = {"h": (np.array([0.0, 20.0]), np.array([0.0, 0.0]), np.array([0.0, -10.0]))}
    trail = maker().make(still(paths=path), [0.0, 10.0, 20.0, 30.0])
    assert trail.lon_deg[0, :3] == pytest.approx([0.0, -15.0, -30.0], abs=1e-12)
    assert STATUSES[trail.status[0, 3]] == "outside the hotspot's path"
    assert np.isnan(trail.lat_deg[0, 3])


def test_great_circles_and_not_parallels():
    """Half-way from 60N 0E to 60N 90E lies at atan(tan 60 / cos 45) north."""
    path = {"h": (np.array([0.0, 20.0]), np.array([60.0, 60.0]), np.array([0.0, 90.0]))}
    trail = maker(rate=0.0).make(still(paths=path), [10.0])
    north = math.degrees(math.atan(math.tan(math.radians(60.0)) / math.cos(math.radians(45.0))))
    assert (trail.lat_deg[0, 0], trail.lon_deg[0, 0]) == pytest.approx((north, 45.0), abs=1e-12)


def test_ages_outside_the_history():
    trail = maker().make(still(), [30.0, 50.0])
    assert [STATUSES[code] for code in trail.status[0]] == ["restored", "outside the history"]


def test_samples(tmp_path):
    """Two degrees off the trail, on crust of 10 Ma, dated 12 Ma: where, and how much too old."""
    path = tmp_path / "samples.csv"
    path.write_text(
        "sample,lat_deg,lon_deg,age_ma,age_sigma_myr,rock\ns,2,-10,12,0.5,basalt\n,0,-20,,,\n",
        encoding="utf-8",
    )
    hotspots = still()
    columns = compare_samples(maker(), hotspots, read_samples(path, hotspots), 40.0)
    assert columns["sample"] == ["s", "2"]
    assert columns["predicted_age_ma"] == pytest.approx([10.0, 20.0], abs=1e-6)
    assert columns["along_km"] == pytest.approx(KM_PER_DEGREE * np.array([10.0, 20.0]), rel=1e-9)
    # looking west, to older crust, north is to the right
    assert columns["across_km"] == pytest.approx(KM_PER_DEGREE * np.array([2.0, 0.0]), abs=1e-4)
    assert columns["age_difference_myr"][0] == pytest.approx(2.0, abs=1e-6)
    assert columns["along_difference_km"][0] == pytest.approx(-2.0 * KM_PER_DEGREE, abs=1e-4)
    assert columns["age_difference_sigmas"][0] == pytest.approx(4.0, abs=1e-5)
    assert np.isnan(columns["age_difference_myr"][1])
    assert columns["rock"] == ["basalt", ""]


def test_the_nearest_trail_is_taken(tmp_path):
    """Of two hotspots the nearer one, unless the table names the other."""
    hotspots = Hotspots(["near", "far"], np.array([0.0, 30.0]), np.array([0.0, 0.0]))
    path = tmp_path / "samples.csv"
    path.write_text("lat_deg,lon_deg,hotspot\n1,-10,\n1,-10,far\n", encoding="utf-8")
    columns = compare_samples(maker(), hotspots, read_samples(path, hotspots), 40.0)
    assert columns["hotspot"] == ["near", "far"]
    path.write_text("lat_deg,lon_deg,hotspot\n1,-10,fat\n", encoding="utf-8")
    with pytest.raises(TableError, match=r"samples.csv:2: no hotspot 'fat'; did you mean 'far'"):
        read_samples(path, hotspots)


def test_a_plate_that_stands_still(tmp_path):
    """The trail is a point: the distance is that to it, and there is no side."""
    path = tmp_path / "samples.csv"
    path.write_text("lat_deg,lon_deg\n3,0\n", encoding="utf-8")
    hotspots = still()
    columns = compare_samples(maker(rate=0.0), hotspots, read_samples(path, hotspots), 40.0)
    assert columns["across_km"] == pytest.approx([3.0 * KM_PER_DEGREE], abs=1e-6)


def test_tables_of_hotspots(tmp_path):
    table, paths = tmp_path / "h.csv", tmp_path / "p.csv"
    table.write_text("hotspot,lat_deg,lon_deg,note\nh,1,2,x\n", encoding="utf-8")
    paths.write_text("hotspot,age_ma,lat_deg,lon_deg\nh,20,3,4\nh,0,1,2\n", encoding="utf-8")
    hotspots = Hotspots.read(table, paths)
    assert hotspots.own == {"note": ["x"]}
    assert [values.tolist() for values in hotspots.paths["h"]] == [[0.0, 20.0], [1.0, 3.0], [2.0, 4.0]]
    for text, message in (("k,0,1,2\n", "no hotspot 'k'"), ("h,0,1,2\nh,0,1,2\n", "two places at 0 Ma")):
        paths.write_text("hotspot,age_ma,lat_deg,lon_deg\n" + text, encoding="utf-8")
        with pytest.raises(TableError, match=message):
            Hotspots.read(table, paths)
    table.write_text("hotspot,lat_deg,lon_deg\nh,1,2\nh,1,2\n", encoding="utf-8")
    with pytest.raises(TableError, match=r"h.csv:3: hotspot 'h' stands twice"):
        Hotspots.read(table)


def test_questions_at_fault():
    with pytest.raises(InputError, match="shown = 'both'"):
        maker().make(still(), "0:10:5", "both")
    with pytest.raises(InputError, match="own"):
        maker().make(still(), "own")
    with pytest.raises(UnknownPlateError):
        TrailMaker(History.from_rows([Row("P", "F", 0.0, *NONE)]), "Q", "F")


def test_restored_crust_was_over_the_hotspot():
    """x(t) turned back by R(t) is s(t): a micrometre, for a moving hotspot about a tilted pole."""
    rows = [
        Row("P", "F", 0.0, *NONE),
        Row("P", "F", 15.0, 50.0, 20.0, 9.0),
        Row("P", "F", 40.0, 60.0, 90.0, 31.0),
    ]
    history = History.from_rows(rows)
    path = {"h": (np.array([0.0, 40.0]), np.array([5.0, 9.0]), np.array([1.0, 3.0]))}
    make = TrailMaker(history, "P", "F")
    trail = make.make(still(paths=path), "0:40:5")
    turn = make.circuit.rotations("P", trail.age_ma).rotations
    back = turn.apply(unit_vectors(trail.lat_deg[0], trail.lon_deg[0]))
    where = still(paths=path).places(0, trail.age_ma, make.latitudes)
    assert np.max(angular_distance(back, where)) * R_M < 1e-6


def test_the_public_face(tmp_path):
    """`trails` from a file and from memory: the same."""
    path = tmp_path / "h.csv"
    path.write_text("hotspot,lat_deg,lon_deg\nh,10,5\n", encoding="utf-8")
    history = maker().history
    found = [trails(given, history, "P", "F", "0:40:20") for given in (path, still(10.0, 5.0))]
    assert found[0].lon_deg.tolist() == found[1].lon_deg.tolist()


def test_a_path_that_ends_ends_the_trail(tmp_path):
    """A sample nearest to where the trail ends has no predicted age: it may lie on crust of any older age;
    beyond the history no trail can be asked."""
    path = tmp_path / "samples.csv"
    path.write_text("lat_deg,lon_deg\n0,-29\n0,-60\n", encoding="utf-8")
    moving = still(paths={"h": (np.array([0.0, 20.0]), np.array([0.0, 0.0]), np.array([0.0, -10.0]))})
    columns = compare_samples(maker(), moving, read_samples(path, moving), 40.0)
    assert columns["predicted_age_ma"][0] == pytest.approx(29.0 / 1.5, abs=2e-3)
    assert np.isnan(columns["predicted_age_ma"][1])
    assert columns["sample_note"] == ["", "nearest to the old end of the trail"]
    with pytest.raises(OutsideHistoryError):
        compare_samples(maker(), moving, read_samples(path, moving), 50.0)
