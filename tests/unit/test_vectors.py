"""Outlines read from GeoJSON and, with geopandas, from other vector files: the same plates from each."""

import builtins
import json
import math

import numpy as np
import pytest
from benchmarks.outlines import scattered

from restore.errors import InputError, MissingPackageError
from restore.files.vectors import read_features
from restore.outlines import Outlines


def write(path, *features):
    path.write_text(json.dumps({"type": "FeatureCollection", "features": features}), encoding="utf-8")
    return path


def feature(geometry, **properties):
    return {"type": "Feature", "properties": properties, "geometry": geometry}


def polygon(*rings):
    return {"type": "Polygon", "coordinates": [[list(p) for p in (*ring, ring[0])] for ring in rings]}


def multi(*parts):
    return {"type": "MultiPolygon", "coordinates": [polygon(*rings)["coordinates"] for rings in parts]}


def on(outlines, *places):
    """The plates of places (longitude, latitude), None for none."""
    lon, lat = np.array(places, dtype=float).T
    names = [*(outline.plate for outline in outlines.outlines), None]
    return [names[number] for number in outlines.plate_at(lat, lon).outline]


def parallel(lat, start=-180, step=10):
    return [(lon, lat) for lon in range(start, start + 360, step)]


def cut_cap(lat):
    """A cap about the north pole as the map shows it: along a parallel, up the side, along the top."""
    return [*((lon, lat) for lon in range(-180, 181, 10)), (180, 90), (-180, 90)]


# the same plate in several writings: (geometries, places on it, places off it)
STYLES = {
    "across 180, cut": (
        [multi([[(170, -10), (180, -10), (180, 10), (170, 10)]], [[(-180, -10), (-170, -10), (-170, 10), (-180, 10)]])],
        [(175, 0), (180, 0), (-180, 0), (-175, 0)],
        [(165, 0), (-165, 0), (0, 0), (175, 20)],
    ),
    "across 180, uncut by sign": (
        [polygon([(170, -10), (-170, -10), (-170, 10), (170, 10)])],
        [(175, 0), (180, 0), (-180, 0), (-175, 0)],
        [(165, 0), (-165, 0), (0, 0), (175, 20)],
    ),
    "across 180, uncut beyond it": (
        [polygon([(170, -10), (190, -10), (190, 10), (170, 10)]), polygon([(-190, -10), (-170, -10), (-170, 10), (-190, 10)])],
        [(175, 0), (180, 0), (-180, 0), (-175, 0)],
        [(165, 0), (-165, 0), (0, 0), (175, 20)],
    ),
    "round the north pole": (
        [polygon(parallel(60)), polygon(parallel(60, 0)), polygon(cut_cap(60))],
        [(0, 61), (180, 61), (-180, 75), (33, 90), (0, 90)],
        [(0, 59), (180, 59), (0, -90)],
    ),
    "round the south pole": (
        [
            polygon(parallel(-60)[::-1]),
            polygon([(-180, -90), (180, -90), *((lon, -60) for lon in range(180, -181, -10))]),
        ],
        [(0, -61), (180, -61), (-180, -75), (33, -90), (0, -90)],
        [(0, -59), (180, -59), (0, 90)],
    ),
    "larger than a hemisphere": (
        [polygon(parallel(-10)), polygon(cut_cap(-10))],
        [(0, -5), (180, -5), (77, 40), (0, 90)],
        [(0, -15), (0, -90), (180, -40)],
    ),
    "the world with a hole": (
        [polygon(parallel(-60), [(-30, -30), (-30, 30), (30, 30), (30, -30)])],
        [(0, 40), (180, 0), (0, 90), (0, -50)],
        [(0, 0), (29, 29), (0, -90)],
    ),
    "two parts and a hole": (
        [multi([[(0, 0), (20, 0), (20, 20), (0, 20)], [(5, 5), (5, 15), (15, 15), (15, 5)]], [[(50, 0), (60, 0), (60, 10)]])],
        [(2, 10), (17, 10), (58, 2)],
        [(10, 10), (40, 5), (51, 9)],
    ),
}  # fmt: skip


@pytest.mark.parametrize(("geometries", "inside", "outside"), STYLES.values(), ids=STYLES)
def test_writings_of_one_plate(tmp_path, geometries, inside, outside):
    """Cut or uncut at 180, round a pole in either style, with holes and parts."""
    for geometry in geometries:
        outlines = Outlines.read(write(tmp_path / "o.geojson", feature(geometry, plate="a")))
        assert on(outlines, *inside) == ["a"] * len(inside)
        assert on(outlines, *outside) == [None] * len(outside)


def test_areas_do_not_depend_on_the_writing(tmp_path):
    """Cut and uncut give one area; a cap's and its complement's make the sphere."""
    for geometries, _, _ in STYLES.values():
        areas = []
        for geometry in geometries:
            (outline,) = Outlines.read(write(tmp_path / "o.geojson", feature(geometry, plate="a"))).outlines
            areas.append(outline.area_sr())
        assert areas == pytest.approx([areas[0]] * len(areas), rel=1e-13)
        assert 0.0 < areas[0] < 4 * math.pi


def test_straight_edges_across_180_take_the_short_way(tmp_path):
    """An uncut ring with straight edges is the same plate as the cut one."""
    for geometry in [*STYLES["across 180, cut"][0], *STYLES["across 180, uncut by sign"][0]]:
        path = write(tmp_path / "o.geojson", feature(geometry, plate="a"))
        outlines = Outlines.read(path, edges="straight")
        assert on(outlines, (175, 9.9999), (180, 9.9999), (-175, -9.9999)) == ["a"] * 3
        assert on(outlines, (175, 10.0002), (0, 0), (-180, -10.0002)) == [None] * 3


def test_properties(tmp_path):
    """The label's property is chosen; ages and rank are read where they are; labels are texts."""
    ring = [(0, 0), (10, 0), (10, 10)]
    path = write(
        tmp_path / "o.geojson",
        feature(polygon(ring), code="NA", oldest_ma=30, youngest_ma="2.5", rank=2),
        feature(polygon(ring), code=101, oldest_ma=None),
        feature(polygon(ring), code="b", rank=-1.0),
    )
    one, two, three = Outlines.read(path, plate_property="code").outlines
    assert (one.plate, one.oldest_ma, one.youngest_ma, one.rank, one.number) == ("NA", 30.0, 2.5, 2, 1)
    assert (two.plate, two.oldest_ma, two.youngest_ma, two.rank, two.number) == ("101", math.inf, 0.0, 0, 2)
    assert (three.plate, three.rank) == ("b", -1)
    with pytest.raises(
        InputError, match=r"o\.geojson: feature 1: has no property 'plate'; known: code, oldest_ma"
    ):
        Outlines.read(path)


@pytest.mark.parametrize("wrap", ["collection", "feature", "geometry"])
def test_geojson_may_be_a_collection_a_feature_or_a_geometry(tmp_path, wrap):
    """RFC 7946, section 3; a bare geometry has no properties."""
    member = feature(polygon([(0, 0), (10, 0), (10, 10)]), plate="a")
    content = {"collection": {"type": "FeatureCollection", "features": [member]}, "feature": member,
               "geometry": member["geometry"]}[wrap]  # fmt: skip
    path = tmp_path / "o.json"
    path.write_text(json.dumps(content), encoding="utf-8-sig")
    (found,) = read_features(path)
    assert found.geometry == member["geometry"]
    assert found.properties == ({} if wrap == "geometry" else {"plate": "a"})
    assert str(found) == f"{path}: feature 1"


def test_heights_and_foreign_members_are_passed_over(tmp_path):
    """A third number in a position and members that RFC 7946 does not know."""
    made = feature(
        {"type": "Polygon", "coordinates": [[[0, 0, 5], [10, 0, 5], [10, 10, 7], [0, 0, 5]]]}, plate="a"
    )
    made |= {"id": 7, "bbox": [0, 0, 10, 10], "note": "x"}
    assert on(Outlines.read(write(tmp_path / "o.geojson", made)), (8, 2), (2, 8)) == ["a", None]


# --- other files -------------------------------------------------------------------------------------

ENDINGS = [".gpkg", ".shp", ".parquet", ".geoparquet", ".fgb"]


def small_world():
    """Plates that any vector file can carry: cut at 180 and at the poles, with holes and parts."""
    return [
        feature(multi([[(10, 0), (60, 0), (60, 40), (10, 40)], [(20, 10), (20, 20), (30, 20), (30, 10)]],
                      [[(80, 0), (90, 0), (90, 10)]]), plate="a", oldest_ma=30.0, youngest_m=2.5, rank=3),
        feature(STYLES["across 180, cut"][0][0], plate="b", oldest_ma=None, youngest_m=None, rank=None),
        feature(polygon(cut_cap(65)), plate="101", oldest_ma=120.0, youngest_m=0.0, rank=0),
        feature(polygon([*((lon, -30) for lon in range(180, -181, -10)), (-180, -90), (180, -90)]), plate="ö",
                oldest_ma=1.0, youngest_m=0.5, rank=1),
    ]  # fmt: skip


def frame_of(features):
    geopandas = pytest.importorskip("geopandas", reason="the extra gis is not installed")
    shapely = pytest.importorskip("shapely", reason="the extra gis is not installed")
    names = list(features[0]["properties"])
    columns = {name: [f["properties"][name] for f in features] for name in names}
    shapes = [shapely.geometry.shape(f["geometry"]) for f in features]
    return geopandas.GeoDataFrame(columns, geometry=shapes, crs="EPSG:4326")


def save(frame, path):
    pytest.importorskip("pyogrio", reason="the extra gis is not installed")
    if "parquet" in path.suffix:
        pytest.importorskip("pyarrow", reason="the extra parquet is not installed")
        frame.to_parquet(path)
    else:
        frame.to_file(path)
    return path


@pytest.mark.parametrize("ending", ENDINGS)
@pytest.mark.parametrize("south_first", [False, True])
def test_other_files_give_the_same_outlines(tmp_path, ending, south_first):
    """GeoPackage, Shapefile, GeoParquet and FlatGeobuf against GeoJSON: labels, ages, ranks, places."""
    features = small_world()
    if south_first:
        features = features[::-1]
    renamed = [json.loads(json.dumps(f).replace("youngest_m", "youngest_ma")) for f in features]
    expected = Outlines.read(write(tmp_path / "o.geojson", *renamed))
    frame = frame_of(features if ending == ".shp" else renamed)
    found = Outlines.read(save(frame, tmp_path / f"o{ending}"))
    by_plate = {o.plate: o for o in found.outlines}
    # a FlatGeobuf is sorted by place
    assert sorted(by_plate) == sorted(o.plate for o in expected.outlines)
    if ending != ".fgb":
        assert found.plates() == expected.plates()
    for one in expected.outlines:
        other = by_plate[one.plate]
        assert (other.oldest_ma, other.youngest_ma, other.rank) == (
            one.oldest_ma,
            one.youngest_ma,
            one.rank,
        )
        assert other.area_sr() == pytest.approx(one.area_sr(), rel=1e-12)
    lat, lon = scattered(3000, 1)
    assert on(found, *zip(lon, lat, strict=True)) == on(expected, *zip(lon, lat, strict=True))


def test_a_shapefile_turns_rings_and_is_read_all_the_same(tmp_path):
    """Its outer rings are clockwise on the map; uncut rings across 180 and round a pole come back too."""
    pytest.importorskip("pyogrio", reason="the extra gis is not installed")
    features = [
        feature(polygon([(170, -10), (190, -10), (190, 10), (170, 10)]), plate="a"),
        feature(polygon([(170, 20), (-170, 20), (-170, 40), (170, 40)]), plate="b"),
        feature(polygon(parallel(70)), plate="c"),
        feature(polygon(parallel(-70)[::-1]), plate="d"),
        feature(
            polygon([(0, 0), (20, 0), (20, 20), (0, 20)][::-1], [(5, 5), (15, 5), (15, 15), (5, 15)]),
            plate="e",
        ),
    ]
    outlines = Outlines.read(save(frame_of(features), tmp_path / "o.shp"))
    assert on(outlines, (180, 0), (180, 30), (0, 80), (0, -80), (2, 2)) == ["a", "b", "c", "d", "e"]
    assert on(outlines, (0, -5), (10, 10), (100, 30), (0, 60), (0, -60)) == [None] * 5
    for outline in outlines.outlines:
        assert all(ring.reversed().area_sr() < 0.5 for p in outline.polygons for ring in p.rings[1:])
        assert outline.polygons[0].rings[0].area_sr() < 0.5


def test_another_reference_system_is_turned_to_degrees(tmp_path):
    """A GeoPackage in metres on a polar map: a square of 1000 km about the pole."""
    pytest.importorskip("pyogrio", reason="the extra gis is not installed")
    frame = frame_of([feature(polygon([(-1e6, -1e6), (1e6, -1e6), (1e6, 1e6), (-1e6, 1e6)]), plate="a")])
    frame = frame.set_crs("EPSG:3995", allow_override=True)
    outlines = Outlines.read(save(frame, tmp_path / "o.gpkg"))
    assert on(outlines, (0, 90), (12, 85), (12, 75)) == ["a", "a", None]


def test_a_table_without_geometries(tmp_path):
    """A file of the right ending that holds no shapes."""
    pandas = pytest.importorskip("pandas", reason="comes with xarray")
    pytest.importorskip("pyarrow", reason="the extra parquet is not installed")
    pytest.importorskip("geopandas", reason="the extra gis is not installed")
    path = tmp_path / "o.parquet"
    pandas.DataFrame({"plate": ["a"]}).to_parquet(path)
    with pytest.raises(InputError, match=r"o\.parquet: cannot be read: Missing geo metadata"):
        read_features(path)


@pytest.mark.parametrize("ending", ENDINGS)
def test_without_the_extra(tmp_path, ending, monkeypatch):
    """What to install is said; nothing else is asked of the file."""
    imported = builtins.__import__

    def refusing(name, *args, **kwargs):
        if name.partition(".")[0] == "geopandas":
            raise ImportError(name)
        return imported(name, *args, **kwargs)

    monkeypatch.setattr(builtins, "__import__", refusing)
    with pytest.raises(
        MissingPackageError, match=rf"o\{ending}: needs geopandas; install oncewhere\[gis\]"
    ):
        read_features(tmp_path / f"o{ending}")


@pytest.mark.parametrize("ending", ENDINGS)
def test_missing_and_broken_files(tmp_path, ending):
    """No such file, and a file that is something else: one line each."""
    pytest.importorskip("geopandas", reason="the extra gis is not installed")
    path = tmp_path / f"o{ending}"
    with pytest.raises(InputError, match=rf"o\{ending}: no such file"):
        read_features(path)
    path.write_text("plainly no such thing", encoding="utf-8")
    with pytest.raises(InputError, match=rf"o\{ending}: cannot be read: [^\n]+$"):
        read_features(path)
