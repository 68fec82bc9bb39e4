"""Editing without losing: rows added, replaced, dropped, merged; differences; drawn histories."""

import math

import numpy as np
import pytest
from scipy.spatial.transform import Rotation

from restore.errors import HistoryError, InputError
from restore.history.circuit import Circuit
from restore.history.conventions import Table
from restore.history.differences import differences
from restore.history.drawn import (
    check_count,
    draw_errors,
    drawn_history,
    drawn_rotations,
    undrawn,
)
from restore.history.rows import Row
from restore.history.store import History

KM_PER_DEGREE = 111.195080
"""constants.csv, computed by a separate small program, on R1."""

SMALL = np.array([[4.0, 1.0, -0.5], [1.0, 3.0, 0.2], [-0.5, 0.2, 2.0]]) * 1e-6


def row(age, plate="afra", partner="deep", table=0, **more):
    values = {"pole_lat_deg": 50.0, "pole_lon_deg": 20.0, "angle_deg": 0.5 * age, **more}
    return Row(plate, partner, float(age), table=table, line=int(age) + 2, **values)


@pytest.fixture
def before():
    return History.from_rows(
        [row(0), row(10, printed="as it stood"), row(20), row(5, "bora", "afra", table=1)],
        [Table(file="a.csv", citation="A 1999"), Table(file="b.csv", rank=1)],
        {"deep": "mantle"},
        "Before",
    )


@pytest.fixture
def copy(before):
    """The same history, built anew: what `before` must still be after every edit."""
    kept = History.from_rows(
        [before.rows.row(n) for n in range(len(before))], before.tables, before.frames, before.title
    )
    yield kept
    assert before.same_as(kept)


def places(history):
    return [history.place_of(n) for n in range(len(history))]


def test_added_rows_have_a_table_of_their_own(before, copy):
    """Old rows keep table and line; new ones stand in a new table with the title that was given."""
    after = before.add([row(30), row(40)], title="from my fit")
    assert len(after) == 6
    assert places(after) == ["a.csv:2", "a.csv:12", "a.csv:22", "b.csv:7", "<rows>:32", "<rows>:42"]
    assert [table.title for table in after.tables] == ["", "", "from my fit"]
    assert (after.frames, after.title) == ({"deep": "mantle"}, "Before")
    assert Circuit(after, "deep").oldest_ma("afra") == 40.0
    assert Circuit(before, "deep").oldest_ma("afra") == 20.0


def test_a_row_that_stands_there_already(before, copy):
    """A second row at its pair's age, or a row at fault, is refused with its place or number."""
    with pytest.raises(
        HistoryError, match=r"afra relative to deep has a second row at 10 Ma \(the first: a\.csv:12"
    ):
        before.add([row(10)])
    with pytest.raises(HistoryError, match=r"row 4: angle_deg = 500; must lie in -360\.\.360"):
        before.add([row(30, angle_deg=500.0)])


def test_a_replaced_row_keeps_its_place(before, copy):
    """The new rotation stands where the old one stood: table, line and what was printed."""
    after = before.replace(1, row(11, angle_deg=6.0, table=7))
    assert (after.rows.age_ma[1], after.rows.angle_deg[1]) == (11.0, 6.0)
    assert (int(after.rows.table[1]), int(after.rows.line[1])) == (0, 12)
    assert after.rows.printed[1] == "as it stood"
    assert before.replace(1, row(11, printed="anew")).rows.printed[1] == "anew"
    others = [0, 2, 3]
    assert after.rows.take(others).same_as(before.rows.take(others))


def test_dropped_rows_are_gone_and_others_stay(before, copy):
    """Rows by number; what is left keeps its order and its places."""
    after = before.drop([0, 2])
    assert places(after) == ["a.csv:12", "b.csv:7"]
    assert after.rows.same_as(before.rows.take([1, 3]))
    assert before.drop([]).rows.same_as(before.rows)
    assert len(before.drop([0, 1, 2, 3])) == 0


@pytest.mark.parametrize(
    "edit", [lambda h: h.drop([4]), lambda h: h.replace(-1, row(3)), lambda h: h.drop([0, 9])]
)
def test_rows_that_are_not_there(before, copy, edit):
    """A number beyond the rows is refused with the ones there are."""
    with pytest.raises(HistoryError, match=r"row -?\d: the history has rows 0\.\.3"):
        edit(before)


def test_merged_histories(before, copy):
    """Rows of both with the tables they came from; frames and titles joined."""
    other = History.from_rows(
        [row(7, "cara"), row(9, "cara", table=1)],
        [Table(file="c.csv"), Table(file="d.csv", time_scale="ck95")],
        {"axis": "spin-axis"},
        "Other",
    )
    after = before.merge(other)
    assert places(after) == [*places(before), "c.csv:9", "d.csv:11"]
    assert after.tables == (*before.tables, *other.tables)
    assert after.frames == {"deep": "mantle", "axis": "spin-axis"}
    assert after.title == "Before + Other"
    assert after.rows.take([0, 1, 2, 3]).same_as(before.rows)
    assert len(other) == 2


def test_histories_that_contradict_each_other(before, copy):
    """One frame of two kinds, or one pair at one age and rank twice, is refused."""
    with pytest.raises(HistoryError, match="frame 'deep' is mantle in one history, spin-axis in the other"):
        before.merge(History.from_rows([row(7, "cara")], frames={"deep": "spin-axis"}))
    with pytest.raises(HistoryError, match=r"second row at 20 Ma \(the first: a\.csv:22\)"):
        before.merge(History.from_rows([row(20)], [Table(file="c.csv")]))
    ranked = History.from_rows([row(20)], [Table(file="c.csv", rank=1)])
    assert len(before.merge(ranked)) == 5


def test_nothing_can_be_changed_in_place(before, copy):
    """The columns of a history are read-only, and so are those of an edited one."""
    for history in (before, before.add([row(30)]), before.drop([0])):
        with pytest.raises(ValueError, match="read-only"):
            history.rows.angle_deg[0] = 1.0
        with pytest.raises(AttributeError, match="cannot assign"):
            history.title = "x"


def test_an_edited_history_is_written_and_read(before, tmp_path):
    """Where each row came from is in the file."""
    after = before.add([row(30)], title="added by hand").drop([2])
    after.write(tmp_path / "h.nc")
    back = History.read(tmp_path / "h.nc")
    assert back.same_as(after)
    assert places(back) == ["a.csv:2", "a.csv:12", "b.csv:7", "<rows>:32"]


def test_no_difference(before):
    """A history differs in nothing from itself, and none but the columns is given."""
    found = differences(before, before)
    assert list(found) == [
        "plate",
        "relative_to",
        "age_ma",
        "what",
        "km",
        "moved_myr",
        "first_row",
        "second_row",
    ]
    assert all(values == [] for values in found.values())


def test_every_kind_of_difference(before):
    """Rows in one history only, other rotations (km), other errors; each with both places."""
    after = before.drop([2]).add([row(30)]).replace(1, row(10, angle_deg=5.25))
    after = after.replace(2, row(5, "bora", "afra", covariance=SMALL))
    found = differences(before, after)
    records = list(zip(*found.values(), strict=True))
    assert [record[:4] for record in records] == [
        ("afra", "deep", 10.0, "rotation"),
        ("afra", "deep", 20.0, "only in the first"),
        ("bora", "afra", 5.0, "covariance"),
        ("afra", "deep", 30.0, "only in the second"),
    ]
    assert records[0][4] == pytest.approx(0.25 * KM_PER_DEGREE, rel=1e-6)
    assert (records[1][4], records[3][4]) == (None, None)
    assert records[2][4] == pytest.approx(0.0, abs=1e-9)
    assert [record[6:] for record in records] == [
        ("a.csv:12", "a.csv:12"),
        ("a.csv:22", ""),
        ("b.csv:7", "b.csv:7"),
        ("", "<rows>:32"),
    ]


def test_one_rotation_typed_in_two_ways_is_no_difference(before):
    """The antipodal pole with the other sign is the same rotation."""
    turned = before.replace(1, row(10, pole_lat_deg=-50.0, pole_lon_deg=-160.0, angle_deg=-5.0))
    assert differences(before, turned)["what"] == []


def test_differences_of_a_row_that_two_tables_have(before):
    """Where two ranks have a row for one pair and age, each is held against its own."""
    other = History.from_rows(
        [row(20), row(20, table=1, angle_deg=11.0)], [Table(file="c.csv"), Table(rank=1)]
    )
    changed = other.replace(1, row(20, angle_deg=12.0))
    found = differences(other, changed)
    assert (found["what"], found["first_row"]) == (["rotation"], ["<rows>:22"])
    assert found["km"][0] == pytest.approx(KM_PER_DEGREE, rel=1e-6)


def test_differences_both_ways(before):
    """What is only in the first is only in the second the other way round."""
    after = before.drop([0])
    assert differences(before, after)["what"] == ["only in the first"]
    assert differences(after, before)["what"] == ["only in the second"]


def known(dof=math.inf):
    """A zero row, a known one, one whose zero angle has an error, one without, one exactly known."""
    return History.from_rows(
        [
            row(0),
            row(10, covariance=SMALL, dof=dof),
            row(15, angle_deg=0.0, covariance=2.0 * SMALL),
            row(20),
            row(30, covariance=np.zeros((3, 3))),
        ],
        title="Known",
    )


def printed(history):
    """The rows' rotations, by scipy, from poles and angles in degrees."""
    vectors = []
    for n in range(len(history)):
        one = history.rows.row(n)
        lat, lon = math.radians(one.pole_lat_deg), math.radians(one.pole_lon_deg)
        axis = [math.cos(lat) * math.cos(lon), math.cos(lat) * math.sin(lon), math.sin(lat)]
        vectors.append(
            np.zeros(3) if one.angle_deg == 0.0 else np.multiply(axis, math.radians(one.angle_deg))
        )
    return Rotation.from_rotvec(vectors)


def small_rotations(history, count, seed):
    """What the drawn rotations add to the printed ones, acting first, rad: (count, rows, 3)."""
    drawn = drawn_rotations(history, count, seed)
    inverse = printed(history).inv()
    return np.stack([(inverse * Rotation.from_quat(q, scalar_first=True)).as_rotvec() for q in drawn])


def test_drawn_rows_have_the_errors_of_their_rows():
    """Mean and covariance of 4000 draws against the rows' own, within four standard errors.

    The standard error of a mean is sqrt(C_ii / n), that of a covariance sqrt((C_ii C_jj + C_ij^2) / n).
    """
    count = 4000
    small = small_rotations(known(), count, 3)
    for number, covariance in ((1, SMALL), (2, 2.0 * SMALL)):
        own = small[:, number]
        variance = np.diag(covariance)
        assert np.all(np.abs(own.mean(axis=0)) < 4.0 * np.sqrt(variance / count))
        error = np.sqrt((np.outer(variance, variance) + covariance**2) / count)
        assert np.all(np.abs(np.cov(own.T) - covariance) < 4.0 * error)
    # rows are drawn independently of each other
    cross = small[:, 1].T @ small[:, 2] / count
    limit = 4.0 * np.sqrt(np.outer(np.diag(SMALL), 2.0 * np.diag(SMALL)) / count)
    assert np.all(np.abs(cross) < limit)


def test_an_estimated_kappa_spreads_wider():
    """A t distribution with nu degrees of freedom has nu / (nu - 2) times the covariance."""
    own = small_rotations(known(dof=12.0), 4000, 3)[:, 1]
    expected = SMALL * 12.0 / 10.0
    # the fourth moments of t with 12 degrees of freedom widen the error of a variance by 1.25
    error = 1.3 * np.sqrt((np.outer(np.diag(expected), np.diag(expected)) + expected**2) / 4000)
    assert np.all(np.abs(np.cov(own.T) - expected) < 4.0 * error)


def test_rows_without_an_error_stay():
    """Zero rows, rows of unknown and of exactly no error are the same in every draw, to the last bit."""
    history = known()
    errors = draw_errors(history, 50, 1)
    assert np.all(errors[:, [0, 3, 4]] == 0.0)
    assert np.all(np.any(errors[:, [1, 2]] != 0.0, axis=-1))
    drawn = drawn_history(history, drawn_rotations(history, 1, 1)[0], 1)
    for name in ("pole_lat_deg", "pole_lon_deg", "angle_deg"):
        old, new = getattr(history.rows, name), getattr(drawn.rows, name)
        np.testing.assert_array_equal(new[[0, 3, 4]], old[[0, 3, 4]])
        assert np.all(new[[1, 2]] != old[[1, 2]])


def test_the_same_seed_gives_the_same_draws():
    """A seed says all: draws repeat, the first of many are those of few, another seed differs."""
    history = known()
    np.testing.assert_array_equal(draw_errors(history, 20, 5), draw_errors(history, 20, 5))
    np.testing.assert_array_equal(draw_errors(history, 20, 5)[:7], draw_errors(history, 7, 5))
    assert np.all(draw_errors(history, 20, 5)[:, 1] != draw_errors(history, 20, 6)[:, 1])
    assert len({tuple(one) for one in draw_errors(history, 20, 5)[:, 1]}) == 20


def test_a_drawn_history_is_a_history():
    """Ages, labels and places are kept; its rows have no error: a draw is a possible world."""
    history = known()
    rotations = drawn_rotations(history, 2, 1)[1]
    drawn = drawn_history(history, rotations, 2)
    assert drawn.title == "Known (draw 2)"
    for name in ("plate", "relative_to", "age_ma", "line", "table"):
        np.testing.assert_array_equal(getattr(drawn.rows, name), getattr(history.rows, name))
    np.testing.assert_allclose(
        (printed(drawn).inv() * Rotation.from_quat(rotations, scalar_first=True)).magnitude(),
        0.0,
        atol=1e-14,
    )
    assert not drawn.row_errors().known[1:].any()
    assert drawn.row_errors().known[0]
    found = Circuit(drawn, "deep").rotations("afra", [0.0, 10.0])
    assert found.rotations.quaternions.shape == (2, 4)


def test_what_cannot_be_drawn_is_said():
    """Rows without a covariance are counted, with the first of them."""
    remark = undrawn(known())
    assert (remark.severity, remark.place.line) == ("warning", 22)
    assert remark.what == "1 of 5 rows have no covariance (the first here)"
    assert undrawn(History.from_rows([row(0), row(10, covariance=SMALL)])) is None


def test_how_many_draws():
    """At least one."""
    assert check_count(1) == 1
    with pytest.raises(InputError, match="draws = 0: must be at least 1"):
        check_count(0)


def test_drawing_nothing():
    """An empty history has empty draws."""
    assert draw_errors(History.from_rows([]), 3, 1).shape == (3, 0, 3)
