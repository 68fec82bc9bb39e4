"""Worked cases of chains, conventions, stages, rates, trails and latitudes.

Expected values were computed by a separate small program (numpy, scipy), not published, unless a
test names another source. Rows are those of Klitgord & Schouten 1986 (from memory) with a zero row,
Africa moving, North America still, radius 6371.0088 km, latitudes as given.
"""

from __future__ import annotations

from itertools import product
from pathlib import Path

import numpy as np
import pytest
from published.support import (
    DATA,
    RADIUS_KM,
    apart_km,
    arc_deg,
    east_north,
    lat_lon,
    records,
    unit,
    write_manifest,
)
from scipy.spatial.transform import Rotation, Slerp

from restore.errors import DomainError, InputError
from restore.geometry.latitudes import (
    Latitudes,
    geocentric_from_geodetic,
    geodetic_from_geocentric,
)
from restore.history.circuit import Circuit
from restore.history.poles import stage_pole
from restore.history.rows import Row
from restore.history.store import History
from restore.motion.points import Points, move_common, move_own
from restore.motion.rates import Rates, rates

AFRICA, AMERICA = "Africa", "North_America"
CAP_BLANC = (20.8, -17.0)
MICRODEGREE = 0.5001e-6
"""Half of the last digit of places given to 1e-6 deg: 5 cm on the ground."""


@pytest.fixture(scope="module")
def klitgord() -> History:
    """Klitgord & Schouten 1986 (from memory) through the manifest beside the table."""
    return History.read(DATA / "klitgord_schouten.toml")


def restored(
    history: History,
    plate: str,
    frame: str,
    age_ma: float,
    place: tuple[float, float],
    latitudes: str = "as-given",
) -> tuple[float, float]:
    """Latitude and longitude in degrees of a place of a plate at an age."""
    circuit = Circuit(history, frame)
    lat, lon = (np.array([value]) for value in place)
    points = Points(lat, lon, circuit.codes([plate]), Latitudes(latitudes))
    found = move_own(circuit, points, np.array([age_ma]))
    return float(found.lat_deg[0]), float(found.lon_deg[0])


def test_the_link_nearest_the_plate_acts_first() -> None:
    """P > A is 90 deg about x, A > F 90 deg about y: 0N 90E goes to 0N 0E, else to 90N."""
    rows = [Row("P", "A", 10.0, 0.0, 0.0, 90.0), Row("A", "F", 10.0, 0.0, 90.0, 90.0)]
    swapped = [Row("P", "A", 10.0, 0.0, 90.0, 90.0), Row("A", "F", 10.0, 0.0, 0.0, 90.0)]
    right = restored(History.from_rows(rows), "P", "F", 10.0, (0.0, 90.0))
    other = restored(History.from_rows(swapped), "P", "F", 10.0, (0.0, 90.0))

    # exact; rounding of 1e-12 deg is a tenth of a micrometre
    assert right == pytest.approx((0.0, 0.0), abs=1e-12)
    assert other[0] == pytest.approx(90.0, abs=1e-12)


def partner_change() -> list[Row]:
    """P leaves its partner A for B at 40 Ma; A is still and B turns about z by 1 deg/Myr."""
    none = (float("nan"), float("nan"), 0.0)
    return [
        Row("B", "A", 0.0, *none),
        Row("B", "A", 80.0, 90.0, 0.0, 80.0),
        Row("P", "A", 0.0, *none),
        Row("P", "A", 40.0, 90.0, 0.0, 40.0),
        Row("P", "B", 40.0, *none),
        Row("P", "B", 80.0, 0.0, 0.0, 40.0),
    ]


def test_a_partner_change_never_mixes_partners() -> None:
    """At 60 Ma the site 0N 90E is at 20N 150E; across partners it would be at 19.96N 111.30E."""
    history = History.from_rows(partner_change())

    # each case is exact; rounding of 1e-12 deg is a tenth of a micrometre
    assert restored(history, "P", "A", 60.0, (0.0, 90.0)) == pytest.approx((20.0, 150.0), abs=1e-12)
    assert apart_km(20.0, 150.0, 19.96, 111.30) == pytest.approx(4035.0, abs=1.0)


def test_at_a_partner_change_both_partners_agree() -> None:
    """At 40 Ma the site 0N 90E is at 0N 130E through A and through B alike."""
    rows = partner_change()
    places = [
        restored(History.from_rows(part), "P", "A", 40.0, (0.0, 90.0))
        for part in (rows, rows[:4], rows[:2] + rows[4:])
    ]

    for place in places:
        assert place == pytest.approx((0.0, 130.0), abs=1e-12)


def test_a_partner_change_is_reached_from_both_sides() -> None:
    """Just before and after 40 Ma the path is continuous, and the order of the rows has no say."""
    rows = partner_change()
    history, shuffled = History.from_rows(rows), History.from_rows(rows[::-1])
    for age in (39.999, 40.0, 40.001, 60.0):
        place = restored(history, "P", "A", age, (0.0, 90.0))

        # 0.001 Myr at 2 deg/Myr is 0.25 km
        assert apart_km(*place, 0.0, 130.0) < 0.25 or age == 60.0
        assert restored(shuffled, "P", "A", age, (0.0, 90.0)) == place


WAYS = list(product([False, True], ["no", "inverse", "holds", "mapped"], [False, True], [False, True]))


def typed(turned: bool, listed: str, sign: bool, antipode: bool) -> tuple[str, str]:
    """The row M0 as some table might print it, and the TOML lines that describe that truthfully.

    `listed` the other way round: `inverse`, North America moves; `holds`, the first named plate is
    the one held still; `mapped`, the columns stand crosswise.
    """
    lat, lon, angle = 66.3, -19.9, -54.25
    keys, first, second = [], AFRICA, AMERICA
    if turned:
        angle, keys = -angle, [*keys, 'turns = "to-present"']
    if listed != "no":
        first, second = AMERICA, AFRICA
    if listed == "inverse":
        angle = -angle
    elif listed == "holds":
        keys.append('holds = "plate"')
    if sign:
        angle, keys = -angle, [*keys, 'positive_angle = "clockwise"']
    if antipode:
        lat, lon, angle = -lat, lon + 180.0, -angle
    columns = ("second", "first") if listed == "mapped" else ("first", "second")
    keys.append(f"[table.columns]\nplate = '{columns[0]}'\nrelative_to = '{columns[1]}'")
    header = "first,second,age_ma,pole_lat_deg,pole_lon_deg,angle_deg"
    return f"{header}\n{first},{second},118,{lat},{lon},{angle}\n", "\n".join(keys)


@pytest.mark.parametrize(("turned", "listed", "sign", "antipode"), WAYS)
def test_m0_typed_in_every_way(
    tmp_path: Path, turned: bool, listed: str, sign: bool, antipode: bool
) -> None:
    """Turned, listed the other way round, sign, antipode: Cap Blanc goes to 27.302395 -58.167059.

    The four choices make 16 ways; a pair can be listed the other way round in three senses.
    """
    text, keys = typed(turned, listed, sign, antipode)
    (tmp_path / "m0.csv").write_text(text, encoding="utf-8")
    history = History.read(write_manifest(tmp_path, f'file = "m0.csv"\n{keys}'))

    place = restored(history, AFRICA, AMERICA, 118.0, CAP_BLANC)
    assert place == pytest.approx((27.302395, -58.167059), abs=MICRODEGREE)


def test_m0_described_wrongly_goes_elsewhere(tmp_path: Path) -> None:
    """A turned row that is not said to be turned lands far away: nothing is guessed."""
    text, keys = typed(True, "no", False, False)
    (tmp_path / "m0.csv").write_text(text, encoding="utf-8")
    keys = keys.replace('turns = "to-present"\n', "")
    history = History.read(write_manifest(tmp_path, f'file = "m0.csv"\n{keys}'))

    place = restored(history, AFRICA, AMERICA, 118.0, CAP_BLANC)
    assert apart_km(*place, 27.302395, -58.167059) > 5000.0


STAGES = [("relative-to", AMERICA, (55.30, -29.00)), ("plate", AFRICA, (55.45, -10.06))]


@pytest.mark.parametrize(("coordinates", "whose", "pole"), STAGES, ids=["relative-to", "plate"])
def test_stage_pole_in_both_coordinates(
    klitgord: History, coordinates: str, whose: str, pole: tuple[float, float]
) -> None:
    """M0 (118 Ma) to An34 (84 Ma): 55.30 -29.00 in North American, 55.45 -10.06 in African terms.

    25.629 deg in both; poles to 0.01 deg, the angle to 0.001 deg.
    """
    record = stage_pole(klitgord, AFRICA, AMERICA, 118.0, 84.0, coordinates).as_record()

    assert record["coordinates"] == whose
    assert record["pole_lat_deg"] == pytest.approx(pole[0], abs=0.00501)
    assert record["pole_lon_deg"] == pytest.approx(pole[1], abs=0.00501)
    assert record["angle_deg"] == pytest.approx(25.629, abs=0.000501)
    assert record["rate_deg_per_myr"] == pytest.approx(25.629 / 34.0, abs=2e-5)


def test_stage_poles_lie_1193_km_apart(klitgord: History) -> None:
    """The two poles of one stage are 1193 km apart: every stage pole says whose it is."""
    poles = [
        stage_pole(klitgord, AFRICA, AMERICA, 118.0, 84.0, coordinates).as_record()
        for coordinates in ("relative-to", "plate")
    ]
    places = [(pole["pole_lat_deg"], pole["pole_lon_deg"]) for pole in poles]

    assert apart_km(*places[0], *places[1]) == pytest.approx(1193.0, abs=0.5)


def test_the_older_pole_of_a_stage_comes_first(klitgord: History) -> None:
    """A stage asked from younger to older is refused."""
    with pytest.raises(InputError, match=r"stage from 84 to 118 Ma: the first age must be the older"):
        stage_pole(klitgord, AFRICA, AMERICA, 84.0, 118.0)


def test_fracture_zones_are_small_circles_about_the_plates_own_pole(klitgord: History) -> None:
    """The trace of a still point on Africa keeps its distance from the African pole.

    Within one stage `R(t)^-1 y` turns about the stage pole in the plate's coordinates (a law); the
    North American pole is 1193 km off. 1e-9 deg is rounding.
    """
    circuit = Circuit(klitgord, AMERICA)
    inverse = circuit.rotations(AFRICA, np.linspace(84.0, 118.0, 7)).rotations.inverse()
    trace = inverse.apply(unit(25.0, -50.0))
    for coordinates, constant in (("plate", True), ("relative-to", False)):
        pole = stage_pole(klitgord, AFRICA, AMERICA, 118.0, 84.0, coordinates).as_record()
        axis = unit(pole["pole_lat_deg"], pole["pole_lon_deg"])
        distances = [arc_deg(axis, place) for place in trace]

        assert bool(np.ptp(distances) < 1e-9) is constant


RATES = [("plate", 110.9, 49.1), ("relative-to", 78.5, 49.8)]


@pytest.mark.parametrize(("at_on", "azimuth", "speed"), RATES, ids=["plate", "relative-to"])
def test_rates_at_a_past_age(klitgord: History, at_on: str, azimuth: float, speed: float) -> None:
    """20N 17W at 100 Ma: today's point of Africa carried back, or a North American position."""
    found = rates(klitgord, AFRICA, AMERICA, 20.0, -17.0, 100.0, at_on=at_on)

    assert found.azimuth_deg[0] == pytest.approx(azimuth, abs=0.0501)
    assert found.speed_mm_yr[0] == pytest.approx(speed, abs=0.0501)


def test_rates_say_where_the_point_was(klitgord: History) -> None:
    """`then` is the carried point for `plate`, the asked one for `relative-to`."""
    carried = rates(klitgord, AFRICA, AMERICA, 20.0, -17.0, 100.0)
    asked = rates(klitgord, AFRICA, AMERICA, 20.0, -17.0, 100.0, at_on="relative-to")
    place = restored(klitgord, AFRICA, AMERICA, 100.0, (20.0, -17.0))

    assert (carried.then_lat_deg[0], carried.then_lon_deg[0]) == pytest.approx(place, abs=1e-12)
    assert (asked.then_lat_deg[0], asked.then_lon_deg[0]) == (20.0, -17.0)
    assert (carried.lat_deg[0], carried.lon_deg[0]) == (20.0, -17.0)


def moving_chain() -> list[Row]:
    """P on B on A: two links with rows at different ages, big angles, no special axes."""
    none = (float("nan"), float("nan"), 0.0)
    return [
        Row("P", "B", 0.0, *none),
        Row("P", "B", 30.0, 20.0, 40.0, 25.0),
        Row("P", "B", 70.0, -35.0, 110.0, 60.0),
        Row("A", "B", 0.0, *none),
        Row("A", "B", 50.0, 61.0, -25.0, 33.0),
        Row("A", "B", 90.0, 10.0, -140.0, 70.0),
    ]


def scipy_chain(age_ma: float) -> Rotation:
    """P relative to A at an age by scipy's Slerp, the link B > A being the inverse of A > B."""

    def link(rows: list[Row]) -> Rotation:
        vectors = [
            unit(row.pole_lat_deg, row.pole_lon_deg) * np.deg2rad(row.angle_deg)
            if row.angle_deg
            else np.zeros(3)
            for row in rows
        ]
        return Slerp([row.age_ma for row in rows], Rotation.from_rotvec(vectors))(age_ma)

    rows = moving_chain()
    return link(rows[3:]).inv() * link(rows[:3])


@pytest.mark.parametrize("age", [12.0, 42.0, 60.0])
def test_angular_velocities_add_along_a_chain(age: float) -> None:
    """Velocity of a chain is the derivative of its position: central differences with scipy.

    Law: `omega(A/F) = omega(B/F) + R(B->F) omega(A/B)`. Steps of 1e-3 Myr leave 1e-5 mm/yr (the
    third derivative), speeds are tens of mm/yr.
    """
    history, step = History.from_rows(moving_chain()), 1e-3
    found: Rates = rates(history, "P", "A", 33.0, 71.0, age)
    place = unit(33.0, 71.0)
    then = scipy_chain(age).apply(place)
    velocity = scipy_chain(age - step).apply(place) - scipy_chain(age + step).apply(place)
    velocity *= RADIUS_KM / (2.0 * step)
    east, north = east_north(*lat_lon(then))

    assert found.east_mm_yr[0] == pytest.approx(velocity @ east, abs=1e-4)
    assert found.north_mm_yr[0] == pytest.approx(velocity @ north, abs=1e-4)
    assert (found.then_lat_deg[0], found.then_lon_deg[0]) == pytest.approx(lat_lon(then), abs=1e-10)


@pytest.mark.parametrize("age", [0.0, 30.0, 50.0, 70.0])
def test_at_a_rows_age_the_stage_just_younger_counts(age: float) -> None:
    """The rate at a row's age is that of the stage just younger, at 0 Ma that of the first stage.

    One-sided differences with scipy over 1e-6 Myr: 1e-3 mm/yr from curvature and rounding.
    """
    history, step = History.from_rows(moving_chain()), 1e-6
    found = rates(history, "P", "A", 33.0, 71.0, age)
    younger, older = (0.0, step) if age == 0.0 else (age - step, age)
    place = unit(33.0, 71.0)
    velocity = scipy_chain(younger).apply(place) - scipy_chain(older).apply(place)
    velocity *= RADIUS_KM / step
    east, north = east_north(*lat_lon(scipy_chain(age).apply(place)))

    assert found.east_mm_yr[0] == pytest.approx(velocity @ east, abs=1e-3)
    assert found.north_mm_yr[0] == pytest.approx(velocity @ north, abs=1e-3)


def test_a_single_row_has_no_rate() -> None:
    """One row says where a plate was, not how fast it went: an error or NaN, never 0 mm/yr."""
    history = History.from_rows([Row(AFRICA, AMERICA, 118.0, 66.3, -19.9, -54.25)])
    try:
        found = rates(history, AFRICA, AMERICA, 20.8, -17.0, 118.0)
    except DomainError:
        return

    assert np.isnan(found.speed_mm_yr[0])


def test_a_trail_is_the_inverse_rotation_of_its_source(klitgord: History) -> None:
    """At 84 Ma a still source at 20N 20W wrote 21.636737 6.304564 on Africa (R^-1 s).

    With R instead of its inverse the place is 5413 km off.
    """
    rotation = Circuit(klitgord, AMERICA).at(AFRICA, 84.0).rotations
    place = lat_lon(rotation.inverse().apply(unit(20.0, -20.0)))
    wrong = lat_lon(rotation.apply(unit(20.0, -20.0)))

    assert place == pytest.approx((21.636737, 6.304564), abs=MICRODEGREE)
    assert apart_km(*place, *wrong) == pytest.approx(5413.0, abs=0.5)


def test_latitude_kinds_differ_by_42_8_km() -> None:
    """A site moved from 45N by 90 deg south along its meridian: 42.8 km between the two kinds."""
    history = History.from_rows([Row("P", "F", 10.0, 0.0, 100.0, 90.0)])
    as_given = restored(history, "P", "F", 10.0, (45.0, 10.0))
    geodetic = restored(history, "P", "F", 10.0, (45.0, 10.0), "geodetic")

    assert as_given == pytest.approx((-45.0, 10.0), abs=1e-12)
    assert geodetic[1] == pytest.approx(10.0, abs=1e-12)
    assert apart_km(*as_given, *geodetic) == pytest.approx(42.8, abs=0.0501)


def geodetic_cap_blanc(folder: Path, poles: str) -> tuple[float, float]:
    """Cap Blanc at M0 as a geodetic site, with a table of poles of the stated kind."""
    text = (DATA / "klitgord_schouten.toml").read_text(encoding="utf-8").split("[[table]]")[1]
    text = text.replace('file = "', f'file = "{DATA.as_posix()}/')
    history = History.read(write_manifest(folder, f'latitudes = "{poles}"\n{text}'))
    return restored(history, AFRICA, AMERICA, 118.0, CAP_BLANC, "geodetic")


def test_latitude_kinds_of_cap_blanc_differ_by_6_8_km(tmp_path: Path) -> None:
    """Cap Blanc at M0 as a geodetic site lands 6.8 km away, the table's poles as given."""
    place = geodetic_cap_blanc(tmp_path, "as-given")

    assert apart_km(27.302395, -58.167059, *place) == pytest.approx(6.8, abs=0.0501)


def test_a_table_of_poles_states_its_own_kind(tmp_path: Path) -> None:
    """With geodetic poles too it lands 8.3 km away: site, pole and result all turned, by hand.

    Expected: tan c = (1 - e2) tan g with GRS80's e2 (Moritz 2000, from memory) and scipy's
    rotation; 1e-9 deg is rounding.
    """
    flatter = 1.0 - 0.00669438002290

    def turned(lat_deg: float, factor: float) -> float:
        return float(np.rad2deg(np.arctan(np.tan(np.deg2rad(lat_deg)) * factor)))

    axis = unit(turned(66.3, flatter), -19.9)
    start = unit(turned(CAP_BLANC[0], flatter), CAP_BLANC[1])
    lat, lon = lat_lon(Rotation.from_rotvec(axis * np.deg2rad(-54.25)).apply(start))
    place = geodetic_cap_blanc(tmp_path, "geodetic")

    assert place == pytest.approx((turned(lat, 1.0 / flatter), lon), abs=1e-9)
    assert apart_km(27.302395, -58.167059, *place) == pytest.approx(8.3, abs=0.0501)


GRS80 = records("latitudes_grs80.csv")


@pytest.mark.parametrize("row", GRS80, ids=[row["geodetic_lat_deg"] for row in GRS80])
def test_grs80_latitudes(row: dict[str, str]) -> None:
    """Geocentric latitudes of GRS80 both ways, north and south, to the printed 1e-10 deg.

    Source: latitudes_grs80.csv, computed by a separate small program from the constants of GRS80
    (Moritz 2000, from memory), not published.
    """
    geodetic, geocentric = float(row["geodetic_lat_deg"]), float(row["geocentric_lat_deg"])
    difference = 3600.0 * (geodetic - float(geocentric_from_geodetic(geodetic)))

    assert float(geocentric_from_geodetic(geodetic)) == pytest.approx(geocentric, abs=0.6e-10)
    assert float(geocentric_from_geodetic(-geodetic)) == pytest.approx(-geocentric, abs=0.6e-10)
    assert float(geodetic_from_geocentric(geocentric)) == pytest.approx(geodetic, abs=0.6e-10)
    printed = float(row["geodetic_minus_geocentric_arcsec"])
    assert difference == pytest.approx(printed, abs=0.501e-4)


def test_at_the_present_a_site_keeps_its_digits(klitgord: History) -> None:
    """At 0 Ma places come back to the last bit, geodetic ones too, alone and among other ages."""
    circuit = Circuit(klitgord, AMERICA)
    for kind in ("as-given", "geodetic"):
        points = Points(
            np.array([45.1, -0.3]),
            np.array([10.7, 179.9]),
            circuit.codes([AFRICA] * 2),
            Latitudes(kind),
        )
        own = move_own(circuit, points, np.zeros(2))
        common = move_common(circuit, points, np.array([0.0, 84.0]))

        assert own.lat_deg.tolist() == common.lat_deg[:, 0].tolist() == [45.1, -0.3]
        assert own.lon_deg.tolist() == common.lon_deg[:, 0].tolist() == [10.7, 179.9]
