"""Worked cases of flowlines and trails, and their ellipses against Monte Carlo.

Places and sizes named in a test were computed by a separate small program (numpy, scipy), not
published. Rows are those of Klitgord & Schouten 1986 (from memory) with a zero row, Africa moving,
North America still, radius 6371.0088 km, latitudes as given. The Monte Carlo programs here rebuild
the half stages of every draw with scipy and share no formula with the package.
"""

from __future__ import annotations

import itertools
from collections.abc import Sequence

import numpy as np
import pytest
from published.simulation import (
    Draws,
    Link,
    draw,
    inside,
    misfit,
    product,
    random_chain,
    recompose,
    rows_of,
    scatter,
    tangent_steps,
)
from published.support import DATA, RADIUS_KM, apart_km, lat_lon, unit
from scipy.spatial.transform import Rotation, Slerp

from restore.history.rows import Row
from restore.history.store import History
from restore.motion.flowlines import Flowlines, Spreading, arms_of
from restore.motion.ridge_points import RidgePoints
from restore.motion.trails import Hotspots, TrailMaker

PAIR = ("Africa", "North_America")
START = (25.0, -45.0)
AMERICAN_ARM, AFRICAN_ARM = (30.559367, -65.217050), (21.543677, -24.437806)
MICRODEGREE = 0.5001e-6
"""Half of the last digit of places given to 1e-6 deg: 5 cm on the ground."""
MICROMETRE_DEG = 1e-11
FACTOR = 2.447746830680816
"""k of the 95 % ellipse, sqrt(-2 ln 0.05)."""
DRAWS = 40_000


@pytest.fixture(scope="module")
def klitgord() -> History:
    """Klitgord & Schouten 1986 (from memory) through the manifest beside the table."""
    return History.read(DATA / "klitgord_schouten.toml")


def made(
    history: History,
    pair: tuple[str, str],
    ages: str | Sequence[float],
    share: object = 0.5,
    start: tuple[float, float] = START,
    age_ma: float = 0.0,
    on_plate: str = "",
    **more: object,
) -> Flowlines:
    """Both arms from one start point."""
    spreading = Spreading.between(history, pair, ages, share, **more)  # type: ignore[arg-type]
    points = RidgePoints.of(
        [start[0]], [start[1]], pair, age_ma=[age_ma], on_plate=[on_plate] if on_plate else None
    )
    return arms_of(spreading, points)


def place(found: Flowlines, side: int, at: int = -1) -> tuple[float, float]:
    """One arm at one age."""
    return float(found.lat_deg[0, side, at]), float(found.lon_deg[0, side, at])


def test_the_worked_flowline(klitgord: History) -> None:
    """118 Ma, shares 0.5: the American arm at 30.559367 -65.217050, the African at 21.543677 -24.437806."""
    found = made(klitgord, PAIR, "118")

    assert place(found, 1) == pytest.approx(AMERICAN_ARM, abs=MICRODEGREE)
    assert place(found, 0) == pytest.approx(AFRICAN_ARM, abs=MICRODEGREE)


def turns(history: History) -> tuple[np.ndarray, Slerp]:
    """Row ages to 118 Ma and the rotations by age, with scipy."""
    rows = history.rows
    vectors = [
        np.deg2rad(angle) * unit(lat, lon)
        for lat, lon, angle in zip(rows.pole_lat_deg, rows.pole_lon_deg, rows.angle_deg, strict=True)
    ]
    ages = np.concatenate([[0.0], rows.age_ma])
    order = np.argsort(ages)
    slerp = Slerp(ages[order], Rotation.from_rotvec(np.array([np.zeros(3), *vectors])[order]))
    return ages[order][ages[order] <= 118.0], slerp


def test_shortcuts_are_told_apart(klitgord: History) -> None:
    """Halving the finite rotation is 77 km off, asked ages as stages 18 km, the reverse order 157 km."""
    ages, slerp = turns(klitgord)
    start = unit(*START)

    def half_way(nodes: Sequence[float], reverse: bool = False) -> tuple[float, float]:
        steps = [slerp([b])[0] * slerp([a])[0].inv() for a, b in itertools.pairwise(nodes)]
        x = start
        for step in steps[::-1] if reverse else steps:
            x = Rotation.from_rotvec(0.5 * step.as_rotvec()).apply(x)
        return lat_lon(x)

    right = place(made(klitgord, PAIR, "118"), 1)
    assert half_way(ages) == pytest.approx(right, abs=MICROMETRE_DEG * 100.0)
    assert apart_km(*right, *half_way([0.0, 118.0])) == pytest.approx(77.0, abs=0.5)
    assert apart_km(*right, *half_way(ages, reverse=True)) == pytest.approx(157.0, abs=0.5)
    assert apart_km(*right, *half_way([0.0, 30.0, 60.0, 90.0, 118.0])) > 1.0


@pytest.mark.parametrize("asked", ["0:118:1", "0:118:7", "59,118", "118,130"])
def test_asked_ages_cut_no_stages(klitgord: History, asked: str) -> None:
    """`--ages 118` and `--ages 0:118:1` end in the same point: within a micrometre."""
    alone, among = made(klitgord, PAIR, "118"), made(klitgord, PAIR, asked)
    at = among.age_ma.tolist().index(118.0)
    for side in (0, 1):
        assert apart_km(*place(alone, side), *place(among, side, at)) < 1e-9


@pytest.mark.parametrize("share", [0.0, 0.3, 0.5, 1.0])
def test_a_swapped_pair(klitgord: History, share: float) -> None:
    """The pair the other way round with share 1 - s gives the same two arms."""
    one = made(klitgord, PAIR, "0:118:20", share)
    other = made(klitgord, PAIR[::-1], "0:118:20", 1.0 - share)
    for side in (0, 1):
        for k in range(len(one.age_ma)):
            assert apart_km(*place(one, side, k), *place(other, 1 - side, k)) < 1e-9


@pytest.mark.parametrize("share", [0.0, 0.2, 1.0])
def test_the_arms_fit_together(klitgord: History, share: float) -> None:
    """`a = R^-1 b` at every age."""
    _, slerp = turns(klitgord)
    found = made(klitgord, PAIR, "0:118:9", share)
    for k, age in enumerate(found.age_ma.tolist()):
        back = slerp([age])[0].inv().apply(unit(*place(found, 1, k)))
        assert apart_km(*place(found, 0, k), *lat_lon(back)) < 1e-9


@pytest.mark.parametrize(("share", "still"), [(0.0, 0), (1.0, 1)])
def test_a_plate_that_keeps_nothing(klitgord: History, share: float, still: int) -> None:
    """Shares 0 and 1 leave one arm at the start point; the other has all the crust."""
    _, slerp = turns(klitgord)
    found = made(klitgord, PAIR, "0:118:10", share)
    for k, age in enumerate(found.age_ma.tolist()):
        assert apart_km(*place(found, still, k), *START) < 1e-9
        turn = slerp([age])[0] if still == 0 else slerp([age])[0].inv()
        assert apart_km(*place(found, 1 - still, k), *lat_lon(turn.apply(unit(*START)))) < 1e-9


def test_an_extinct_ridge_begins_at_its_age(klitgord: History) -> None:
    """A start point of 59 Ma in African coordinates: the products restart there, `b0 = R(59) a0`."""
    ages, slerp = turns(klitgord)
    found = made(klitgord, PAIR, "59,118", age_ma=59.0, on_plate="Africa")
    x = slerp([59.0])[0].apply(unit(*START))
    nodes = [age for age in ages if age >= 59.0]
    for a, b in itertools.pairwise(nodes):
        step = slerp([b])[0] * slerp([a])[0].inv()
        x = Rotation.from_rotvec(0.5 * step.as_rotvec()).apply(x)

    assert place(found, 0, 0) == START
    assert apart_km(*place(found, 1), *lat_lon(x)) < 1e-9
    assert apart_km(*place(found, 0), *lat_lon(slerp([118.0])[0].inv().apply(x))) < 1e-9


def test_the_worked_trail(klitgord: History) -> None:
    """84 Ma, hotspot at 20N 20W: the crust lies at 21.636737 6.304564 (R, not its inverse: 5413 km off)."""
    maker = TrailMaker(klitgord, *PAIR)
    hotspot = Hotspots(["h"], np.array([20.0]), np.array([-20.0]))
    crust, passage = (maker.make(hotspot, "84", shown) for shown in ("crust", "passage"))
    right = (21.636737, 6.304564)

    assert (crust.lat_deg[0, 0], crust.lon_deg[0, 0]) == pytest.approx(right, abs=MICRODEGREE)
    wrong = passage.lat_deg[0, 0], passage.lon_deg[0, 0]
    assert apart_km(*right, *wrong) == pytest.approx(5413.0, abs=0.5)


def with_errors(history: History, sigma_km: float, oldest: float) -> History:
    """Its rows up to an age, with an isotropic error, and an exact zero row."""
    rows = history.rows
    covariance = np.eye(3) * (sigma_km / RADIUS_KM) ** 2
    made_ = [Row(*PAIR, 0.0, np.nan, np.nan, 0.0, np.zeros((3, 3)))]
    made_ += [
        Row(
            *PAIR,
            float(rows.age_ma[n]),
            float(rows.pole_lat_deg[n]),
            float(rows.pole_lon_deg[n]),
            float(rows.angle_deg[n]),
            covariance,
        )
        for n in np.argsort(rows.age_ma)
        if rows.age_ma[n] <= oldest
    ]
    return History.from_rows(made_)


def test_shared_rows_cancel(klitgord: History) -> None:
    """Ten stages of rows with 5 km each: about 2.5 km, not the 10.8 km of independent stages.

    The worked case says 2.51 x 2.59 km; drawn with scipy from these rows it is 2.53 x 2.55 km. The
    last row's error comes in by its half, and inner rows cancel but for the turn between stages.
    """
    history = with_errors(klitgord, 5.0, 118.0)
    assert len(history) == 11
    found = made(history, PAIR, "118")
    sizes = found.axes[:2, 0, 1, 0] / FACTOR

    rng = np.random.default_rng(3)
    x, before = np.tile(unit(*START), (DRAWS, 1)), Rotation.identity()
    for lat, lon, angle in zip(
        history.rows.pole_lat_deg, history.rows.pole_lon_deg, history.rows.angle_deg, strict=True
    ):
        if angle == 0.0:
            continue
        errors = Rotation.from_rotvec(rng.standard_normal((DRAWS, 3)) * 5.0 / RADIUS_KM)
        turn = Rotation.from_rotvec(np.deg2rad(angle) * unit(lat, lon)) * errors
        x = Rotation.from_rotvec(0.5 * (turn * before.inv()).as_rotvec()).apply(x)
        before = turn
    steps = tangent_steps(unit(*place(found, 1)), x) * RADIUS_KM
    drawn = np.sqrt(np.linalg.eigvalsh(np.cov(steps.T)))[::-1]

    assert sizes == pytest.approx(drawn, rel=0.02)
    assert np.all((sizes > 2.45) & (sizes < 2.65))


def half_products(chain: Sequence[Link], nodes: np.ndarray, beta: float, drawn: Draws | None) -> Rotation:
    """`P` at the last node, from the chain recomposed at every node."""
    arm, before = Rotation.identity(), recompose(chain, float(nodes[0]), drawn)
    for age in nodes[1:]:
        here = recompose(chain, float(age), drawn)
        step = product(here, before.inv()).as_rotvec()
        arm, before = product(Rotation.from_rotvec(beta * step), arm), here
    return arm


SAMPLED = [
    pytest.param((True,), [(0.0, 10.0, 25.0, 40.0)], 32.0, 0.5, 0.0, None, id="one link"),
    pytest.param((False,), [(0.0, 10.0, 25.0)], 25.0, 0.25, 0.0, None, id="turned round, at a row"),
    pytest.param((True,), [(0.0, 10.0, 25.0, 40.0)], 32.0, 0.5, 14.0, "p0", id="extinct ridge"),
    pytest.param(
        (True, False), [(0.0, 20.0, 40.0), (0.0, 15.0, 40.0)], 30.0, 0.5, 0.0, None, id="two links"
    ),
]


@pytest.mark.parametrize(("directions", "ages", "age_ma", "share", "begun", "on"), SAMPLED)
def test_ellipses_against_monte_carlo(
    directions: tuple[bool, ...],
    ages: list[tuple[float, ...]],
    age_ma: float,
    share: float,
    begun: float,
    on: str | None,
) -> None:
    """Covariance within 2 % and 95 % of the draws inside, on both arms; sampling error 1.2 % and 0.1 %."""
    rng = np.random.default_rng(len(ages) + int(10 * share))
    chain = random_chain(rng, directions, ages, turn_deg=(5.0, 15.0))
    pair = ("p0", f"p{len(chain)}")
    history = History.from_rows(rows_of(chain))
    found = made(history, pair, [age_ma], share, (20.0, 30.0), begun, on or "")
    edges = {begun, age_ma, *(age for link in chain for age in link.ages if begun < age < age_ma)}
    pieces = 1 if len(chain) == 1 else 4
    nodes = np.unique(
        np.concatenate([np.linspace(a, b, pieces + 1) for a, b in zip(sorted(edges)[:-1], sorted(edges)[1:], strict=True)])
    )  # fmt: skip
    drawn = draw(rng, chain, DRAWS)
    start = unit(20.0, 30.0)
    origin = recompose(chain, begun, drawn) if on == "p0" else Rotation.identity()
    second = product(half_products(chain, nodes, 1.0 - share, drawn), origin)
    first = product(recompose(chain, age_ma, drawn).inv(), second)
    for side, turn in ((0, first), (1, second)):
        places = turn.apply(start)
        centre = places.mean(axis=0)
        steps = tangent_steps(centre / np.linalg.norm(centre), places) * RADIUS_KM
        major, minor, azimuth = (float(axis) for axis in found.axes[:3, 0, side, 0])
        a = np.deg2rad(azimuth)
        longer, shorter = np.array([np.sin(a), np.cos(a)]), np.array([np.cos(a), -np.sin(a)])
        matrix = (np.outer(longer, longer) * major**2 + np.outer(shorter, shorter) * minor**2) / FACTOR**2

        assert misfit(matrix, scatter(steps)) < 0.02
        assert 0.945 < inside(steps, major, minor, azimuth) < 0.955


def test_trail_covariance_in_plate_coordinates() -> None:
    """`C_x = [x]x C [x]x^T`, with C of the rotation and x the place on the plate."""
    c = np.array([[4.0, 1.0, -0.5], [1.0, 6.0, 0.7], [-0.5, 0.7, 8.0]]) * 1e-7
    rows = [
        Row("P", "F", 0.0, np.nan, np.nan, 0.0, np.zeros((3, 3))),
        Row("P", "F", 84.0, 60.0, -30.0, 25.0, c),
    ]
    trail = TrailMaker(History.from_rows(rows), "P", "F").make(
        Hotspots(["h"], np.array([20.0]), np.array([-20.0])), "84"
    )
    x = Rotation.from_rotvec(np.deg2rad(25.0) * unit(60.0, -30.0)).inv().apply(unit(20.0, -20.0))
    cross = np.array([[0, -x[2], x[1]], [x[2], 0, -x[0]], [-x[1], x[0], 0]])
    values = np.linalg.eigvalsh(cross @ c @ cross.T)[1:]

    assert (trail.lat_deg[0, 0], trail.lon_deg[0, 0]) == pytest.approx(lat_lon(x), abs=1e-11)
    sizes = trail.axes[1::-1, 0, 0] / FACTOR / RADIUS_KM
    assert sizes == pytest.approx(np.sqrt(values), rel=1e-9)
