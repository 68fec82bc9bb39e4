"""Pieces that ride on other plates: positions against rotations multiplied out with scipy, continuity, faults."""

import math

import numpy as np
import pytest
from scipy.spatial.transform import Rotation, Slerp

from restore.errors import HistoryError, TableError
from restore.geometry.sphere import lat_lon, unit_vectors
from restore.history.audit import audit
from restore.history.circuit import Circuit
from restore.history.riding import Ride, changes, read_rides, with_rides
from restore.history.rows import Row
from restore.history.store import History
from restore.motion.sites import restore_sites

KM = 6371.0088
COVARIANCE = np.diag([4.0, 5.0, 7.0]) * 1e-6
# plate: (latitude, longitude, rate in deg/Myr), relative to deep, on to 100 Ma
POLES = {"a": (60.0, -30.0, 0.8), "b": (-20.0, 100.0, -0.5), "c": (5.0, 10.0, 1.1)}
RIDES = [
    Ride("piece", "b", 0.0, 40.0, 2),
    Ride("piece", "a", 40.0, 70.0, 3),
    Ride("piece", "c", 70.0, 100.0, 4),
]


def history(covariance=COVARIANCE):
    rows = []
    for plate, (lat, lon, rate) in POLES.items():
        for age in (0.0, 25.0, 100.0):
            # the pole wanders, so that ages between rows are worth interpolating
            known = covariance if age else None
            rows.append(
                Row(plate, "deep", age, lat + age / 10.0, lon, rate * age, known, reference=f"log {plate}")
            )
    return History.from_rows(rows, frames={"deep": "mantle"})


def by_hand(plate):
    """A plate's rotation relative to deep as scipy's Slerp of the same rows."""
    lat, lon, rate = POLES[plate]
    turns = [
        Rotation.from_rotvec(np.deg2rad(rate * age) * unit_vectors(lat + age / 10.0, lon))
        for age in (0.0, 25.0, 100.0)
    ]
    return Slerp([0.0, 25.0, 100.0], Rotation.concatenate(turns))


def expected(place, age):
    """Where the piece was: carried back by each plate down to the age of the change."""
    a, b, c = (by_hand(plate) for plate in "abc")
    turn = b(min(age, 40.0))
    if age > 40.0:
        turn = a(min(age, 70.0)) * a(40.0).inv() * turn
    if age > 70.0:
        turn = c(age) * c(70.0).inv() * turn
    return turn.apply(place)


def moved(history, age, place=(12.0, 34.0)):
    found = Circuit(history, "deep").at("piece", age)
    return Rotation.from_quat(found.rotations.quaternions.reshape(4), scalar_first=True).apply(
        unit_vectors(*place)
    )


AGES = [0.0, 10.0, 39.9, 40.0, 40.1, 55.0, 70.0, 70.1, 99.0, 100.0]


@pytest.mark.parametrize("age", AGES)
def test_positions_against_scipy(age):
    """A piece that docked at 40 and at 70 Ma, on three plates, to a micrometre."""
    found = moved(with_rides(history(), RIDES), age)
    assert np.linalg.norm(found - expected(unit_vectors(12.0, 34.0), age)) * KM * 1e9 < 10.0  # micrometres


@pytest.mark.parametrize("change", [40.0, 70.0])
def test_positions_are_continuous(change):
    """At a change the next age that a float can hold is within a micrometre."""
    whole = with_rides(history(), RIDES)
    here = moved(whole, change)
    for beside in (np.nextafter(change, 0.0), np.nextafter(change, 200.0)):
        assert np.linalg.norm(moved(whole, beside) - here) * KM * 1e3 < 1e-6  # metres
    plain = [f for f in audit(whole, "deep") if "piece" in f.what and f.severity != "note"]
    assert plain == []


def test_through_the_sites(tmp_path):
    """Sites on the piece: places, ellipses, and a ledger that names the ride and the rows behind it."""
    whole = with_rides(history(), RIDES, "rides.csv")
    table = {
        "site": ["x"] * 3,
        "lat_deg": [12.0] * 3,
        "lon_deg": [34.0] * 3,
        "age_ma": [20.0, 50.0, 90.0],
        "plate": ["piece"] * 3,
    }
    results = restore_sites(table, whole, "deep")
    for row, age in enumerate(table["age_ma"]):
        lat, lon = lat_lon(expected(unit_vectors(12.0, 34.0), age))
        assert results.columns["restored_lat_deg"][row] == pytest.approx(float(lat), abs=1e-11)
        assert results.columns["restored_lon_deg"][row] == pytest.approx(float(lon), abs=1e-11)
    assert results.columns["status"] == ["restored"] * 3
    major = np.array(results.columns["ellipse_major_km"])
    assert (major > 0).all()
    assert np.all(np.diff(major) > 0.0), "each change adds the error of the rotation it was made with"
    pieces = {
        (row.plate, row.relative_to, row.age_ma, row.reference)
        for row in map(whole.rows.row, range(len(whole)))
    }
    assert ("piece", "a", 40.0, "rides") in pieces
    assert ("piece", "c", 100.0, "rides") in pieces


def test_covariance_of_the_handover():
    """At the first change the piece's rows hold the errors of a and b at 40 Ma, in its own coordinates.

    With R = A^-1 B the piece stands on a; small rotations that act first: of b as they are, of a
    turned by R (Chang 1988), and both plates' errors are alike and isotropic here.
    """
    isotropic = np.eye(3) * 1e-6
    whole = with_rides(history(isotropic), RIDES[:2])
    rows = [whole.rows.row(n) for n in range(len(whole))]
    (row,) = [r for r in rows if (r.plate, r.relative_to, r.age_ma) == ("piece", "a", 40.0)]
    # 40 Ma lies a fifth of the way from 25 to 100: shares of the two rows, near their weights by age
    share = 0.2
    each = ((1 - share) ** 2 + share**2) * 1e-6
    assert row.covariance == pytest.approx(2 * each * np.eye(3), abs=0.06e-6)
    (first,) = [r for r in rows if (r.plate, r.relative_to, r.age_ma) == ("piece", "b", 40.0)]
    assert np.array_equal(first.covariance, np.zeros((3, 3)))
    assert first.angle_deg == 0.0


def test_errors_that_are_not_known_stay_so():
    """If the rotation at a change has no error, the piece has none to give before it."""
    whole = with_rides(history(None), RIDES)
    rows = [whole.rows.row(n) for n in range(len(whole))]
    known = {(r.relative_to, r.covariance is not None) for r in rows if r.plate == "piece"}
    assert known == {("b", True), ("a", False), ("c", False)}


def test_changes():
    """The piece and the age of each change, in the order of the ages, whatever that of the table."""
    assert changes([RIDES[2], RIDES[0], RIDES[1], Ride("other", "a", 0.0, 9.0)]) == [
        ("piece", 40.0),
        ("piece", 70.0),
    ]


def test_one_ride_is_the_plate_itself():
    """A piece with one ride moves as its plate does, on to the ride's end and no further."""
    whole = with_rides(history(), [Ride("piece", "a", 0.0, 60.0)])
    turn = by_hand("a")(33.0)
    assert np.allclose(moved(whole, 33.0), turn.apply(unit_vectors(12.0, 34.0)), atol=1e-15)
    results = restore_sites(
        {"lat_deg": [0.0], "lon_deg": [0.0], "age_ma": [61.0], "plate": ["piece"]}, whole, "deep"
    )
    assert results.columns["status"] == ["outside the history"]


HEAD = "plate,rides_on,youngest_ma,oldest_ma\n"


def test_reading(tmp_path):
    """Comment lines, spaces about labels, other columns; lines are those of the file."""
    path = tmp_path / "rides.csv"
    path.write_text(
        "# docked twice\nplate,note,rides_on,youngest_ma,oldest_ma\n piece ,x,b,0,40\n# and\npiece,,a,40,70\n"
    )
    assert read_rides(path) == [Ride("piece", "b", 0.0, 40.0, 3), Ride("piece", "a", 40.0, 70.0, 5)]


BAD_ROWS = {
    "no plate": (",b,0,40", r"rides\.csv:2: '' rides on 'b'; name two different plates"),
    "on itself": ("b,b,0,40", r"rides\.csv:2: 'b' rides on 'b'; name two different plates"),
    "upside down": ("p,b,40,0", r"rides\.csv:2: p on b: 40\.\.0 Ma; youngest_ma lies below oldest_ma"),
    "no length": ("p,b,40,40", r"rides\.csv:2: p on b: 40\.\.40 Ma"),
    "negative": ("p,b,-1,40", r"rides\.csv:2: p on b: -1\.\.40 Ma"),
    "endless": ("p,b,0,inf", r"rides\.csv:2: p on b: 0\.\.inf Ma"),
    "empty": ("p,b,0,", r"rides\.csv:2: p on b: 0\.\.nan Ma"),
    "text": ("p,b,0,old", r"rides\.csv:2:4: oldest_ma = 'old' is not a number"),
}


@pytest.mark.parametrize(("row", "message"), BAD_ROWS.values(), ids=BAD_ROWS)
def test_rows_at_fault(tmp_path, row, message):
    """Each row at fault is said with its line; the good ones do not hide it."""
    path = tmp_path / "rides.csv"
    path.write_text(HEAD + row + "\nq,b,0,40\n", encoding="utf-8")
    with pytest.raises(TableError, match=message):
        read_rides(path)


def test_a_missing_column(tmp_path):
    """The header lacks a column that is needed."""
    path = tmp_path / "rides.csv"
    path.write_text("plate,rides,youngest_ma,oldest_ma\n", encoding="utf-8")
    with pytest.raises(TableError, match=r"rides\.csv:1: column 'rides_on' is missing"):
        read_rides(path)


MISFITS = {
    "late": ([Ride("p", "b", 5.0, 40.0, 2)], "f:2: p on b begins at 5 Ma where 0 Ma is expected; rides follow one another"),
    "gap": ([Ride("p", "b", 0.0, 40.0, 2), Ride("p", "a", 41.0, 70.0, 3)], "f:3: p on a begins at 41 Ma where 40 Ma"),
    "overlap": ([Ride("p", "b", 0.0, 40.0, 2), Ride("p", "a", 39.0, 70.0, 3)], "f:3: p on a begins at 39 Ma where 40 Ma"),
    "moved already": ([Ride("a", "b", 0.0, 40.0, 7)], "f:7: the history already moves 'a'"),
    "too old": ([Ride("p", "b", 0.0, 140.0, 2), Ride("p", "a", 140.0, 170.0, 3)], "f:3: "),
    "no such plate": ([Ride("p", "zz", 0.0, 40.0, 2), Ride("p", "a", 40.0, 70.0, 3)], "f:3: .*zz"),
}  # fmt: skip


@pytest.mark.parametrize(("rides", "message"), MISFITS.values(), ids=MISFITS)
def test_rides_that_do_not_fit(rides, message):
    """What the table asks for must follow in time and be tied by the history; one line with the place."""
    with pytest.raises(HistoryError, match=message) as caught:
        with_rides(history(), rides, "f")
    assert "\n" not in str(caught.value)


def test_an_angle_of_zero_has_no_pole():
    """On its youngest plate the piece stands still: no pole, and no turn."""
    whole = with_rides(history(), RIDES)
    rows = [whole.rows.row(n) for n in range(len(whole))]
    still = [r for r in rows if r.plate == "piece" and r.relative_to == "b"]
    assert [(math.isnan(r.pole_lat_deg), r.angle_deg) for r in still] == [(True, 0.0), (True, 0.0)]
