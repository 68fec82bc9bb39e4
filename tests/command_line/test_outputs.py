"""`--out`: every kind of file is whole, readable by others, and says where its numbers come from."""

import hashlib
import json
import math
import sys

import pytest
import xarray as xr
from command_line.world import SITES, header_of, leftovers, rows_of

TABLE = SITES + "a,0,0,5,alba\nb,0,0,50,alba\nc,0,178,5,alba\n"
KINDS = ["csv", "json", "geojson", "nc", "parquet"]
BESIDE = {"csv", "parquet"}


def provenance_of(here, kind):
    """The provenance that an output carries inside or beside it."""
    path = here / f"out.{kind}"
    if kind in BESIDE:
        return json.loads((here / f"out.{kind}.provenance.json").read_text(encoding="utf-8"))
    if kind == "nc":
        with xr.open_dataset(path) as dataset:
            return json.loads(dataset.attrs["provenance"])
    return json.loads(path.read_text(encoding="utf-8"))["provenance"]


@pytest.mark.parametrize("kind", KINDS)
def test_provenance(here, restore, kind):
    """Versions, inputs with their SHA-256 and settings go with every kind of file; nothing else stays."""
    answer = restore(TABLE, "--out", f"out.{kind}", history="known.csv")
    assert (answer.code, answer.out) == (0, "")
    assert answer.said == ["3 rows: 1 outside the history, 2 restored"]
    found = provenance_of(here, kind)
    assert [record["file"] for record in found["inputs"]] == ["sites.csv", "known.csv"]
    for record in found["inputs"]:
        assert record["sha256"] == hashlib.sha256((here / record["file"]).read_bytes()).hexdigest()
    assert {"oncewhere", "python", "numpy"} <= set(found["made_by"])
    assert found["command"].startswith("oncewhere")
    assert found["settings"] == {
        "frame": "deep", "frame_kind": "plate", "ages": "own", "latitudes": "as-given",
        "radius_km": 6371.0088, "beyond": "refuse",
    }  # fmt: skip
    assert "model's own error" in found["caution"]
    names = {"history.csv", "known.csv", "sites.csv", f"out.{kind}"}
    names |= {f"out.{kind}.provenance.json"} if kind in BESIDE else set()
    assert {path.name for path in here.iterdir()} == names


def test_csv_is_what_standard_output_gets(here, restore):
    """The file and the stream are the same bytes, with plain line ends and no comment lines."""
    printed = restore(TABLE, history="known.csv").out
    restore(TABLE, "--out", "out.csv", history="known.csv")
    assert (here / "out.csv").read_bytes() == printed.encode()
    assert "\r" not in printed
    assert "#" not in printed


def test_json(here, restore):
    """One record per row, numbers as numbers, null where there is none."""
    restore(TABLE, "--out", "out.json", history="known.csv")
    rows = json.loads((here / "out.json").read_text(encoding="utf-8"))["rows"]
    printed = restore(TABLE, history="known.csv")
    assert [list(row) for row in rows] == [header_of(printed.out)] * 3
    assert (rows[0]["restored_age_ma"], rows[0]["status"]) == (5.0, "restored")
    assert [rows[1][name] for name in ("restored_lat_deg", "ellipse_major_km")] == [None, None]
    for row, text in zip(rows, printed.rows, strict=True):
        for name in ("restored_lon_deg", "ellipse_major_km"):
            assert row[name] == (float(text[name]) if text[name] else None)


def test_geojson(here, restore):
    """RFC 7946: a collection of points as [longitude, latitude], geometry null where there is none."""
    restore(TABLE, "--out", "out.geojson")
    found = json.loads((here / "out.geojson").read_text(encoding="utf-8"))
    assert found["type"] == "FeatureCollection"
    assert "crs" not in found
    assert {feature["type"] for feature in found["features"]} == {"Feature"}
    assert all({"geometry", "properties"} <= set(feature) for feature in found["features"])
    first, outside, over = (feature["geometry"] for feature in found["features"])
    assert first == {"type": "Point", "coordinates": [5.0, 0.0]}
    assert outside is None
    assert over["coordinates"] == [-177.0, 0.0]
    assert found["features"][1]["properties"]["status"] == "outside the history"


def test_geojson_of_rates(here, ask):
    """Rates are points where the plate stood then."""
    at = ("--plate", "alba", "--relative-to", "deep", "--at", "0,10", "--age", "20")
    assert ask("rates", *at, "--history", "history.csv", "--out", "r.geojson").code == 0
    found = json.loads((here / "r.geojson").read_text(encoding="utf-8"))
    lon, lat = found["features"][0]["geometry"]["coordinates"]
    assert (lat, lon) == pytest.approx((0.0, 30.0), abs=1e-9)


def test_netcdf(here, restore):
    """xarray opens it: a dimension `row`, units on numbers, texts as texts, NaN where there is none."""
    restore(TABLE, "--out", "out.nc")
    with xr.open_dataset(here / "out.nc", decode_timedelta=False) as dataset:
        assert dict(dataset.sizes) == {"row": 3}
        assert dataset.attrs["Conventions"].startswith("CF-")
        assert dataset["restored_lat_deg"].attrs["units"] == "degree"
        assert dataset["restored_age_ma"].attrs["units"] == "Myr"
        assert list(dataset["status"].values) == ["restored", "outside the history", "restored"]
        lon = dataset["restored_lon_deg"].values
    assert lon[0] == pytest.approx(5.0, abs=1e-9)
    assert math.isnan(lon[1])


@pytest.mark.parametrize("name", ["depth/m", "#3", ""])
def test_names_that_netcdf_does_not_allow(here, restore, name):
    """A column whose name netCDF cannot take is refused in one line; CSV takes it."""
    table = f"site,lat_deg,lon_deg,age_ma,plate,{name}\na,0,0,5,alba,x\n"
    answer = restore(table, "--out", "out.nc")
    assert (answer.code, answer.out, len(answer.said)) == (1, "", 1)
    assert answer.said[0].startswith("error: out.nc: cannot be written as netCDF: ")
    assert answer.said[0].endswith("; rename the column, or write another kind")
    assert not (here / "out.nc").exists()
    assert leftovers(here) == []
    assert restore(table, "--out", "out.csv").code == 0


def test_parquet(here, restore):
    """pandas reads it: the same columns and values, missing ones missing."""
    import pandas as pd

    printed = restore(TABLE, "--out", "out.csv")
    restore(TABLE, "--out", "out.parquet")
    table = pd.read_parquet(here / "out.parquet")
    text = (here / "out.csv").read_text(encoding="utf-8")
    assert list(table.columns) == header_of(text)
    assert list(table["site"]) == ["a", "b", "c"]
    assert table["restored_lon_deg"].isna().tolist() == [False, True, False]
    assert float(rows_of(text)[2]["restored_lon_deg"]) == pytest.approx(
        table["restored_lon_deg"][2], abs=1e-9
    )
    assert printed.code == 0


@pytest.mark.parametrize("kind", KINDS)
@pytest.mark.parametrize("rows", [0, 1])
def test_no_row_and_one_row(here, restore, kind, rows):
    """Tables of 0 and 1 rows are written in every form, with all their columns."""
    table = SITES + "a,0,0,5,alba\n" * rows
    answer = restore(table, "--out", f"out.{kind}")
    assert (answer.code, leftovers(here)) == (0, [])
    path = here / f"out.{kind}"
    if kind == "csv":
        text = path.read_text(encoding="utf-8")
        assert header_of(text) == header_of(restore(table).out)
        assert len(rows_of(text)) == rows
    elif kind in {"json", "geojson"}:
        found = json.loads(path.read_text(encoding="utf-8"))
        assert len(found["rows" if kind == "json" else "features"]) == rows
    elif kind == "nc":
        with xr.open_dataset(path, decode_timedelta=False) as dataset:
            assert dataset.sizes["row"] == rows
            assert "restored_lat_deg" in dataset
    else:
        import pyarrow.parquet

        found = pyarrow.parquet.read_table(path)
        assert found.num_rows == rows
        assert "restored_lat_deg" in found.column_names


def test_an_older_file_is_replaced_only_by_a_whole_one(here, restore):
    """A run that fails leaves the file of an earlier run as it was, and nothing half-written."""
    restore(TABLE, "--out", "out.csv")
    before = (here / "out.csv").read_bytes()
    answer = restore(TABLE + '"open,0,0,5,alba\n', "--out", "out.csv")
    assert (answer.code, answer.out) == (1, "")
    assert (here / "out.csv").read_bytes() == before
    assert leftovers(here) == []


def test_a_package_that_is_missing(here, restore, monkeypatch):
    """Where an optional package is not installed, the message names it and the extra that brings it."""
    monkeypatch.setitem(sys.modules, "geopandas", None)
    answer = restore(TABLE, "--out", "out.gpkg")
    assert (answer.code, answer.out) == (1, "")
    assert answer.said == ["error: out.gpkg: GeoPackage needs geopandas; install oncewhere[gis]"]
    monkeypatch.setitem(sys.modules, "pyarrow", None)
    answer = restore(TABLE, "--out", "out.parquet")
    assert answer.said == ["error: out.parquet: Parquet needs pyarrow; install oncewhere[parquet]"]
    assert sorted(path.name for path in here.iterdir()) == ["history.csv", "known.csv", "sites.csv"]
