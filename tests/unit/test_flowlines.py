"""Flowlines in detail: composed paths, partner changes, shares by stage, jumps, frames, bad input."""

from functools import cache

import numpy as np
import pytest
from published.support import apart_km, lat_lon, unit
from scipy.spatial.transform import Rotation
from strategies import R_M

from restore.errors import InputError, TableError, UnknownPlateError
from restore.geometry.sphere import angular_distance, unit_vectors
from restore.history.circuit import Circuit
from restore.history.rows import Row
from restore.history.store import History
from restore.motion.flowlines import STATUSES, Spreading, arms_of, flowlines
from restore.motion.ridge_points import Jump, RidgePoints, read_jumps
from restore.motion.shares import Shares

NONE = (float("nan"), float("nan"), 0.0)
STILL = np.zeros((3, 3))
PAIR = ("A", "B")


def about_z(plate="A", partner="B", oldest=40.0, rate=1.0, lat=90.0, lon=0.0):
    """A plate that turns about one pole at a steady rate."""
    return [Row(plate, partner, 0.0, *NONE), Row(plate, partner, oldest, lat, lon, rate * oldest)]


def two_links(start=0.0):
    """A and B both turn on C about poles of their own: the stage pole of A relative to B wanders."""
    return [
        *(Row("A", "C", start, *NONE), Row("A", "C", 30.0, 60.0, 10.0, 25.0)),
        Row("A", "C", 60.0, 20.0, 80.0, 50.0),
        *(Row("B", "C", start, *NONE), Row("B", "C", 60.0, -10.0, 120.0, 60.0)),
    ]


def made(rows, ages, share=0.5, starts=((0.0, 0.0),), pair=PAIR, jumps=None, **more):
    history = rows if isinstance(rows, History) else History.from_rows(rows)
    begun = {name: more.pop(name) for name in ("age_ma", "on_plate") if name in more}
    spreading = Spreading.between(history, pair, ages, share, **more)
    lats, lons = zip(*starts, strict=True)
    return arms_of(spreading, RidgePoints.of(lats, lons, pair, **begun), jumps)


def places(found, start=0, side=0):
    return unit_vectors(found.lat_deg[start, side], found.lon_deg[start, side])


def test_half_of_a_turn_about_the_pole_of_the_earth():
    """A turned eastwards into the past: its crust of t Ma is t/2 degrees west, that of B t/2 east."""
    found = made(about_z(), "0:40:10", starts=[(10.0, 20.0)])
    assert found.lon_deg[0].tolist() == pytest.approx(
        np.array([20.0 - 0.5 * found.age_ma, 20.0 + 0.5 * found.age_ma]), abs=1e-12
    )
    assert found.lat_deg[0] == pytest.approx(np.full((2, 5), 10.0), abs=1e-12)


def test_a_constant_pole_gives_a_small_circle():
    """Both arms keep their distance from the pole to a micrometre."""
    found = made(about_z(rate=1.5, lat=52.0, lon=-31.0), "0:40:0.5", 0.3, [(5.0, 17.0)])
    pole = unit(52.0, -31.0)
    for side in (0, 1):
        away = angular_distance(np.broadcast_to(pole, (81, 3)), places(found, side=side)) * R_M
        assert np.ptp(away) < 1e-6


@cache
def by_hand(share, start, oldest, count):
    """B's arm of `two_links` with equal steps far finer than the package's, by scipy."""
    rows = History.from_rows(two_links()).rows

    def turn(plate, age):
        own = np.flatnonzero(rows.plate == plate)
        poles = [
            np.deg2rad(rows.angle_deg[n]) * np.nan_to_num(unit(rows.pole_lat_deg[n], rows.pole_lon_deg[n]))
            for n in own
        ]
        at = max(int(np.searchsorted(rows.age_ma[own], age)), 1)
        a, b = Rotation.from_rotvec(poles[at - 1]), Rotation.from_rotvec(poles[at])
        f = (age - rows.age_ma[own[at - 1]]) / (rows.age_ma[own[at]] - rows.age_ma[own[at - 1]])
        return a * Rotation.from_rotvec(f * (a.inv() * b).as_rotvec())

    x, before = unit(*start), Rotation.identity()
    for age in np.linspace(0.0, oldest, count + 1)[1:]:
        here = turn("B", age).inv() * turn("A", age)
        x = Rotation.from_rotvec((1.0 - share) * (here * before.inv()).as_rotvec()).apply(x)
        before = here
    return lat_lon(x)


@pytest.mark.parametrize("tolerance_m", [1000.0, 10.0, 0.1])
def test_composed_paths_keep_to_the_tolerance(tolerance_m):
    """Against 6000 steps by scipy, whose own error is far below a tenth of a metre."""
    exact = by_hand(0.3, (12.0, 40.0), 55.0, 6000)
    found = made(two_links(), [55.0], 0.3, [(12.0, 40.0)], tolerance_m=tolerance_m)
    off = apart_km(*exact, found.lat_deg[0, 1, 0], found.lon_deg[0, 1, 0]) * 1000.0
    assert off < tolerance_m
    single = made(two_links(), [55.0], 0.3, [(12.0, 40.0)], tolerance_m=1e7)
    coarse = apart_km(*exact, single.lat_deg[0, 1, 0], single.lon_deg[0, 1, 0]) * 1000.0
    assert coarse > 1000.0


def test_composed_paths_do_not_depend_on_the_asked_ages():
    """Not by a bit: asked ages cut nothing."""
    alone, among = made(two_links(), [55.0]), made(two_links(), "0:55:1")
    assert alone.lat_deg[..., 0].tolist() == among.lat_deg[..., -1].tolist()
    assert alone.lon_deg[..., 0].tolist() == among.lon_deg[..., -1].tolist()


def test_a_swapped_pair_on_a_composed_path():
    """The pair the other way round with share 1 - s: a micrometre."""
    one = made(two_links(), "0:60:15", 0.2, [(12.0, 40.0)])
    other = made(two_links(), "0:60:15", 0.8, [(12.0, 40.0)], PAIR[::-1])
    for side in (0, 1):
        apart = angular_distance(places(one, side=side), places(other, side=1 - side)) * R_M
        assert np.max(apart) < 1e-6


@pytest.mark.parametrize("share", [0.0, 0.35, 1.0])
def test_arms_fit_together_on_a_composed_path(share):
    """`a = R^-1 b` does not know of steps."""
    history = History.from_rows(two_links())
    found = made(history, "0:60:7", share, [(12.0, 40.0)])
    back = Circuit(history, "B").rotations("A", found.age_ma).rotations.inverse()
    assert np.max(angular_distance(back.apply(places(found, side=1)), places(found, side=0))) * R_M < 1e-6


def test_a_partner_change_adds_its_own_step():
    """A leaves C for D at 20 Ma and jumps by 4 degrees there; each arm takes its share of the jump."""
    rows = [
        *(Row("A", "B", 0.0, *NONE), Row("A", "B", 20.0, 90.0, 0.0, 20.0)),
        *(Row("D", "B", 0.0, *NONE), Row("D", "B", 40.0, *NONE)),
        *(Row("A", "D", 20.0, 90.0, 0.0, 24.0), Row("A", "D", 40.0, 90.0, 0.0, 34.0)),
    ]
    found = made(rows, [20.0, 30.0, 40.0], 0.25)
    assert found.lon_deg[0, 1] == pytest.approx(0.75 * np.array([20.0, 29.0, 34.0]), abs=1e-7)
    assert found.lon_deg[0, 0] == pytest.approx(-0.25 * np.array([20.0, 29.0, 34.0]), abs=1e-7)


def test_shares_by_stage():
    """Share 0.5 to 10 Ma, then 0.2: at 30 Ma A keeps 5 + 4 degrees of 30."""
    shares = Shares.of([(10.0, 40.0, 0.2), (0.0, 10.0, 0.5)])
    found = made(about_z(), [10.0, 30.0], shares)
    assert found.lon_deg[0] == pytest.approx(np.array([[-5.0, -9.0], [5.0, 21.0]]), abs=1e-12)


@pytest.mark.parametrize("share", [-0.1, 1.0001, float("nan")])
def test_shares_outside_0_to_1(share):
    with pytest.raises(InputError, match=r"lies in 0\.\.1"):
        Shares.constant(share)


def test_shares_that_leave_ages_out():
    """The message names the span that is bare."""
    with pytest.raises(InputError, match=r"says nothing for 10\.\.20 Ma"):
        made(about_z(), [30.0], Shares.of([(0.0, 10.0, 0.5), (20.0, 40.0, 0.5)]))
    with pytest.raises(InputError, match="must not overlap"):
        Shares.of([(0.0, 10.0, 0.5), (5.0, 40.0, 0.5)])


def test_an_extinct_ridge():
    """Given at 20 Ma on A, which stood 20 degrees farther east then: both arms begin there."""
    found = made(about_z(), [10.0, 20.0, 30.0], starts=[(0.0, 5.0)], age_ma=[20.0], on_plate=["A"])
    assert [STATUSES[s] for s in found.status[0, 0]] == ["younger than its start", "restored", "restored"]
    assert np.isnan(found.lat_deg[0, :, 0]).all()
    assert found.lon_deg[0, 0, 1] == 5.0
    assert found.lon_deg[0, :, 1:] == pytest.approx(np.array([[5.0, 0.0], [25.0, 30.0]]), abs=1e-12)


@pytest.mark.parametrize(("on_plate", "message"), [("", "on_plate is empty"), ("C", "on_plate = 'C'")])
def test_an_extinct_ridge_needs_one_of_the_two_plates(on_plate, message):
    with pytest.raises(InputError, match=f"row 1: .*{message}.*; .*A"):
        RidgePoints.of([0.0], [0.0], PAIR, age_ma=[20.0], on_plate=[on_plate])


def test_ages_outside_the_history():
    """A clear status, no number; other ages are answered."""
    found = made(about_z(), [30.0, 41.0])
    assert [STATUSES[s] for s in found.status[0, 1]] == ["restored", "outside the history"]
    assert np.isnan(found.lat_deg[0, :, 1]).all()
    held = made(about_z(), [40.0, 55.0], beyond="hold")
    assert held.lon_deg[0, 1] == pytest.approx([20.0, 20.0], abs=1e-12)
    extended = made(about_z(), [40.0, 55.0], beyond="extend")
    assert extended.lon_deg[0, 1] == pytest.approx([20.0, 27.5], abs=1e-12)


def test_a_gap_is_not_bridged():
    """Between two spans of the chain nothing is known: the far side has the status of a gap."""
    rows = [
        *about_z(oldest=10.0),
        Row("A", "D", 20.0, 90.0, 0.0, 25.0),
        Row("A", "D", 30.0, 90.0, 0.0, 35.0),
    ]
    rows += [Row("D", "B", 0.0, *NONE), Row("D", "B", 40.0, *NONE)]
    found = made(rows, [5.0, 15.0, 25.0])
    assert [STATUSES[s] for s in found.status[0, 0]] == ["restored", "gap in history", "gap in history"]
    far = made(rows, [25.0], starts=[(0.0, 0.0)], age_ma=[20.0], on_plate=["B"])
    assert far.lon_deg[0, 1, 0] == pytest.approx(2.5, abs=1e-12)


def test_a_pole_at_the_start_point():
    """Nothing moves there: both arms stay."""
    found = made(about_z(lat=30.0, lon=40.0), "0:40:10", starts=[(30.0, 40.0)])
    assert np.max(angular_distance(places(found), unit_vectors([30.0] * 5, 40.0))) * R_M < 1e-6


def test_a_ridge_jump():
    """Older than 20 Ma the crust came from 8 degrees farther east on B."""
    jumps = {"1": [Jump(20.0, 0.0, 18.0)]}
    found = made(about_z(), [10.0, 20.0, 30.0], jumps=jumps)
    assert found.lon_deg[0, 1] == pytest.approx([5.0, 10.0, 23.0], abs=1e-12)
    # on A the point lies 20 degrees, the turn of that age, farther west
    assert found.lon_deg[0, 0] == pytest.approx([-5.0, -10.0, -7.0], abs=1e-12)


def test_captured_crust():
    """The ridge jumped into B: the crust of B between the old ridge and the new one goes on with A.

    The old ridge lay at 4E on B at 20 Ma, the new one at 10E; B's crust of less than 32 Ma lies between.
    """
    jumps = {"1": [Jump(20.0, 0.0, 4.0, captured_by="A")]}
    found = made(about_z(), [10.0, 25.0, 30.0, 35.0], jumps=jumps)
    assert found.plate[0].tolist() == [[0, 0, 0, 0], [1, 0, 0, 1]]
    assert found.lon_deg[0, 1] == pytest.approx([5.0, 6.5 - 20.0, 9.0 - 20.0, 11.5], abs=1e-12)
    assert found.columns()["plate"][4:] == ["B", "A", "A", "B"]
    assert found.columns()["formed_on"][4:] == ["B", "B", "B", "B"]


def test_in_a_frame_both_arms_are_the_ridge():
    """At its own age the crust of both arms lay on the ridge; later it had gone apart."""
    rows = [*about_z(), *about_z("B", "F", rate=0.5, lat=0.0)]
    found = made(rows, "0:40:10", starts=[(10.0, 20.0)], frame="F")
    assert np.max(angular_distance(places(found, side=0), places(found, side=1))) * R_M < 1e-6
    ridge = made(rows, "0:40:10", starts=[(10.0, 20.0)])
    turn = Circuit(History.from_rows(rows), "F").rotations("B", found.age_ma).rotations
    assert np.max(angular_distance(turn.apply(places(ridge, side=1)), places(found))) * R_M < 1e-6
    then = made(rows, "0:40:10", starts=[(10.0, 20.0)], frame="F", restored_ma=20.0)
    assert STATUSES[then.status[0, 0, 0]] == "crust not yet formed"
    # at 20 Ma the crust of 40 Ma stood 20 degrees apart, that of 20 Ma together
    apart = np.rad2deg(angular_distance(places(then, side=0), places(then, side=1)))[2:]
    level = np.cos(np.deg2rad(10.0))
    wide = [2.0 * np.arcsin(level * np.sin(np.deg2rad(w / 2))) for w in (0.0, 10.0, 20.0)]
    assert apart == pytest.approx(np.rad2deg(wide), abs=1e-9)


def test_densified_rows():
    """They are there for drawing, are not asked, and only where there is an answer."""
    found = made(about_z(), [15.0, 45.0], every_myr=10.0)
    columns = found.columns()
    rows = list(zip(columns["age_ma"].tolist(), columns["asked"].tolist(), strict=True))[:7]
    assert rows[:6] == [
        (0.0, False),
        (10.0, False),
        (15.0, True),
        (20.0, False),
        (30.0, False),
        (40.0, False),
    ]
    assert rows[6] == (45.0, True)
    with pytest.raises(InputError, match="every_myr = 0"):
        made(about_z(), [15.0], every_myr=0.0)


def test_a_part_is_as_the_whole():
    """Start points in parts or together, of several ages: the same bits."""
    history = History.from_rows([*about_z(oldest=40.0), *about_z("B", "F")])
    spreading = Spreading.between(history, PAIR, "0:40:5")
    rng = np.random.default_rng(2)
    ages = rng.choice([0.0, 10.0, 12.5], 40)
    plates = rng.choice(["A", "B"], 40).tolist()
    points = RidgePoints.of(
        rng.uniform(-80, 80, 40), rng.uniform(-180, 180, 40), PAIR, age_ma=ages, on_plate=plates
    )
    whole = arms_of(spreading, points)
    for row in range(0, 40, 7):
        alone = arms_of(spreading, points.some(slice(row, row + 1)))
        assert alone.lon_deg[0].tobytes() == np.ascontiguousarray(whole.lon_deg[row]).tobytes()


@pytest.mark.parametrize(
    ("pair", "message"),
    [(("A", "A"), "nothing spreads"), (("A", "Q"), "'Q' is not"), (("Q", "B"), "'Q' is not")],
)
def test_plates_that_cannot_part(pair, message):
    with pytest.raises((InputError, UnknownPlateError), match=message):
        made(about_z(), [10.0], pair=pair)


def test_tolerances_at_fault():
    with pytest.raises(InputError, match="tolerance_m = 0"):
        made(two_links(), [10.0], tolerance_m=0.0)
    with pytest.raises(InputError, match="ask for a larger one"):
        made(two_links(), [10.0], tolerance_m=1e-9)


def test_tables_of_start_points(tmp_path):
    """Names, ages and plates; faults by line, all at once."""
    path = tmp_path / "ridge.csv"
    path.write_text(
        "start,lat_deg,lon_deg,age_ma,on_plate,note\nP,1,2,,,x\n,3,4,20,B,y\n", encoding="utf-8"
    )
    points = RidgePoints.read(path, PAIR)
    assert (points.start, points.age_ma.tolist(), points.own) == (
        ["P", "2"],
        [0.0, 20.0],
        {"note": ["x", "y"]},
    )
    path.write_text(
        "start,lat_deg,lon_deg,age_ma,on_plate\nP,91,2,,\nQ,3,x,20,\nR,3,4,20,\n", encoding="utf-8"
    )
    with pytest.raises(TableError) as caught:
        RidgePoints.read(path, PAIR)
    assert [line.split(": ")[0].rsplit(":", 2)[1:] for line in str(caught.value).splitlines()] == [
        ["2", "2"],
        ["3", "3"],
    ]
    path.write_text("start,lat_deg,lon_deg,age_ma,on_plate\nR,3,4,20,\n", encoding="utf-8")
    with pytest.raises(
        TableError, match=r"ridge.csv:2: start 'R' lay on the ridge at 20 Ma but on_plate is empty"
    ):
        RidgePoints.read(path, PAIR)


def test_tables_of_jumps(tmp_path):
    path = tmp_path / "jumps.csv"
    points = RidgePoints.of([0.0], [0.0], PAIR, start=["P"])
    head = "start,age_ma,lat_deg,lon_deg,on_plate,captured_by\n"
    path.write_text(head + "P,20,1,2,A,B\nP,30,1,2,,\n", encoding="utf-8")
    assert read_jumps(path, points, PAIR) == {"P": [Jump(20.0, 1.0, 2.0, True, "B"), Jump(30.0, 1.0, 2.0)]}
    for line, message in (
        ("Q,20,1,2,,\n", "no start point 'Q'"),
        ("P,0,1,2,,\n", "not older than 0 Ma"),
        ("P,20,1,2,C,\n", "on_plate = 'C'"),
    ):
        path.write_text(head + line, encoding="utf-8")
        with pytest.raises(TableError, match=f"jumps.csv:2: .*{message}"):
            read_jumps(path, points, PAIR)


def test_a_table_of_shares_need_not_reach_the_present():
    """Of an extinct ridge only its own time is needed."""
    found = made(about_z(), [20.0, 30.0], Shares.of([(20.0, 30.0, 0.2)]), age_ma=[20.0], on_plate=["B"])
    assert found.lon_deg[0, 1] == pytest.approx([0.0, 8.0], abs=1e-12)


def test_a_start_older_than_all_that_is_asked():
    found = made(about_z(), [10.0], age_ma=[20.0], on_plate=["B"])
    assert [STATUSES[code] for code in found.status.ravel()] == ["younger than its start"] * 2


def test_errors_that_do_not_matter():
    """An unknown error of a row that the arm does not use leaves the ellipse known; one in use does not."""
    known = (5e3 / R_M) ** 2 * np.eye(3)
    rows = [Row("A", "B", 0.0, *NONE, STILL), Row("A", "B", 10.0, 80.0, 0.0, 9.0)]
    rows += [Row("A", "B", t, 70.0, 10.0 + t, 0.9 * t, known) for t in (20.0, 30.0, 40.0)]
    rows += [Row("A", "B", 50.0, 60.0, 10.0, 47.0)]
    late = made(rows, [20.0, 35.0], age_ma=[20.0], on_plate=["A"])
    assert late.axes[0, 0, 0, 0] == 0.0
    assert np.all(late.axes[0, 0, :, 1] > 1.0)
    assert np.isnan(made(rows, [35.0, 45.0]).axes[0, 0, :, 1]).all()
    assert np.isnan(made(rows, [45.0], age_ma=[20.0], on_plate=["A"]).axes[0]).all()


def test_the_public_face(tmp_path):
    """`flowlines` from a file and from columns in memory: the same."""
    path = tmp_path / "ridge.csv"
    path.write_text("start,lat_deg,lon_deg\nP,10,20\n", encoding="utf-8")
    history = History.from_rows(about_z())
    columns = {"lat_deg": [10.0], "lon_deg": [20.0], "start": ["P"]}
    found = [flowlines(given, history, PAIR, "0:40:20", share=0.3) for given in (path, columns)]
    assert found[0].columns()["lon_deg"].tolist() == found[1].columns()["lon_deg"].tolist()
    assert found[0].columns()["start"] == ["P"] * 6
