"""Laws of moved points: no trace of order, blocks or threads; own ages and common ages agree."""

import math

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from scipy.spatial.transform import Rotation
from strategies import (
    R_M,
    assert_within,
    cases,
    latitudes,
    longitudes,
    metres_apart,
    row_of,
    times_in,
    vector_of,
)

from restore.geometry.latitudes import Latitudes
from restore.history.circuit import BLOCK, Circuit
from restore.history.rows import Row
from restore.history.store import History
from restore.motion.points import Moved, Points, move_common, move_own

SIGMA_RAD = 3_000.0 / R_M


def world(seed: int = 31, plates: int = 4) -> History:
    """A hub, its mantle frame, and plates round it, with errors, one pair turned round."""
    random = np.random.default_rng(seed)
    rows: list[Row] = []
    ends = [("hub", "deep")] + [(f"p{i}", "hub") for i in range(plates)]
    ends[-1] = ends[-1][::-1]
    for plate, relative_to in ends:
        turn = Rotation.identity()
        rows.append(row_of(plate, relative_to, 0.0, turn))
        for age in [*np.sort(random.uniform(1.0, 119.0, 5)).tolist(), 120.0]:
            turn = turn * Rotation.from_rotvec(random.normal(size=3) * 0.1)
            root = random.normal(size=(3, 3)) * SIGMA_RAD
            rows.append(row_of(plate, relative_to, age, turn, root @ root.T))
    return History.from_rows(rows)


def sites(circuit: Circuit, count: int, seed: int = 32) -> tuple[Points, np.ndarray]:
    """Seeded sites, awkward ones among them: poles, date line, NaN, no plate, no answer."""
    random = np.random.default_rng(seed)
    lat = np.degrees(np.arcsin(random.uniform(-1.0, 1.0, count)))
    lon = random.uniform(-180.0, 180.0, count)
    ages = random.uniform(0.0, 120.0, count)
    lat[:4], lon[:4] = [90.0, -90.0, 10.0, 10.0], [0.0, 77.0, -180.0, np.nextafter(180.0, 0.0)]
    ages[4:8] = [0.0, 120.0, 130.0, np.nan]
    lat[8] = np.nan
    codes = circuit.codes(random.choice(list(circuit.plates), count).astype(object))
    codes[9] = -1
    return Points(lat, lon, codes, Latitudes("geodetic"), np.full(count, 1e-4), ages * 0.01), ages


def some(points: Points, items: np.ndarray | slice) -> Points:
    """Some of the points, in the order asked."""
    return Points(
        points.lat_deg[items],
        points.lon_deg[items],
        points.codes[items],
        points.latitudes,
        points.position_sigma[items],
        points.age_sigma[items],
    )


def columns(moved: Moved) -> list[np.ndarray]:
    """Everything a result holds, as arrays whose bits can be compared."""
    listed = [moved.lat_deg, moved.lon_deg, moved.status, moved.ages]
    if moved.spread is not None:
        spread = moved.spread
        listed += [spread.east, spread.north, spread.cov, spread.squares_by_dof]
    return listed


def assert_same_bits(one: list[np.ndarray], other: list[np.ndarray]) -> None:
    for a, b in zip(one, other, strict=True):
        assert a.dtype == b.dtype
        assert a.shape == b.shape
        assert np.array_equal(a, b, equal_nan=a.dtype.kind == "f")
        number = ~np.isnan(a)
        assert np.array_equal(np.signbit(a[number]), np.signbit(b[number]))


@pytest.mark.parametrize("errors", [False, True])
def test_the_order_of_rows_leaves_no_trace(errors):
    """Shuffled sites get, to the last bit, the results that they get in file order.

    Enough of them that every plate fills more than one block.
    """
    circuit = Circuit(world(plates=1), "deep")
    points, ages = sites(circuit, 4 * BLOCK)
    order = np.random.default_rng(33).permutation(len(ages))
    straight = columns(move_own(circuit, points, ages, errors))
    shuffled = columns(move_own(circuit, some(points, order), ages[order], errors))
    assert_same_bits([c[order] for c in straight], shuffled)


@pytest.mark.parametrize("errors", [False, True])
@pytest.mark.parametrize("size", [1, 7, 1000])
def test_the_size_of_a_chunk_leaves_no_trace(size, errors):
    """Sites restored one by one, by sevens or by thousands get what they get all at once."""
    circuit = Circuit(world(), "deep")
    count = 60 if size == 1 else 3000
    points, ages = sites(circuit, count)
    whole = columns(move_own(circuit, points, ages, errors))
    parts = [
        columns(move_own(circuit, some(points, slice(at, at + size)), ages[at : at + size], errors))
        for at in range(0, count, size)
    ]
    assert_same_bits(whole, [np.concatenate(c) for c in zip(*parts, strict=True)])


@pytest.mark.parametrize("errors", [False, True])
@pytest.mark.parametrize("threads", [2, 3])
def test_the_number_of_threads_leaves_no_trace(threads, errors):
    """Several threads give, to the last bit, what one gives; for own ages and for common ages."""
    circuit = Circuit(world(plates=2), "deep")
    points, ages = sites(circuit, 3 * BLOCK)
    one = columns(move_own(circuit, points, ages, errors))
    assert_same_bits(one, columns(move_own(circuit, points, ages, errors, threads)))
    asked = np.array([0.0, 55.0, 120.0])
    one = columns(move_common(circuit, points, asked, errors))
    assert_same_bits(one, columns(move_common(circuit, points, asked, errors, threads)))


@pytest.mark.parametrize("errors", [False, True])
def test_common_ages_leave_no_trace_of_order_or_chunks(errors):
    """Shuffled or chunked points at common ages get the same bits; so do ages in any order."""
    circuit = Circuit(world(), "deep")
    points, _ = sites(circuit, 2000)
    asked = np.array([0.0, 3.0, 71.5, 120.0, 125.0])
    whole = columns(move_common(circuit, points, asked, errors))
    order = np.random.default_rng(34).permutation(2000)
    shuffled = columns(move_common(circuit, some(points, order), asked, errors))
    assert_same_bits([c[order] for c in whole], shuffled)
    turned = columns(move_common(circuit, points, asked[::-1].copy(), errors))
    assert_same_bits([c[:, ::-1] for c in whole], turned)
    for at in (0, 1, 700):
        few = columns(move_common(circuit, some(points, slice(at, at + 9)), asked, errors))
        assert_same_bits([c[at : at + 9] for c in whole], few)


def test_own_ages_and_common_ages_agree():
    """A site at an age is in the same place by either way, assert_within 1e-6 m, its ellipse within 1 mm.

    Measured: 6e-9 m, ellipses 3e-11 m.
    """
    circuit = Circuit(world(), "deep")
    points, _ = sites(circuit, 500)
    points = Points(points.lat_deg, points.lon_deg, points.codes, points.latitudes)
    asked = np.array([0.0, 0.1, 33.0, 84.0, 120.0, 121.0])
    common = move_common(circuit, points, asked, errors=True)
    for k, age in enumerate(asked):
        own = move_own(circuit, points, np.full(500, age), errors=True)
        assert np.array_equal(own.status, common.status[:, k])
        assert np.array_equal(own.ages, common.ages[:, k], equal_nan=True)
        good = ~np.isnan(own.lat_deg)
        assert np.array_equal(good, ~np.isnan(common.lat_deg[:, k]))
        assert good.sum() > 400 or age > 120.0
        one = places(own.lat_deg[good], own.lon_deg[good])
        other = places(common.lat_deg[good, k], common.lon_deg[good, k])
        assert_within(metres_apart(one, other), 1e-6)
        one_ellipse, other_ellipse = (m.spread.ellipse(R_M)[0] for m in (own, common))
        assert_within(one_ellipse.major_km[good] - other_ellipse.major_km[good, k], 1e-3)
        assert_within(one_ellipse.minor_km[good] - other_ellipse.minor_km[good, k], 1e-3)


def places(lat: np.ndarray, lon: np.ndarray) -> np.ndarray:
    return np.array([vector_of(a, b) for a, b in zip(lat, lon, strict=True)]).reshape(-1, 3)


@settings(max_examples=30)
@given(cases(), latitudes(), longitudes(), st.data())
def test_points_move_as_the_rows_say(case, lat, lon, data):
    """A point at an age is where scipy puts it, assert_within 1e-6 m, poles and date line included."""
    age = data.draw(times_in(case))
    circuit = Circuit(case.history(), case.frame)
    points = Points(np.array([lat]), np.array([lon]), circuit.codes([case.plate]))
    own = move_own(circuit, points, np.array([age]))
    common = move_common(circuit, points, np.array([age]))
    truth = case.rotation(age).apply(vector_of(lat, lon))
    assert_within(metres_apart(vector_of(own.lat_deg[0], own.lon_deg[0]), truth), 1e-6)
    assert_within(metres_apart(vector_of(common.lat_deg[0, 0], common.lon_deg[0, 0]), truth), 1e-6)
    assert -180.0 <= own.lon_deg[0] < 180.0
    assert -90.0 <= own.lat_deg[0] <= 90.0


@given(latitudes(), longitudes(), st.sampled_from(["as-given", "geodetic"]))
def test_today_a_point_keeps_its_digits(lat, lon, kind):
    """At 0 Ma latitude and longitude come out bit for bit as they went in, by either way."""
    circuit = Circuit(world(), "deep")
    points = Points(np.array([lat]), np.array([lon]), circuit.codes(["p0"]), Latitudes(kind))
    own = move_own(circuit, points, np.zeros(1))
    common = move_common(circuit, points, np.zeros(1))
    assert (own.lat_deg[0], own.lon_deg[0]) == (lat, lon)
    assert (common.lat_deg[0, 0], common.lon_deg[0, 0]) == (lat, lon)


def test_bad_sites_never_touch_their_neighbours():
    """NaN places, unknown plates and ages without answer give NaN; the others keep every bit."""
    circuit = Circuit(world(), "deep")
    points, ages = sites(circuit, 200)
    whole = move_own(circuit, points, ages, errors=True)
    good = np.isfinite(whole.lat_deg)
    assert not good[[6, 7, 8, 9]].any()
    assert good[[0, 1, 2, 3, 5]].all()
    assert good.sum() == 196
    alone = move_own(circuit, some(points, good), ages[good], errors=True)
    assert_same_bits([c[good] for c in columns(whole)], columns(alone))


def test_no_points_at_all():
    """Empty tables give empty results, by either way."""
    circuit = Circuit(world(), "deep")
    nothing = Points(np.zeros(0), np.zeros(0), np.zeros(0, dtype=np.int64))
    assert move_own(circuit, nothing, np.zeros(0), errors=True).lat_deg.shape == (0,)
    common = move_common(circuit, nothing, np.array([0.0, 10.0]), errors=True)
    assert common.lat_deg.shape == common.status.shape == (0, 2)
    assert move_common(circuit, nothing, np.zeros(0)).lat_deg.shape == (0, 0)


def test_points_of_one_plate_keep_their_distances():
    """Rigid motion: all distances within a plate are kept within 1e-7 m at every age."""
    circuit = Circuit(world(), "deep")
    points, _ = sites(circuit, 40)
    lat, lon = np.delete(points.lat_deg, 8), np.delete(points.lon_deg, 8)
    one_plate = Points(lat, lon, np.repeat(circuit.codes(["p1"]), 39))
    before = places(lat, lon)
    moved = move_common(circuit, one_plate, np.array([12.0, 77.0, 120.0]))
    for k in range(3):
        after = places(moved.lat_deg[:, k], moved.lon_deg[:, k])
        chords = [np.linalg.norm(p[:, None] - p[None], axis=-1) * R_M for p in (before, after)]
        assert_within(chords[0] - chords[1], 1e-7)
    assert math.isfinite(float(moved.lat_deg.sum()))
