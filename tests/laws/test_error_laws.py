"""Laws of errors: Jacobians by the rows, covariances however the chain is written."""

import math
from dataclasses import replace

import numpy as np
from hypothesis import assume, given, settings
from hypothesis import strategies as st
from scipy.spatial.transform import Rotation
from strategies import (
    R_M,
    Case,
    assert_within,
    cases,
    chain_cases,
    dated_cases,
    latitudes,
    longitudes,
    perturbed,
    times_in,
    turned_round,
    vector_of,
)

from restore.geometry import so3
from restore.geometry.uncertain import Sensitivity
from restore.history.circuit import Circuit
from restore.history.rows import Row
from restore.history.store import History
from restore.motion.points import Points, Spread, move_common, move_own

# central differences with this step leave step^2 = 1e-10 of truncation and 1e-15 / step of rounding
STEP_RAD = 1e-5
# an error of 10 km in a row is then followed to 0.1 mm
JACOBIAN = 1e-8


def numerical_jacobian(case: Case, age_ma: float, number: int) -> np.ndarray:
    """d u / d u_row of the chain's rotation `A expm([u]x)`, by scipy and central differences."""
    home = case.rotation(age_ma).inv()
    columns = []
    for axis in np.eye(3):
        ends = [
            case.with_row(number, perturbed(case.rows[number], sign * STEP_RAD * axis))
            for sign in (1.0, -1.0)
        ]
        plus, minus = ((home * end.rotation(age_ma)).as_rotvec() for end in ends)
        columns.append((plus - minus) / (2.0 * STEP_RAD))
    return np.stack(columns, axis=-1)


def jacobian_of(sensitivity: Sensitivity, number: int) -> np.ndarray:
    """The Jacobian by one row, zero if the row was not used; each row may stand once."""
    places = np.flatnonzero(sensitivity.rows[0] == number)
    assert len(places) <= 1
    return sensitivity.matrices[0, places[0]] if len(places) else np.zeros((3, 3))


@settings(max_examples=20)
@given(dated_cases())
def test_the_sensitivity_is_the_derivative_by_every_row(dated):
    """Jacobians agree with finite differences for every row, used or not, inverse links too."""
    case, age = dated
    circuit = Circuit(case.history(), case.frame)
    sensitivity = circuit.at(case.plate, age).sensitivity()
    for number in range(len(case.rows)):
        misfit = jacobian_of(sensitivity, number) - numerical_jacobian(case, age, number)
        assert_within(misfit, JACOBIAN, f"row {number}")


@settings(max_examples=20)
@given(dated_cases(most_links=3, errors=True))
def test_the_covariance_is_the_sum_over_rows(dated):
    """C = sum J C_row J^T with the numerical Jacobians; rows of age 0 bring exactly nothing."""
    case, age = dated
    found = Circuit(case.history(), case.frame).at(case.plate, age)
    total = np.zeros((3, 3))
    for number, row in enumerate(case.rows):
        if row.age_ma > 0.0:
            jacobian = numerical_jacobian(case, age, number)
            total += jacobian @ row.covariance @ jacobian.T
    scale = sum(np.trace(r.covariance) for r in case.rows if r.age_ma > 0.0)
    assert_within(found.covariance()[0] - total, 1e-7 * scale)


@given(dated_cases(errors=True))
def test_covariances_are_symmetric_and_not_negative(dated):
    """Symmetric to the last bit, no eigenvalue below rounding; zero today; shares sum to one."""
    case, age = dated
    circuit = Circuit(case.history(), case.frame)
    errors = case.history().row_errors()
    sensitivity = circuit.at(case.plate, age).sensitivity()
    covariance = sensitivity.covariance(errors)[0]
    assert np.array_equal(covariance, covariance.T)
    values = np.linalg.eigvalsh(covariance)
    assert values[0] >= -1e-14 * max(values[-1], 0.0)
    assert not np.any(circuit.at(case.plate, 0.0).covariance())
    # at 5e-324 Ma the variance is below the smallest float
    if np.trace(covariance) > 1e-290:
        assert_within(sensitivity.variance_shares(errors).sum() - 1.0, 1e-12)


@given(chain_cases(errors=True, least_links=2), st.data())
def test_bracketing_leaves_the_covariance_alone(case, data):
    """A relative to C, direct or through any other plate's frame, has one and the same covariance.

    The rows between the detour and the chain cancel: `u = u_A - (R_C^-1 R_A)^T u_C`.
    """
    age = data.draw(times_in(case))
    history = case.history()
    errors = history.row_errors()
    via = Circuit(history, data.draw(st.sampled_from(history.plates())))
    a, c = via.at(case.plate, age), via.at(case.frame, age)
    relative = c.rotations.inverse() @ a.rotations
    back = -relative.inverse().as_matrices().reshape(1, 3, 3)
    detour = Sensitivity.combined([a.sensitivity(), c.sensitivity().mapped(back)])
    direct = Circuit(history, case.frame).at(case.plate, age).sensitivity()
    size = max(np.trace(direct.covariance(errors)[0]), 1e-20)
    assert_within(detour.covariance(errors) - direct.covariance(errors), 1e-11 * size)
    for number in range(len(case.rows)):
        assert_within(jacobian_of(detour, number) - jacobian_of(direct, number), 1e-13)


@given(dated_cases(errors=True))
def test_the_inverse_has_the_covariance_of_the_other_side(dated):
    """C(A^-1) = A C A^T: the frame relative to the plate, in the frame's coordinates."""
    case, age = dated
    history = case.history()
    there = Circuit(history, case.frame).at(case.plate, age)
    back = Circuit(history, case.plate).at(case.frame, age)
    matrix = case.rotation(age).as_matrix()
    turned = matrix @ there.covariance()[0] @ matrix.T
    assert_within(back.covariance()[0] - turned, 1e-12 * max(np.trace(turned), 1e-20))


def spread_of(case: Case, lat: float, lon: float, age: float, common: bool = False) -> Spread:
    """Variances of one point restored with the case's history."""
    circuit = Circuit(case.history(), case.frame)
    points = Points(np.array([lat]), np.array([lon]), circuit.codes([case.plate]))
    move = move_common if common else move_own
    spread = move(circuit, points, np.array([age]), errors=True).spread
    assert spread is not None
    return spread


@given(cases(errors=True), latitudes(), longitudes(), st.data())
def test_a_pair_listed_the_other_way_round_gives_the_same_ellipses(case, lat, lon, data):
    """Rotation inverted and covariance A C A^T: the 95 % ellipse stays, assert_within a millimetre.

    The azimuth is measured as what it moves the end of the longer axis.
    """
    age = data.draw(times_in(case))
    pairs = sorted({(r.plate, r.relative_to) for r in case.rows})
    turned = data.draw(st.sets(st.sampled_from(pairs), min_size=1))
    rows = [turned_round(r) if (r.plate, r.relative_to) in turned else r for r in case.rows]
    one, _ = spread_of(case, lat, lon, age).ellipse(R_M)
    other, _ = spread_of(replace(case, rows=tuple(rows)), lat, lon, age).ellipse(R_M)
    assert_within(one.major_km - other.major_km, 1e-3)
    assert_within(one.minor_km - other.minor_km, 1e-3)
    off = math.remainder(float(one.azimuth_deg[0] - other.azimuth_deg[0]), 180.0)
    assert_within(math.radians(off) * (one.major_km - one.minor_km), 1e-3)


@settings(max_examples=20)
@given(cases(most_links=3, errors=True), latitudes(), longitudes(), st.data())
def test_the_spread_of_a_point_is_the_derivative_of_its_place(case, lat, lon, data):
    """East, north and mixed variances agree with finite differences of the restored place.

    By own age and by common age, in the tangent plane, at the poles too.
    """
    age = data.draw(times_in(case))
    start = vector_of(lat, lon)
    there = case.rotation(age).apply(start)
    east, north = tangent_at(there)
    total = np.zeros((2, 2))
    for number, row in enumerate(case.rows):
        if row.age_ma == 0.0:
            continue
        jacobian = np.empty((2, 3))
        for k, axis in enumerate(np.eye(3) * STEP_RAD):
            plus, minus = (
                case.with_row(number, perturbed(row, step)).rotation(age).apply(start)
                for step in (axis, -axis)
            )
            jacobian[:, k] = np.stack([east, north]) @ (plus - minus) / (2.0 * STEP_RAD)
        total += jacobian @ row.covariance @ jacobian.T
    scale = sum(np.trace(r.covariance) for r in case.rows if r.age_ma > 0.0)
    for common in (False, True):
        spread = spread_of(case, lat, lon, age, common)
        found = [float(v.ravel()[0]) for v in (spread.east, spread.north, spread.cov)]
        # near a pole east is ill defined; the sum of the variances and the determinant are not
        assert_within(found[0] + found[1] - np.trace(total), 1e-7 * scale)
        if abs(there[2]) < 0.99999:
            truth = [total[0, 0], total[1, 1], total[0, 1]]
            assert_within(np.array(found) - truth, 1e-7 * scale)


def tangent_at(x: np.ndarray) -> tuple[np.ndarray, np.ndarray]:
    """East and north at a place, from cross products with the axis of the globe."""
    east = np.cross([0.0, 0.0, 1.0], x)
    size = np.linalg.norm(east)
    east = np.array([0.0, 1.0, 0.0]) if size < 1e-12 else east / size
    north = np.cross(x, east)
    return east, north / np.linalg.norm(north)


@settings(max_examples=20)
@given(chain_cases(most_links=3), latitudes(), longitudes(), st.floats(0.05, 0.95))
def test_the_age_sigma_of_a_site_spreads_it_along_its_motion(case, lat, lon, part):
    """With rows known exactly, a site's age sigma gives |speed| x sigma along the motion, no more.

    Speed by central differences of scipy's positions over 2e-4 Myr.
    """
    rows = tuple(replace(r, covariance=np.zeros((3, 3)) if r.age_ma > 0.0 else None) for r in case.rows)
    case = replace(case, rows=rows)
    age = part * case.oldest_ma
    # at a row the speed jumps, and a difference across the jump is neither
    assume(min(abs(age - row_age) for row_age in case.row_ages()) > 1e-3)
    circuit = Circuit(case.history(), case.frame)
    sigma = 0.25
    points = Points(np.array([lat]), np.array([lon]), circuit.codes(["p0"]), age_sigma=np.array([sigma]))
    found = move_own(circuit, points, np.array([age]), errors=True).spread
    start = vector_of(lat, lon)
    before, after = (case.rotation(t).apply(start) for t in (age - 1e-4, age + 1e-4))
    step = (after - before) / 2e-4 * sigma
    assert found is not None
    assert_within((math.sqrt(float(found.east[0] + found.north[0])) - np.linalg.norm(step)) * R_M, 0.1)
    determinant = float(found.east[0] * found.north[0] - found.cov[0] ** 2)
    assert_within(determinant, 1e-13 * float(found.east[0] + found.north[0]) ** 2)
    there = case.rotation(age).apply(start)
    # near a pole east is ill defined
    if abs(there[2]) < 0.99999:
        east, north = (float(step @ axis) for axis in tangent_at(there))
        assert_within(
            (float(found.cov[0]) - east * north) * R_M**2, 0.1 * R_M * np.linalg.norm(step) + 1e-6
        )


def three_row_history() -> History:
    """A zero row, a row of unknown error at 10 Ma and a known one at 59 Ma."""
    known = np.eye(3) * (5_000.0 / R_M) ** 2
    rows = [
        Row("A", "B", 0.0, 0.0, 0.0, 0.0),
        Row("A", "B", 10.0, 40.0, 50.0, 5.0),
        Row("A", "B", 59.0, 40.0, 60.0, 25.0, covariance=known),
    ]
    return History.from_rows(rows)


def test_an_unknown_row_error_spreads_to_every_result_that_uses_it():
    """Between 0 and 59 Ma the row of unknown error at 10 Ma has a say everywhere but at 0 Ma."""
    circuit = Circuit(three_row_history(), "B")
    found = circuit.rotations("A", [0.0, 1.0, 10.0, 30.0, 58.0])
    unknown = np.isnan(found.covariance()).any(axis=(1, 2))
    assert unknown.tolist() == [False, True, True, True, True]


def test_at_the_exact_age_of_the_oldest_row_only_that_row_has_a_say():
    """At 59 Ma the error is the row's own, whatever is not known at 10 Ma.

    49 * (1 / 49) is not 1 in float64, so the fraction of the stage must not be computed that way.
    """
    history = three_row_history()
    circuit = Circuit(history, "B")
    found = circuit.at("A", 59.0)
    assert_within(found.covariance()[0] - history.rows.covariance[2], 1e-20)
    assert np.flatnonzero(found.sensitivity().rows[0] == 1).size == 0
    points = Points(np.array([10.0]), np.array([20.0]), circuit.codes(["A"]))
    for move in (move_own, move_common):
        spread = move(circuit, points, np.array([59.0]), errors=True).spread
        assert spread is not None
        assert np.isfinite(spread.east).all()


def test_a_rotation_without_an_answer_has_no_covariance():
    """Outside the history the covariance is NaN like the rotation, never an exact zero."""
    circuit = Circuit(three_row_history(), "B")
    found = circuit.rotations(["A", "A", "nobody"], [20.0, 60.0, 20.0])
    assert np.isnan(found.rotations.quaternions[1:]).all()
    assert np.isnan(found.covariance()[1:]).all()


def test_the_frame_itself_is_known_exactly():
    """The frame relative to itself is the zero rotation with covariance exactly zero."""
    found = Circuit(three_row_history(), "B").at("B", 20.0)
    assert np.array_equal(found.rotations.as_quaternions().reshape(4), [1.0, 0.0, 0.0, 0.0])
    assert not found.covariance().any()


@given(dated_cases(most_links=4, errors=True), st.data())
def test_shared_rows_cancel_between_two_results(dated, data):
    """Cov(u1 - u2) = C1 + C2 - X - X^T, X the cross-covariance; equal ages give nothing."""
    case, age = dated
    other_age = data.draw(times_in(case))
    history = case.history()
    errors = history.row_errors()
    circuit = Circuit(history, case.frame)
    one, other = (circuit.at(case.plate, t).sensitivity() for t in (age, other_age))
    minus = -np.eye(3).reshape(1, 3, 3)
    difference = Sensitivity.combined([one, other.mapped(minus)]).covariance(errors)[0]
    crossed = one.cross_covariance(other, errors)[0]
    total = one.covariance(errors)[0] + other.covariance(errors)[0] - crossed - crossed.T
    assert_within(difference - total, 1e-12 * max(np.trace(total), np.trace(one.covariance(errors)[0])))
    same = Sensitivity.combined([one, one.mapped(minus)])
    assert not same.covariance(errors).any()


def test_pulling_back_through_a_stage_is_the_transpose_of_its_matrix():
    """`pull_back_stage` applies G^T, at fractions inside and outside the stage."""
    random = np.random.default_rng(41)
    for _ in range(50):
        vector, covector = random.normal(size=3) * 0.5, random.normal(size=3)
        size = np.linalg.norm(vector)
        fraction = random.uniform(-0.5, 1.5)
        weights = so3.stage_weights(fraction, 0.5 * size)
        pulled = so3.pull_back_stage(covector, vector / size, weights)
        matrix = numerical_stage_jacobian(vector, fraction)
        assert_within(pulled - matrix.T @ covector, 1e-8)


def numerical_stage_jacobian(vector: np.ndarray, fraction: float) -> np.ndarray:
    """d u / d u2 of exp(f log(exp(s) exp(u2))), by scipy and central differences."""
    home = Rotation.from_rotvec(fraction * vector).inv()
    columns = []
    for axis in np.eye(3) * STEP_RAD:
        ends = [Rotation.from_rotvec(vector) * Rotation.from_rotvec(u) for u in (axis, -axis)]
        steps = [(home * Rotation.from_rotvec(fraction * e.as_rotvec())).as_rotvec() for e in ends]
        columns.append((steps[0] - steps[1]) / (2.0 * STEP_RAD))
    return np.stack(columns, axis=-1)
