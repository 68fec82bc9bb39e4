"""Worked cases of uncertainty: the rows are the random variables.

Expected values were computed by a separate small program (numpy, scipy), not published, unless a
test names another source. Errors are 1-sigma unless an ellipse is named, which is at 95 %.
"""

from __future__ import annotations

import math
from dataclasses import replace

import numpy as np
import pytest
from published.support import RADIUS_KM, arc_deg, east_north, lat_lon, records, unit
from scipy.spatial.transform import Rotation

from restore.geometry.sphere import EARTH_RADIUS_KM
from restore.geometry.uncertain import Sensitivity, confidence_factor
from restore.history.circuit import Circuit
from restore.history.poles import finite_pole, stage_pole
from restore.history.rows import Row
from restore.history.store import History
from restore.motion.points import Moved, Points, move_common, move_own
from restore.motion.rates import rates

NONE = (float("nan"), float("nan"), 0.0)
K_95 = 2.4477
"""k of a 95 % ellipse with 2 degrees of freedom, kappa known."""


def isotropic(sigma_km: float) -> np.ndarray:
    """The covariance, rad^2, of a row with one sigma in every direction."""
    return np.eye(3) * (sigma_km / RADIUS_KM) ** 2


def matrix_6y() -> np.ndarray:
    """Marks, Stock & Quinn 1999, Table 2, row 6y (read), kappa applied, rad^2."""
    row = next(r for r in records("rotation_covariances_marks1999_table2.csv") if r["anomaly"] == "6y")
    a, b, c, d, e, f = (float(row[f"{letter}_10^-g_rad2"]) for letter in "abcdef")
    scale = 10.0 ** -float(row["g"]) / float(row["kappa_hat"])
    return np.array([[a, b, c], [b, d, e], [c, e, f]]) * scale


def moved(circuit: Circuit, plate: str, age_ma: float, place: tuple[float, float], **own: float) -> Moved:
    """One place of a plate, restored with its errors; `own`: position_sigma, age_sigma."""
    errors = {name: np.array([value]) for name, value in own.items()}
    points = Points(np.array([place[0]]), np.array([place[1]]), circuit.codes([plate]), **errors)
    return move_own(circuit, points, np.array([age_ma]), errors=True)


def ellipse_of(found: Moved) -> tuple[float, float, float, float]:
    """Semi-axes in km, azimuth of the longer in degrees, degrees of freedom."""
    shape, dof = found.spread.ellipse(RADIUS_KM)
    return (
        float(shape.major_km[0]),
        float(shape.minor_km[0]),
        float(shape.azimuth_deg[0]),
        float(dof[0]),
    )


def two_rows(sigma_km: float = 5.0, turn_deg: float = 1.0) -> list[Row]:
    """Rows at 10 and 20 Ma, a small stage, both equally wrong in every direction."""
    spread = isotropic(sigma_km)
    return [
        Row("P", "F", 0.0, *NONE),
        Row("P", "F", 10.0, 90.0, 0.0, turn_deg, spread),
        Row("P", "F", 20.0, 90.0, 0.0, 2.0 * turn_deg, spread),
    ]


def test_radius() -> None:
    """The mean radius is R1 of GRS80, Moritz 2000 (from memory), rounded to the decimetre."""
    published = next(
        float(row["value"])
        for row in records("constants.csv")
        if (row["ellipsoid_or_scope"], row["quantity_with_unit"]) == ("GRS80", "mean_radius_R1_m")
        and row["status"].startswith("published")
    )

    assert EARTH_RADIUS_KM == RADIUS_KM == pytest.approx(published / 1000.0, abs=0.05e-3)


@pytest.mark.parametrize("at_on", ["plate", "relative-to"])
def test_rate_inside_two_rows(at_on: str) -> None:
    """Between rows of 5 km at 10 and 20 Ma the rate's sigma is 0.707 mm/yr: 5 sqrt(2) km in 10 Myr.

    Both components alike; the azimuth then is sigma over speed. Three digits are given.
    """
    found = rates(History.from_rows(two_rows()), "P", "F", 0.0, 30.0, 15.0, at_on=at_on)
    speed_sigma, azimuth_sigma = found.sigmas()

    assert speed_sigma[0] == pytest.approx(0.707, abs=0.0005)
    assert azimuth_sigma[0] == pytest.approx(math.degrees(0.7071 / float(found.speed_mm_yr[0])), rel=1e-3)
    assert np.sqrt(found.covariance[0, 1, 1]) == pytest.approx(0.707, abs=0.0005)


def test_rate_between_two_close_ages() -> None:
    """The stage from 15.1 to 14.9 Ma has 0.707 mm/yr; two ages taken as independent give 25.0.

    Both ages lie between the same rows, whose errors cancel for the most part.
    """
    history = History.from_rows(two_rows())
    stage = stage_pole(history, "P", "F", 15.1, 14.9)
    together = np.sqrt(np.diag(stage.covariance)) * RADIUS_KM / 0.2
    ends = [finite_pole(history, "P", "F", age).covariance for age in (15.1, 14.9)]
    apart = np.sqrt(np.diag(ends[0] + ends[1])) * RADIUS_KM / 0.2

    assert together == pytest.approx([0.707] * 3, abs=0.0005)
    assert apart == pytest.approx([25.0] * 3, abs=0.05)


def test_ellipse_of_a_pair_turned_round() -> None:
    """C' = A C A^T: 95 % ellipse 12.65 x 4.03 km, azimuth 44.6 deg (6.71 x 3.74, 66.6 without).

    Matrix 6y of Marks et al. 1999 (kappa applied) on the M0 rotation of Klitgord & Schouten 1986
    (from memory); the North American point 27.3024N 58.1671W restored relative to Africa.
    """
    row = Row("Africa", "North_America", 118.0, 66.3, -19.9, -54.25, matrix_6y())
    history = History.from_rows([row])
    place = (27.3024, -58.1671)
    found = moved(Circuit(history, "Africa"), "North_America", 118.0, place)

    major, minor, azimuth, dof = ellipse_of(found)
    assert (major, minor) == pytest.approx((12.65, 4.03), abs=0.00501)
    assert azimuth == pytest.approx(44.6, abs=0.0501)
    assert math.isinf(dof)
    # the inverse of M0 brings the point back to Cap Blanc, to the digits it was given with
    assert (found.lat_deg[0], found.lon_deg[0]) == pytest.approx((20.8, -17.0), abs=1e-4)


def test_ellipse_if_the_matrix_were_left_alone() -> None:
    """The same matrix stated for the other plate gives the other ellipse: 6.71 x 3.74 km, 66.6 deg.

    A row of North America relative to Africa that has C itself in its own coordinates.
    """
    row = Row("North_America", "Africa", 118.0, 66.3, -19.9, 54.25, matrix_6y())
    circuit = Circuit(History.from_rows([row]), "Africa")
    major, minor, azimuth, _ = ellipse_of(moved(circuit, "North_America", 118.0, (27.3024, -58.1671)))

    assert (major, minor) == pytest.approx((6.71, 3.74), abs=0.00501)
    assert azimuth == pytest.approx(66.6, abs=0.0501)


def test_a_pair_turned_round_has_the_turned_covariance() -> None:
    """The rotation itself of the turned pair has C' = A C A^T, element by element (a law)."""
    history = History.from_rows([Row("Africa", "North_America", 118.0, 66.3, -19.9, -54.25, matrix_6y())])
    a = Rotation.from_rotvec(unit(66.3, -19.9) * math.radians(-54.25)).as_matrix()
    found = Circuit(history, "Africa").at("North_America", 118.0).covariance()[0]

    # rounding, against entries of 1e-7 rad^2
    assert np.abs(found - a @ matrix_6y() @ a.T).max() < 1e-20


def test_halfway_to_the_only_row() -> None:
    """One row of 5 km at 20 Ma: a site at 10 Ma has a round ellipse of 6.12 km (small stage)."""
    rows = [Row("P", "F", 0.0, *NONE), Row("P", "F", 20.0, 90.0, 0.0, 1.0, isotropic(5.0))]
    major, minor, _, dof = ellipse_of(moved(Circuit(History.from_rows(rows), "F"), "P", 10.0, (0.0, 0.0)))

    assert (major, minor) == pytest.approx((6.12, 6.12), abs=0.00501)
    assert math.isinf(dof)


def test_halfway_to_the_only_row_with_estimated_kappa() -> None:
    """With dof = 10, k is 2.8645 instead of 2.4477, so the ellipse of 6.12 km grows to 7.16 km."""
    row = Row("P", "F", 20.0, 90.0, 0.0, 1.0, isotropic(5.0), dof=10.0)
    history = History.from_rows([Row("P", "F", 0.0, *NONE), row])
    major, minor, _, dof = ellipse_of(moved(Circuit(history, "F"), "P", 10.0, (0.0, 0.0)))

    assert dof == pytest.approx(10.0, abs=1e-9)
    assert (major, minor) == pytest.approx((2.5 * 2.8645, 2.5 * 2.8645), abs=0.001)


@pytest.mark.parametrize(
    ("dof", "k", "digit"),
    [
        (5.0, 3.40, 0.01),
        (10.0, 2.86, 0.01),
        (30.0, 2.58, 0.01),
        (10.0, 2.8645, 1e-4),
        (math.inf, K_95, 1e-4),
    ],
)
def test_confidence_factor(dof: float, k: float, digit: float) -> None:
    """k^2 = 2 F(0.95; 2, nu): 3.40, 2.86, 2.58 for nu = 5, 10, 30; 2.4477 where kappa is known."""
    assert float(confidence_factor(dof)) == pytest.approx(k, abs=0.501 * digit)


def test_the_zero_row_has_no_error() -> None:
    """At 0 Ma the covariance is exactly zero, even if the table gives the zero row a matrix."""
    rows = two_rows()
    rows[0] = replace(rows[0], covariance=isotropic(5.0))
    history = History.from_rows(rows)
    circuit = Circuit(history, "F")
    found = moved(circuit, "P", 0.0, (10.0, 20.0))

    assert not np.any(history.rows.covariance[0])
    assert not np.any(circuit.at("P", 0.0).covariance())
    assert ellipse_of(found)[:2] == (0.0, 0.0)
    assert not np.any(finite_pole(history, "P", "F", 0.0).covariance)


def test_an_unknown_row_spreads_to_what_uses_it_only() -> None:
    """Without a covariance the error is not known (NaN), except at the very age of a known row."""
    rows = two_rows()
    rows[2] = replace(rows[2], covariance=None)
    history = History.from_rows(rows)
    circuit = Circuit(history, "F")
    sizes = [ellipse_of(moved(circuit, "P", age, (10.0, 20.0)))[0] for age in (5.0, 10.0, 15.0, 20.0)]

    assert np.isnan(sizes).tolist() == [False, False, True, True]
    assert sizes[1] == pytest.approx(5.0 * K_95, abs=1e-3)
    assert finite_pole(history, "P", "F", 10.0).covariance is not None
    assert finite_pole(history, "P", "F", 15.0).covariance is None
    points = Points(np.array([10.0]), np.array([20.0]), circuit.codes(["P"]))
    common = move_common(circuit, points, np.array([5.0, 10.0, 15.0, 20.0]), errors=True)
    assert np.isnan(common.spread.east[0]).tolist() == [False, False, True, True]


def palaeopole_row(a95_deg: float) -> Row:
    """The row of a palaeopole at 70N 200E: axis (0, lon - 90), angle 90 - lat; 30 deg along p."""
    pole = unit(70.0, 200.0)
    s, along = math.radians(a95_deg) / K_95, math.radians(30.0)
    spread = s**2 * (np.eye(3) - np.outer(pole, pole)) + along**2 * np.outer(pole, pole)
    return Row("P", "axis", 60.0, 0.0, 110.0, 20.0, spread)


def test_palaeolatitude_of_a_palaeopole() -> None:
    """The pole goes to the north pole; 30N 10E to latitude 10.2619, 90 less its distance."""
    circuit = Circuit(History.from_rows([palaeopole_row(5.0)], frames={"axis": "spin-axis"}), "axis")
    site = moved(circuit, "P", 60.0, (30.0, 10.0))
    pole = moved(circuit, "P", 60.0, (70.0, -160.0))

    assert site.lat_deg[0] == pytest.approx(10.2619, abs=0.501e-4)
    assert site.lat_deg[0] == pytest.approx(90.0 - arc_deg(unit(30.0, 10.0), unit(70.0, 200.0)), abs=1e-9)
    assert pole.lat_deg[0] == pytest.approx(90.0, abs=1e-9)


def test_palaeolatitude_error_of_a_palaeopole() -> None:
    """A95 = 5 deg gives a palaeolatitude sigma of 2.043 deg, whatever the longitude's error."""
    circuit = Circuit(History.from_rows([palaeopole_row(5.0)], frames={"axis": "spin-axis"}), "axis")
    spread = moved(circuit, "P", 60.0, (30.0, 10.0)).spread

    assert math.degrees(math.sqrt(spread.north[0])) == pytest.approx(2.043, abs=0.0005)
    # the longitude is 30 deg uncertain, times cos lat on the ground, and latitude adds a little
    assert math.degrees(math.sqrt(spread.east[0])) == pytest.approx(30.0, abs=1.0)


def test_age_error_of_a_site() -> None:
    """An age error spreads the site along its path only: k times rate times sigma, minor axis 0.

    Law: `omega omega^T sigma^2` as a rotation covariance. 2 deg/Myr about the north pole are
    111.195 mm/yr at 60N, to the east; with 0.1 Myr the 1-sigma is 11.1195 km.
    """
    rows = [
        Row("P", "F", 0.0, *NONE),
        Row("P", "F", 20.0, 90.0, 0.0, -40.0, np.zeros((3, 3))),
    ]
    found = moved(Circuit(History.from_rows(rows), "F"), "P", 10.0, (60.0, 10.0), age_sigma=0.1)
    major, minor, azimuth, dof = ellipse_of(found)

    # 111.195080 km per degree (constants.csv, computed by a separate small program)
    assert major == pytest.approx(K_95 * 11.119508, abs=0.001)
    assert minor == pytest.approx(0.0, abs=1e-6)
    assert azimuth == pytest.approx(90.0, abs=1e-6)
    assert math.isinf(dof)


def test_position_error_of_a_site_adds_in_quadrature() -> None:
    """3 km of the site and 4 km of the row make 5 km, in every direction alike."""
    row = Row("P", "F", 20.0, 30.0, 40.0, 50.0, isotropic(4.0))
    circuit = Circuit(History.from_rows([row]), "F")
    found = moved(circuit, "P", 20.0, (60.0, 10.0), position_sigma=3.0 / RADIUS_KM)

    assert ellipse_of(found)[:2] == pytest.approx((5.0 * K_95, 5.0 * K_95), abs=1e-3)


def test_age_and_position_errors_do_not_make_the_rows_uncertain() -> None:
    """The site's own errors dilute an estimated kappa: its degrees of freedom rise.

    Welch 1947 and Satterthwaite 1946 (from memory): nu = 10 (9 + 16)^2 / 16^2 with 3 km known and
    4 km estimated with 10.
    """
    row = Row("P", "F", 20.0, 30.0, 40.0, 50.0, isotropic(4.0), dof=10.0)
    circuit = Circuit(History.from_rows([row]), "F")
    dof = ellipse_of(moved(circuit, "P", 20.0, (60.0, 10.0), position_sigma=3.0 / RADIUS_KM))[3]

    assert dof == pytest.approx(10.0 * 25.0**2 / 16.0**2, rel=1e-9)


def separation(places: list[tuple[float, float]], plates: list[str], history: History) -> Sensitivity:
    """How the cosine of the distance between two restored places moves with the rows' errors.

    `d(y1 . y2) = y2 . A1 (u1 x x1) + y1 . A2 (u2 x x2)`, with the sensitivities of both rotations.
    """
    found = Circuit(history, "F").rotations(plates, 15.0)
    both = found.sensitivity()
    turns = [found.rotations[i].as_matrices() for i in range(2)]
    starts = [unit(*place) for place in places]
    ends = [turn @ start for turn, start in zip(turns, starts, strict=True)]
    parts = []
    for i in range(2):
        on_u = np.cross(starts[i], turns[i].T @ ends[1 - i])
        parts.append(Sensitivity(both.rows[i], both.matrices[i]).mapped(on_u[np.newaxis]))
    return Sensitivity.combined(parts)


def shared_rows() -> History:
    """P and Q on B, B on F: the link B > F is common to both."""
    rows = [replace(row, plate="B") for row in two_rows(turn_deg=11.0)]
    rows += [replace(row, relative_to="B") for row in two_rows(sigma_km=3.0, turn_deg=-7.0)]
    rows += [replace(row, plate="Q", relative_to="B") for row in two_rows(turn_deg=5.0)]
    return History.from_rows(rows)


def test_two_neighbours_on_one_plate_have_no_separation_error() -> None:
    """The separation of two sites of one plate is known exactly (a plate is rigid)."""
    history = shared_rows()
    places = [(10.0, 20.0), (14.0, 33.0)]
    variance = separation(places, ["P", "P"], history).covariance(history.row_errors())

    # entries of the rows' covariances are 1e-7 rad^2
    assert abs(float(variance[0, 0])) < 1e-22


def test_a_shared_link_cancels_in_a_separation() -> None:
    """The rows of B > F, which sites of P and of Q both use, have no say in their separation."""
    history = shared_rows()
    both = separation([(10.0, 20.0), (14.0, 33.0)], ["P", "Q"], history)
    errors = history.row_errors()
    shares = dict(zip(both.rows.tolist(), both.variance_shares(errors).tolist(), strict=True))

    labels = history.rows.plate
    assert float(both.covariance(errors)[0, 0]) > 1e-10
    assert sum(share for row, share in shares.items() if row >= 0 and labels[row] == "B") < 1e-12
    assert sum(shares.values()) == pytest.approx(1.0, abs=1e-12)


def test_cross_covariance_of_two_ages_in_one_stage() -> None:
    """`sum J1 C J2^T`: at 12.5 and 17.5 Ma of a small stage 3/16 C1 + 3/16 C2, so 3/8 of (5 km)^2.

    The small-stage form leaves out terms of the order of the stage angle, 1e-3 rad here.
    """
    history = History.from_rows(two_rows(turn_deg=0.1))
    both = Circuit(history, "F").rotations("P", [12.5, 17.5]).sensitivity()
    one, other = (Sensitivity(both.rows[i], both.matrices[i]) for i in range(2))
    cross = one.cross_covariance(other, history.row_errors())

    expected = 0.375 * isotropic(5.0)
    assert np.abs(cross - expected).max() < 2e-3 * expected[0, 0]
    assert one.variance_shares(history.row_errors()).max() == pytest.approx(0.9, abs=1e-3)


def test_covariance_of_a_trail() -> None:
    """A still source seen from the plate: C_x = [x]x C [x]x^T in the plate's coordinates (a law).

    The source 20N 20W of North America restored relative to Africa is the trail's place on Africa.
    """
    row = Row("Africa", "North_America", 84.0, 76.55, -20.73, -29.6, matrix_6y())
    circuit = Circuit(History.from_rows([row]), "Africa")
    found = moved(circuit, "North_America", 84.0, (20.0, -20.0))
    turn = Rotation.from_rotvec(unit(76.55, -20.73) * math.radians(-29.6))
    x = turn.inv().apply(unit(20.0, -20.0))
    step = np.array([np.cross(e, x) for e in np.eye(3)]).T
    spread = step @ matrix_6y() @ step.T
    east, north = east_north(*lat_lon(x))

    # rounding, against entries of 1e-7 rad^2
    assert found.spread.east[0] == pytest.approx(east @ spread @ east, abs=1e-20)
    assert found.spread.north[0] == pytest.approx(north @ spread @ north, abs=1e-20)
    assert found.spread.cov[0] == pytest.approx(east @ spread @ north, abs=1e-20)
