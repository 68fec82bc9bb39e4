"""The audit of chains: plates without a frame, gaps, partners that jump, chains that differ, loops."""

import numpy as np
import pytest

from restore.history.audit import audit
from restore.history.conventions import Table
from restore.history.rows import Row
from restore.history.store import History

KM_PER_DEGREE = 111.195080
"""constants.csv, computed by a separate small program, on R1."""


def pair(plate, partner, *turns, pole=(90.0, 0.0), table=0, sigma_km=None, dof=np.inf):
    """Rows (age, angle) about one pole; isotropic errors in km if they are known."""
    known = None if sigma_km is None else np.eye(3) * (sigma_km / 6371.0088) ** 2
    return [
        Row(plate, partner, float(age), *pole, float(angle), known if age else None, dof, table=table, line=int(age) + 2)
        for age, angle in turns
    ]  # fmt: skip


def of(*pairs, tables=(), frames=None):
    rows = [row for rows in pairs for row in rows]
    tables = [Table(file="t0.csv", citation="x", **table) for table in tables or ({},)]
    tables = [Table(**{**vars(table), "file": f"t{n}.csv"}) for n, table in enumerate(tables)]
    return History.from_rows(rows, tables, frames)


def found(history, kind, frame="deep"):
    return [finding for finding in audit(history, frame) if finding.kind == kind]


STEADY = ((0, 0), (20, 10), (40, 20))


def test_chains_that_hold_give_no_finding():
    """A plate on a plate on the frame, all from the present to one age: only what is not known."""
    history = of(pair("afra", "deep", *STEADY), pair("bora", "afra", *STEADY))
    assert {finding.kind for finding in audit(history, "deep")} == {"no covariance"}


def test_a_plate_that_no_chain_ties():
    """Plates that reach no frame at any age are named at their first row, both ends of the pair."""
    history = of(pair("afra", "deep", *STEADY), pair("isla", "reef", *STEADY))
    findings = found(history, "no chain")
    assert [finding.what for finding in findings] == [
        "no chain leads from isla to deep at any age",
        "no chain leads from reef to deep at any age",
    ]
    assert {(f.severity, str(f.place)) for f in findings} == {("warning", "t0.csv:2")}
    assert "another frame" in findings[0].remedy
    assert found(history, "no chain", "reef") != []


def test_a_chain_that_ends_before_the_plate():
    """bora has rows to 40 Ma, but its partner has a chain only to 25 Ma: the ages are said."""
    history = of(pair("afra", "deep", (0, 0), (25, 5)), pair("bora", "afra", *STEADY))
    (finding,) = found(history, "no chain")
    assert (finding.severity, finding.place.line) == ("warning", 42)
    assert finding.what == "no chain leads from bora to deep between 25 and 40 Ma, where bora has rows"
    assert found(of(pair("afra", "deep", *STEADY), pair("bora", "afra", *STEADY)), "no chain") == []


def test_a_chain_that_does_not_reach_the_present():
    """A pair without a row of age 0 is a note, unless the table says that it holds from the present."""
    rows = pair("afra", "deep", (10, 5), (20, 10))
    (finding,) = found(of(rows), "not from the present")
    assert (finding.severity, finding.place.line) == ("note", 12)
    assert "only from 10 Ma on" in finding.what
    assert "from_present = true" in finding.remedy
    assert found(of(rows, tables=({"from_present": True},)), "not from the present") == []
    assert found(of(pair("afra", "deep", *STEADY)), "not from the present") == []


def test_a_gap():
    """Ten Myr without a chain between two partners: a warning at the row where it ends."""
    near = pair("near", "deep", *STEADY)
    history = of(pair("afra", "near", (0, 0), (10, 5)), pair("afra", "deep", (20, 12), (30, 15)), near)
    (finding,) = found(history, "gap")
    assert (finding.severity, finding.place.line) == ("warning", 22)
    assert finding.what == "afra has no chain to deep between 10 and 20 Ma"
    closed = of(pair("afra", "near", (0, 0), (20, 5)), pair("afra", "deep", (20, 12), (30, 15)), near)
    assert found(closed, "gap") == []


def test_a_gap_that_is_likely_rounding():
    """A tenth of a Myr between two partners is named as rounding, with the key that joins it."""
    near = pair("near", "deep", *STEADY)
    rows = (pair("afra", "near", (0, 0), (19.9, 5)), pair("afra", "deep", (20, 12), (30, 15)), near)
    (finding,) = found(of(*rows), "near gap")
    assert finding.severity == "warning"
    assert "between 19.9 and 20 Ma" in finding.what
    assert "join_within_myr" in finding.remedy
    assert found(of(*rows), "gap") == []
    joined = of(*rows, tables=({"join_within_myr": 0.2},))
    assert found(joined, "near gap") == []
    assert found(joined, "gap") == []


def changing(second, **more):
    """afra leaves near for deep at 20 Ma; near stands still, so that both angles count from deep."""
    near = pair("near", "deep", (0, 0), (40, 0), sigma_km=0.0)
    return of(pair("afra", "near", (0, 0), (20, 10), **more), pair("afra", "deep", *second, **more), near)


def test_a_partner_change_that_jumps():
    """10 degrees at the end of one pair, 10.5 where the next begins: half a degree, 55.6 km."""
    (finding,) = found(changing(((20, 10.5), (40, 20))), "partner change")
    assert (finding.severity, finding.place.line) == ("warning", 22)
    assert finding.what.startswith("afra jumps at 20 Ma, where its partner changes")
    assert "errors of its rows are not known" in finding.what
    assert finding.km == pytest.approx(0.5 * KM_PER_DEGREE, rel=1e-6)
    assert found(changing(((20, 10), (40, 20))), "partner change") == []


def test_a_jump_of_less_than_a_kilometre_is_none():
    """Rounding in the last printed digits of two papers is no jump; a little more is."""
    assert found(changing(((20, 10.008), (40, 20))), "partner change") == []
    assert len(found(changing(((20, 10.010), (40, 20))), "partner change")) == 1


@pytest.mark.parametrize(("sigma_km", "word"), [(5.0, "beyond"), (100.0, "within")])
def test_whether_errors_explain_a_jump(sigma_km, word):
    """55.6 km are many times two rows' 5 km, and less than two rows' 100 km.

    By chi-square with 3 degrees of freedom of (55.6 km)^2 / (2 sigma^2): 62 and 0.15.
    """
    (finding,) = found(changing(((20, 10.5), (40, 20)), sigma_km=sigma_km), "partner change")
    assert f"{word} the errors of its rows (probability" in finding.what
    if word == "within":
        assert "(probability 0.98)" in finding.what


def test_a_table_that_turns_the_other_way_shows_where_partners_change():
    """A jump of 20 degrees that vanishes if a whole table is turned round names that table."""
    near = pair("near", "deep", (0, 0), (40, 0), table=0)
    young = pair("afra", "near", (0, 0), (20, 10), table=0)
    old = pair("afra", "deep", (20, -10), (40, -20), table=1)
    (finding,) = found(of(near, young, old, tables=({}, {})), "partner change")
    assert finding.what.endswith("if all of t0.csv turned the other way, 0 km would be left")
    assert finding.km == pytest.approx(20.0 * KM_PER_DEGREE, rel=1e-6)
    askew = pair("afra", "deep", (20, -10), (40, -20), table=1, pole=(20.0, 0.0))
    (finding,) = found(of(near, young, askew, tables=({}, {})), "partner change")
    assert "turned the other way" not in finding.what


def triangle(angle, **more):
    """Two ways from bora to deep: by itself, 2 degrees less `angle`, and over afra."""
    over = (pair("afra", "deep", *STEADY, **more), pair("bora", "afra", *STEADY, **more))
    own = pair("bora", "deep", (0, 0), (20, 20 - angle), (40, 40 - 2 * angle), **more)
    return of(*over, own)


def test_two_chains_that_differ():
    """Over afra bora has turned 40 degrees at 40 Ma, by itself 38: 222 km, both chains named."""
    (finding,) = found(triangle(1.0), "two chains")
    assert (finding.severity, finding.place.line) == ("warning", 42)
    assert finding.km == pytest.approx(2.0 * KM_PER_DEGREE, rel=1e-6)
    assert "0..40 Ma" in finding.what
    assert "bora > deep" in finding.what
    assert "bora > afra > deep" in finding.what
    assert "errors of its rows are not known" in finding.what
    assert "rank the tables" in finding.remedy
    assert found(triangle(0.0), "two chains") == []


@pytest.mark.parametrize(("sigma_km", "word"), [(5.0, "beyond"), (300.0, "within")])
def test_whether_two_chains_differ_significantly(sigma_km, word):
    """222 km against three rows of 5 km, or of 300 km, each."""
    (finding,) = found(triangle(1.0, sigma_km=sigma_km), "two chains")
    assert f"{word} the errors of its rows (probability" in finding.what


def test_few_degrees_of_freedom_make_a_difference_less_sure():
    """The same misfit is significant with errors known, and not where kappa rests on little."""
    (sure,) = found(triangle(0.05, sigma_km=2.0), "two chains")
    (guessed,) = found(triangle(0.05, sigma_km=2.0, dof=1.0), "two chains")
    assert "beyond the errors" in sure.what
    assert "within the errors" in guessed.what


def test_ranks_settle_two_chains():
    """Where a rank decides, nothing is in doubt."""
    over = (pair("afra", "deep", *STEADY), pair("bora", "afra", *STEADY))
    own = pair("bora", "deep", (0, 0), (40, 38), table=1)
    history = of(*over, own, tables=({}, {"rank": 1}))
    assert found(history, "two chains") == []


def test_a_loop_that_closes():
    """Two chains that agree are a note with both, 0 km; without a loop there is none."""
    (finding,) = found(triangle(0.0), "loop")
    assert finding.severity == "note"
    assert "two chains agree" in finding.what
    assert "bora > afra > deep" in finding.what
    assert finding.km == pytest.approx(0.0, abs=1e-3)
    assert found(triangle(1.0), "loop") == []
    assert found(of(pair("afra", "deep", *STEADY)), "loop") == []


def test_chains_that_mix_two_kinds_of_frame():
    """A mantle frame on the way to a spin-axis frame is a warning that names both."""
    rows = (pair("afra", "deep", *STEADY), pair("deep", "axis", *STEADY))
    mixed = of(*rows, frames={"deep": "mantle", "axis": "spin-axis"})
    (finding,) = found(mixed, "frames mixed", "axis")
    assert finding.severity == "warning"
    assert "chains to axis (spin-axis) pass through deep (mantle)" in finding.what
    assert "true polar wander" in finding.remedy
    # asked relative to the mantle frame, plates do not pass through the other one
    assert found(mixed, "frames mixed", "deep") == []
    assert found(of(*rows, frames={"deep": "mantle", "axis": "mantle"}), "frames mixed", "axis") == []
    assert found(of(*rows), "frames mixed", "axis") == []


def test_findings_have_places_even_where_the_present_is_implied():
    """A pair that holds from the present without a row for it is placed at a row that is written."""
    rows = (
        pair("afra", "near", (5, 3), (20, 10)),
        pair("afra", "deep", (20, 10.5), (40, 20)),
        pair("near", "deep", (10, 0), (40, 0)),
    )
    history = of(*rows, tables=({"from_present": True, "valid_from_ma": 0.0},))
    for finding in audit(history, "deep"):
        assert finding.place.file == "t0.csv"
        assert finding.place.line is not None
