"""Laws of angular velocities: derivatives in age, and how they follow every row's error."""

import numpy as np
from hypothesis import assume, given, settings
from hypothesis import strategies as st
from strategies import (
    Case,
    assert_within,
    cases,
    chain_cases,
    dated_cases,
    partner_cases,
    perturbed,
    times_in,
)

from restore.history.circuit import Circuit
from restore.history.rows import Row
from restore.history.store import History
from restore.history.velocity import Functional, angular_velocity, sensitivity

# one-sided differences of second order over this step leave 3e-10 rad/Myr of truncation at the
# fastest chains drawn (0.3 rad/Myr) and 1e-15 rad / step = 1e-11 rad/Myr of rounding
STEP_MYR = 1e-4
# 1e-8 rad/Myr is 6e-5 mm/yr on the ground
VELOCITY = 1e-8
STEP_RAD = 1e-5


def velocity_of(case: Case, age_ma: float) -> np.ndarray:
    circuit = Circuit(case.history(), case.frame)
    return angular_velocity(circuit.at(case.plate, age_ma))[0]


def numerical_velocity(case: Case, age_ma: float) -> np.ndarray:
    """eta, forward in time, of `A(t - h) = A(t) expm([eta]x h)`, by scipy's positions just younger.

    At 0 Ma there is nothing younger: the first stage is taken, with -h.
    """
    home = case.rotation(age_ma).inv()
    h = STEP_MYR if age_ma > 0.0 else -STEP_MYR
    near, far = ((home * case.rotation(age_ma - k * h)).as_rotvec() for k in (1, 2))
    return (4.0 * near - far) / (2.0 * h)


def clear_of_other_rows(case: Case, age_ma: float) -> bool:
    """Whether no row lies so close below an age that differences would reach across it."""
    return all(age == age_ma or abs(age - age_ma) > 1e-3 for age in case.row_ages())


@given(dated_cases())
def test_the_angular_velocity_is_the_derivative_by_age(dated):
    """eta agrees with one-sided differences towards the present, at rows' ages too."""
    case, age = dated
    assume(clear_of_other_rows(case, age))
    assert_within(velocity_of(case, age) - numerical_velocity(case, age), VELOCITY)


@given(partner_cases())
def test_at_a_partner_change_the_rate_is_that_of_the_younger_chain(case):
    """At the shared age the rate belongs to the stage just younger, along the younger partner."""
    change = case.legs[0].older_ma
    assume(clear_of_other_rows(case, change))
    assert_within(velocity_of(case, change) - numerical_velocity(case, change), VELOCITY)


@given(dated_cases())
def test_the_other_way_round_the_velocity_is_opposite(dated):
    """The frame relative to the plate turns opposite to eta, seen in the frame's coordinates.

    To rounding of velocities that reach 0.3 rad/Myr.
    """
    case, age = dated
    history = case.history()
    eta = velocity_of(case, age)
    back = angular_velocity(Circuit(history, case.plate).at(case.frame, age))[0]
    assert_within(case.rotation(age).apply(eta) + back, 1e-14)


def test_without_an_answer_there_is_no_velocity():
    """Where the history has no answer the velocity is NaN."""
    rows = [Row("A", "B", 0.0, 0.0, 0.0, 0.0), Row("A", "B", 10.0, 40.0, 50.0, 5.0)]
    found = Circuit(History.from_rows(rows), "B").rotations(["A", "A", "B"], [5.0, 11.0, 5.0])
    velocity = angular_velocity(found)
    assert np.isfinite(velocity[0]).all()
    assert np.isnan(velocity[1]).all()
    assert not velocity[2].any()


def test_one_stage_has_its_own_velocity():
    """5 degrees in 10 Myr about the pole 40N 50E, to the past: 0.5 deg/Myr about its antipode.

    The same at every age of the stage, 0 and 10 Ma included, and in the coordinates of both plates.
    """
    rows = [Row("A", "B", 0.0, 0.0, 0.0, 0.0), Row("A", "B", 10.0, 40.0, 50.0, 5.0)]
    found = Circuit(History.from_rows(rows), "B").rotations("A", [0.0, 3.0, 10.0])
    lat, lon = np.radians([40.0, 50.0])
    pole = [np.cos(lat) * np.cos(lon), np.cos(lat) * np.sin(lon), np.sin(lat)]
    assert_within(angular_velocity(found) + np.radians(0.5) * np.array(pole), 1e-16)


@settings(max_examples=12)
@given(cases(most_links=4), st.data())
def test_linear_results_follow_the_rows(case, data):
    """`sensitivity` of c . u + b . d eta agrees with differences for every row, used or not.

    Central differences with a step of 1e-5 rad; a velocity answers an error by up to 2 / 0.3 Myr.
    Rows of age 0 cannot be moved: their error is zero by definition.
    """
    age = data.draw(times_in(case))
    random = np.random.default_rng(data.draw(st.integers(0, 1000)))
    on_rotation, on_velocity = random.normal(size=(2, 3, 3))
    results = [
        Functional(c.reshape(1, 3), b.reshape(1, 3)) for c, b in zip(on_rotation, on_velocity, strict=True)
    ]
    found = Circuit(case.history(), case.frame).at(case.plate, age)
    jacobians = sensitivity(found, results)
    for number, row in enumerate(case.rows):
        if row.age_ma == 0.0:
            continue
        truth = np.stack(
            [linear_change(case, age, number, a, on_rotation, on_velocity) for a in np.eye(3)],
            axis=-1,
        )
        places = np.flatnonzero(jacobians.rows[0] == number)
        assert len(places) <= 1
        mine = jacobians.matrices[0, places[0]] if len(places) else np.zeros((3, 3))
        assert_within(mine - truth, 1e-7)


def linear_change(
    case: Case,
    age: float,
    number: int,
    axis: np.ndarray,
    on_rotation: np.ndarray,
    on_velocity: np.ndarray,
) -> np.ndarray:
    """d (c . u + b . eta) by a small rotation of one row about an axis: three results at once."""
    home = case.rotation(age).inv()
    ends = [
        case.with_row(number, perturbed(case.rows[number], sign * STEP_RAD * axis)) for sign in (1.0, -1.0)
    ]
    turns = [(home * end.rotation(age)).as_rotvec() for end in ends]
    rates = [velocity_of(end, age) for end in ends]
    change = on_rotation @ (turns[0] - turns[1]) + on_velocity @ (rates[0] - rates[1])
    return change / (2.0 * STEP_RAD)


@given(chain_cases(most_links=5, errors=True), st.data())
def test_on_rotation_alone_is_the_sensitivity_of_the_circuit(case, data):
    """With unit covectors on u and none on the velocity the rows' Jacobians are the rotation's own.

    At a row's age one stage may be named instead of its neighbour; each row's Jacobian is the same.
    """
    age = data.draw(times_in(case))
    found = Circuit(case.history(), case.frame).at(case.plate, age)
    none = np.zeros((1, 3))
    mine = sensitivity(found, [Functional(e.reshape(1, 3), none) for e in np.eye(3)])
    errors = case.history().row_errors()
    scale = max((np.trace(c) for c in errors.covariance), default=0.0)
    assert_within(mine.covariance(errors) - found.covariance(), 1e-12 * scale)


@given(chain_cases(most_links=3, errors=True), st.floats(0.05, 0.95), st.floats(0.05, 0.95))
def test_a_stage_known_at_both_ends_has_one_velocity_error(case, one, other):
    """For a single link eta is the same at all ages of a stage, and so is its covariance."""
    case = Case(
        tuple(r for r in case.rows if {r.plate, r.relative_to} == {"p0", "p1"}),
        "p0",
        "p1",
        (),
        case.from_present,
    )
    ages = [0.0, min(r.age_ma for r in case.rows if r.age_ma > 0.0)]
    circuit = Circuit(case.history(), "p1")
    errors = case.history().row_errors()
    found = circuit.rotations("p0", [ages[1] * one, ages[1] * other])
    eta = angular_velocity(found)
    forward = case.rows[0].plate == "p0"
    none = np.zeros((2, 3))
    covariance = sensitivity(
        found, [Functional(none, np.broadcast_to(e, (2, 3))) for e in np.eye(3)]
    ).covariance(errors)
    scale = np.trace(covariance[0])
    # of a link listed the other way round the error is turned with the partner, so only eta stays
    assert_within(eta[0] - eta[1], 1e-15)
    if forward:
        assert_within(covariance[0] - covariance[1], 1e-12 * scale)
    assert np.linalg.eigvalsh(covariance[0])[0] >= -1e-14 * scale
