"""Rows off their neighbours' path: slips of the pole are named, real changes of motion are not."""

from dataclasses import replace

import pytest

from restore.history.audit import audit
from restore.history.rows import Row
from restore.history.store import History

AGES = (0.0, 10.0, 21.0, 33.0, 46.0, 58.0, 70.0, 85.0)


def path():
    """A smooth pair of rows: a pole that drifts a little, at half a degree per Myr."""
    rows = [Row("A", "B", 0.0, 0.0, 0.0, 0.0, line=2)]
    for line, age in enumerate(AGES[1:], start=3):
        rows.append(Row("A", "B", age, 41.0 + 0.04 * age, 26.0 - 0.05 * age, 0.5 * age, line=line))
    return rows


def off(rows):
    return [f for f in audit(History.from_rows(rows)) if f.kind == "off the path"]


def with_slip(age, **wrong):
    return [replace(row, **wrong) if row.age_ma == age else row for row in path()]


def test_a_smooth_path_has_no_finding():
    """Nothing stands out of a path without a slip."""
    assert off(path()) == []


@pytest.mark.parametrize("age", [33.0, 46.0, 70.0])
@pytest.mark.parametrize(
    ("slip", "said"),
    [
        (lambda r: {"pole_lat_deg": -r.pole_lat_deg}, "with the latitude's sign changed"),
        (lambda r: {"pole_lon_deg": -r.pole_lon_deg}, "with the longitude's sign changed"),
        (lambda r: {"pole_lon_deg": r.pole_lon_deg - 180.0}, "with the longitude turned by 180 degrees"),
        (lambda r: {"angle_deg": r.angle_deg + 30.0}, "its neighbours would have an angle of"),
    ],
)
def test_a_slip_of_one_row_is_one_warning_at_its_line(age, slip, said):
    """One wrong row gives one warning, at its line, with the change that would bring it near."""
    right = next(row for row in path() if row.age_ma == age)
    (finding,) = off(with_slip(age, **slip(right)))
    assert (finding.severity, finding.place.line) == ("warning", right.line)
    assert said in finding.remedy
    assert finding.km > 500.0


def test_two_slips_are_two_warnings():
    """The worst is taken out before the next is looked at, so that neighbours are not blamed."""
    rows = [replace(r, pole_lat_deg=-r.pole_lat_deg) if r.age_ma in {21.0, 58.0} else r for r in path()]
    assert [finding.place.line for finding in off(rows)] == [4, 7]


def test_a_real_change_of_motion_is_no_slip():
    """A plate that stops for good, or turns by 40 mm/yr, is not doubted."""
    rows = path()
    stopped = [*rows[:-1], replace(rows[-1], **{k: getattr(rows[-2], k) for k in (
        "pole_lat_deg", "pole_lon_deg", "angle_deg")})]  # fmt: skip
    assert off(stopped) == []
