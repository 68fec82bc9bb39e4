"""Published time scales as the package ships them, and published rotations restated from one to another.

The worked case at the end is computed by a separate small program, not published.
"""

from __future__ import annotations

import math
from collections import Counter
from functools import cache

import numpy as np
import pytest
from published.support import DATA, apart_km, records, unit, write_manifest

from restore.errors import InputError
from restore.history.circuit import Circuit
from restore.history.poles import stage_pole
from restore.history.redate import redate
from restore.history.store import History
from restore.history.timescale import SOURCES, Chron, Restatement, TimeScale
from restore.motion.points import Points, move_own

C_CHRONS = records("gpts_c_sequence_normal_chrons.csv")
M_CHRONS = records("gpts_m0_to_m5_reversed_chrons.csv")
M_INTERVALS = records("gpts_m_sequence_cent94_reversed_intervals.csv")
TIES = records("gpts_tie_chrons.csv")
C_SCALES = {"ck95": "read", "gts2004": "read", "gts2012": "memory"}
"""Scale -> how its column was obtained: Cande & Kent 1995, Ogg & Smith 2004 (both read), Ogg 2012
(from memory)."""

CAP_BLANC = (20.8, -17.0)
PICKS = {
    "An5": "C5n.2n(o)",
    "An6": "C6n(o)",
    "An13": "C13n(y)",
    "An21": "C21n(o)",
    "An25": "C25n(y)",
    "An30": "C30n(y)",
    "An32": "C32n.1n(y)",
    "An33o": "C33n(o)",
    "An34": "C34n(y)",
    "M0": "M0r(y)",
}
"""A stated pick for each anomaly of Klitgord & Schouten 1986: ours, for the test."""


def edge(text: str) -> float:
    """An age of the tables, NaN where the edge is not known."""
    return float(text) if text else math.nan


def chrons_of(name: str) -> dict[str, tuple[float, float]]:
    """All chrons of a published scale from the reference tables."""
    if name == "cent94":
        label = "label_of_normal_interval_just_younger"
        count, seen = Counter(row[label] for row in M_INTERVALS), Counter[str]()
        found = {}
        for row in M_INTERVALS:
            seen[row[label]] += 1
            alike = count[row[label]] > 1
            chron = f"{row[label]}r.{seen[row[label]]}r" if alike else f"{row[label]}r"
            found[chron] = edge(row["reversed_interval_young_Ma"]), edge(row["reversed_interval_old_Ma"])
        # an interval without a label and without a length, which no row of a history can name
        assert found.pop("-r") == (132.4, 132.4)
        return found
    how = {**C_SCALES, "kg86": "read"}[name]
    found = {}
    for row in (*C_CHRONS, *M_CHRONS):
        young = row.get(f"{name}_young_Ma_{how}", "")
        if young:
            found[row["chron"]] = edge(young), edge(row[f"{name}_old_Ma_{how}"])
    return found


@pytest.mark.parametrize("name", ["ck95", "gts2004", "gts2012", "cent94", "kg86"])
def test_scales_of_the_package_are_the_published_ones(name: str) -> None:
    """Every chron of every reference table, both edges, and no other.

    Sources: Cande & Kent 1995 Table 2, Ogg & Smith 2004, Channell et al. 1995, Kent & Gradstein 1986
    (all read), Ogg 2012 (from memory).
    """
    scale = TimeScale.read(name)
    expected = chrons_of(name)

    assert list(scale.chrons) == list(expected)
    for chron, ages in expected.items():
        np.testing.assert_array_equal(scale.chrons[chron], ages, err_msg=chron)


def test_the_m_sequences_agree_where_two_tables_hold_them() -> None:
    """M0r, M1r, M3r and M5r of CENT94 stand alike in both reference tables (Channell et al. 1995)."""
    scale = TimeScale.read("cent94")
    for row in M_CHRONS:
        expected = edge(row["cent94_young_Ma_read"]), edge(row["cent94_old_Ma_read"])
        assert scale.chrons[row["chron"]] == expected


def test_sources_say_what_was_read_and_what_recalled() -> None:
    """Each scale names its source; only GTS2012 is from memory and says so (SOURCES.md)."""
    assert {name: TimeScale.read(name).source for name in SOURCES} == SOURCES
    recalled = {name for name, source in SOURCES.items() if "recalled" in source}
    assert recalled == {"gts2012"}
    assert all(("(read)" in source) != (name in recalled) for name, source in SOURCES.items())


@pytest.mark.parametrize("tie", TIES, ids=[tie["tie"] for tie in TIES])
def test_ties_in_three_scales(tie: dict[str, str]) -> None:
    """The edges by which scales are tied, in the three of the C sequence.

    Sources: Cande & Kent 1995, Ogg & Smith 2004 (read), Ogg 2012 (from memory).
    """
    chron = Chron(tie["chron"], {"young": 0.0, "old": 1.0}[tie["edge"]])
    columns = {"ck95": "ck95_Ma_read", "gts2004": "gts2004_Ma_read", "gts2012": "gts2012_Ma_memory"}
    for name, column in columns.items():
        assert TimeScale.read(name).age_of(chron) == float(tie[column])


@pytest.mark.parametrize(("one", "other"), [("ck95", "gts2004"), ("gts2004", "ck95"), ("ck95", "gts2012")])
def test_ties_are_restated_exactly(one: str, other: str) -> None:
    """At a reversal that both scales date, the restated age is the other scale's to the last bit.

    Sources: as the tie table.
    """
    columns = {"ck95": "ck95_Ma_read", "gts2004": "gts2004_Ma_read", "gts2012": "gts2012_Ma_memory"}
    restatement = Restatement.between(TimeScale.read(one), TimeScale.read(other))
    before = [float(tie[columns[one]]) for tie in TIES]
    after = [float(tie[columns[other]]) for tie in TIES]
    np.testing.assert_array_equal(restatement(before), after)


def test_a_pick_inside_a_chron() -> None:
    """Marks et al. 1999 pick "3y" at 4.235 Ma: the middle of C3n.1n in CK95 (4.180 to 4.290, read)."""
    scale = TimeScale.read("ck95")
    assert scale.age_of(Chron.parse("C3n.1n(0.5)")) == pytest.approx(4.235, abs=1e-12)
    assert scale.age_of(Chron.parse("C3n.1n", 0.5)) == pytest.approx(4.235, abs=1e-12)


MARKS = {
    "6y": "C6n(y)",
    "5o": "C5n.2n(o)",
    "3ay": "C3An.1n(y)",
    "2ay": "C2An.1n(y)",
}


@pytest.mark.parametrize("anomaly", MARKS)
def test_ages_of_marks_by_their_picks(anomaly: str) -> None:
    """Marks, Stock & Quinn 1999, Table 2, date their anomalies in CK95 (read): the picks give their ages."""
    row = next(r for r in records("rotation_covariances_marks1999_table2.csv") if r["anomaly"] == anomaly)
    age = TimeScale.read("ck95").age_of(Chron.parse(MARKS[anomaly]))
    assert age == float(row["age_CK95_Ma"])


@pytest.mark.parametrize("anomaly", ["An34", "M0", "3y", "6", "M4"])
def test_names_of_papers_need_a_pick(anomaly: str) -> None:
    """Anomaly names of papers (Klitgord & Schouten 1986, Marks et al. 1999) are never guessed."""
    with pytest.raises(InputError, match="say which edge"):
        Chron.parse(anomaly)
    with pytest.raises(InputError, match=rf"chron '{anomaly}' is not in time scale gts2012"):
        TimeScale.read("gts2012").age_of(Chron(anomaly, 0.0))


@cache
def klitgord() -> History:
    """Klitgord & Schouten 1986 (from memory) with a stated pick for each anomaly, to M0."""
    history = History.read(DATA / "klitgord_schouten.toml")
    rows = history.rows
    older = [n for n in range(len(rows)) if rows.age_ma[n] > 118.0]
    kept = history.drop(older)
    for number, anomaly in enumerate(list(kept.rows.chron)):
        row = kept.rows.row(number)
        kept = kept.replace(number, type(row)(**{**vars(row), "chron": PICKS[anomaly]}))
    return kept


def cap_blanc(history: History, age_ma: float) -> tuple[float, float]:
    """Cap Blanc restored relative to North America, degrees."""
    circuit = Circuit(history, "North_America")
    points = Points(np.array([CAP_BLANC[0]]), np.array([CAP_BLANC[1]]), circuit.codes(["Africa"]))
    found = move_own(circuit, points, np.array([age_ma]))
    return float(found.lat_deg[0]), float(found.lon_deg[0])


def test_the_clock_matters_by_307_km() -> None:
    """Cap Blanc "at 118 Ma" on the source's ages and on GTS2012's: 307 km apart.

    Computed by a separate small program, not published; rotations of Klitgord & Schouten 1986 (from
    memory), GTS2012 (from memory).
    """
    restated = redate(klitgord(), TimeScale.read("gts2012")).history
    one, other = cap_blanc(klitgord(), 118.0), cap_blanc(restated, 118.0)

    assert apart_km(*one, *other) == pytest.approx(307.0, abs=0.5)


def test_a_history_restated_is_the_same_history() -> None:
    """Asked at the restated age, the restated history puts Cap Blanc where it stood, within 1 mm.

    Every row has a chron, so that M0 is asked at 125.93 Ma and An34 at 83.64 Ma of GTS2012 (from
    memory); the rotations are those of Klitgord & Schouten 1986 (from memory).
    """
    restated = redate(klitgord(), TimeScale.read("gts2012")).history
    for before, after in ((118.0, 125.93), (84.0, 83.64), (80.2, 79.9), (66.7, 66.398)):
        assert apart_km(*cap_blanc(klitgord(), before), *cap_blanc(restated, after)) < 1e-6
    # halfway between two rows as well: the stage goes at one speed on either clock
    halfway = cap_blanc(klitgord(), 101.0), cap_blanc(restated, (83.64 + 125.93) / 2)
    assert apart_km(*halfway[0], *halfway[1]) < 1e-6


def test_stage_rates_on_two_clocks() -> None:
    """An34 to M0: 0.754 deg/Myr on the source's ages, 0.606 on GTS2012's; the rotation is the same.

    Computed by a separate small program, not published; rotations and GTS2012 from memory.
    """
    restated = redate(klitgord(), TimeScale.read("gts2012")).history
    one = stage_pole(klitgord(), "Africa", "North_America", 118.0, 84.0).as_record()
    other = stage_pole(restated, "Africa", "North_America", 125.93, 83.64).as_record()

    assert one["rate_deg_per_myr"] == pytest.approx(0.754, abs=0.0005)
    assert other["rate_deg_per_myr"] == pytest.approx(0.606, abs=0.0005)
    poles = [unit(record["pole_lat_deg"], record["pole_lon_deg"]) for record in (one, other)]
    np.testing.assert_allclose(poles[0], poles[1], atol=1e-12)
    assert other["angle_deg"] == pytest.approx(one["angle_deg"], abs=1e-10)


def test_restating_changes_ages_and_nothing_else() -> None:
    """Poles, angles, labels and references of the restated rows are the printed ones to the last bit.

    Rotations of Klitgord & Schouten 1986 (from memory).
    """
    before = klitgord()
    done = redate(before, TimeScale.read("gts2012"))
    after = done.history.rows
    for name in ("plate", "relative_to", "pole_lat_deg", "pole_lon_deg", "angle_deg", "chron", "line"):
        np.testing.assert_array_equal(getattr(after, name), getattr(before.rows, name), err_msg=name)
    assert {moved.how for moved in done.moved} == {"chron"}
    assert {table.time_scale for table in done.history.tables} == {"gts2012"}
    m0 = next(m for m in done.moved if m.before_ma == 118.0)
    # 7.93 Myr at the stage's 0.754 deg/Myr (the worked case above) are 665 km at most on the globe
    assert m0.km == pytest.approx((125.93 - 118.0) * math.radians(0.754) * 6371.0088, rel=1e-3)


def test_ages_by_chron_of_a_published_table(tmp_path) -> None:
    """The same rows without the source's ages: the pick and the named scale date each one.

    Rotations of Klitgord & Schouten 1986 (from memory), ages of GTS2012 (from memory).
    """
    text = (DATA / "finite_rotations.csv").read_text(encoding="utf-8")
    (tmp_path / "finite_rotations.csv").write_text(text, encoding="utf-8")
    path = write_manifest(
        tmp_path,
        'file = "finite_rotations.csv"\ncomment = "Bullard_1965"\ntime_scale = "ck95"\nfrom_present = true\n'
        'columns = { plate = "plate_moved", relative_to = "plate_fixed", chron = "anomaly",'
        ' angle_deg = "angle_deg_anticlockwise_positive", reference = "source" }\n'
        "[table.chrons]\n" + "\n".join(f'{ours} = "{pick}"' for ours, pick in PICKS.items()),
    )
    with pytest.raises(
        InputError, match=r"finite_rotations\.csv:11:4: chron 'M0r' is not in time scale ck95"
    ):
        History.read(path)
    scale = {row["chron"]: row for row in C_CHRONS}
    text = text[: text.index("Klitgord_Schouten_1986,Africa,North_America,M0,")]
    (tmp_path / "finite_rotations.csv").write_text(text, encoding="utf-8")
    history = History.read(path)
    anomalies = [row["anomaly"] for row in records("finite_rotations.csv")[:9]]
    printed = dict(zip(anomalies, history.rows.age_ma, strict=True))
    for anomaly, age in printed.items():
        name, which = PICKS[anomaly].rstrip(")").split("(")
        side = {"y": "young", "o": "old"}[which]
        assert age == float(scale[name][f"ck95_{side}_Ma_read"])
    assert len(history) == 9
