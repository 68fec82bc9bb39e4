"""No function writes to its arguments, nor needs to: read-only arrays give the same bits."""

from collections.abc import Callable
from typing import Any

import numpy as np
import pytest
from strategies import random_quaternions

from restore.geometry import latitudes, so3, sphere, uncertain
from restore.geometry.rotations import Rotations
from restore.history.circuit import Circuit
from restore.history.rows import Row
from restore.history.store import History
from restore.motion.ages import parse_ages
from restore.motion.points import Points, move_common, move_own

COUNT = 6


def drawn(seed: int, *shape: int) -> np.ndarray:
    return np.random.default_rng(seed).uniform(-0.9, 0.9, shape)


def units(seed: int) -> np.ndarray:
    v = np.random.default_rng(seed).normal(size=(COUNT, 3))
    return v / np.linalg.norm(v, axis=1, keepdims=True)


QA, QB = random_quaternions(51, COUNT), random_quaternions(52, COUNT)
MATRICES = so3.matrices(QA)
VA, VB = drawn(53, COUNT, 3), drawn(54, COUNT, 3)
XA, XB = units(55), units(56)
F = np.abs(drawn(57, COUNT))
LAT, LON = drawn(58, COUNT) * 90.0, drawn(59, COUNT) * 200.0
ROWS = np.array([[0, 1], [1, 1], [2, -1], [0, 2], [-1, -1], [2, 2]])
ARC = so3.arc(QA, QB)
ERRORS = uncertain.RowErrors.from_covariances(np.stack([np.eye(3)] * 3), np.full(3, 10.0))
WEIGHTS = so3.stage_weights(F, ARC.half)
SPREAD = drawn(60, COUNT, 2, 3, 3)


def sensed(rows: np.ndarray, matrices: np.ndarray) -> uncertain.Sensitivity:
    return uncertain.Sensitivity(rows, matrices)


CALLS: dict[str, tuple[Callable[..., Any], tuple[np.ndarray, ...]]] = {
    "multiply": (so3.multiply, (QA, QB)),
    "conjugate": (so3.conjugate, (QA,)),
    "normalise": (so3.normalise, (QA * 3.0,)),
    "canonical": (so3.canonical, (QA,)),
    "exponential": (so3.exponential, (VA,)),
    "logarithm": (so3.logarithm, (QA,)),
    "angle": (so3.angle, (QA,)),
    "rotate": (so3.rotate, (QA, XA)),
    "rotate_back": (so3.rotate_back, (QA, XA)),
    "matrices": (so3.matrices, (QA,)),
    "from_matrices": (so3.from_matrices, (MATRICES,)),
    "arc": (so3.arc, (QA, QB)),
    "along_arc": (so3.along_arc, (ARC.start, ARC.side, np.cos(F), np.sin(F))),
    "slerp": (so3.slerp, (QA, QB, F)),
    "skew": (so3.skew, (VA,)),
    "right_jacobian": (so3.right_jacobian, (VA,)),
    "stage_weights": (so3.stage_weights, (F, ARC.half)),
    "stage_jacobian": (so3.stage_jacobian, (VA, F)),
    "pull_back_stage": (lambda c, a: so3.pull_back_stage(c, a, WEIGHTS), (VA, XA)),
    "unit_vectors": (sphere.unit_vectors, (LAT, LON)),
    "lat_lon": (sphere.lat_lon, (XA,)),
    "wrap_longitude": (sphere.wrap_longitude, (LON,)),
    "unit_vectors_from_colatitude": (sphere.unit_vectors_from_colatitude, (LAT + 90.0, LON)),
    "colatitude_east_longitude": (sphere.colatitude_east_longitude, (XA,)),
    "dot": (sphere.dot, (XA, XB)),
    "cross": (sphere.cross, (XA, XB)),
    "length": (sphere.length, (VA,)),
    "angular_distance": (sphere.angular_distance, (XA, XB)),
    "distance_km": (sphere.distance_km, (XA, XB)),
    "tangent_frame": (sphere.tangent_frame, (XA,)),
    "azimuth_deg": (sphere.azimuth_deg, (XA, XB)),
    "compass_deg": (sphere.compass_deg, (VA[:, 0], VA[:, 1])),
    "destination": (sphere.destination, (XA, LON, F)),
    "geocentric_from_geodetic": (latitudes.geocentric_from_geodetic, (LAT,)),
    "geodetic_from_geocentric": (latitudes.geodetic_from_geocentric, (LAT,)),
    "inward": (latitudes.Latitudes("geodetic").inward, (LAT,)),
    "outward": (latitudes.Latitudes("geodetic").outward, (LAT,)),
    "confidence_factor": (uncertain.confidence_factor, (np.array([5.0, np.inf, np.nan]),)),
    "ellipse": (lambda e, n, c: uncertain.ellipse(e, n, c, 2.0, 1.0), (F + 1.0, F + 2.0, F)),
    "combined": (
        lambda r, m: uncertain.Sensitivity.combined([sensed(r, m), sensed(r, m)]).matrices,
        (ROWS, SPREAD),
    ),
    "covariance": (lambda r, m: sensed(r, m).covariance(ERRORS), (ROWS, SPREAD)),
    "effective_dof": (lambda r, m: sensed(r, m).effective_dof(ERRORS), (ROWS, SPREAD)),
    "variance_shares": (lambda r, m: sensed(r, m).variance_shares(ERRORS), (ROWS, SPREAD)),
    "cross_covariance": (
        lambda r, m: sensed(r, m).cross_covariance(sensed(r, m), ERRORS),
        (ROWS, SPREAD),
    ),
    "mapped": (lambda m, a: sensed(ROWS, m).mapped(a).matrices, (SPREAD, MATRICES)),
    "from_covariances": (
        lambda c, d: uncertain.RowErrors.from_covariances(c, d).covariance,
        (np.full((2, 3, 3), np.nan), np.array([np.nan, 4.0])),
    ),
    "significance": (lambda v, c: tuple(uncertain.significance(v, c)), (VA[0], np.eye(3))),
    "from_poles": (lambda *a: Rotations.from_poles(*a).quaternions, (LAT, LON, LON * F)),
    "from_quaternions": (lambda q: Rotations.from_quaternions(q).quaternions, (QA * 2.0,)),
    "from_vectors": (lambda v: Rotations.from_vectors(v).quaternions, (VA,)),
    "Rotations.from_matrices": (lambda m: Rotations.from_matrices(m).quaternions, (MATRICES,)),
    "apply": (lambda q, x: Rotations(q).apply(x), (QA, XA)),
    "power": (lambda q, n: Rotations(q).power(n).quaternions, (QA, F)),
    "as_poles": (lambda q: Rotations(q).as_poles(), (QA,)),
    "parse_ages": (parse_ages, (F,)),
}


def bits(result: Any) -> list[np.ndarray]:
    """The arrays of a result, whatever it is made of."""
    if isinstance(result, tuple):
        return [part for item in result for part in bits(item)]
    return [np.array(result)]


@pytest.mark.parametrize("name", CALLS)
def test_arguments_are_left_alone(name):
    """Arguments hold the same bits after the call, and read-only ones give the same result."""
    function, arguments = CALLS[name]
    mine = [a.copy() for a in arguments]
    result = bits(function(*mine))
    for before, after in zip(arguments, mine, strict=True):
        assert np.array_equal(before, after, equal_nan=True)
    for array in mine:
        array.flags.writeable = False
    for one, other in zip(result, bits(function(*mine)), strict=True):
        assert np.array_equal(one, other, equal_nan=True)


@pytest.mark.parametrize("name", CALLS)
def test_results_do_not_share_memory_with_arguments(name):
    """A result can be written to without changing what was passed in.

    The start of an arc is the first quaternion itself, by design.
    """
    function, arguments = CALLS[name]
    mine = [a.copy() for a in arguments]
    result = function(*mine)
    for part in result if isinstance(result, tuple) else (result,):
        if name == "arc" and part is result[0]:
            continue
        assert not any(np.shares_memory(np.asarray(part), array) for array in mine)


@pytest.mark.parametrize("move", [move_own, move_common])
def test_moving_leaves_points_and_ages_alone(move):
    """Points, codes, sigmas and ages are as they were after a restoration with errors."""
    rows = [
        Row("A", "B", 0.0, 0.0, 0.0, 0.0),
        Row("A", "B", 50.0, 60.0, -30.0, 20.0, covariance=np.eye(3) * 1e-7),
    ]
    circuit = Circuit(History.from_rows(rows), "B", beyond="hold")
    ages = np.linspace(0.0, 60.0, COUNT)
    columns = [LAT.copy(), LON.copy(), np.repeat(circuit.codes(["A"]), COUNT), F * 1e-4, F]
    before = [c.copy() for c in columns]
    points = Points(*columns[:3], position_sigma=columns[3], age_sigma=columns[4])
    for array in (*columns, ages):
        array.flags.writeable = False
    moved = move(circuit, points, ages, errors=True, threads=2)
    assert np.isfinite(moved.lat_deg).all()
    for one, other in zip(before, columns, strict=True):
        assert np.array_equal(one, other)
    assert np.array_equal(ages, np.linspace(0.0, 60.0, COUNT))


def test_a_circuit_leaves_its_questions_alone():
    """Labels and ages that are asked of a Circuit are not written to."""
    rows = [Row("A", "B", 0.0, 0.0, 0.0, 0.0), Row("A", "B", 50.0, 60.0, -30.0, 20.0)]
    circuit = Circuit(History.from_rows(rows), "B", beyond="hold")
    labels = np.array(["A", "B", "nobody", "A"], dtype=object)
    ages = np.array([70.0, 10.0, 20.0, np.nan])
    labels.flags.writeable = ages.flags.writeable = False
    found = circuit.rotations(labels, ages)
    assert found.status.tolist() == [0, 0, 2, 2]
    assert found.ages[0] == 50.0
    assert ages[0] == 70.0
