"""What sites stand on: labels given or found, and the age of the crust from column, grid or outline."""

import json
import math

import numpy as np
import pytest

from restore.errors import InputError
from restore.files.rasters import Field
from restore.motion.ground import Ground, Placing
from restore.motion.site_table import table_from_columns
from restore.outlines import Outlines


def box(west, south, east, north):
    return [[[west, south], [east, south], [east, north], [west, north], [west, south]]]


@pytest.fixture
def outlines(tmp_path):
    """`a` (30-2 Ma), `b` with an `island` of its own rank on it, and `c` over `b` by rank."""
    plates = [
        ("a", box(0, 0, 20, 20), {"oldest_ma": 30, "youngest_ma": 2}),
        ("b", box(40, 0, 60, 20), {"rank": 1}),
        ("island", box(45, 5, 50, 10), {"rank": 1, "oldest_ma": 9}),
        ("c", box(55, 5, 58, 10), {"oldest_ma": 70}),
    ]
    features = [
        {
            "type": "Feature",
            "properties": {"plate": p, **more},
            "geometry": {"type": "Polygon", "coordinates": rings},
        }
        for p, rings, more in plates
    ]
    path = tmp_path / "o.geojson"
    path.write_text(json.dumps({"type": "FeatureCollection", "features": features}), encoding="utf-8")
    return Outlines.read(path)


def crust(**change):
    """A grid of 10 degree cells from 5S to 25N and 5W to 65E: 10 Ma plus the longitude, a gap at 60E."""
    lat, lon = np.arange(0.0, 21.0, 10.0), np.arange(0.0, 61.0, 10.0)
    values = np.broadcast_to(10.0 + lon, (3, 7)).copy()
    values[:, 6] = np.nan
    return Field(
        **{"name": "age", "lat_deg": lat, "lon_deg": lon, "values": values, "units": "Myr", **change}
    )


def table(**columns):
    count = len(columns["lat_deg"])
    return table_from_columns({"age_ma": [1.0] * count, **columns}, own_ages=True)


def test_as_given():
    """Labels and host ages by the columns alone; without a host age the crust is as old as you like."""
    placing = Placing.as_given(
        table(lat_deg=[0, 0], lon_deg=[0, 0], plate=["x", ""], host_age_ma=[5.0, None])
    )
    assert (placing.plate, placing.plate_from) == (["x", ""], ["given", ""])
    assert placing.host_ma.tolist() == [5.0, math.inf]
    assert placing.youngest_ma.tolist() == [0.0, 0.0]
    assert placing.distance_km is None


def test_labels_are_filled_kept_and_compared(outlines):
    """Given labels stay; where outlines say otherwise that is a warning and a remark on the row."""
    sites = table(lat_deg=[3, 3, 3, 3, 3], lon_deg=[3, 3, 3, 30, 30], plate=["", "a", "zz", "zz", ""])
    placing = Ground(outlines).place(sites)
    assert placing.plate == ["a", "a", "zz", "zz", ""]
    assert placing.plate_from == ["outlines", "given", "given", "given", ""]
    assert placing.remark == ["", "", "outlines say a", "", ""]
    (finding,) = placing.findings
    assert (finding.severity, finding.kind) == ("warning", "plate differs")
    assert (
        finding.line()
        == "sites:2: plate 'zz' is given where the outlines say 'a'; the label that was given is kept"
    )
    # the life of an outline that the label contradicts says nothing of the site
    assert placing.host_ma.tolist() == [30.0, 30.0, math.inf, math.inf, math.inf]
    assert placing.youngest_ma.tolist() == [2.0, 2.0, 0.0, 0.0, 0.0]


def test_overlaps(outlines):
    """Two of one rank: the first, and a warning; a lower rank decides silently."""
    placing = Ground(outlines).place(table(lat_deg=[7, 7], lon_deg=[47, 56]))
    assert placing.plate == ["b", "c"]
    assert [finding.line() for finding in placing.findings] == [
        "sites:0: 2 outlines of one rank hold the site; b is taken; rank the outlines"
    ]


def test_nearest_and_its_distance(outlines):
    """Within a distance the nearest outline is taken and how far it is is said; 0 inside."""
    placing = Ground(outlines, within_km=300.0).place(table(lat_deg=[3, 3, 3], lon_deg=[-2, 3, 30]))
    assert placing.plate == ["a", "a", ""]
    # two degrees off a meridian at 3N: asin(cos 3 sin 2)
    expected = math.asin(math.cos(math.radians(3)) * math.sin(math.radians(2))) * 6371.0088
    assert placing.distance_km[:2] == pytest.approx([expected, 0.0], rel=1e-12)
    assert np.isnan(placing.distance_km[2])


def test_the_crust_s_age_by_column_then_grid_then_outline(outlines):
    """In this order; where the grid has a gap or ends, the outline's life counts."""
    sites = table(
        lat_deg=[3, 3, 3, 3, 80],
        lon_deg=[3, 3, 56, 59, 3],
        plate=[""] * 5,
        host_age_ma=[4.0, None, None, None, None],
    )
    assert Ground(outlines, crust()).place(sites).host_ma.tolist() == [
        4.0,
        10.0,
        math.inf,
        math.inf,
        math.inf,
    ]
    assert Ground(None, crust()).place(sites).host_ma.tolist() == [4.0, 10.0, math.inf, math.inf, math.inf]
    assert Ground(outlines).place(sites).host_ma.tolist() == [4.0, 30.0, math.inf, math.inf, math.inf]
    inside = table(lat_deg=[7, 7], lon_deg=[57, 54.9])
    both = Ground(outlines, crust()).place(inside)
    assert both.plate == ["c", "b"]
    # at 57E the grid has a gap (60E), at 54.9E it says 60
    assert both.host_ma.tolist() == [70.0, 60.0]


def test_unusable_places_are_on_nothing(outlines):
    """Rows with a latitude of 95 or none get no plate, no age, no distance and no finding of ours."""
    sites = table(lat_deg=[95.0, math.nan, 3.0], lon_deg=[3.0, 3.0, 3.0])
    placing = Ground(outlines, crust(), within_km=1e5).place(sites)
    assert placing.plate == ["", "", "a"]
    assert placing.host_ma.tolist() == [math.inf, math.inf, 10.0]
    assert np.isnan(placing.distance_km).tolist() == [True, True, False]
    assert placing.findings == []


@pytest.mark.parametrize("units", ["", "Ma", "Myr", "million years", "1e6 year"])
def test_units_of_crustal_ages(units):
    """Million years by the names they go by, or no word of units."""
    assert Ground(None, crust(units=units)).crust.units == units


@pytest.mark.parametrize("units", ["years", "ka", "m", "1"])
def test_other_units_are_refused(units):
    """Ages in years would be a million times too old."""
    with pytest.raises(
        InputError, match=f"crustal ages 'age': units '{units}'; they are wanted in Ma or Myr"
    ):
        Ground(None, crust(units=units))


def test_negative_ages_are_refused():
    """A fill value that the file does not declare as one."""
    values = crust().values
    values[0, 0] = -9999.0
    with pytest.raises(InputError, match="crustal ages 'age': -9999 Ma; ages are positive, gaps are NaN"):
        Ground(None, crust(values=values))
