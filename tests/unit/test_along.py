"""Along flowlines: rates by stage, distances and ages, and observed points against them."""

import math

import numpy as np
import pytest
from published.support import RADIUS_KM, unit
from scipy.spatial.transform import Rotation

from restore.errors import TableError
from restore.history.rows import Row
from restore.history.store import History
from restore.motion.along import along, distance_columns, stage_columns
from restore.motion.flowlines import Spreading
from restore.motion.isochrons import RidgeLine
from restore.motion.observed import against_flowlines, against_isochrons, read_observed
from restore.motion.ridge_points import RidgePoints

NONE = (float("nan"), float("nan"), 0.0)
PAIR = ("A", "B")
KM_PER_DEGREE = math.radians(1.0) * RADIUS_KM
C = (5.0 / RADIUS_KM) ** 2 * np.eye(3)
ZERO = Row("A", "B", 0.0, *NONE, np.zeros((3, 3)))


def two_rates(covariance=None):
    """1 degree/Myr about the north pole to 10 Ma, 2 degrees/Myr from there to 30 Ma."""
    return [
        ZERO,
        Row("A", "B", 10.0, 90.0, 0.0, 10.0, covariance),
        Row("A", "B", 30.0, 90.0, 0.0, 50.0, covariance),
    ]


def arms(rows, ages=(30.0,), share=0.25, start=(0.0, 0.0), **begun):
    spreading = Spreading.between(History.from_rows(rows), PAIR, ages, share)
    return along(spreading, RidgePoints.of([start[0]], [start[1]], PAIR, **begun))


def test_rates_by_stage():
    """On the equator a degree is 111.195 km; A keeps a quarter and goes west, B the rest and east."""
    first, second = arms(two_rates())
    assert (first.plate, second.plate) == PAIR
    assert first.columns["younger_ma"].tolist() == [0.0, 10.0]
    assert first.columns["older_ma"].tolist() == [10.0, 30.0]
    for arm, part, azimuth in ((first, 0.25, 270.0), (second, 0.75, 90.0)):
        full = np.array([1.0, 2.0]) * KM_PER_DEGREE
        assert arm.columns["full_rate_mm_yr"] == pytest.approx(full, rel=1e-12)
        assert arm.columns["half_rate_mm_yr"] == pytest.approx(part * full, rel=1e-12)
        assert arm.columns["azimuth_deg"] == pytest.approx([azimuth] * 2, abs=1e-9)
        assert arm.columns["length_km"] == pytest.approx(part * KM_PER_DEGREE * np.array([10.0, 40.0]))
        assert arm.columns["distance_km"] == pytest.approx(part * KM_PER_DEGREE * np.array([10.0, 50.0]))
        assert np.isnan(arm.columns["full_rate_sigma_mm_yr"]).all()


def test_ages_and_distances_are_inverse():
    """Distance by age and age by distance, beyond the arm NaN."""
    arm = arms(two_rates())[1]
    asked = np.array([0.0, 5.0, 10.0, 20.0, 30.0])
    expected = 0.75 * KM_PER_DEGREE * np.array([0.0, 5.0, 10.0, 30.0, 50.0])
    assert arm.distance_at(asked) == pytest.approx(expected, rel=1e-12)
    assert arm.age_at(arm.distance_at(asked)) == pytest.approx(asked, abs=1e-9)
    assert np.isnan(arm.distance_at([31.0])).all()
    assert np.isnan(arm.age_at([-1.0, 1e5])).all()
    columns = distance_columns([arm], np.array([0.0, 100.0]))
    assert columns["age_ma"] == pytest.approx([0.0, 100.0 / (0.75 * KM_PER_DEGREE)])


def test_where_nothing_was_made_the_youngest_age_is_given():
    """Still from 10 to 20 Ma: the crust at the distance of 10 Ma has that age, a metre on it is older."""
    rows = [ZERO, *(Row("A", "B", t, 90.0, 0.0, a) for t, a in ((10.0, 10.0), (20.0, 10.0), (30.0, 20.0)))]
    arm = arms(rows, share=0.5)[0]
    edge = arm.distance_at([10.0])[0]
    assert arm.age_at([edge])[0] == 10.0
    assert arm.age_at([edge + 1e-3])[0] == pytest.approx(20.0, abs=1e-4)
    assert np.isnan(arm.columns["azimuth_deg"][1])
    assert arm.columns["full_rate_mm_yr"][1] == 0.0


def test_a_plate_that_keeps_nothing_has_no_length():
    first, _ = arms(two_rates(), share=0.0)
    assert first.columns["distance_km"].tolist() == [0.0, 0.0]
    assert first.age_at([0.0, 1.0])[0] == 0.0
    assert np.isnan(first.age_at([1.0])[0])


def test_an_extinct_ridge_has_no_younger_stages():
    first, _ = arms(two_rates(), age_ma=[20.0], on_plate=["B"])
    assert (first.columns["younger_ma"].tolist(), first.columns["older_ma"].tolist()) == ([20.0], [30.0])
    assert first.distance_at([20.0])[0] == 0.0


def test_an_arm_ends_with_the_history():
    first, _ = arms(two_rates(), ages=(45.0,))
    assert first.columns["older_ma"].tolist() == [10.0, 30.0]


def test_sigmas_against_monte_carlo():
    """Full rate and azimuth on either arm, within 3 %: 20000 draws have a sampling error of 0.5 %."""
    rng = np.random.default_rng(8)
    start, share, count = unit(30.0, 20.0), 0.3, 20_000
    rows = [
        ZERO,
        Row("A", "B", 10.0, 60.0, -20.0, 12.0, 4.0 * C),
        Row("A", "B", 25.0, 50.0, 10.0, 25.0, C @ np.diag([1.0, 2.0, 3.0])),
    ]
    found = arms(rows, (25.0,), share, (30.0, 20.0))
    turns = [Rotation.identity()]
    for row in rows[1:]:
        u = rng.standard_normal((count, 3)) @ np.linalg.cholesky(row.covariance).T
        axis = unit(row.pole_lat_deg, row.pole_lon_deg) * math.radians(row.angle_deg)
        turns.append(Rotation.from_rotvec(axis) * Rotation.from_rotvec(u))
    x = np.tile(start, (count, 1))
    for younger, older in ((0, 1), (1, 2)):
        s = (turns[older] * turns[younger].inv()).as_rotvec()
        middle = Rotation.from_rotvec(0.5 * (1.0 - share) * s).apply(x)
        half_way = Rotation.from_rotvec(0.5 * (turns[younger].inv() * turns[older]).as_rotvec())
        on_first = (turns[younger] * half_way).inv().apply(middle)
        own = (turns[older].inv() * turns[younger]).as_rotvec()
        myr = (10.0, 15.0)[younger]
        for arm, stage, place in ((found[0], own, on_first), (found[1], s, middle)):
            motion = np.cross(stage, place)
            rate = np.linalg.norm(motion, axis=1) * RADIUS_KM / myr
            east = np.stack([-place[:, 1], place[:, 0], 0.0 * place[:, 0]], axis=1)
            east /= np.linalg.norm(east, axis=1)[:, None]
            north = np.cross(place, east)
            azimuth = np.unwrap(np.arctan2((motion * east).sum(1), (motion * north).sum(1)))
            assert arm.columns["full_rate_sigma_mm_yr"][younger] == pytest.approx(rate.std(), rel=0.03)
            sigma = np.rad2deg(azimuth.std())
            assert arm.columns["azimuth_sigma_deg"][younger] == pytest.approx(sigma, rel=0.03)
            assert arm.columns["full_rate_mm_yr"][younger] == pytest.approx(rate.mean(), rel=5e-3)
        x = Rotation.from_rotvec((1.0 - share) * s).apply(x)


def test_stage_columns_are_one_table():
    columns = stage_columns(arms(two_rates()))
    assert columns["plate"] == ["A", "A", "B", "B"]
    assert {len(values) for values in columns.values()} == {4}


def observed_table(tmp_path, spreading, text, aged=False):
    path = tmp_path / "seen.csv"
    path.write_text(text, encoding="utf-8")
    return read_observed(path, spreading, aged)


def test_fracture_zone_points(tmp_path):
    """Signed distance to the right looking away from the ridge, the age and distance at the foot."""
    spreading = Spreading.between(History.from_rows(two_rates(C)), PAIR, (30.0,), 0.5)
    starts = RidgePoints.of([0.0, 20.0], [0.0, 0.0], PAIR, start=["P", "Q"])
    text = (
        "point,plate,lat_deg,lon_deg,start,sigma_km\n"
        "a,B,0.1,3,,1\nb,B,-0.2,15,P,\nc,A,0.1,-15,,\nd,B,20,4,P,\ne,B,20.3,4,,\n"
    )
    misfits, half = against_flowlines(spreading, starts, observed_table(tmp_path, spreading, text))
    assert misfits.line == ["P", "P", "P", "P", "Q"]
    # B's arm goes east: north of it is left; A's goes west: north of it is right
    expected = KM_PER_DEGREE * np.array([-0.1, 0.2, 0.1, -20.0, -0.3])
    assert misfits.distance_km == pytest.approx(expected, abs=1e-4)
    assert misfits.age_ma[:3] == pytest.approx([6.0, 20.0, 20.0], abs=1e-3)
    assert misfits.along_km[:2] == pytest.approx(KM_PER_DEGREE * np.array([3.0, 15.0]), abs=0.02)
    columns = misfits.columns()
    # at 10 Ma on the equator the half stage carries half of the row's 5 km; at 6 Ma 0.6 of it
    assert misfits.sigma_km[0] == pytest.approx(0.5 * 0.6 * 5.0, rel=0.02)
    assert columns["sigmas"][0] == pytest.approx(
        expected[0] / math.hypot(misfits.sigma_km[0], 1.0), rel=1e-6
    )
    assert columns["probability"][0] == pytest.approx(math.erfc(abs(columns["sigmas"][0]) / math.sqrt(2)))
    summary = misfits.by_stage(half.edges, spreading)
    assert summary["plate"] == ["A", "A", "B", "B", "B"]
    assert summary["points"].tolist() == [1, 1, 3, 1, 4]
    of_b = expected[[0, 1, 3, 4]]
    assert summary["rms_km"][4] == pytest.approx(math.sqrt(np.mean(of_b**2)), abs=1e-3)
    assert summary["mean_km"][4] == pytest.approx(np.mean(of_b), abs=1e-3)


def test_a_mean_keeps_what_its_points_share(tmp_path):
    """A hundred points of one row are no better known than one; their own errors do average out."""
    spreading = Spreading.between(History.from_rows(two_rates(C)), PAIR, (30.0,), 0.5)
    starts = RidgePoints.of([0.0], [0.0], PAIR)
    lines = "".join(f"B,0.01,5,{3.0}\n" for _ in range(100))
    table = observed_table(tmp_path, spreading, "plate,lat_deg,lon_deg,sigma_km\n" + lines)
    misfits, half = against_flowlines(spreading, starts, table)
    summary = misfits.by_stage(half.edges, spreading)
    assert summary["mean_sigma_km"][-1] == pytest.approx(math.hypot(misfits.sigma_km[0], 0.3), rel=1e-9)


def test_picks_against_isochrons(tmp_path):
    """On a north-south ridge: positive where a pick is farther from the ridge than its age says."""
    spreading = Spreading.between(History.from_rows(two_rates(C)), PAIR, (30.0,), 0.5)
    ridge = RidgeLine("r", np.array([-10.0, 10.0]), np.array([0.0, 0.0]))
    text = (
        "plate,lat_deg,lon_deg,age_ma,sigma_km\n"
        "B,0,5.1,10,\nB,0,4.8,10,\nA,0,-15.3,20,\nA,0,-14.8,20,\nB,0,15,20,2\n"
    )
    table = observed_table(tmp_path, spreading, text, aged=True)
    misfits, half = against_isochrons(spreading, [ridge], table)
    expected = KM_PER_DEGREE * np.array([0.1, -0.2, 0.3, -0.2, 0.0])
    assert misfits.distance_km == pytest.approx(expected, abs=1e-6)
    assert misfits.along_km == pytest.approx([10.0 * KM_PER_DEGREE] * 5, rel=1e-3)
    # the row at 10 Ma moves half stages by half its 5 km
    assert misfits.sigma_km[:2] == pytest.approx([2.5, 2.5], rel=0.02)
    summary = misfits.by_stage(half.edges, spreading)
    assert summary["points"].tolist() == [2, 2, 2, 1, 3]
    assert summary["rms_km"][0] == pytest.approx(KM_PER_DEGREE * math.sqrt((0.09 + 0.04) / 2), rel=1e-6)


def test_observed_points_at_fault(tmp_path):
    spreading = Spreading.between(History.from_rows(two_rates()), PAIR, (30.0,))
    for text, aged, message in (
        ("plate,lat_deg,lon_deg\nC,0,0\n", False, r":2: plate = 'C'; known: A, B"),
        ("plate,lat_deg,lon_deg\nA,0,0\n", True, r":1: column 'age_ma' is missing"),
        ("plate,lat_deg,lon_deg,age_ma\nA,0,0,\n", True, r":2:4: age_ma is empty"),
        ("plate,lat_deg,lon_deg,age_ma\nA,0,0,-1\n", True, r":2:4: age_ma = -1"),
    ):
        with pytest.raises(TableError, match=message):
            observed_table(tmp_path, spreading, text, aged)
    table = observed_table(tmp_path, spreading, "plate,lat_deg,lon_deg,start\nA,0,0,Q\n")
    with pytest.raises(TableError, match="no start point 'Q'"):
        against_flowlines(spreading, RidgePoints.of([0.0], [0.0], PAIR), table)


def test_observed_points_beyond_the_history(tmp_path):
    """The flowline ends with the history; the point is off its end."""
    spreading = Spreading.between(History.from_rows(two_rates()), PAIR, (45.0,), 0.5)
    table = observed_table(tmp_path, spreading, "plate,lat_deg,lon_deg\nB,0,27\n")
    misfits, _ = against_flowlines(spreading, RidgePoints.of([0.0], [0.0], PAIR), table)
    assert misfits.age_ma == pytest.approx([30.0], abs=1e-3)
    assert abs(misfits.distance_km[0]) == pytest.approx(2.0 * KM_PER_DEGREE, abs=0.6)
