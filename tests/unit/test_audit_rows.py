"""The audit of rows and tables: each kind of finding provoked once, and once not."""

import numpy as np
import pytest

from restore.errors import HistoryError
from restore.findings import Finding
from restore.history.audit import SEVERITIES, audit, widest_frame
from restore.history.conventions import Table
from restore.history.rows import Row
from restore.history.store import History

HEAD = "plate,relative_to,age_ma,pole_lat_deg,pole_lon_deg,angle_deg"
KM_PER_DEGREE = 111.195080
"""constants.csv, computed by a separate small program, on R1."""


def row(age, plate="afra", partner="deep", table=0, **more):
    return Row(plate, partner, float(age), 60.0, 30.0, 0.5 * age, table=table, line=int(age), **more)


def found(history, kind, frame=None):
    return [finding for finding in audit(history, frame) if finding.kind == kind]


def read(tmp_path, rows, head=HEAD):
    path = tmp_path / "h.csv"
    path.write_text(f"{head}\n{rows}", encoding="utf-8")
    return History.read(path)


GOOD = "afra,deep,0,,,0\nafra,deep,10,60,30,5\nafra,deep,20,60,30,10\nafra,deep,30,60,30,15\n"


def test_a_clean_history_has_no_finding(tmp_path):
    """Sorted rows with references and errors, from the present on: nothing is said."""
    head = f"{HEAD},cov_a,cov_b,cov_c,cov_d,cov_e,cov_f,reference"
    rows = "afra,deep,0,,,0,,,,,,,x\n" + "".join(
        f"afra,deep,{age},60,30,{0.5 * age},1e-6,0,0,1e-6,0,1e-6,Log 1\n" for age in (10, 20, 30)
    )
    assert audit(read(tmp_path, rows, head)) == []


def test_a_second_row_at_one_age(tmp_path):
    """Two rows of a pair at one age are an error at the later line, which names the first."""
    with pytest.raises(HistoryError, match=r"h\.csv:6: afra relative to deep has a second row at 20 Ma"):
        read(tmp_path, GOOD + "afra,deep,20,60,31,10\n")
    assert len(read(tmp_path, GOOD + "afra,deep,20.001,60,31,10\n")) == 5


def test_rows_out_of_order(tmp_path):
    """A row that stands after an older one is a warning at its line; in order there is none."""
    (finding,) = found(read(tmp_path, GOOD + "afra,deep,25,60,30,12.5\n"), "unsorted ages")
    assert (finding.severity, finding.place.line) == ("warning", 6)
    assert "25 Ma stands after 30 Ma" in finding.what
    assert found(read(tmp_path, GOOD), "unsorted ages") == []


def test_a_plate_that_is_elsewhere_today(tmp_path):
    """A row of age 0 that turns is an error at its angle; a zero row is none."""
    with pytest.raises(HistoryError, match=r"h\.csv:2:6: a row of age 0 turns by 3 degrees"):
        read(tmp_path, "afra,deep,0,60,30,3\n")
    assert len(read(tmp_path, "afra,deep,0,60,30,0\n")) == 1


COV_HEAD = f"{HEAD},cov_a,cov_b,cov_c,cov_d,cov_e,cov_f"


def test_a_covariance_that_is_none(tmp_path):
    """A printed matrix with a negative eigenvalue is an error; one that is positive definite is none."""
    with pytest.raises(HistoryError, match=r"h\.csv:2:7: the covariance is not positive definite"):
        read(tmp_path, "afra,deep,10,60,30,5,1e-6,2e-6,0,1e-6,0,1e-6\n", COV_HEAD)
    assert len(read(tmp_path, "afra,deep,10,60,30,5,1e-6,0.9e-6,0,1e-6,0,1e-6\n", COV_HEAD)) == 1


def test_rows_without_a_covariance(tmp_path):
    """Their number and the first of them; a zero row needs none."""
    rows = "afra,deep,0,,,0,,,,,,\nafra,deep,10,60,30,5,1e-6,0,0,1e-6,0,1e-6\n"
    assert found(read(tmp_path, rows, COV_HEAD), "no covariance") == []
    history = read(tmp_path, rows + "afra,deep,20,60,30,10,,,,,,\nafra,deep,30,60,30,15,,,,,,\n", COV_HEAD)
    (finding,) = found(history, "no covariance")
    assert (finding.severity, finding.place.line) == ("note", 4)
    assert finding.what == "2 of 3 rows have no covariance (the first here)"
    assert "no error bar" in finding.remedy


def test_rows_without_a_reference(tmp_path):
    """A row stands on its own reference or on its table's citation; without either it is named."""
    (finding,) = found(read(tmp_path, GOOD), "no reference")
    assert (finding.severity, finding.place.line) == ("note", 3)
    assert finding.what == "3 rows have no reference (the first here)"
    head = f"{HEAD},reference"
    with_it = "".join(f"{line},Log 7\n" for line in GOOD.splitlines())
    assert found(read(tmp_path, with_it, head), "no reference") == []
    cited = History.from_rows([row(10)], [Table(citation="Author 1999")])
    assert found(cited, "no reference") == []


def tables(*scales):
    return [Table(file=f"t{n}.csv", time_scale=scale, citation="x") for n, scale in enumerate(scales)]


def test_two_clocks_in_one_history():
    """A table on CK95 beside one on GTS2004: a warning with the row that matters most, in km.

    C6n(o) is 20.131 Ma in CK95 and 19.722 in GTS2004 (both read): 0.409 Myr at half a degree per Myr.
    """
    rows = [row(0, plate="bora"), row(20.131, plate="bora"), row(30, table=1)]
    history = History.from_rows(rows, tables("ck95", "gts2004"))
    assert found(history, "clocks mixed")[0].place.file == "t1.csv"
    swapped = [row(0, plate="bora", table=1), row(20.131, plate="bora", table=1), row(10)]
    (finding,) = found(History.from_rows(swapped, tables("gts2004", "ck95")), "clocks mixed")
    assert (finding.severity, finding.place.file, finding.place.line) == ("warning", "t1.csv", 20)
    assert "restated from ck95 to gts2004: up to 0.409 Myr" in finding.what
    assert finding.km == pytest.approx(0.409 * 0.5 * KM_PER_DEGREE, rel=1e-6)


def test_a_table_without_a_clock_beside_one_that_has_it():
    """What names no time scale is named where another table has one."""
    history = History.from_rows([row(20), row(30, table=1, plate="bora")], tables("ck95", ""))
    (finding,) = found(history, "clocks mixed")
    assert (finding.severity, finding.place.file) == ("warning", "t1.csv")
    assert "names no time scale" in finding.what


@pytest.mark.parametrize("scales", [("ck95", "ck95"), ("", "")])
def test_one_clock_or_none_is_no_mixture(scales):
    """Tables on one clock, or histories without any, are not mixed."""
    history = History.from_rows([row(20), row(30, table=1, plate="bora")], tables(*scales))
    assert found(history, "clocks mixed") == []


def test_clocks_that_cannot_be_brought_together():
    """Rows that cannot be restated are named, and the audit goes on."""
    rows = [row(20), row(120, table=1, plate="bora")]
    findings = found(History.from_rows(rows, tables("ck95", "cent94")), "clocks mixed")
    assert [finding.severity for finding in findings] == ["warning"]
    assert "share 0 reversals" in findings[0].what


def test_errors_stand_first_and_records_are_plain():
    """Findings are sorted by severity, and each is a record of plain values."""
    history = History.from_rows([row(10), row(20), Row("afra", "deep", 30.0, 60.0, 30.0, -15.0), row(40)])
    findings = audit(history)
    order = [SEVERITIES.index(finding.severity) for finding in findings]
    assert order == sorted(order)
    assert findings[0].severity == "error"
    for finding in findings:
        record = finding.as_record()
        assert {"severity", "kind", "file", "line", "what", "km", "remedy"} <= set(record)
        assert record["km"] is None or isinstance(record["km"], float)


def test_every_finding_says_where_and_what_to_do():
    """Kind, what and remedy are said by every warning and error that these tests provoke."""
    rows = [row(10), row(20), Row("afra", "deep", 30.0, 60.0, 30.0, -15.0, line=30), row(40)]
    rows += [row(5, plate="isla", partner="reef")]
    for finding in audit(History.from_rows(rows, [Table(file="t.csv")])):
        assert isinstance(finding, Finding)
        assert finding.place.file == "t.csv"
        assert finding.place.line is not None
        assert finding.what
        assert finding.remedy


def test_the_frame_that_is_audited():
    """A stated mantle or spin-axis frame, else the label that most plates are tied to."""
    rows = [row(10), row(10, plate="bora"), row(10, plate="cara", partner="other")]
    assert widest_frame(History.from_rows(rows)) == "deep"
    assert widest_frame(History.from_rows(rows, frames={"other": "mantle"})) == "other"
    assert widest_frame(History.from_rows(rows, frames={"bora": "plate"})) == "deep"


def test_an_empty_history():
    """There is nothing to say about nothing."""
    assert audit(History.from_rows([])) == []


def test_a_zero_matrix_is_a_known_error():
    """An error stated as exactly zero is known: no finding."""
    known = Row("afra", "deep", 10.0, 60.0, 30.0, 5.0, covariance=np.zeros((3, 3)))
    assert found(History.from_rows([known]), "no covariance") == []
