"""Histories and tables of sites restated: ages change, rotations never, and no gap opens.

Ages of chrons are those of the published tables: CK95 read, GTS2004 read (see the sources of the
data beside the published checks).
"""

import csv

import numpy as np
import pytest

from restore.errors import HistoryError, InputError, TableError
from restore.files.delimited import Layout
from restore.history.circuit import GAP, REACHED, Circuit
from restore.history.conventions import Table
from restore.history.links import pairs_of
from restore.history.redate import clock_of, one_clock, redate
from restore.history.rows import Row
from restore.history.store import History
from restore.history.timescale import TimeScale
from restore.motion.site_redates import redate_sites

CK95, GTS2004 = TimeScale.read("ck95"), TimeScale.read("gts2004")
KM_PER_DEGREE = 111.195080
"""constants.csv, computed by a separate small program, on R1."""


def row(age, angle=None, chron="", plate="afra", partner="deep", table=0, line=0):
    turn = age if angle is None else angle
    return Row(plate, partner, float(age), 50.0, 20.0, float(turn), chron=chron, table=table, line=line)


def history(*rows, scales=("ck95",), **more):
    tables = [Table(file=f"t{n}.csv", time_scale=scale, **more) for n, scale in enumerate(scales)]
    return History.from_rows(rows, tables)


def ages(done):
    return done.history.rows.age_ma.tolist()


def between(age, young, old, to_young, to_old):
    return to_young + (age - young) / (old - young) * (to_old - to_young)


def test_by_chron_else_by_interpolation():
    """C6n(o) is 20.131 Ma in CK95 and 19.722 in GTS2004; a row without a chron goes in proportion."""
    before = history(row(0.0, 0.0), row(20.131, chron="C6n(o)"), row(19.5), row(19.048))
    done = redate(before, GTS2004)
    halfway = between(19.5, 19.048, 20.131, 18.748, 19.722)
    np.testing.assert_allclose(ages(done), [0.0, 19.722, halfway, 18.748], rtol=0.0, atol=1e-13)
    assert [moved.how for moved in done.moved] == ["unchanged", "chron", "interpolated", "interpolated"]
    assert [moved.row for moved in done.moved] == [0, 1, 2, 3]
    assert done.moved[1].before_ma == 20.131
    assert done.history.tables[0].time_scale == "gts2004"


def test_a_chron_counts_more_than_the_age_beside_it():
    """A row typed 20.0 Ma with chron C6n(o) takes the chron's age in the new scale."""
    assert ages(redate(history(row(20.0, chron="C6n(o)")), GTS2004)) == [19.722]


def test_a_remark_is_no_chron():
    """A name that the scale lacks, or without an edge, does not date a row: it is interpolated."""
    done = redate(history(row(19.048, chron="An6"), row(20.131, chron="M0r(y)", angle=21.0)), GTS2004)
    assert ages(done)[0] == 18.748
    assert [moved.how for moved in done.moved] == ["interpolated", "chron"]
    done = redate(history(row(19.048, chron="Brunhes(y)")), GTS2004)
    assert (ages(done), done.moved[0].how) == ([18.748], "interpolated")


def test_rotations_stay():
    """Poles, angles, errors, labels and lines are the same to the last bit, and so is the original."""
    before = history(row(20.131, 7.25, line=9), row(40.13, 11.5, line=4))
    done = redate(before, GTS2004)
    for name in ("pole_lat_deg", "pole_lon_deg", "angle_deg", "covariance", "plate", "line", "printed"):
        np.testing.assert_array_equal(getattr(done.history.rows, name), getattr(before.rows, name))
    assert before.rows.age_ma.tolist() == [20.131, 40.13]
    assert before.tables[0].time_scale == "ck95"
    with pytest.raises(ValueError, match="read-only"):
        done.history.rows.age_ma[0] = 1.0


def test_what_a_change_is_worth():
    """0.409 Myr at one degree per Myr are 0.409 degrees: 45.5 km at most on the globe."""
    done = redate(history(row(0.0, 0.0), row(20.131, chron="C6n(o)"), row(30.098)), GTS2004)
    assert done.moved[1].km == pytest.approx((20.131 - 19.722) * KM_PER_DEGREE, rel=1e-6)
    assert done.moved[0].km == 0.0


def test_the_faster_stage_counts():
    """Of the stages before and after a row the faster one says how far its age matters."""
    done = redate(
        history(row(0.0, 0.0), row(20.131, 20.131), row(30.131, 50.131, chron="C12n(o)")), GTS2004
    )
    assert done.moved[1].km == pytest.approx((20.131 - 19.722) * 3.0 * KM_PER_DEGREE, rel=1e-6)


def test_a_history_already_on_the_clock():
    """Rows on the scale that is asked stay, chron or not; the same scale under another name as well."""
    done = redate(history(row(20.0, chron="C6n(o)"), row(500.0, 50.0)), CK95)
    assert ages(done) == [20.0, 500.0]
    assert {moved.how for moved in done.moved} == {"unchanged"}


def test_a_file_is_the_same_scale_wherever_it_is_named(tmp_path):
    """A scale of one's own, once by its path and once by its name, does not restate to itself."""
    (tmp_path / "own.csv").write_text("chron,young_ma,old_ma\nA,0,5\nB,6,9\n", encoding="utf-8")
    before = history(row(4.0), row(500.0, 50.0), scales=(str(tmp_path / "own.csv"),))
    own = TimeScale.read("own.csv", tmp_path)
    assert ages(redate(before, own)) == [4.0, 500.0]
    assert one_clock(before, own).history is before


def test_loose_ages_are_marked():
    """76 Ma lies inside C33n of CK95 (73.619 to 79.075 Ma), 81 Ma in C33r, under 5 Myr long."""
    done = redate(history(row(76.0), row(81.0), row(79.075)), GTS2004)
    assert [moved.loose for moved in done.moved] == [True, False, False]


def test_tables_without_a_clock():
    """A table that names no clock is taken to be on the default; its chrons need none."""
    before = history(row(20.131), row(33.545, chron="C13n(o)"), scales=("",))
    assert ages(redate(before, GTS2004, CK95)) == [19.722, 33.738]
    with pytest.raises(
        HistoryError, match=r"t0\.csv:5: age 20\.131 Ma has no chron and its table names no"
    ):
        redate(history(row(20.131, line=5), row(33.545, chron="C13n(o)"), scales=("",)), GTS2004)


def test_every_row_at_fault_has_its_line():
    """Rows older than what both scales date are refused, one line each, with what can be restated."""
    before = history(row(20.0, line=2), row(90.0, line=3), row(120.0, line=7))
    match = r"t0\.csv:3: age 90 Ma cannot be restated from ck95 to gts2004; only 0\.\.83 Ma of ck95 can"
    with pytest.raises(HistoryError, match=match) as caught:
        redate(before, GTS2004)
    assert [line.split(": ")[0] for line in str(caught.value).splitlines()] == ["t0.csv:3", "t0.csv:7"]
    assert [finding.kind for finding in caught.value.findings] == ["outside the scale"] * 2


def test_rows_that_would_change_their_order():
    """A wrong pick: 20.0 Ma is said to be C6An.1n(y), 20.040 in GTS2004; 20.131 Ma is 19.722 there."""
    before = history(row(20.0, chron="C6An.1n(y)", line=2), row(20.131, line=3))
    match = (
        r"t0\.csv:3: afra relative to deep: restated, this row is at 19\.722 Ma and its younger neighbour"
    )
    with pytest.raises(HistoryError, match=match):
        redate(before, GTS2004)


def test_rows_that_would_fall_on_one_age():
    """Two rows of a pair at one age are a fault as well."""
    before = history(row(20.0, chron="C6n(o)", line=2), row(20.131, line=3))
    with pytest.raises(
        HistoryError, match=r"t0\.csv:3: .* 19\.722 Ma and its younger neighbour at 19\.722 Ma"
    ):
        redate(before, GTS2004)


YOUNG = (row(0.0, 0.0, partner="near"), row(20.1, chron="C6n(o)", partner="near", line=3))
NEAR = (row(0.0, 0.0, plate="near"), row(70.0, plate="near"))


def test_touching_rows_move_together():
    """The younger pair ends by chron at 19.722 Ma; the older one begins there, not at 19.694."""
    before = history(*YOUNG, row(20.1), row(60.0), *NEAR)
    done = redate(before, GTS2004)
    alone = redate(history(row(20.1), row(60.0)), GTS2004)
    assert ages(alone)[0] == pytest.approx(between(20.1, 19.048, 20.131, 18.748, 19.722), abs=1e-12)
    assert ages(done)[1] == ages(done)[2] == 19.722
    assert [moved.how for moved in done.moved][1:3] == ["chron", "with its neighbour"]
    circuit = Circuit(done.history, "deep")
    found = circuit.rotations("afra", np.linspace(0.0, 58.0, 2001))
    assert set(found.status.tolist()) == {REACHED}


def test_without_touching_nothing_is_pulled_along():
    """A gap of a hundredth of a Myr is a gap before and after: rows that do not touch stay apart."""
    done = redate(history(*YOUNG, row(20.11), row(60.0), *NEAR), GTS2004)
    assert ages(done)[2] == pytest.approx(between(20.11, 19.048, 20.131, 18.748, 19.722), abs=1e-12)
    assert done.moved[2].how == "interpolated"


def test_a_pair_listed_the_other_way_round_touches_too():
    """deep relative to afra goes on where afra relative to near ends: one age again."""
    turned = (row(20.1, plate="deep", partner="afra"), row(60.0, plate="deep", partner="afra"))
    done = redate(history(*YOUNG, *turned, *NEAR), GTS2004)
    assert ages(done)[1] == ages(done)[2] == 19.722
    status = Circuit(done.history, "deep").rotations("afra", np.linspace(0.0, 58.0, 501)).status
    assert GAP not in status.tolist()


def test_pairs_that_only_share_a_partner_do_not_touch():
    """Two plates that both end on deep at 20.1 Ma, one by chron: the other is interpolated."""
    before = history(row(20.1, chron="C6n(o)"), row(20.1, plate="bora"))
    assert ages(redate(before, GTS2004))[1] < 19.7


def test_three_pairs_that_touch_in_a_row():
    """near hands over to afra, afra to bora at one age: all take the age that one has by chron."""
    rows = (
        row(10.0, plate="afra", partner="deep"),
        row(20.1, plate="afra", partner="deep"),
        row(20.1, plate="bora", partner="afra"),
        row(30.0, plate="bora", partner="afra"),
        row(5.0, plate="bora", partner="deep"),
        row(20.1, plate="bora", partner="deep", chron="C6n(o)"),
    )
    done = redate(history(*rows), GTS2004)
    assert {ages(done)[n] for n in (2, 5)} == {19.722}


def test_two_chrons_where_a_partner_changes():
    """Rows at one age that two chrons date differently in the new scale are a fault."""
    before = history(*YOUNG, row(20.1, chron="C6n(0.9)", line=4), row(60.0), *NEAR)
    match = r"t0\.csv:4: afra changes its partner at 20\.1 Ma, where two chrons say 19\.722 and 19\.6246 Ma"
    with pytest.raises(HistoryError, match=match):
        redate(before, GTS2004)


def test_two_clocks_that_touch():
    """Two tables on two clocks that meet at 20.131 Ma go on meeting on the run's clock."""
    rows = (
        *YOUNG[:1],
        row(20.131, partner="near", line=3),
        row(20.131, table=1),
        row(60.0, table=1),
        *NEAR,
    )
    before = history(*rows, scales=("ck95", "gts2004"))
    done = redate(before, TimeScale.read("gts2012"))
    assert ages(done)[1] == ages(done)[2]
    assert set(Circuit(done.history, "deep").rotations("afra", [5.0, 19.9, 20.3, 50.0]).status) == {REACHED}


def test_the_ages_for_which_a_table_is_meant_move_too():
    """valid_to_ma = 20.131 at a row goes with the row; one between two rows goes in proportion."""
    before = history(row(0.0, 0.0), row(20.131), row(40.13), valid_to_ma=20.131)
    assert redate(before, GTS2004).history.tables[0].valid_to_ma == 19.722
    (pair,) = pairs_of(redate(before, GTS2004).history)
    assert (pair.youngest_ma, pair.oldest_ma) == (0.0, 19.722)
    before = history(row(19.048), row(20.131), valid_from_ma=19.5, valid_to_ma=25.0)
    table = redate(before, GTS2004).history.tables[0]
    assert table.valid_from_ma == pytest.approx(between(19.5, 19.048, 20.131, 18.748, 19.722), abs=1e-12)
    # beyond its rows a bound moves with the nearest
    assert table.valid_to_ma == pytest.approx(25.0 + 19.722 - 20.131, abs=1e-12)
    endless = redate(history(row(20.131)), GTS2004).history.tables[0]
    assert (endless.valid_from_ma, endless.valid_to_ma) == (0.0, np.inf)


def test_the_same_positions_at_restated_ages():
    """At the restated age of any row the restated history gives the same rotation: exactly."""
    before = history(row(0.0, 0.0), row(20.131, 5.0), row(40.13, 12.0), row(67.61, 19.0))
    after = redate(before, GTS2004).history
    one = Circuit(before, "deep").rotations("afra", [20.131, 40.13, 67.61])
    other = Circuit(after, "deep").rotations("afra", [19.722, 39.464, 67.696])
    np.testing.assert_array_equal(one.rotations.quaternions, other.rotations.quaternions)


def test_a_restated_history_is_written_and_read(tmp_path):
    """One file for the restated history: its clock is named in it."""
    done = redate(history(row(20.131), row(40.13)), GTS2004).history
    done.write(tmp_path / "h.nc")
    back = History.read(tmp_path / "h.nc")
    assert back.same_as(done)
    assert back.tables[0].time_scale == "gts2004"


def test_one_clock_restates_what_is_on_another():
    """A table on CK95 beside one on GTS2004: the first is restated, with the worst row in Myr and km."""
    rows = (row(0.0, 0.0), row(20.131, line=2), row(40.13, line=3), row(20.0, plate="bora", table=1))
    done = one_clock(history(*rows, scales=("ck95", "gts2004")), GTS2004)
    np.testing.assert_allclose(ages(done), [0.0, 19.722, 39.464, 20.0], rtol=0.0, atol=1e-13)
    (finding,) = done.findings
    assert (finding.severity, finding.kind, str(finding.place)) == ("note", "restated", "t0.csv:3")
    assert finding.what == "restated from ck95 to gts2004: up to 0.666 Myr (row of 40.13 Ma)"
    assert finding.km == pytest.approx(0.666 * KM_PER_DEGREE, rel=1e-6)


def test_one_clock_keeps_and_names_what_has_none():
    """A table without a clock beside one that has it is kept, and remarked upon."""
    rows = (row(20.0), row(25.0, plate="bora", table=1))
    before = history(*rows, scales=("gts2004", ""))
    done = one_clock(before, GTS2004)
    assert done.history is before
    (finding,) = done.findings
    assert (finding.severity, finding.kind, str(finding.place)) == ("warning", "no clock", "t1.csv")
    assert finding.what == "the table names no time scale; its ages are taken as gts2004"
    assert one_clock(history(row(20.0), scales=("",)), GTS2004).findings == ()


def test_the_clock_of_a_history():
    """The one that is named, else the one its tables name; several are refused, none is none."""
    one = history(row(20.0), scales=("ck95",))
    assert clock_of(one, None).name == "ck95"
    assert clock_of(one, "gts2012").name == "gts2012"
    assert clock_of(history(row(20.0), scales=("",)), None) is None
    two = history(row(20.0), row(25.0, table=1, plate="bora"), scales=("ck95", "gts2004"))
    assert clock_of(two, "ck95").name == "ck95"
    with pytest.raises(HistoryError, match=r"on 2 clocks \(ck95, gts2004\); name one time scale"):
        clock_of(two, None)


def restated(tmp_path, text, own="ck95", layout=None):
    (tmp_path / "sites.csv").write_text(text, encoding="utf-8")
    scale = None if own is None else TimeScale.read(own)
    table = tmp_path / "sites.csv"
    out = tmp_path / "out.csv"
    findings = redate_sites(table, layout or Layout(), scale, GTS2004, out, {})
    with out.open(encoding="utf-8", newline="") as stream:
        return list(csv.DictReader(stream)), findings


def test_sites_by_chron_and_by_interpolation(tmp_path):
    """A row with a chron takes its age, others go in proportion; every column of one's own stays."""
    rows, findings = restated(
        tmp_path,
        "core,lat_deg,age_ma,chron,keeper\na,1.50,20.131,,x\nb,2,,C6n(o),y\nc,3,20.0,C6n(y),z\nd,4,,,w\n",
    )
    assert findings == []
    assert [r["age_ma"] for r in rows] == ["19.722", "19.722", "18.748", ""]
    assert [r["redated_by"] for r in rows] == ["interpolated", "chron", "chron", ""]
    assert [r["age_before_ma"] for r in rows] == ["20.131", "", "20", ""]
    assert [r["age_moved_myr"] for r in rows] == ["-0.409", "", "-1.252", ""]
    assert [(r["core"], r["lat_deg"], r["keeper"]) for r in rows] == [
        ("a", "1.50", "x"),
        ("b", "2", "y"),
        ("c", "3", "z"),
        ("d", "4", "w"),
    ]


def test_every_age_of_a_site_is_restated(tmp_path):
    """Both ends of a range and the host's age go to the new clock as well."""
    rows, findings = restated(
        tmp_path, "age_young_ma,age_old_ma,host_age_ma\n19.048,20.131,40.13\n0,83.0,\n"
    )
    assert findings == []
    assert [list(r.values())[:3] for r in rows] == [["18.748", "19.722", "39.464"], ["0", "84", ""]]


def test_sites_with_decimal_commas(tmp_path):
    """Ages and fractions of chrons are read with the decimal mark of the table."""
    layout = Layout(delimiter=";", decimal=",")
    rows, findings = restated(
        tmp_path, "age_ma;chron;chron_fraction\n20,131;;\n;C3n.1n;0,5\n", layout=layout
    )
    assert findings == []
    # C3n.1n is 4.187 to 4.300 Ma in GTS2004 (read)
    assert [r["age_ma"] for r in rows] == ["19.722", "4.2435"]


def test_sites_at_fault_lose_their_age_and_nothing_else(tmp_path):
    """One line per fault with its place; the other rows are restated all the same."""
    rows, findings = restated(
        tmp_path,
        "core,age_ma,chron\na,90,\nb,x,\nc,5,An6\nd,20.131,\ne,20.131\n",
    )
    assert [r["age_ma"] for r in rows] == ["", "", "", "19.722", ""]
    assert [r["core"] for r in rows] == list("abcde")
    said = [finding.line().split("sites.csv:")[1] for finding in findings]
    assert said == [
        "2:2: age_ma = 90 cannot be restated to gts2004; only 0..83 Ma of ck95 can",
        "3:2: age_ma = 'x' is not a number; leave it empty if there is no value",
        "4:3: chron 'An6': say which edge, An6(y) or An6(o), or a chron_fraction",
        "6: the row has 2 fields where the header has 3; a missing value still needs its delimiter",
    ]


def test_a_fraction_that_is_no_number(tmp_path):
    """The line names the column of the fraction and what stands there."""
    _, findings = restated(tmp_path, "core,chron,chron_fraction\na,C6n,half\nb,C6n,2\n")
    assert [finding.line().split("sites.csv:")[1] for finding in findings] == [
        "2:3: chron_fraction = 'half' is not a number",
        "3:2: chron_fraction = 2: must lie in 0..1, from the young edge",
    ]


def test_sites_without_a_clock(tmp_path):
    """Where the table's clock is not said, only chrons and the present date a row."""
    rows, findings = restated(tmp_path, "core,age_ma,chron\na,20,\nb,20,C6n(o)\nc,0,\n", own=None)
    assert [r["age_ma"] for r in rows] == ["", "19.722", "0"]
    (finding,) = findings
    assert str(finding.place).endswith("sites.csv:2:2")
    assert finding.what == "age_ma = 20 has no chron and the table names no time scale"


def test_loose_ages_of_sites(tmp_path):
    """76 Ma lies inside C33n of CK95, more than 5 Myr long; a chron is never loose."""
    rows, _ = restated(tmp_path, "age_ma,chron\n76,\n81,\n76,C33n(0.5)\n")
    assert [r["loose"].lower() for r in rows] == ["true", "false", "false"]


def test_tables_of_sites_at_fault(tmp_path):
    """A table without any age, or two clocks that share nothing, is refused as a whole."""
    with pytest.raises(TableError, match=r"sites\.csv:1: column 'age_ma' is missing"):
        restated(tmp_path, "core,lat_deg\na,1\n")
    own = TimeScale("own", "", {"A": (0.0, 1.0)})
    with pytest.raises(InputError, match="time scales own and gts2004 share 0 reversals"):
        redate_sites(tmp_path / "sites.csv", Layout(), own, GTS2004, tmp_path / "out.csv", {})
    assert [path.name for path in tmp_path.iterdir()] == ["sites.csv"]
