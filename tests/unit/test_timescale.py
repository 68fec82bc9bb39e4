"""Chrons, time scales and restatements: names, edges, fractions, tables of one's own, faults."""

import math

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from restore.errors import InputError, TableError
from restore.history.timescale import LONG_INTERVAL_MYR, SOURCES, Chron, Restatement, TimeScale

ONE = """\
# a scale of the test's own
chron,young_ma,old_ma
A1n,0,1
A2n,2.5,4
A3n,10,11
A4n,20,
"""
OTHER = """\
chron,young_ma,old_ma
A1n,0,2
A2n,3,5
A3n,8,9
A4n,30,40
"""


def scale(folder, text, name="scale.csv"):
    (folder / name).write_text(text, encoding="utf-8")
    return TimeScale.read(name, folder)


@pytest.fixture
def two(tmp_path):
    return scale(tmp_path, ONE, "one.csv"), scale(tmp_path, OTHER, "other.csv")


@pytest.mark.parametrize(
    ("text", "fraction", "name", "expected"),
    [
        ("C5n.2n(y)", math.nan, "C5n.2n", 0.0),
        ("C5n.2n(o)", math.nan, "C5n.2n", 1.0),
        ("C3n.1n(0.5)", math.nan, "C3n.1n", 0.5),
        ("C3n.1n(.25)", math.nan, "C3n.1n", 0.25),
        ("C3n.1n(1.0)", math.nan, "C3n.1n", 1.0),
        ("C3n.1n(0)", math.nan, "C3n.1n", 0.0),
        ("  M10Nr (o) ", math.nan, "M10Nr", 1.0),
        ("C13n", 0.75, "C13n", 0.75),
        ("C13n", 0.0, "C13n", 0.0),
    ],
)
def test_chrons_as_rows_name_them(text, fraction, name, expected):
    """An edge in brackets, a fraction in brackets, or a fraction beside the name."""
    assert Chron.parse(text, fraction) == Chron(name, expected)


@pytest.mark.parametrize(
    ("text", "fraction", "match"),
    [
        ("An34", math.nan, r"chron 'An34': say which edge, An34\(y\) or An34\(o\)"),
        ("C5n(y)", 0.5, r"chron 'C5n\(y\)' has an edge and chron_fraction = 0\.5: give one"),
        ("C5n", 1.5, r"chron_fraction = 1\.5: must lie in 0\.\.1"),
        ("C5n", -0.1, r"chron_fraction = -0\.1: must lie in 0\.\.1"),
        ("C5n(1.5)", math.nan, r"chron_fraction = 1\.5: must lie in 0\.\.1"),
        ("C5n(x)", math.nan, r"chron 'C5n\(x\)': write name\(y\), name\(o\) or name\(0\.5\)"),
        ("C5n(y", math.nan, r"chron 'C5n\(y': write name\(y\)"),
        ("(y)", math.nan, r"chron '\(y\)': write name\(y\)"),
        ("", math.nan, r"chron '': write name\(y\)"),
    ],
)
def test_chrons_that_are_not_clear(text, fraction, match):
    """Nothing is guessed: without an edge or a fraction, or with both, a chron is refused."""
    with pytest.raises(InputError, match=match):
        Chron.parse(text, fraction)


@given(st.floats(0.0, 1.0))
def test_a_chron_written_is_the_chron_read(fraction):
    """A chron as text keeps its fraction to the last bit, so that its age is the same."""
    chron = Chron("C5n.2n", fraction)
    assert Chron.parse(str(chron)) == chron


def test_chrons_in_words():
    """Edges have their letters, other places their fraction."""
    assert [str(Chron("C6n", f)) for f in (0.0, 1.0, 0.5, 1e-5)] == [
        "C6n(y)",
        "C6n(o)",
        "C6n(0.5)",
        "C6n(0.00001)",
    ]


def test_ages_of_a_scale_of_ones_own(two):
    """Edges are the table's; a place inside lies between them, counted from the young edge."""
    one, _ = two
    assert one.age_of(Chron.parse("A2n(y)")) == 2.5
    assert one.age_of(Chron.parse("A2n(o)")) == 4.0
    assert one.age_of(Chron.parse("A2n(0.2)")) == pytest.approx(2.8, abs=1e-15)
    assert one.source.endswith("one.csv")
    assert one.edges() == {
        ("A1n", "y"): 0.0,
        ("A1n", "o"): 1.0,
        ("A2n", "y"): 2.5,
        ("A2n", "o"): 4.0,
        ("A3n", "y"): 10.0,
        ("A3n", "o"): 11.0,
        ("A4n", "y"): 20.0,
    }


def test_an_edge_that_is_not_known(two):
    """The known edge is given, the other one and every place between them refused."""
    one, _ = two
    assert one.age_of(Chron("A4n", 0.0)) == 20.0
    for fraction in (0.5, 1.0):
        with pytest.raises(InputError, match="has no age for that edge of A4n"):
            one.age_of(Chron("A4n", fraction))


@pytest.mark.parametrize(
    ("name", "match"),
    [
        ("C5n2n", r"chron 'C5n2n' is not in time scale ck95; did you mean 'C5n\.[12]n'\?"),
        ("c34n", r"chron 'c34n' is not in time scale ck95; did you mean 'C[0-9]+n'\?"),
        ("Brunhes", "chron 'Brunhes' is not in time scale ck95; a paper's own names need a stated pick"),
    ],
)
def test_unknown_chrons(name, match):
    """A chron that the scale lacks is refused, with the nearest name or what to do."""
    with pytest.raises(InputError, match=match):
        TimeScale.read("ck95").age_of(Chron(name, 0.0))


@pytest.mark.parametrize(
    ("name", "match"),
    [
        ("ck59", r"time scale 'ck59' is neither known nor a file; did you mean 'ck95'\?"),
        ("CK95", r"time scale 'CK95' is neither known nor a file; did you mean 'ck95'\?"),
        ("gts2013.csv", r"time scale 'gts2013\.csv' is neither known nor a file; did you mean 'gts2012'\?"),
        ("holocene", r"known: cent94, ck95, gts2004, gts2012, kg86, or name a table chron,young_ma,old_ma"),
        (".", r"time scale '\.' is neither known nor a file"),
    ],
)
def test_unknown_scales(tmp_path, name, match):
    """A name that is neither a scale of the package nor a file is refused with a hint."""
    with pytest.raises(InputError, match=match):
        TimeScale.read(name, tmp_path)


HEAD = "chron,young_ma,old_ma\n"


@pytest.mark.parametrize(
    ("text", "match"),
    [
        (HEAD, r"scale\.csv: no chrons; a time scale needs at least one"),
        (HEAD + "A,0,x\n", r"scale\.csv:2:3: old_ma = 'x'; an age is a finite number"),
        (HEAD + "A,0 Ma,1\n", r"scale\.csv:2:2: young_ma = '0 Ma'; an age is a finite number"),
        (HEAD + "A,0,inf\n", r"scale\.csv:2:3: old_ma = 'inf'; an age is a finite number"),
        (HEAD + "A,,1\n", r"scale\.csv:2:2: young_ma is empty; only old_ma may be"),
        (HEAD + ",0,1\n", r"scale\.csv:2:1: chron is empty; every row names one"),
        (HEAD + "A,0,1\nA,2,3\n", r"scale\.csv:3:1: chron 'A' stands twice; keep one row"),
        (HEAD + "A,2,1\n", r"scale\.csv:2:3: old_ma = 1 of A with young_ma = 2; the old edge is older"),
        (HEAD + "A,1,1\n", r"scale\.csv:2:3: old_ma = 1 of A with young_ma = 1; the old edge is older"),
        (HEAD + "A,-1,1\n", r"scale\.csv:2:2: young_ma = -1 of A after 0 Ma; ages are not negative"),
        (HEAD + "A,0,3\nB,2,4\n", r"scale\.csv:3:2: young_ma = 2 of B after 3 Ma; .* rise down the table"),
        (HEAD + "A,0\n", r"scale\.csv:2: the row has 2 fields where the header has 3"),
        (HEAD + "A,0,1,5\n", r"scale\.csv:2: the row has 4 fields where the header has 3"),
        ("chron,young_ma\nA,1\n", r"scale\.csv:1: column 'old_ma' is missing"),
        ("chron;young_ma;old_ma\nA;0;1\n", r"scale\.csv:1: .*the table looks semicolon-delimited"),
        ("", r"scale\.csv: is empty"),
    ],
)
def test_tables_of_time_scales_at_fault(tmp_path, text, match):
    """Every fault has its file, line and column, the value, and what would be right."""
    with pytest.raises(TableError, match=match) as caught:
        scale(tmp_path, text)
    assert len(str(caught.value).splitlines()) == 1


def test_all_faults_of_a_table_at_once(tmp_path):
    """One line per fault, in the order of the lines."""
    with pytest.raises(TableError, match="stands twice") as caught:
        scale(tmp_path, HEAD + "A,0,1\nA,2,3\n,4,5\nB,4,x\n")
    lines = str(caught.value).splitlines()
    assert [line.split("scale.csv:")[1].split(":")[0] for line in lines] == ["3", "4", "5"]


def test_the_same_scale_under_two_names(two, tmp_path):
    """A scale is the same whatever its file is called, an unknown edge notwithstanding."""
    one, other = two
    assert one.same_as(scale(tmp_path, ONE, "copy.csv"))
    assert not one.same_as(other)
    assert TimeScale.read("ck95").same_as(TimeScale.read("ck95"))


def test_restating_by_hand(two):
    """Between reversals that both scales date, ages go in proportion; outside there is none."""
    restatement = Restatement.between(*two)
    before = [0.0, 0.5, 1.0, 1.75, 2.5, 7.0, 10.0, 20.0]
    after = [0.0, 1.0, 2.0, 2.5, 3.0, 6.5, 8.0, 30.0]
    np.testing.assert_allclose(restatement(before), after, rtol=0.0, atol=1e-15)
    assert np.isnan(restatement([20.001, 100.0, -1.0, np.nan])).all()
    assert restatement.span() == "0..20 Ma of one.csv"


def test_an_edge_that_one_scale_lacks_ties_nothing(two):
    """A4n's old edge is known in one scale only: it neither restates nor ends the span."""
    there, back = Restatement.between(*two), Restatement.between(*reversed(two))
    assert float(there.from_ma[-1]) == 20.0
    assert float(back.from_ma[-1]) == 30.0
    assert np.isnan(back(35.0))


@pytest.mark.parametrize(
    ("one", "other"), [("ck95", "gts2004"), ("gts2012", "ck95"), ("gts2004", "gts2012")]
)
def test_restatements_rise(one, other):
    """No two ages change their order."""
    restatement = Restatement.between(TimeScale.read(one), TimeScale.read(other))
    ages = np.linspace(restatement.from_ma[0], restatement.from_ma[-1], 20_001)
    assert np.all(np.diff(restatement(ages)) > 0.0)


@given(st.floats(0.0, 83.0))
@settings(max_examples=200)
def test_there_and_back(age):
    """Restated and back an age is the same, within rounding: 1e-11 Ma are five minutes."""
    ck95, gts2004 = TimeScale.read("ck95"), TimeScale.read("gts2004")
    there, back = Restatement.between(ck95, gts2004), Restatement.between(gts2004, ck95)
    assert float(back(there(age))) == pytest.approx(age, abs=1e-11)


def test_a_scale_to_itself():
    """From a scale to itself nothing moves, to the last digits."""
    ck95 = TimeScale.read("ck95")
    ages = np.linspace(0.0, 83.0, 5001)
    np.testing.assert_allclose(Restatement.between(ck95, ck95)(ages), ages, rtol=0.0, atol=3e-14)


def test_outside_what_both_scales_date():
    """KG86 and GTS2012 share the edges of M0r only: nothing younger or older is restated."""
    restatement = Restatement.between(TimeScale.read("kg86"), TimeScale.read("gts2012"))
    assert restatement.span() == "118..118.7 Ma of kg86"
    assert float(restatement(118.0)) == 125.93
    assert np.isnan(restatement([0.0, 84.0, 117.99, 118.71, 125.0])).all()


@pytest.mark.parametrize(("one", "other"), [("ck95", "kg86"), ("cent94", "ck95")])
def test_scales_that_share_nothing(one, other):
    """A C sequence and an M sequence have no reversal in common: refused, naming both."""
    with pytest.raises(InputError, match=f"time scales {one} and {other} share 0 reversals"):
        Restatement.between(TimeScale.read(one), TimeScale.read(other))


def test_scales_that_order_reversals_differently(tmp_path):
    """Two scales that disagree on which came first cannot be restated."""
    one = scale(tmp_path, HEAD + "A,1,2\nB,3,4\n", "one.csv")
    other = scale(tmp_path, HEAD + "B,1,2\nA,3,4\n", "other.csv")
    with pytest.raises(
        InputError, match=r"one\.csv and other\.csv order the reversals near 2 Ma differently"
    ):
        Restatement.between(one, other)


def test_long_intervals_are_loose(two):
    """Strictly inside an interval of more than 5 Myr without reversals an age is only loosely dated."""
    restatement = Restatement.between(*two)
    assert LONG_INTERVAL_MYR == 5.0
    ages = [0.5, 3.0, 4.0, 4.001, 9.999, 10.0, 10.5, 11.0, 15.0, 20.0]
    loose = [False, False, False, True, True, False, False, False, True, False]
    assert restatement.loose(ages).tolist() == loose


def test_loose_ages_of_a_published_scale():
    """C33n and C34n are the long normal chrons of GTS2004: 6 and 40.6 Myr."""
    restatement = Restatement.between(TimeScale.read("gts2004"), TimeScale.read("gts2012"))
    assert restatement.loose([76.0, 81.0, 84.0, 100.0, 124.61, 124.8]).tolist() == [
        True,
        False,
        False,
        True,
        False,
        False,
    ]


def test_every_scale_has_a_source():
    """The package's scales name where they come from, with a year."""
    assert sorted(SOURCES) == ["cent94", "ck95", "gts2004", "gts2012", "kg86"]
    assert all(
        any(year in source for year in ("1986", "1995", "2004", "2012")) for source in SOURCES.values()
    )
