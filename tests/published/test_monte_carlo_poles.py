"""Errors of finite poles, stage poles and rates against Monte Carlo by a program of its own.

Rows are drawn and recomposed as in simulation.py. Covariances and sigmas must agree within 2 %
(sampling error below 0.7 %, of rates 1.2 %), 95 % ellipses of poles must hold 94.5 to 95.5 % of
1e5 draws (0.07 %). All draws are seeded.
"""

from __future__ import annotations

from dataclasses import replace
from functools import cache
from typing import NamedTuple

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
from published.support import RADIUS_KM, lat_lon, unit
from scipy import stats
from scipy.spatial.transform import Rotation

from restore.geometry.rotations import Rotations
from restore.geometry.uncertain import Sensitivity
from restore.history.circuit import Circuit
from restore.history.poles import Pole, compare, finite_pole, stage_pole
from restore.history.rows import Row
from restore.history.store import History
from restore.motion.rates import Rates, rates

DRAWS = 100_000
HELD = (0.945, 0.955)
AGES = ((0.0, 12.0, 30.0, 55.0), (0.0, 20.0, 50.0), (0.0, 7.0, 33.0, 60.0))


class World(NamedTuple):
    """A random chain, its history, and the errors of its rows."""

    chain: list[Link]
    history: History
    errors: Draws


@cache
def world(directions: tuple[bool, ...], seed: int, draws: int = DRAWS) -> World:
    """One chain drawn once."""
    rng = np.random.default_rng([seed, len(directions)])
    chain = random_chain(rng, directions, AGES)
    return World(chain, History.from_rows(rows_of(chain)), draw(rng, chain, draws))


@cache
def at_age(directions: tuple[bool, ...], seed: int, age_ma: float) -> tuple[Rotation, Rotation]:
    """The mean rotation of a world's whole chain at an age, and its draws."""
    here = world(directions, seed)
    return recompose(here.chain, age_ma), recompose(here.chain, age_ma, here.errors)


def check_pole(pole: Pole, mean: Rotation, drawn: Rotation) -> None:
    """Covariance, ellipse of the pole and sigma of the angle of a rotation against its draws."""
    assert pole.covariance is not None
    vectors = drawn.as_rotvec()
    angles = np.linalg.norm(vectors, axis=1)
    record, error = pole.as_record(), pole.pole_error()
    centre = unit(record["pole_lat_deg"], record["pole_lon_deg"])
    shape, angle_sigma = error
    steps = np.rad2deg(tangent_steps(centre, vectors / angles[:, np.newaxis]))

    # rounding only
    assert np.abs(centre * np.deg2rad(record["angle_deg"]) - mean.as_rotvec()).max() < 1e-13
    assert misfit(pole.covariance, scatter(product(mean.inv(), drawn).as_rotvec())) < 0.02
    size = (float(value) for value in (shape.major_km, shape.minor_km, shape.azimuth_deg))
    assert HELD[0] < inside(steps, *size) < HELD[1]
    spread = np.rad2deg(np.sqrt(np.mean((angles - mean.magnitude()) ** 2)))
    assert angle_sigma == pytest.approx(spread, rel=0.02)


FINITE = [
    pytest.param((True,), 30.0, id="at a row"),
    pytest.param((False,), 41.0, id="between rows, turned round"),
    pytest.param((True, False, False), 44.0, id="three links"),
    pytest.param((False, True, False, True), 20.0, id="four links"),
]


@pytest.mark.parametrize(("directions", "age_ma"), FINITE)
def test_finite_poles(directions: tuple[bool, ...], age_ma: float) -> None:
    """A finite pole's covariance, 95 % ellipse in degrees of arc and angle sigma."""
    here = world(directions, 1)
    pole = finite_pole(here.history, "p0", f"p{len(here.chain)}", age_ma)

    check_pole(pole, *at_age(directions, 1, age_ma))


STAGES = [
    pytest.param((True,), 50.0, 35.0, id="between the same rows"),
    pytest.param((False,), 50.0, 20.0, id="across a row, turned round"),
    pytest.param((True, False), 46.0, 9.0, id="two links, several rows"),
    pytest.param((True, True), 20.0, 0.0, id="to the present"),
]


@pytest.mark.parametrize("coordinates", ["relative-to", "plate"])
@pytest.mark.parametrize(("directions", "older", "younger"), STAGES)
def test_stage_poles(directions: tuple[bool, ...], older: float, younger: float, coordinates: str) -> None:
    """A stage from the older to the younger age, in coordinates of the partner or of the plate.

    Both ends are drawn with the same errors of the rows, so that shared rows cancel.
    """
    here = world(directions, 2)
    pole = stage_pole(here.history, "p0", f"p{len(here.chain)}", older, younger, coordinates)

    ends = zip(at_age(directions, 2, older), at_age(directions, 2, younger), strict=True)
    in_plate = coordinates == "plate"

    check_pole(
        pole,
        *(product(old.inv(), young) if in_plate else product(young, old.inv()) for old, young in ends),
    )


def test_a_stage_seen_from_the_plate_is_in_its_coordinates() -> None:
    """Naming the plate itself as the frame gives the pole and the errors of `plate` (a law).

    `R1^-1 (R1 R2^-1) R1 = R2^-1 R1`; rounding, against covariances of 1e-6 rad^2.
    """
    here = world((True, False), 2)
    named, own = (stage_pole(here.history, "p0", "p2", 46.0, 9.0, c) for c in ("p0", "plate"))

    assert float(named.rotation.angle_to(own.rotation)) < 1e-14
    assert np.abs(named.covariance - own.covariance).max() < 1e-19


@pytest.mark.parametrize("directions", [(True, True), (False, True, False)])
def test_stage_poles_in_a_third_frame(directions: tuple[bool, ...]) -> None:
    """The pole as the partner stood in a frame at the younger age: that link's error counts."""
    here = world(directions, 3)
    inner, outer = here.chain[:-1], here.chain[-1:]
    partner, frame = f"p{len(inner)}", f"p{len(here.chain)}"
    pole = stage_pole(here.history, "p0", partner, 46.0, 25.0, frame)

    def stage(errors: Draws | None) -> Rotation:
        first, last = (None, None) if errors is None else (errors[:-1], errors[-1:])
        old, young = (recompose(inner, age, first) for age in (46.0, 25.0))
        turn = recompose(outer, 25.0, last)
        return product(product(turn, product(young, old.inv())), turn.inv())

    check_pole(pole, stage(None), stage(here.errors))


def test_cross_covariance_of_two_ages() -> None:
    """Rotations of one chain at two ages share rows: `sum J1 C J2^T` is the draws' cross moment."""
    here = world((True, False), 4)
    found = Circuit(here.history, "p2").rotations("p0", [36.0, 45.0])
    both = found.sensitivity()
    one, other = (Sensitivity(both.rows[i], both.matrices[i]) for i in range(2))
    cross = one.cross_covariance(other, here.history.row_errors())
    ends = [at_age((True, False), 4, age) for age in (36.0, 45.0)]
    steps = [product(mean.inv(), drawn).as_rotvec() for mean, drawn in ends]

    assert misfit(cross, steps[0].T @ steps[1] / DRAWS) < 0.02


RATE_DRAWS = 40_000
"""Enough for 0.35 % in a sigma."""

STEP_MYR = 0.01

RATES = [
    pytest.param((True,), 38.0, id="one link"),
    pytest.param((False,), 41.0, id="one link, turned round"),
    pytest.param((True,), 30.0, id="at a row: the stage just younger"),
    pytest.param((False, True), 0.0, id="at the present: the first stage"),
    pytest.param((True, False, True), 45.0, id="three links"),
]


@cache
def around(directions: tuple[bool, ...], age_ma: float) -> tuple[Rotation, Rotation, Rotation]:
    """Draws of the chain at an age, a step before and a step after it, all in one stage."""
    here = world(directions, 5, RATE_DRAWS)
    now, before, after = (
        recompose(here.chain, age, here.errors, stage_of=age_ma)
        for age in (age_ma, age_ma + STEP_MYR, age_ma - STEP_MYR)
    )
    return now, before, after


def velocities(directions: tuple[bool, ...], age_ma: float, at_on: str) -> tuple[np.ndarray, np.ndarray]:
    """Draws of the point (draws, 3) and of its velocity in mm/yr, by central differences.

    Steps inside the stage just younger: less than 1e-6 of the velocity is lost.
    """
    now, before, after = around(directions, age_ma)
    place = unit(33.0, 71.0)
    start = place if at_on == "plate" else now.inv().apply(place)
    return now.apply(start), (after.apply(start) - before.apply(start)) * RADIUS_KM / (2.0 * STEP_MYR)


def rate_found(directions: tuple[bool, ...], age_ma: float, at_on: str) -> Rates:
    """The rate of the chain's plate relative to the end of the chain, as restore has it."""
    here = world(directions, 5, RATE_DRAWS)
    return rates(here.history, "p0", f"p{len(directions)}", 33.0, 71.0, age_ma, at_on=at_on)


@pytest.mark.parametrize("at_on", ["plate", "relative-to"])
@pytest.mark.parametrize(("directions", "age_ma"), RATES)
def test_rates(directions: tuple[bool, ...], age_ma: float, at_on: str) -> None:
    """Sigmas of speed and azimuth and the covariance of east and north of a rate.

    A point of the plate is drawn with its chain, its east and north with it; a point fixed in the
    partner's coordinates stays.
    """
    found = rate_found(directions, age_ma, at_on)
    points, moving = velocities(directions, age_ma, at_on)
    level = np.hypot(points[:, 0], points[:, 1])
    east = np.stack([-points[:, 1] / level, points[:, 0] / level, np.zeros(len(level))], axis=1)
    north = np.cross(points, east)
    steps = np.stack([np.sum(moving * east, axis=1), np.sum(moving * north, axis=1)], axis=1)
    mean = np.array([found.east_mm_yr[0], found.north_mm_yr[0]])
    speed_sigma, azimuth_sigma = (float(sigma[0]) for sigma in found.sigmas())
    speeds = np.hypot(steps[:, 0], steps[:, 1])
    azimuths = np.rad2deg(np.arctan2(steps[:, 0], steps[:, 1])) - found.azimuth_deg[0]

    # the mean of the draws is off by its own sampling error, 1/200 of a sigma
    assert np.abs(steps.mean(axis=0) - mean).max() < 0.03 * np.sqrt(np.trace(found.covariance[0]))
    assert misfit(found.covariance[0], scatter(steps - mean)) < 0.02
    assert speed_sigma == pytest.approx(np.std(speeds - found.speed_mm_yr[0]), rel=0.02)
    assert azimuth_sigma == pytest.approx(np.std((azimuths + 180.0) % 360.0 - 180.0), rel=0.02)


def pole_of(seed: int, dof: float, exact: bool = False) -> tuple[Pole, np.ndarray]:
    """A finite pole from a single row, and the root of its covariance; `exact`: without error."""
    rng = np.random.default_rng(seed)
    shape = rng.standard_normal((3, 3)) * 5.0 / RADIUS_KM
    covariance = np.zeros((3, 3)) if exact else shape @ shape.T
    row = Row("a", "b", 20.0, 60.0, -39.0, 30.0, covariance, dof=dof)
    return finite_pole(History.from_rows([row]), "a", "b", 20.0), shape * (not exact)


def drawn_pole(pole: Pole, error: np.ndarray, scale: float = 1.0) -> Pole:
    """The pole with its rotation off by an error, its covariance as estimated."""
    mean = Rotation.from_rotvec(unit(60.0, -39.0) * np.deg2rad(30.0))
    wxyz = (mean * Rotation.from_rotvec(error)).as_quat(scalar_first=True)
    return replace(pole, rotation=Rotations.from_quaternions(wxyz), covariance=pole.covariance * scale)


@pytest.mark.parametrize(("dof", "exact"), [(np.inf, False), (np.inf, True), (8.0, True)])
def test_probabilities_of_differences(dof: float, exact: bool) -> None:
    """`compare` of two draws of one rotation gives probabilities that are uniform in 0..1.

    Two poles with known errors; one known exactly; one whose kappa was estimated with dof = 8
    (F(3, nu), Royer & Chang 1991), its estimate drawn as chi2_nu / nu. Kolmogorov's test on 2000
    seeded draws.
    """
    rng = np.random.default_rng(11)
    (one, root), (other, other_root) = pole_of(1, dof), pole_of(2, np.inf, exact)
    found = []
    for _ in range(2000):
        scale = rng.chisquare(dof) / dof if np.isfinite(dof) else 1.0
        first = drawn_pole(one, root @ rng.standard_normal(3), scale)
        second = drawn_pole(other, other_root @ rng.standard_normal(3))
        found.append(compare(first, second)["probability"])

    assert stats.kstest(found, "uniform").pvalue > 0.01


def test_difference_of_two_rotations() -> None:
    """The greatest distance between two rotations is their angle times the radius.

    Exact: 0.5 deg about any axis, on 30 deg about 60N 39W, is 55.5975 km apart at most.
    """
    pole, _ = pole_of(1, np.inf)
    turned = drawn_pole(pole, unit(10.0, 20.0) * np.deg2rad(0.5))
    record = compare(pole, turned)

    # 111.195080 km per degree (constants.csv, computed by a separate small program), on R1
    assert record["greatest_km"] == pytest.approx(0.5 * 111.195080, abs=1e-5)
    assert record["angle_deg"] == pytest.approx(0.5, abs=1e-10)
    assert record["probability"] < 1e-6


def test_poles_keep_their_places() -> None:
    """The pole that a row states is the pole that is drawn about (60N 39W, 30 deg)."""
    record = pole_of(1, np.inf)[0].as_record()
    vector = Rotation.from_rotvec(unit(60.0, -39.0) * np.deg2rad(30.0)).as_rotvec()

    assert (record["pole_lat_deg"], record["pole_lon_deg"]) == pytest.approx(lat_lon(vector), abs=1e-10)
