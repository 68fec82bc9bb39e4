"""Small promises that keep results honest: clocks, errors that are not known, draws by site."""

import numpy as np
import pytest
from scipy.spatial.transform import Rotation

from restore.errors import InputError
from restore.files.tables import honest_errors
from restore.history.circuit import Circuit
from restore.history.conventions import Table
from restore.history.rows import Row
from restore.history.store import History
from restore.motion.rates import average_rates, rates
from restore.motion.sites import restore_sites


def two_clocks():
    rows = [
        Row("A", "B", 0.0, 0, 0, 0.0),
        Row("A", "B", 20.0, 50.0, 0.0, 10.0),
        Row("C", "B", 0.0, 0, 0, 0.0, table=1),
        Row("C", "B", 20.0, 50.0, 0.0, 8.0, table=1),
    ]
    return History.from_rows(rows, (Table(time_scale="ck95"), Table(time_scale="gts2012")))


def test_a_circuit_never_mixes_clocks():
    """Ages of two time scales do not meet in one computation, in Python either."""
    with pytest.raises(InputError, match=r"the history is on 2 clocks \(ck95, gts2012\)"):
        Circuit(two_clocks(), "B")
    with pytest.raises(InputError, match="2 clocks"):
        rates(two_clocks(), "A", "B", 0.0, 0.0)


def test_errors_say_not_known_where_no_sigma_is():
    """A row of a table without any sigma does not claim an error."""
    columns = {
        "speed_sigma_mm_yr": np.array([1.0, np.nan, np.nan]),
        "azimuth_sigma_deg": np.array([2.0, np.nan, 3.0]),
        "errors": ["error of rows only"] * 3,
    }
    said = honest_errors(columns)["errors"]
    assert said == ["error of rows only", "not known", "error of rows only"]
    assert honest_errors({"errors": ["rows only"]}) == {"errors": ["rows only"]}


def test_draws_of_a_site_do_not_depend_on_the_others():
    """Alone, first, last: a site with an age and a position error has the same draws."""
    sigma = np.eye(3) * (10.0 / 6371.0) ** 2
    history = History.from_rows(
        [Row("A", "B", 0.0, 0, 0, 0.0), Row("A", "B", 40.0, 30.0, 20.0, 30.0, sigma)]
    )
    site = {
        "lat_deg": 10.0,
        "lon_deg": 20.0,
        "age_ma": 25.0,
        "age_sigma_myr": 2.0,
        "position_sigma_km": 5.0,
    }
    other = {
        "lat_deg": -40.0,
        "lon_deg": 100.0,
        "age_ma": 31.0,
        "age_sigma_myr": 1.0,
        "position_sigma_km": 9.0,
    }
    found = []
    for order in ([site], [site, other], [other, other, site]):
        columns = {name: [one[name] for one in order] for name in site} | {"plate": ["A"] * len(order)}
        results = restore_sites(columns, history, "B", draws=50)
        found.append(results.columns["draws_radius_95_km"][order.index(site)])
    assert found[0] > 0.0
    assert found[0] == found[1] == found[2]


def test_a_plate_does_not_move_relative_to_itself():
    """That question is refused, not answered with zero."""
    history = History.from_rows([Row("A", "B", 0.0, 0, 0, 0.0), Row("A", "B", 40.0, 30.0, 20.0, 30.0)])
    with pytest.raises(InputError, match="plate and relative_to are both 'A'"):
        rates(history, "A", "A", 0.0, 0.0)


def test_a_mean_over_one_stage_is_the_rate_in_it():
    """Inside one stage the mean between two ages is the rate at the middle, errors included."""
    sigma = np.eye(3) * (5.0 / 6371.0088) ** 2
    rows = [Row("A", "B", t, 90.0, 0.0, 0.4 * t, sigma if t else None) for t in (0.0, 10.0, 20.0)]
    history = History.from_rows(rows)
    mean = average_rates(history, "A", "B", 0.0, 0.0, 15.1, 14.9)
    now = rates(history, "A", "B", 0.0, 0.0, 15.0)
    assert mean.speed_mm_yr[0] == pytest.approx(now.speed_mm_yr[0], rel=1e-12)
    assert mean.azimuth_deg[0] == pytest.approx(now.azimuth_deg[0], abs=1e-9)
    # 0.707 mm/yr for rows of 5 km ten Myr apart (computed by a separate small program, not published)
    assert mean.sigmas()[0][0] == pytest.approx(0.7071, abs=5e-5)


@pytest.mark.parametrize(("sigma_deg", "apart"), [(1.0, False), (80.0, True)])
def test_where_draws_and_the_linear_form_part(sigma_deg, apart):
    """An angle that is not known well moves a site near the pole along a small circle: by a degree the
    linear form is right, by 80 degrees the circle closes on itself and only the draws know."""
    axis = np.array([0.0, 0.0, 1.0])
    sigma = np.deg2rad(sigma_deg)
    covariance = np.outer(axis, axis) * sigma**2 + np.eye(3) * (1e-4 * sigma) ** 2
    rows = [Row("A", "B", 0.0, 0, 0, 0.0), Row("A", "B", 40.0, 90.0, 0.0, 30.0, covariance)]
    site = {"lat_deg": [80.0], "lon_deg": [20.0], "age_ma": [40.0], "plate": ["A"]}
    found = restore_sites(site, History.from_rows(rows), "B", draws=4000).columns
    linear, drawn = float(found["ellipse_major_km"][0]), float(found["draws_radius_95_km"][0])
    along = sigma * np.cos(np.deg2rad(80.0)) * 6371.0088
    assert linear == pytest.approx(2.4477 * along, rel=1e-4)
    # on a line 95 % lie within 1.96 sigma; 4000 draws give that to about 2 %
    assert bool(abs(drawn / (1.96 * along) - 1.0) > 0.1) is apart


def test_a_mean_rate_at_a_place_of_the_partner():
    """Held in the partner's coordinates the mean is the stage's own velocity there: log(S) / t x p."""
    rows = [Row("A", "B", t, 60.0 + t / 10.0, 20.0, -0.5 * t) for t in (0.0, 20.0, 40.0, 60.0)]
    history = History.from_rows(rows)
    found = average_rates(history, "A", "B", -30.0, -20.0, 60.0, 20.0, "relative-to")
    turns = [Rotation.from_quat(q, scalar_first=True) for q in history.rows.rotations().quaternions]
    omega = (turns[1] * turns[3].inv()).as_rotvec() / 40.0
    lat, lon = np.deg2rad([-30.0, -20.0])
    place = np.array([np.cos(lat) * np.cos(lon), np.cos(lat) * np.sin(lon), np.sin(lat)])
    velocity = np.cross(omega, place) * 6371.0088
    east = np.array([-np.sin(lon), np.cos(lon), 0.0])
    assert found.east_mm_yr[0] == pytest.approx(velocity @ east, abs=1e-9)
    assert found.north_mm_yr[0] == pytest.approx(velocity @ np.cross(place, east), abs=1e-9)
    on_plate = average_rates(history, "A", "B", -30.0, -20.0, 60.0, 20.0)
    assert abs(on_plate.azimuth_deg[0] - found.azimuth_deg[0]) > 1.0


@pytest.mark.parametrize(("lat", "lon"), [(-130.0, 0.0), (np.nan, 0.0), (10.0, 400.0)])
def test_points_off_the_globe_are_refused(lat, lon):
    """In Python as on the command line."""
    history = History.from_rows([Row("A", "B", 0.0, 0, 0, 0.0), Row("A", "B", 40.0, 30.0, 20.0, 30.0)])
    with pytest.raises(InputError, match=r"point 0: l(at|on)_deg = .*: must lie in"):
        rates(history, "A", "B", [lat], [lon])
