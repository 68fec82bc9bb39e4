"""Published finite rotations and their covariances, read as they stand through manifests."""

from __future__ import annotations

import math
from functools import cache
from pathlib import Path

import numpy as np
import pytest
from published.support import (
    DATA,
    RADIUS_KM,
    apart_km,
    arc_deg,
    lat_lon,
    records,
    unit,
    write_manifest,
)
from scipy.spatial.transform import Rotation

from restore.errors import HistoryError, OutsideHistoryError
from restore.history.circuit import Circuit
from restore.history.poles import finite_pole
from restore.history.rows import Row
from restore.history.store import History
from restore.motion.points import Points, move_common, move_own
from restore.motion.rates import rates

FIT_MA = 180.0
"""An age for the fits of Bullard et al. 1965, which state none; any would do."""

PRINTED_DEG = 0.5001e-6
"""Half of the last printed digit of the moved points: 5 cm on the ground."""

ROTATIONS = records("finite_rotations.csv")
KLITGORD = [row for row in ROTATIONS if row["source"] == "Klitgord_Schouten_1986"]
MOVED = records("finite_rotation_moved_points.csv")


@cache
def klitgord() -> History:
    """Africa relative to North America, Klitgord & Schouten 1986, through the manifest."""
    return History.read(DATA / "klitgord_schouten.toml")


@cache
def bullard() -> History:
    """The fits of Bullard et al. 1965; their table has no ages, so one is given here."""
    return History.from_rows(
        [
            Row(
                row["plate_moved"],
                row["plate_fixed"],
                FIT_MA,
                float(row["pole_lat_deg"]),
                float(row["pole_lon_deg"]),
                float(row["angle_deg_anticlockwise_positive"]),
            )
            for row in ROTATIONS
            if row["source"] == "Bullard_1965"
        ]
    )


def moved(
    history: History, plate: str, frame: str, age_ma: float, place: tuple[float, float]
) -> tuple[float, float]:
    """Latitude and longitude in degrees of a place on a plate, restored relative to a frame."""
    circuit = Circuit(history, frame)
    points = Points(np.array([place[0]]), np.array([place[1]]), circuit.codes([plate]))
    found = move_own(circuit, points, np.array([age_ma]))
    return float(found.lat_deg[0]), float(found.lon_deg[0])


@pytest.mark.parametrize("row", KLITGORD, ids=[row["anomaly"] for row in KLITGORD])
def test_rows_keep_their_numbers(row: dict[str, str]) -> None:
    """Each row comes through the manifest as printed: Africa moves, with negative angles.

    Source: Klitgord & Schouten 1986 (from memory).
    """
    rows = klitgord().rows
    number = list(rows.chron).index(row["anomaly"])

    assert (rows.plate[number], rows.relative_to[number]) == ("Africa", "North_America")
    assert rows.age_ma[number] == float(row["age_Ma_in_source"])
    assert rows.pole_lat_deg[number] == float(row["pole_lat_deg"])
    assert rows.pole_lon_deg[number] == float(row["pole_lon_deg"])
    assert rows.angle_deg[number] == float(row["angle_deg_anticlockwise_positive"])


@pytest.mark.parametrize("row", KLITGORD, ids=[row["anomaly"] for row in KLITGORD])
def test_finite_poles_at_row_ages(row: dict[str, str]) -> None:
    """At a row's age the pole is the row's, as the antipode with a positive angle (1e-9 deg).

    Source: Klitgord & Schouten 1986 (from memory). A pole and its antipode with the angle negated
    are one rotation.
    """
    pole = finite_pole(klitgord(), "Africa", "North_America", float(row["age_Ma_in_source"]))
    record = pole.as_record()
    lat, lon = float(row["pole_lat_deg"]), float(row["pole_lon_deg"])

    assert record["pole_lat_deg"] == pytest.approx(-lat, abs=1e-9)
    assert math.cos(math.radians(record["pole_lon_deg"] - lon)) == pytest.approx(-1.0, abs=1e-12)
    assert record["angle_deg"] == pytest.approx(-float(row["angle_deg_anticlockwise_positive"]), abs=1e-9)
    assert record["covariance_rad2"] is None


@pytest.mark.parametrize("row", MOVED, ids=[f"{r['source']}-{r['point']}" for r in MOVED])
def test_moved_points(row: dict[str, str]) -> None:
    """Points moved by the printed rotations land where the table says, to its last digit.

    Source: finite_rotation_moved_points.csv, computed by a separate small program, not published;
    rotations of Klitgord & Schouten 1986 and Bullard, Everett & Smith 1965 (from memory).
    """
    place = float(row["lat_deg"]), float(row["lon_deg"])
    if row["source"] == "Bullard_1965":
        plate = {"Recife": "South_America", "Newfoundland margin": "North_America"}
        plate = plate.get(row["point"], "Africa")
        frame = {"South_America": "Africa", "Africa": "North_America", "North_America": "Europe"}
        found = moved(bullard(), plate, frame[plate], FIT_MA, place)
    else:
        age = next(r["age_Ma_in_source"] for r in KLITGORD if r["anomaly"] == row["anomaly"])
        found = moved(klitgord(), "Africa", "North_America", float(age), place)

    assert found[0] == pytest.approx(float(row["moved_lat_deg_computed"]), abs=PRINTED_DEG)
    assert found[1] == pytest.approx(float(row["moved_lon_deg_computed"]), abs=PRINTED_DEG)


@pytest.mark.parametrize(
    ("plate", "frame", "place", "conjugate"),
    [
        ("South_America", "Africa", (-8.05, -34.9), (4.95, 8.32)),
        ("Africa", "North_America", (20.8, -17.0), (35.25, -75.5)),
        ("North_America", "Europe", (50.0, -49.5), (49.5, -12.2)),
    ],
    ids=["Recife-Calabar", "Cap Blanc-Cape Hatteras", "NE Newfoundland shelf-Porcupine"],
)
def test_fits_close_the_ocean(
    plate: str, frame: str, place: tuple[float, float], conjugate: tuple[float, float]
) -> None:
    """The fits bring edges of opposite continents, thousands of km apart today, within 150 km.

    Source: Bullard, Everett & Smith 1965 (from memory). Places of the conjugates are from memory
    and good to about 50 km, and a fit of shelf edges leaves gaps and overlaps of that size; moved
    the wrong way round the pairs would be over 4000 km apart. Measured: 105, 29 and 38 km.
    """
    lat, lon = moved(bullard(), plate, frame, FIT_MA, place)

    assert apart_km(*place, *conjugate) > 2600.0
    assert apart_km(lat, lon, *conjugate) < 150.0


@pytest.mark.parametrize(
    ("place", "conjugate"),
    [((20.8, -17.0), (37.05, -74.65)), ((15.0, -18.5), (32.8, -79.9))],
    ids=["Cap Blanc-Norfolk Canyon", "Dakar-Charleston"],
)
def test_the_closure_pole_closes_the_ocean(
    place: tuple[float, float], conjugate: tuple[float, float]
) -> None:
    """The closure of Klitgord & Schouten brings Africa's edge within 150 km of North America's.

    Source: Klitgord & Schouten 1986 (from memory); conjugates from memory, good to about 50 km.
    Measured: 61 and 92 km. The path there only ever approaches, row by row.
    """
    circuit = Circuit(klitgord(), "North_America")
    points = Points(np.array([place[0]]), np.array([place[1]]), circuit.codes(["Africa"]))
    path = move_common(circuit, points, np.array([0.0, 35.5, 84.0, 118.0, 156.5, 175.0]))
    gaps = [apart_km(*at, *conjugate) for at in zip(path.lat_deg[0], path.lon_deg[0], strict=True)]

    assert gaps[0] > 5000.0
    assert gaps == sorted(gaps, reverse=True)
    assert gaps[-1] < 150.0


def test_two_published_fits_agree() -> None:
    """Two independent closures of the central Atlantic put Cap Blanc within 200 km of each other.

    Sources: Bullard, Everett & Smith 1965; Klitgord & Schouten 1986 (both from memory). Measured
    151 km: the price of fitting shelf edges by eye and machine twenty years apart.
    """
    one = moved(bullard(), "Africa", "North_America", FIT_MA, (20.8, -17.0))
    other = moved(klitgord(), "Africa", "North_America", 175.0, (20.8, -17.0))

    assert apart_km(*one, *other) < 200.0


def test_fits_chain() -> None:
    """South America reaches Europe along Africa and North America: three fits in order.

    Expected values multiply the three rotations by the formula of Rodrigues. Tolerance: 1e-9 deg,
    rounding.
    """
    place = unit(-8.05, -34.9)
    for row in ROTATIONS[-3:]:
        axis = unit(float(row["pole_lat_deg"]), float(row["pole_lon_deg"]))
        turn = math.radians(float(row["angle_deg_anticlockwise_positive"]))
        place = (
            place * math.cos(turn)
            + np.cross(axis, place) * math.sin(turn)
            + axis * (axis @ place) * (1.0 - math.cos(turn))
        )
    found = moved(bullard(), "South_America", "Europe", FIT_MA, (-8.05, -34.9))

    assert found == pytest.approx(lat_lon(place), abs=1e-9)


def test_the_pair_holds_from_the_present_to_its_oldest_row() -> None:
    """`from_present` makes the table hold down to today; beyond the closure it is not continued."""
    circuit = Circuit(klitgord(), "North_America")

    assert float(circuit.at("Africa", 0.0).rotations.angle_deg()) == 0.0
    assert circuit.oldest_ma("Africa") == 175.0
    with pytest.raises(OutsideHistoryError, match=r"at 175.1 Ma: outside the history; the chain holds"):
        circuit.at("Africa", 175.1)


def test_anomaly_5_rate_is_nuvel1a() -> None:
    """The rate since anomaly 5 equals NUVEL-1A's Africa-North America: 0.24 deg/Myr, two digits.

    Sources: Klitgord & Schouten 1986, An5, 2.41 deg in 10 Myr; DeMets et al. 1994, Table 1 (both
    from memory). Measured: 0.2410 and 0.2380 deg/Myr, poles 7.5 deg apart, and at the ridge (25N
    45W) velocities that differ by 1.9 mm/yr of 25: one is an average over 10 Myr, the other over
    about 3.
    """
    of_rows, of_today = klitgord(), History.read(DATA / "nuvel1a_poles.toml")
    both = [rates(of, "Africa", "North_America", 25.0, -45.0) for of in (of_rows, of_today)]
    turns = [np.rad2deg(np.linalg.norm(one.omega[0])) for one in both]

    assert turns[0] == pytest.approx(0.241, abs=1e-9)
    assert turns[1] == pytest.approx(0.24, abs=0.005)
    assert turns[0] == pytest.approx(turns[1], abs=0.005)
    assert arc_deg(both[0].omega[0], both[1].omega[0]) < 8.0
    assert both[0].east_mm_yr[0] == pytest.approx(both[1].east_mm_yr[0], abs=2.0)
    assert both[0].north_mm_yr[0] == pytest.approx(both[1].north_mm_yr[0], abs=2.0)
    assert both[0].east_mm_yr[0] > 20.0


MARKS = records("rotation_covariances_marks1999_table2.csv")


def marks_table(folder: Path, covariance_in: str = "plate") -> str:
    """The covariances of Marks et al. 1999 under a manifest, as printed: kappa, a to f.

    The file has no plates and no poles, and gives the scale as an exponent: a copy with these
    columns is generated here. The poles are stand-ins; the axes do not depend on them.
    """
    lines = ["plate,relative_to,lat,lon,angle,scale," + ",".join(MARKS[0])]
    for row in MARKS:
        angle = 0.6 * float(row["age_CK95_Ma"])
        lines.append(f"aus,ant,12,36,{angle:.3f},1e-{row['g']}," + ",".join(row.values()))
    path = folder / "marks.csv"
    path.write_text("\n".join(lines) + "\n", encoding="utf-8")
    columns = "\n".join(f'cov_{letter} = "{letter}_10^-g_rad2"' for letter in "abcdef")
    return f"""
file = '{path}'
citation = "Marks, Stock & Quinn 1999, J. Geophys. Res. 104, 4967-4981, Table 2"
from_present = true
covariance_in = "{covariance_in}"
[table.columns]
age_ma = "age_CK95_Ma"
pole_lat_deg = "lat"
pole_lon_deg = "lon"
angle_deg = "angle"
chron = "anomaly"
kappa = "kappa_hat"
cov_factor = "scale"
{columns}
"""


@pytest.mark.parametrize("covariance_in", ["plate", "relative_to"])
@pytest.mark.parametrize("row", MARKS, ids=[row["anomaly"] for row in MARKS])
def test_published_covariances(tmp_path: Path, row: dict[str, str], covariance_in: str) -> None:
    """C = (1/kappa) (a..f) 10^-g has the printed longest and shortest 1-sigma axes in km.

    Source: Marks, Stock & Quinn 1999, Table 2, read (citation from memory); axes computed from it
    by a separate small program, not published, printed to 1 m. They are the same whichever plate's
    coordinates the matrix is in, for a rotation only turns them.
    """
    history = History.read(write_manifest(tmp_path, marks_table(tmp_path, covariance_in)))
    found = Circuit(history, "ant").at("aus", float(row["age_CK95_Ma"]))
    axes = np.sqrt(np.linalg.eigvalsh(found.covariance()[0])) * RADIUS_KM

    largest = float(row["largest_1sigma_axis_km_at_kappa_computed"])
    smallest = float(row["smallest_1sigma_axis_km_at_kappa_computed"])
    assert axes[2] == pytest.approx(largest, abs=0.5001e-3)
    assert axes[0] == pytest.approx(smallest, abs=0.5001e-3)


def test_covariances_in_the_partners_coordinates_are_turned(tmp_path: Path) -> None:
    """`covariance_in = "relative_to"` turns the matrix by the row's rotation, element by element.

    Law: `A expm([u]x) = expm([w]x) A` with w = A u (Chang 1988), so C_plate = A^T C A, with A the
    stand-in rotation of 0.6 deg/Myr for 19.048 Myr, 11.429 deg, about 12N 36E.
    """
    as_plate, as_partner = (
        History.read(write_manifest(tmp_path, marks_table(tmp_path, side))).rows
        for side in ("plate", "relative_to")
    )
    number = list(as_plate.chron).index("6y")
    a = Rotation.from_rotvec(unit(12.0, 36.0) * math.radians(11.429)).as_matrix()
    expected = a.T @ as_plate.covariance[number] @ a

    # rounding, against entries of 1e-7 rad^2
    assert np.abs(as_partner.covariance[number] - expected).max() < 1e-20
    assert np.abs(expected - as_plate.covariance[number]).max() > 1e-8


def test_a_misprinted_matrix_is_refused(tmp_path: Path) -> None:
    """A matrix that is not positive definite is refused, with its place and what to do.

    Some printed matrices are misprinted; here the sign of one entry of 6y is changed.
    """
    table = marks_table(tmp_path)
    path = tmp_path / "marks.csv"
    text = path.read_text(encoding="utf-8").replace("1.25,3.11,", "1.25,-3.11,")
    path.write_text(text, encoding="utf-8")
    with pytest.raises(HistoryError, match=r"marks.csv:2:\d+: the covariance is not positive definite"):
        History.read(write_manifest(tmp_path, table))
