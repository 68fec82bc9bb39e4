"""Geodetic and geocentric latitudes against a table computed elsewhere."""

import csv
from pathlib import Path

import pytest
from strategies import assert_within

from restore.geometry.latitudes import (
    GRS80_E2,
    Latitudes,
    geocentric_from_geodetic,
    geodetic_from_geocentric,
)

TABLE = Path(__file__).parents[1] / "published" / "data" / "latitudes_grs80.csv"


def rows() -> list[dict[str, str]]:
    with TABLE.open(encoding="utf-8", newline="") as stream:
        return list(csv.DictReader(stream))


@pytest.mark.parametrize("row", rows(), ids=lambda row: row["geodetic_lat_deg"])
def test_the_table_of_grs80_latitudes(row):
    """Latitudes agree to the ten digits printed (5e-11 deg, 6e-6 m), both sides, both ways.

    Table: GRS80 of Moritz (2000, J. Geodesy 74, 128-133), checked there against PROJ to 4e-15 deg.
    """
    geodetic, geocentric = float(row["geodetic_lat_deg"]), float(row["geocentric_lat_deg"])
    for sign in (1.0, -1.0):
        assert_within(geocentric_from_geodetic(sign * geodetic) - sign * geocentric, 5.1e-11)
        # the inverse stretches the printed rounding by at most 1 / (1 - e2)
        assert_within(geodetic_from_geocentric(sign * geocentric) - sign * geodetic, 5.1e-11)


def test_the_table_is_all_there():
    """Sixteen latitudes from the equator to the pole."""
    assert [float(r["geodetic_lat_deg"]) for r in rows()][:: len(rows()) - 1] == [0.0, 90.0]
    assert len(rows()) == 16


def test_the_ellipsoid_is_grs80():
    """e2 = f (2 - f) with the flattening 1 / 298.257222101 (Moritz 2000), to the digits printed."""
    flattening = 1.0 / 298.257222101
    assert_within(GRS80_E2 - flattening * (2.0 - flattening), 5e-14)


def test_geodetic_latitudes_are_turned_on_the_way_in_and_back_on_the_way_out():
    """`geodetic` turns 45 to 44.8075767831 (table) and back; `as-given` leaves it."""
    assert_within(Latitudes("geodetic").inward(45.0) - 44.8075767831, 5.1e-11)
    assert_within(Latitudes("geodetic").outward(44.8075767831) - 45.0, 5.1e-11)
    assert Latitudes("as-given").inward(45.0) == Latitudes().outward(45.0) == 45.0


def test_nan_and_shapes_are_carried_through():
    """NaN stays NaN, and arrays keep their shape, for both kinds."""
    for kind in ("as-given", "geodetic"):
        out = Latitudes(kind).inward([[float("nan"), 10.0]])
        assert out.shape == (1, 2)
        assert str(out[0, 0]) == "nan"
        assert out[0, 1] > 9.9


@pytest.mark.parametrize("kind", ["geocentric", "", "Geodetic", "as given"])
def test_another_kind_is_refused(kind):
    """A kind that is none of the two is refused, naming what it is and what there is."""
    with pytest.raises(ValueError, match=rf"latitudes = '{kind}': .*as-given, geodetic"):
        Latitudes(kind)
