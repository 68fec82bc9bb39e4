"""Closure of a loop of plates: the rotation left over, against scipy; whether errors explain it.

At the end: which pairs of a loop the circuit uses, against a forest grown anew for every piece of time.
"""

import math

import numpy as np
import pytest
from scipy.spatial.transform import Rotation, Slerp
from scipy.stats import chi2, f, kstest

from restore.errors import HistoryError, InputError, OutsideHistoryError
from restore.history.circuit import Circuit
from restore.history.closure import closure
from restore.history.conventions import Table
from restore.history.rows import Row
from restore.history.store import History

AGES = (0.0, 10.0, 25.0, 40.0)
FIRST = ((70.0, 10.0, 0.5), (68.0, 15.0, 0.45), (66.0, 12.0, 0.5))
SECOND = ((-20.0, 100.0, 0.3), (-25.0, 95.0, 0.35), (-22.0, 90.0, 0.3))
KNOWN = np.array([1e-3, -2e-3, 5e-4])
"""A misfit as a small rotation of the plate, rad: 14.6 km at most."""


def unit(lat, lon):
    lat, lon = math.radians(lat), math.radians(lon)
    return np.array([math.cos(lat) * math.cos(lon), math.cos(lat) * math.sin(lon), math.sin(lat)])


def turns(poles):
    """Rotations at AGES: the identity today, then degrees per Myr about a pole each."""
    vectors = [np.zeros(3)]
    vectors += [
        unit(lat, lon) * math.radians(rate * age)
        for (lat, lon, rate), age in zip(poles, AGES[1:], strict=True)
    ]
    return Rotation.from_rotvec(vectors)


def rows_of(plate, partner, rotations, covariance=None, dof=math.inf, table=0):
    rows = []
    for age, turn in zip(AGES, rotations, strict=True):
        vector = turn.as_rotvec()
        size = float(np.linalg.norm(vector))
        if size == 0.0:
            rows.append(Row(plate, partner, age, math.nan, math.nan, 0.0, table=table))
            continue
        x, y, z = vector
        lat, lon = math.degrees(math.atan2(z, math.hypot(x, y))), math.degrees(math.atan2(y, x))
        rows.append(Row(plate, partner, age, lat, lon, math.degrees(size), covariance, dof, table=table))
    return rows


A_B, B_C = turns(FIRST), turns(SECOND)


def loop(misfit=(0.0, 0.0, 0.0), covariance=None, dof=math.inf):
    """a on b, b on c, and a on c as the other two have it, turned by a misfit at every age but today."""
    small = Rotation.from_rotvec([np.zeros(3), *[misfit] * 3])
    return History.from_rows(
        [
            *rows_of("a", "b", A_B, covariance, dof),
            *rows_of("b", "c", B_C, covariance, dof),
            *rows_of("a", "c", B_C * A_B * small, covariance, dof),
        ]
    )


def test_a_loop_that_closes():
    """At the rows' ages nothing is left over: less than a micrometre."""
    found = closure(loop(), ["a", "b", "c"], AGES)
    assert found.loop == ("a", "b", "c", "a")
    assert np.max(found.columns()["greatest_km"]) < 1e-9


def test_a_known_misfit():
    """What a on c has too much is left over the other way round, in the coordinates of a."""
    found = closure(loop(KNOWN), ["a", "b", "c"], AGES)
    np.testing.assert_allclose(found.misfit.as_vectors()[1:], [-KNOWN] * 3, rtol=0.0, atol=1e-15)
    np.testing.assert_allclose(found.misfit.as_vectors()[0], 0.0, rtol=0.0, atol=1e-15)
    columns = found.columns()
    size = np.linalg.norm(KNOWN)
    np.testing.assert_allclose(columns["angle_deg"][1:], math.degrees(size), rtol=1e-12)
    np.testing.assert_allclose(columns["greatest_km"][1:], size * 6371.0088, rtol=1e-12)
    axis = [unit(*pole) for pole in zip(columns["pole_lat_deg"], columns["pole_lon_deg"], strict=True)]
    np.testing.assert_allclose(axis[1:], [-KNOWN / size] * 3, rtol=0.0, atol=1e-11)
    assert columns["loop"] == ["a > b > c > a"] * 4


@pytest.mark.parametrize("ages", [[5.0, 17.0, 33.3], 12.5])
def test_between_rows_each_pair_is_interpolated_by_itself(ages):
    """Against scipy's Slerp along each pair: 1e-12 rad."""
    history = loop(KNOWN)
    a_c = B_C * A_B * Rotation.from_rotvec([np.zeros(3), *[KNOWN] * 3])
    ages_ = np.atleast_1d(ages)
    one, two, three = (Slerp(AGES, turn)(ages_) for turn in (A_B, B_C, a_c))
    expected = (three.inv() * two * one).as_rotvec()
    found = closure(history, ["a", "b", "c"], ages)
    np.testing.assert_allclose(found.misfit.as_vectors(), expected, rtol=0.0, atol=1e-12)


def test_the_other_way_round_and_from_another_plate():
    """Walked the other way a loop leaves the inverse; from another plate the misfit is carried there."""
    there = closure(loop(KNOWN), ["a", "b", "c"], 25.0).misfit.as_vectors()[0]
    back = closure(loop(KNOWN), ["a", "c", "b"], 25.0).misfit.as_vectors()[0]
    np.testing.assert_allclose(back, -there, rtol=0.0, atol=1e-14)
    elsewhere = closure(loop(KNOWN), ["b", "c", "a"], 25.0).misfit.as_vectors()[0]
    carried = A_B[2].apply(there)
    np.testing.assert_allclose(elsewhere, carried, rtol=0.0, atol=1e-14)
    closed = closure(loop(KNOWN), ["a", "b", "c", "a"], 25.0)
    assert closed.loop == ("a", "b", "c", "a")


COVARIANCE = np.array([[4.0, 1.0, -0.5], [1.0, 3.0, 0.2], [-0.5, 0.2, 2.0]]) * 1e-7


def expected_covariance(at, misfit):
    """Every row's share in the coordinates of a: that of b on c turned back, that of a on c by the misfit."""
    turn, left = A_B[at].as_matrix(), Rotation.from_rotvec(-misfit).as_matrix()
    return COVARIANCE + turn.T @ COVARIANCE @ turn + left.T @ COVARIANCE @ left


def test_errors_of_a_loop():
    """At a row's age the three rows' covariances add up, each in the coordinates of the first plate."""
    found = closure(loop(KNOWN, COVARIANCE), ["a", "b", "c"], AGES[1:])
    for at in range(3):
        expected = expected_covariance(at + 1, KNOWN)
        np.testing.assert_allclose(found.covariance[at], expected, rtol=0.0, atol=1e-20)
    assert np.all(np.isinf(found.dof))


def test_the_significance_of_a_misfit():
    """The statistic is u C^-1 u, its probability that of chi-square with 3 degrees of freedom."""
    columns = closure(loop(KNOWN, COVARIANCE), ["a", "b", "c"], 25.0).columns()
    statistic = KNOWN @ np.linalg.inv(expected_covariance(2, KNOWN)) @ KNOWN
    assert columns["statistic"][0] == pytest.approx(statistic, rel=1e-9)
    assert columns["probability"][0] == pytest.approx(chi2.sf(statistic, 3), rel=1e-9)


def test_an_estimated_kappa():
    """With kappa estimated a third of the statistic is held against F with the rows' degrees of freedom.

    Three rows with equal shares and 10 degrees of freedom each have 30 together (Welch 1947).
    """
    isotropic = np.eye(3) * 1e-6
    found = closure(loop(KNOWN, isotropic, 10.0), ["a", "b", "c"], 25.0)
    assert found.dof[0] == pytest.approx(30.0, rel=1e-9)
    statistic = KNOWN @ KNOWN / 3e-6
    columns = found.columns()
    assert columns["statistic"][0] == pytest.approx(statistic, rel=1e-9)
    assert columns["probability"][0] == pytest.approx(f.sf(statistic / 3.0, 3, 30), rel=1e-8)


def test_the_probability_is_a_probability():
    """Loops whose misfit is nothing but the rows' errors have probabilities spread evenly over 0..1.

    200 loops drawn with the rows' covariances; the Kolmogorov-Smirnov test must not reject at 0.1 %.
    """
    rng = np.random.default_rng(7)
    root = np.linalg.cholesky(COVARIANCE)
    probabilities = []
    for _ in range(200):
        drawn = []
        for plate, partner, turn in (("a", "b", A_B), ("b", "c", B_C), ("a", "c", B_C * A_B)):
            errors = np.vstack([np.zeros(3), rng.standard_normal((3, 3)) @ root.T])
            drawn += rows_of(plate, partner, turn * Rotation.from_rotvec(errors), COVARIANCE)
        columns = closure(History.from_rows(drawn), ["a", "b", "c"], [25.0]).columns()
        probabilities.append(columns["probability"][0])
    assert kstest(probabilities, "uniform").pvalue > 1e-3
    # one in twenty lies below 0.05, within three standard deviations of 200
    assert np.mean(np.array(probabilities) < 0.05) < 0.097


def test_errors_that_are_not_known():
    """One row without a covariance and nothing is said of significance; today all is exact."""
    columns = closure(loop(KNOWN), ["a", "b", "c"], [0.0, 25.0]).columns()
    assert np.isnan(columns["probability"][1])
    assert np.isnan(columns["statistic"][1])
    assert columns["probability"][0] == 1.0
    assert np.isnan(columns["pole_lat_deg"][0])


def test_four_plates():
    """A longer loop: d goes with a, so that the way over d leaves as much as the short one."""
    history = loop(KNOWN).add([*rows_of("d", "a", Rotation.identity(4)), *rows_of("b", "d", A_B.inv())])
    found = closure(history, ["d", "b", "c", "a"], 25.0)
    assert found.loop == ("d", "b", "c", "a", "d")
    np.testing.assert_allclose(found.misfit.as_vectors()[0], -KNOWN, rtol=0.0, atol=1e-14)


def test_the_pair_of_the_lowest_rank():
    """Of two tables for one pair the loop goes by the one that is used elsewhere too."""
    rows = [*rows_of("a", "b", A_B), *rows_of("b", "c", B_C)]
    wrong = Rotation.from_rotvec([np.zeros(3), *[KNOWN] * 3])
    for ranks, size in (((0, 1), 0.0), ((1, 0), float(np.linalg.norm(KNOWN)))):
        tables = [Table(), *(Table(rank=rank) for rank in ranks)]
        right, other = rows_of("a", "c", B_C * A_B, table=1), rows_of("a", "c", B_C * A_B * wrong, table=2)
        found = closure(History.from_rows([*rows, *right, *other], tables), ["a", "b", "c"], 25.0)
        assert np.linalg.norm(found.misfit.as_vectors()) == pytest.approx(size, abs=1e-14)


@pytest.mark.parametrize(
    ("plates", "match"),
    [
        (["a", "b"], r"loop a,b: name at least three different plates"),
        (["a", "b", "a"], r"loop a,b,a: name at least three different plates"),
        (["a", "b", "c", "b"], r"loop a,b,c,b: name at least three different plates"),
        ([], r"loop : name at least three different plates"),
        (["a", "b", "c", "d"], r"loop: c and d are no pair of this history"),
    ],
)
def test_loops_that_are_none(plates, match):
    """A loop has three plates or more, and every neighbour is a pair."""
    history = loop().add(rows_of("d", "e", A_B))
    with pytest.raises(InputError, match=match):
        closure(history, plates, 10.0)


def test_ages_at_which_a_pair_does_not_hold():
    """Outside a pair's rows the loop has no answer; the pair and its ages are named."""
    match = r"a relative to b at 40\.1 Ma: the pair holds at 0\.\.40 Ma"
    with pytest.raises(OutsideHistoryError, match=match):
        closure(loop(), ["a", "b", "c"], [10.0, 40.1])


def test_an_unknown_plate():
    """A plate that the history lacks is named, with a hint."""
    with pytest.raises((InputError, HistoryError, KeyError), match="'x' is not in the history"):
        closure(loop(), ["x", "b", "c"], 10.0)


def still(rng, count):
    """Pairs of plates that all stand still, at random ages and ranks: every loop of them closes."""
    tables = [Table(rank=rank) for rank in range(3)]
    rows = {}
    for _ in range(count):
        plate, partner = (f"p{n}" for n in rng.choice(6, 2, replace=False))
        table = int(rng.integers(3))
        for age in sorted(set(rng.integers(0, 8, 2).tolist())):
            rows[plate, partner, table, age] = Row(plate, partner, float(age), 0.0, 0.0, 0.0, table=table)
    return History.from_rows(list(rows.values()), tables)


def grown(circuit, holding, late):
    """The chains of a forest that is grown anew: pairs by rank, then by number, those that only begin last."""
    pairs = circuit.pairs
    group = {plate: plate for plate in circuit.plates}
    used = []
    for members in (holding, late):
        for n in sorted(members, key=lambda n: (pairs[n].rank, n)):
            one, other = group[pairs[n].plate], group[pairs[n].relative_to]
            if one != other:
                group = {plate: other if its == one else its for plate, its in group.items()}
                used.append(n)
    chains, waiting = {circuit.frame: ()}, [circuit.frame]
    while waiting:
        here = waiting.pop()
        for n in used:
            ends = pairs[n].plate, pairs[n].relative_to
            for there, partner, forward in ((*ends, True), (*reversed(ends), False)):
                if partner == here and there not in chains:
                    chains[there] = ((n, forward), *chains[here])
                    waiting.append(there)
    return chains


@pytest.mark.parametrize("seed", range(40))
def test_chains_against_a_forest_grown_anew(seed):
    """In every piece of time each plate has the chain that a forest grown from nothing gives it.

    The circuit follows one forest from piece to piece; at a cut the pairs of the younger piece hold,
    and those that only begin there fill in.
    """
    rng = np.random.default_rng(seed)
    history = still(rng, int(rng.integers(1, 18)))
    circuit = Circuit(history, history.plates()[0])
    pieces = circuit.pieces
    for number in range(1, 2 * len(pieces.cuts) + 1):
        cut = float(pieces.cuts[(number - 1) // 2])
        ends = [(pair.youngest_ma, pair.oldest_ma) for pair in circuit.pairs]
        if number % 2:
            holding = [n for n, (young, old) in enumerate(ends) if young < cut <= old]
            late = [n for n, (young, _) in enumerate(ends) if young == cut]
        else:
            holding, late = [n for n, (young, old) in enumerate(ends) if young <= cut < old], []
        chains = grown(circuit, holding, late)
        for code, plate in enumerate(circuit.plates):
            chain = int(pieces.chain_of[code, number])
            assert (chain >= 0) == (plate in chains)
            if chain >= 0:
                assert pieces.chains[chain] == chains[plate]
    assert pieces.conflicts == ()
