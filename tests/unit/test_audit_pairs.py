"""The audit of pairs: slips of the pen, speeds, wide stages, poles typed two ways, noise."""

import math

import numpy as np
import pytest
from published.support import DATA
from scipy.spatial.transform import Rotation

from restore.history.audit import audit
from restore.history.conventions import Table
from restore.history.rows import Row
from restore.history.store import History

KM_PER_DEGREE = 111.195080
"""constants.csv, computed by a separate small program, on R1."""


def steady(degrees, ages=(0, 10, 20, 30, 40, 50, 60), plate="afra", pole=(60.0, 30.0), **more):
    """Rows at a steady rate, degrees per Myr, about one pole."""
    return [
        Row(plate, "deep", float(a), *pole, degrees * a, line=n + 2, **more) for n, a in enumerate(ages)
    ]


def of(rows, **table):
    return History.from_rows(rows, [Table(file="t.csv", citation="x", **table)])


def found(history, kind):
    return [finding for finding in audit(history, "deep") if finding.kind == kind]


def changed(rows, at, **values):
    rows = list(rows)
    rows[at] = Row(**{**vars(rows[at]), **values})
    return rows


def test_a_steady_plate_is_beyond_suspicion():
    """Rows on one path give no finding about pairs."""
    kinds = {finding.kind for finding in audit(of(steady(0.5)), "deep")}
    assert kinds == {"no covariance"}


@pytest.mark.parametrize("at", range(1, 7))
def test_one_sign_too_many(at):
    """The row whose sign is turned is the one that is named, with twice its angle in km; the first
    and the last row as well.
    """
    rows = steady(0.5)
    (finding,) = found(of(changed(rows, at, angle_deg=-rows[at].angle_deg)), "likely sign")
    assert (finding.severity, finding.place.line) == ("error", at + 2)
    assert finding.km == pytest.approx(2 * rows[at].angle_deg * KM_PER_DEGREE, rel=1e-6)
    assert "sign" in finding.what
    assert "undone, it is 0 km off" in finding.what


def test_two_signs_too_many():
    """Every turned row is named, not its neighbours."""
    rows = steady(0.5)
    rows = changed(changed(rows, 2, angle_deg=-10.0), 5, angle_deg=-25.0)
    assert [finding.place.line for finding in found(of(rows), "likely sign")] == [4, 7]


@pytest.mark.parametrize(
    ("turned", "first", "last"),
    [((3, 4), 3, 4), ((1, 2), 1, 2), ((5, 6), 5, 6), ((3, 4, 5), 3, 5), ((4, 5, 6), 4, 6)],
)
def test_a_run_of_rows_turns_the_other_way(turned, first, last):
    """Two papers with two conventions in one table: one error at the first row of the part that is
    smaller (of two halves the older), which says how many rows turn against the others.
    """
    rows = steady(0.5)
    for at in turned:
        rows = changed(rows, at, angle_deg=-rows[at].angle_deg)
    findings = [f for f in audit(of(rows), "deep") if f.severity != "note"]
    assert [(f.severity, f.kind, f.place.line) for f in findings] == [("error", "likely sign", first + 2)]
    assert f"at {first}0 to {last}0 Ma ({len(turned)} rows)" in findings[0].what
    assert "these rows turn against the others" in findings[0].remedy


@pytest.mark.parametrize("seed", range(12))
def test_plates_that_change_their_motion_are_not_suspected(seed):
    """Paths that bend sharply at irregular ages, up to 100 mm/yr, give no error."""
    rng = np.random.default_rng(seed)
    ages = np.concatenate([[0.0], np.sort(rng.uniform(2.0, 160.0, 15))])
    turn, rows, axis, rate = Rotation.identity(), [], rng.normal(size=3), 0.5
    for n, step in enumerate(np.diff(ages, prepend=0.0)):
        if rng.random() < 0.3:
            axis, rate = rng.normal(size=3), rng.uniform(0.1, 0.9)
        turn = turn * Rotation.from_rotvec(axis / np.linalg.norm(axis) * math.radians(rate * step))
        x, y, z = turn.as_rotvec()
        lat, lon = math.degrees(math.atan2(z, math.hypot(x, y))), math.degrees(math.atan2(y, x))
        rows.append(Row("afra", "deep", ages[n], lat, lon, math.degrees(turn.magnitude()), line=n + 2))
    assert [f for f in audit(of(rows), "deep") if f.severity == "error"] == []


def test_a_pole_on_the_other_side_without_the_sign():
    """The antipode typed with the angle's sign kept is the same slip."""
    rows = changed(steady(0.5), 3, pole_lat_deg=-60.0, pole_lon_deg=-150.0)
    (finding,) = found(of(rows), "likely sign")
    assert finding.place.line == 5


def test_a_real_bend_is_no_slip():
    """A plate that turns back on its path gives no error: its rows fit neither way better."""
    angles = [0, 5, 10, 15, 10, 5, 0.1]
    rows = [Row("afra", "deep", 10.0 * n, 60.0, 30.0, float(a), line=n + 2) for n, a in enumerate(angles)]
    assert [f for f in audit(of(rows), "deep") if f.severity == "error"] == []


def test_a_small_angle_is_not_judged():
    """A sign that matters by less than 500 km between neighbours is not held against a row."""
    rows = steady(0.05)
    assert found(of(changed(rows, 3, angle_deg=-1.5)), "likely sign") == []


@pytest.mark.parametrize("at", [2, 4, 6])
def test_one_angle_in_radians(at):
    """A row in radians among degrees is named, with what it is off its neighbours' path."""
    rows = steady(0.9)
    angle = rows[at].angle_deg
    (finding,) = found(of(changed(rows, at, angle_deg=math.radians(angle))), "likely radians")
    assert (finding.severity, finding.place.line) == ("error", at + 2)
    assert finding.km == pytest.approx((angle - math.radians(angle)) * KM_PER_DEGREE, rel=1e-6)
    assert finding.remedy == "angles are in degrees"


def test_a_whole_table_in_radians():
    """Where every angle of a table is in radians the speeds give it away: a warning at the widest."""
    rows = steady(math.radians(0.6)) + steady(math.radians(0.4), plate="bora", pole=(10.0, 80.0))
    (finding,) = found(of(rows), "likely radians")
    assert (finding.severity, finding.place.line) == ("warning", 8)
    assert "all 12 angles of the table lie below 2 pi" in finding.what
    assert finding.km == pytest.approx((36.0 - math.radians(36.0)) * KM_PER_DEGREE, rel=1e-6)


@pytest.mark.parametrize(
    "rows",
    [
        pytest.param(steady(0.6), id="degrees"),
        pytest.param(steady(0.01) + steady(0.4, plate="bora"), id="one plate that hardly moves"),
        pytest.param(steady(0.01, ages=(0, 10, 20)), id="too few rows to tell"),
    ],
)
def test_tables_that_are_not_in_radians(rows):
    """Slow pairs beside others, or a few rows, are no sign of radians."""
    assert found(of(rows), "likely radians") == []


def test_faster_than_any_plate():
    """2.3 degrees per Myr are 256 mm/yr: a warning at the older row; 2.2 (245 mm/yr) are none."""
    rows = steady(2.3, ages=(0, 10, 20))
    findings = found(of(rows), "too fast")
    assert [finding.place.line for finding in findings] == [3, 4]
    assert findings[0].severity == "warning"
    assert "0 to 10 Ma: up to 256 mm/yr" in findings[0].what
    assert findings[0].km == pytest.approx(23.0 * KM_PER_DEGREE, rel=1e-6)
    assert found(of(steady(2.2, ages=(0, 10, 20))), "too fast") == []


def test_a_slip_is_not_also_a_speed():
    """A row with the wrong sign is one finding; the stages that it spoils are not found as well."""
    rows = steady(1.2)
    history = of(changed(rows, 3, angle_deg=-36.0))
    assert [f.kind for f in audit(history, "deep") if f.severity != "note"] == ["likely sign"]


def test_wide_stages():
    """More than 90 degrees between two rows: the short way is taken, and said; 89 degrees are none."""
    rows = [
        Row("afra", "deep", a, 60.0, 30.0, turn, line=int(a)) for a, turn in ((0, 0), (100, 95), (200, 184))
    ]
    (finding,) = found(of(rows), "wide stage")
    assert (finding.severity, finding.place.line) == ("warning", 100)
    assert "0 to 100 Ma: a stage of 95.0 degrees" in finding.what
    assert found(of([*rows[:1], Row("afra", "deep", 100.0, 60.0, 30.0, 89.0)]), "wide stage") == []


def test_a_pair_that_begins_turned_is_no_wide_stage():
    """Where a pair holds from 200 Ma on, nothing is interpolated between today and its first row."""
    rows = [Row("afra", "deep", a, 60.0, 30.0, turn) for a, turn in ((200.0, 110.0), (210.0, 115.0))]
    assert found(of(rows), "wide stage") == []
    held = of(rows, from_present=True)
    assert len(found(held, "wide stage")) == 1


def test_one_rotation_typed_in_two_ways():
    """The antipodal pole with the angle's sign is the same rotation: a note, 0 km."""
    rows = changed(steady(0.5), 3, pole_lat_deg=-60.0, pole_lon_deg=-150.0, angle_deg=-15.0)
    findings = found(of(rows), "antipodal pole")
    assert [(f.severity, f.place.line, f.km) for f in findings] == [("note", 5, 0.0), ("note", 6, 0.0)]
    assert [f for f in audit(of(rows), "deep") if f.severity != "note"] == []
    assert found(of(steady(0.5)), "antipodal pole") == []
    assert found(of(steady(-0.5)), "antipodal pole") == []


def noisy(seed, stated_km, real_km, ages):
    """Rows of a steady plate, each turned by a small normal error."""
    rng = np.random.default_rng(seed)
    covariance = np.eye(3) * (stated_km / 6371.0088) ** 2
    rows = []
    for n, row in enumerate(steady(0.5, ages)):
        angle = np.deg2rad(row.angle_deg)
        pole = np.deg2rad([row.pole_lat_deg, row.pole_lon_deg])
        axis = [np.cos(pole[0]) * np.cos(pole[1]), np.cos(pole[0]) * np.sin(pole[1]), np.sin(pole[0])]
        small = Rotation.from_rotvec(rng.normal(0.0, real_km / 6371.0088, 3) * (n > 0))
        vector = (Rotation.from_rotvec(np.multiply(axis, angle)) * small).as_rotvec()
        x, y, z = vector
        size = float(np.linalg.norm(vector))
        lat, lon = np.rad2deg([np.arctan2(z, np.hypot(x, y)), np.arctan2(y, x)])
        known = covariance if n else None
        rows.append(Row("afra", "deep", row.age_ma, lat, lon, math.degrees(size), known, line=n + 2))
    return rows


def test_noise_that_the_errors_explain():
    """Of 2 000 short stages with errors as stated no more than a handful saw (1 in 1000 by chance)."""
    ages = np.arange(0.0, 250.0, 2.0)
    count = sum(len(found(of(noisy(seed, 3.0, 3.0, ages)), "rough velocity")) for seed in range(16))
    assert count <= 8


def test_noise_that_the_errors_do_not_explain():
    """With errors stated eight times too small nearly every short stage saws, with its size in km."""
    ages = np.arange(0.0, 100.0, 2.0)
    findings = found(of(noisy(1, 1.0, 8.0, ages)), "rough velocity")
    assert len(findings) > 30
    assert {finding.severity for finding in findings} == {"warning"}
    # a kink of one stage is a few times the 8 km of a row
    assert 10.0 < np.median([finding.km for finding in findings]) < 60.0
    assert "beyond its error" in findings[0].what


def test_noise_is_judged_in_short_stages_of_known_error_only():
    """Stages of 5 Myr are not judged, nor rows without an error."""
    assert found(of(noisy(1, 1.0, 8.0, np.arange(0.0, 100.0, 5.0))), "rough velocity") == []
    unknown = [
        Row(**{**vars(row), "covariance": None}) for row in noisy(1, 1.0, 8.0, np.arange(0.0, 60.0, 2.0))
    ]
    assert found(of(unknown), "rough velocity") == []


def test_an_estimated_kappa_makes_noise_less_sure():
    """With few degrees of freedom behind each error the same noise is no longer beyond chance."""
    ages = np.arange(0.0, 100.0, 2.0)
    rows = noisy(1, 1.0, 3.0, ages)
    sure = found(of(rows), "rough velocity")
    guessed = found(of([Row(**{**vars(row), "dof": 1.5}) for row in rows]), "rough velocity")
    assert len(guessed) < len(sure) / 2


KLITGORD = "klitgord_schouten.toml"
"""Klitgord & Schouten 1986, The Geology of North America M, 351-378 (from memory)."""


def klitgord(tmp_path, anomaly=None):
    """The published rows, with one angle's sign flipped."""
    lines = (DATA / "finite_rotations.csv").read_text(encoding="utf-8").splitlines()
    for n, line in enumerate(lines):
        fields = line.split(",")
        if anomaly is not None and fields[3] == anomaly:
            fields[7] = str(-float(fields[7]))
            lines[n] = ",".join(fields)
    (tmp_path / "finite_rotations.csv").write_text("\n".join(lines) + "\n", encoding="utf-8")
    (tmp_path / KLITGORD).write_bytes((DATA / KLITGORD).read_bytes())
    return History.read(tmp_path / KLITGORD)


def test_the_published_rows_give_no_error(tmp_path):
    """Klitgord & Schouten 1986 (from memory) as they stand: no error and no warning."""
    assert [f for f in audit(klitgord(tmp_path)) if f.severity != "note"] == []


@pytest.mark.parametrize(
    ("anomaly", "line", "km"),
    [("An6", 3, None), ("An21", 5, None), ("An34", 10, 6594.0), ("M0", 11, None), ("closure", 18, None)],
)
def test_a_published_row_with_its_sign_flipped(tmp_path, anomaly, line, km):
    """Exactly one error, at that line: An34 is 6594 km off its neighbours' path.

    Rows of Klitgord & Schouten 1986 (from memory); the distance was computed by a separate small
    program, not published.
    """
    errors = [f for f in audit(klitgord(tmp_path, anomaly)) if f.severity == "error"]
    assert [(f.kind, f.place.line) for f in errors] == [("likely sign", line)]
    if km is not None:
        assert errors[0].km == pytest.approx(km, abs=0.5)
