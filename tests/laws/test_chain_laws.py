"""Laws of chains: composed as the rows say, there and back, continuous in age, either way round."""

import itertools
import math
from dataclasses import replace

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st
from scipy.spatial.transform import Rotation
from strategies import (
    FASTEST_RAD_PER_MYR,
    R_M,
    Case,
    Leg,
    assert_within,
    cases,
    chain_cases,
    dated_cases,
    metres_apart,
    partner_cases,
    quaternions_apart,
    random_quaternions,
    row_of,
    times_in,
    turned_round,
    unit_vectors,
    vector_of,
)

from restore.geometry import so3
from restore.history.circuit import Circuit
from restore.history.rows import Row
from restore.history.store import History
from restore.history.velocity import angular_velocity
from restore.motion.points import Points, move_own

# each link rounds by some 2e-16 rad, the rows' degrees by as much again: 1e-14 rad is 6e-8 m
CHAIN_RAD = 1e-14


def quaternion(circuit: Circuit, plate: str, age_ma: float) -> np.ndarray:
    return circuit.at(plate, age_ma).rotations.quaternions.reshape(4)


def expected(case: Case, age_ma: float) -> np.ndarray:
    return case.rotation(age_ma).as_quat(scalar_first=True)


@given(dated_cases())
def test_a_chain_is_composed_as_its_rows_say(dated):
    """Chains of 1 to 6 links, pairs in both directions and partner changes agree with scipy."""
    case, age = dated
    found = quaternion(Circuit(case.history(), case.frame), case.plate, age)
    assert_within(quaternions_apart(found, expected(case, age)), 1e-12)


@given(dated_cases())
def test_the_chain_the_other_way_is_the_inverse(dated):
    """The frame relative to the plate undoes the plate relative to the frame."""
    case, age = dated
    history = case.history()
    there = quaternion(Circuit(history, case.frame), case.plate, age)
    back = quaternion(Circuit(history, case.plate), case.frame, age)
    assert_within(quaternions_apart(so3.multiply(back, there), [1.0, 0.0, 0.0, 0.0]), CHAIN_RAD)


@given(chain_cases(least_links=2), st.data())
def test_the_choice_of_frame_does_not_matter_between_two_plates(case, data):
    """A relative to C through any third plate's frame is A relative to C."""
    age = data.draw(times_in(case))
    history = case.history()
    via = data.draw(st.sampled_from(history.plates()))
    circuit = Circuit(history, via)
    one, other = quaternion(circuit, case.plate, age), quaternion(circuit, case.frame, age)
    composed = so3.multiply(so3.conjugate(other), one)
    direct = quaternion(Circuit(history, case.frame), case.plate, age)
    assert_within(quaternions_apart(composed, direct), CHAIN_RAD)


@given(cases(), st.data())
def test_a_pair_listed_the_other_way_round_says_the_same(case, data):
    """Any choice of pairs turned round, rotations inverted, leaves the chain where it was."""
    age = data.draw(times_in(case))
    pairs = sorted({(r.plate, r.relative_to) for r in case.rows})
    turned = data.draw(st.sets(st.sampled_from(pairs)))
    rows = [turned_round(r) if (r.plate, r.relative_to) in turned else r for r in case.rows]
    found = quaternion(Circuit(replace(case, rows=tuple(rows)).history(), case.frame), case.plate, age)
    assert_within(quaternions_apart(found, expected(case, age)), 1e-12)


@given(dated_cases())
def test_a_rotation_of_the_same_sense_in_other_numbers_says_the_same(dated):
    """(pole, angle), (antipode, -angle) and (pole, angle - 360) are one row."""
    case, age = dated
    rows = []
    for i, row in enumerate(case.rows):
        antipode = replace(
            row,
            pole_lat_deg=-row.pole_lat_deg,
            pole_lon_deg=row.pole_lon_deg + (180.0 if row.pole_lon_deg < 0.0 else -180.0),
            angle_deg=-row.angle_deg,
        )
        longer = replace(row, angle_deg=row.angle_deg - 360.0)
        rows.append([row, antipode, longer][i % 3] if row.angle_deg else row)
    found = quaternion(Circuit(replace(case, rows=tuple(rows)).history(), case.frame), case.plate, age)
    assert_within(quaternions_apart(found, expected(case, age)), 1e-12)


@given(cases())
def test_at_a_rows_age_the_row_itself_is_given(case):
    """At 0 Ma nothing moves; at each row's age the pair's rotation is the row's own."""
    history = case.history()
    today = quaternion(Circuit(history, case.frame), case.plate, 0.0)
    assert_within(quaternions_apart(today, [1.0, 0.0, 0.0, 0.0]), 0.0)
    for row in case.rows:
        alone = History.from_rows(
            [r for r in case.rows if (r.plate, r.relative_to) == (row.plate, row.relative_to)],
            history.tables,
        )
        found = quaternion(Circuit(alone, row.relative_to), row.plate, row.age_ma)
        pole = vector_of(row.pole_lat_deg, row.pole_lon_deg)
        printed = Rotation.from_rotvec(math.radians(row.angle_deg) * pole)
        assert_within(quaternions_apart(found, printed.as_quat(scalar_first=True)), 2e-15)


@given(cases(), unit_vectors())
def test_one_ulp_either_side_of_a_row_nothing_jumps(case, x):
    """Positions one float before, at and after every row's age lie within 1e-7 m of each other.

    One ulp of 500 Ma is 1.1e-13 Myr, times 0.3 rad/Myr for six links: 2e-7 m in all would be the
    worst conceivable; the ages drawn here stay below 160 Ma. A partner change does not jump either.
    """
    circuit = Circuit(case.history(), case.frame)
    for age in case.row_ages():
        near = [np.nextafter(age, -np.inf), age, np.nextafter(age, np.inf)]
        near = [t for t in near if 0.0 <= t <= case.oldest_ma]
        moved = [so3.rotate(quaternion(circuit, case.plate, t), x) for t in near]
        for one, other in itertools.pairwise(moved):
            assert_within(metres_apart(one, other), 1e-7)


@given(dated_cases(), unit_vectors())
def test_two_ages_close_together_differ_by_speed_times_time(dated, x):
    """Over 1e-6 Myr a point moves by omega x r times the time, to a millionth of a metre.

    It moves up to 2 m then. What is left out is (0.3 rad/Myr x 1e-6 Myr)^2 / 2 = 3e-7 m.
    """
    case, age = dated
    age = max(age, 1e-6)
    younger = age - 1e-6
    circuit = Circuit(case.history(), case.frame)
    found = circuit.at(case.plate, age)
    older_turn, younger_turn = (quaternion(circuit, case.plate, t) for t in (age, younger))
    step = so3.rotate(younger_turn, x) - so3.rotate(older_turn, x)
    speed = so3.rotate(older_turn, np.cross(angular_velocity(found)[0], x))
    assert_within((step - speed * (age - younger)) * R_M, 1e-6)
    assert_within(np.linalg.norm(speed), 6 * FASTEST_RAD_PER_MYR * 1.001)


@given(cases())
def test_asking_many_ages_is_asking_each(case):
    """Ages asked together, repeated, in any order, give to the last bit what each gives alone."""
    circuit = Circuit(case.history(), case.frame)
    ages = np.array([*case.row_ages(), 0.37 * case.oldest_ma, *case.row_ages()[::-1]])
    together = circuit.rotations(case.plate, ages).rotations.quaternions
    alone = np.array([quaternion(circuit, case.plate, age) for age in ages])
    assert np.array_equal(together, alone)


@given(cases())
def test_outside_its_ages_a_chain_gives_no_answer(case):
    """One float beyond the oldest age is refused, with NaN and a status, never extrapolated."""
    circuit = Circuit(case.history(), case.frame)
    assert circuit.oldest_ma(case.plate) == case.oldest_ma
    beyond = np.nextafter(case.oldest_ma, np.inf)
    found = circuit.rotations(case.plate, [case.oldest_ma, beyond, -1e-9, np.nan])
    assert list(found.status == 0) == [True, False, False, False]
    assert np.isnan(found.rotations.quaternions[1:]).all()


@given(chain_cases(most_links=3), st.floats(0.0, 30.0))
def test_hold_and_extend_past_the_oldest_age(case, past):
    """`hold` keeps the last rotation to the bit; `extend` goes on with each link's last stage."""
    history, oldest = case.history(), case.oldest_ma
    held = Circuit(history, case.frame, "hold").at(case.plate, oldest + past)
    last = quaternion(Circuit(history, case.frame), case.plate, oldest)
    assert np.array_equal(held.rotations.quaternions.reshape(4), last)
    extended = quaternion(Circuit(history, case.frame, "extend"), case.plate, oldest + past)
    total = Rotation.identity()
    for plate, relative_to, forward in case.path(oldest):
        link = extended_link(case, plate, relative_to, oldest + past)
        total = (link if forward else link.inv()) * total
    assert_within(quaternions_apart(extended, total.as_quat(scalar_first=True)), 1e-12)


def extended_link(case: Case, plate: str, relative_to: str, age_ma: float) -> Rotation:
    """A pair's rotation at an age that may lie past its last row: its last stage goes on."""
    ages, turns = case.pair(plate, relative_to)
    if age_ma <= ages[-1]:
        return case.link(plate, relative_to, age_ma)
    stage = (turns[-2].inv() * turns[-1]).as_rotvec()
    further = (age_ma - ages[-1]) / (ages[-1] - ages[-2])
    return turns[-1] * Rotation.from_rotvec(stage * further)


@given(partner_cases())
def test_at_a_partner_change_the_younger_link_is_used(case):
    """At the shared age the chain is the younger interval's; a float later it is the older's."""
    circuit = Circuit(case.history(), case.frame)
    change = case.legs[0].older_ma
    young = circuit.at(case.plate, change)
    old = circuit.at(case.plate, float(np.nextafter(change, np.inf)))
    words = [circuit.say("p0", circuit.pieces.chains[f.chain[0]]) for f in (young, old)]
    assert words == ["p0 > a > frame", "p0 > b > frame"]


def ten_link_case() -> Case:
    """Ten links of five stages each at irregular ages to 180 Ma, pairs in both directions."""
    random = np.random.default_rng(20)
    rows: list[Row] = []
    path = []
    for i in range(10):
        forward = bool(i % 3)
        ends = (f"p{i}", f"p{i + 1}") if forward else (f"p{i + 1}", f"p{i}")
        ages = np.sort(random.uniform(1.0, 179.0, 4)).tolist()
        turn = Rotation.identity()
        for age in [*ages, 180.0]:
            turn = turn * Rotation.from_rotvec(random.normal(size=3) * 0.3)
            rows.append(row_of(*ends, age, turn))
        path.append((*ends, forward))
    return Case(tuple(rows), "p0", "p10", (Leg(0.0, 180.0, tuple(path)),), True)


def special_places(count: int) -> tuple[np.ndarray, np.ndarray]:
    """Seeded places all over the globe, poles, neighbours of poles and the date line among them."""
    random = np.random.default_rng(21)
    lat = np.degrees(np.arcsin(random.uniform(-1.0, 1.0, count)))
    lon = random.uniform(-180.0, 180.0, count)
    lat[:6] = [90.0, -90.0, 89.9999999, -89.99999999, 0.0, 12.0]
    lon[:6] = [0.0, 50.0, 33.0, -120.0, -180.0, np.nextafter(180.0, 0.0)]
    return lat, lon


@pytest.mark.parametrize("kind", ["as-given", "geodetic"])
def test_ten_links_there_and_back(kind):
    """A ten-link chain to the past and back, through degrees on the way, returns within 1e-6 m.

    Measured over 2000 places and ages, the rounding of degrees included: 3.1e-8 m.
    """
    from restore.geometry.latitudes import Latitudes

    case = ten_link_case()
    history = case.history()
    lat, lon = special_places(2000)
    ages = np.random.default_rng(22).uniform(0.0, 180.0, len(lat))
    ages[:20] = np.array(case.row_ages())[:20]
    there_circuit, back_circuit = Circuit(history, case.frame), Circuit(history, case.plate)
    start = Points(lat, lon, np.repeat(there_circuit.codes(["p0"]), len(lat)), Latitudes(kind))
    there = move_own(there_circuit, start, ages)
    codes = np.repeat(back_circuit.codes(["p10"]), len(lat))
    past = Points(there.lat_deg, there.lon_deg, codes, Latitudes(kind))
    back = move_own(back_circuit, past, ages)
    home = np.array([vector_of(*p) for p in zip(back.lat_deg, back.lon_deg, strict=True)])
    begun = np.array([vector_of(*p) for p in zip(lat, lon, strict=True)])
    assert_within(metres_apart(home, begun), 1e-6)


def test_ten_links_against_scipy():
    """The same ten-link chain agrees with scipy within 1e-12 rad at 200 ages.

    Measured: 4.6e-15 rad (3e-8 m).
    """
    case = ten_link_case()
    circuit = Circuit(case.history(), case.frame)
    ages = np.concatenate([np.random.default_rng(23).uniform(0.0, 180.0, 160), case.row_ages()])
    found = circuit.rotations("p0", ages).rotations.quaternions
    truth = np.array([expected(case, age) for age in ages])
    assert_within(quaternions_apart(found, truth), 1e-12)


def test_half_turns_in_a_history():
    """A plate that turns steadily through 90, 180, 270 and 360 degrees is never sent the short way.

    Rows every 20 Myr, the last two also written as -90 and 0 degrees: 4.5 deg/Myr about z.
    """
    for angles in ([90.0, 180.0, 270.0, 360.0], [90.0, -180.0, -90.0, 0.0]):
        rows = [Row("p", "f", 0.0, 90.0, 0.0, 0.0)]
        rows += [Row("p", "f", 20.0 * (i + 1), 90.0, 0.0, a) for i, a in enumerate(angles)]
        circuit = Circuit(History.from_rows(rows), "f")
        ages = np.linspace(0.0, 80.0, 33)
        moved = circuit.rotations("p", ages).rotations.apply([1.0, 0.0, 0.0])
        turned = np.radians(4.5 * ages)
        truth = np.stack([np.cos(turned), np.sin(turned), np.zeros_like(turned)], axis=-1)
        assert_within(metres_apart(moved, truth), 1e-7)


def test_a_stage_of_exactly_half_a_turn_is_one_of_the_two_arcs():
    """Over a stage of exactly 180 degrees either arc may be taken, but never a third way."""
    rows = [Row("p", "f", 0.0, 90.0, 0.0, 0.0), Row("p", "f", 20.0, 90.0, 0.0, 180.0)]
    circuit = Circuit(History.from_rows(rows), "f")
    middle = circuit.at("p", 10.0).rotations.apply([1.0, 0.0, 0.0]).reshape(3)
    assert min(metres_apart(middle, [0, s, 0]) for s in (1.0, -1.0)) < 1e-8
    end = circuit.at("p", 20.0).rotations.apply([1.0, 0.0, 0.0]).reshape(3)
    assert_within(metres_apart(end, [-1.0, 0.0, 0.0]), 1e-8)


def test_random_rows_at_equal_ages_in_different_pairs():
    """Pairs whose rows share every age compose exactly as the rows do, to 1e-12 rad at each row."""
    turns = random_quaternions(24, 12)
    rows = []
    for pair in range(3):
        for i in range(4):
            turn = Rotation.from_quat(turns[4 * pair + i], scalar_first=True)
            rows.append(row_of(f"p{pair}", f"p{pair + 1}", 10.0 * (i + 1), turn))
    case = Case(
        tuple(rows),
        "p0",
        "p3",
        (Leg(10.0, 40.0, tuple((f"p{i}", f"p{i + 1}", True) for i in range(3))),),
        False,
    )
    circuit = Circuit(case.history(), "p3")
    for i in range(4):
        a, b, c = (Rotation.from_quat(turns[4 * p + i], scalar_first=True) for p in range(3))
        truth = (c * b * a).as_quat(scalar_first=True)
        assert_within(quaternions_apart(quaternion(circuit, "p0", 10.0 * (i + 1)), truth), 1e-12)
