"""Published tables read through manifests as they stand, or as another hand would have typed them.

Expected numbers are the printed ones; the tables' sources are named beside each check.
"""

from __future__ import annotations

import re
from collections.abc import Callable
from pathlib import Path

import numpy as np
import pytest
from published.support import DATA, apart_km, records, unit, write_manifest

from restore.errors import HistoryError
from restore.history.audit import audit
from restore.history.circuit import GAP, OUTSIDE, REACHED, Circuit
from restore.history.listing import listing
from restore.history.store import History

KLITGORD = [r for r in records("finite_rotations.csv") if r["source"] == "Klitgord_Schouten_1986"]
"""Klitgord & Schouten 1986, The Geology of North America M, 351-378 (from memory)."""

CITATION = 'citation = "Klitgord & Schouten 1986, Geology of North America M, 351-378 (from memory)"\n'
COLUMNS = """\
columns = { plate = "plate_moved", relative_to = "plate_fixed", age_ma = "age_Ma_in_source", \
chron = "anomaly", angle_deg = "angle_deg_anticlockwise_positive", reference = "source" }
"""
ONLY = 'only = { source = "Klitgord_Schouten_1986" }\n'
PICKS = """\
[table.chrons]
An5 = "C5n.2n(o)"
An6 = "C6n(o)"
An34 = "C34n(y)"
M0 = "M0r(y)"
[table.plates]
Africa = "afr"
North_America = "nam"
"""
M0 = next(row for row in KLITGORD if row["anomaly"] == "M0")


def published(folder: Path, *tables: str) -> History:
    """A history of tables of the data folder, copied as they stand beside a manifest."""
    for name in re.findall(r'file = "(\w+\.csv)"', "\n".join(tables)):
        if (DATA / name).is_file():
            (folder / name).write_bytes((DATA / name).read_bytes())
    return History.read(write_manifest(folder, *tables))


def klitgord(folder: Path, more: str = "", maps: str = "") -> History:
    """The rows of Klitgord & Schouten 1986, picked from the table of several sources."""
    table = 'file = "finite_rotations.csv"\n' + CITATION + COLUMNS + ONLY + more + maps
    return published(folder, table)


def numbers(history: History) -> np.ndarray:
    """Ages, pole latitudes, longitudes and angles of a history."""
    rows = history.rows
    return np.array([rows.age_ma, rows.pole_lat_deg, rows.pole_lon_deg, rows.angle_deg])


def printed_numbers() -> np.ndarray:
    """The same as printed by Klitgord & Schouten 1986 (from memory)."""
    names = ("age_Ma_in_source", "pole_lat_deg", "pole_lon_deg", "angle_deg_anticlockwise_positive")
    return np.array([[float(row[name]) for row in KLITGORD] for name in names])


def test_finite_rotations_by_anomaly(tmp_path: Path) -> None:
    """Anomalies are picked, plates renamed; ages, poles and angles are the printed ones.

    Source: Klitgord & Schouten 1986 (from memory); the picks are this test's.
    """
    history = klitgord(tmp_path, "from_present = true\n", PICKS)

    np.testing.assert_array_equal(numbers(history), printed_numbers())
    assert set(history.rows.plate) == {"afr"}
    assert set(history.rows.relative_to) == {"nam"}
    chron = dict(zip((row["anomaly"] for row in KLITGORD), history.rows.chron, strict=True))
    assert (chron["An34"], chron["M0"]) == ("C34n(y)", "M0r(y)")
    # a name without a pick is a remark beside an age
    assert chron["BSMA"] == "BSMA"
    lines = (DATA / "finite_rotations.csv").read_text(encoding="utf-8").splitlines()
    for number, row in zip(history.rows.line, KLITGORD, strict=True):
        assert f",{row['anomaly']}," in lines[number - 1]


def test_ages_of_a_scale_stand_beside_those_of_the_source(tmp_path: Path) -> None:
    """With a clock named, a row that has an age keeps it, and its chron is the pick.

    Sources: Klitgord & Schouten 1986 and GTS2012 (both from memory).
    """
    history = klitgord(tmp_path, 'time_scale = "gts2012"\n', PICKS)
    assert [history.rows.age_ma[n] for n in (8, 9)] == [84.0, 118.0]
    assert history.rows.chron[9] == "M0r(y)"


@pytest.mark.parametrize(
    ("name", "maps", "unit_of_table", "columns"),
    [
        pytest.param(
            "nuvel1a_relative_to_pacific.csv",
            'columns = { plate = "plate_moving", relative_to = "plate_fixed",'
            ' rate_deg_per_myr = "rate_deg_per_Myr" }',
            "pole",
            ("pole_lat_deg", "pole_lon_deg", "rate_deg_per_Myr"),
            id="deg/Myr, NUVEL-1A: DeMets et al. 1994 (from memory)",
        ),
        pytest.param(
            "nuvel1a_relative_to_pacific.csv",
            'columns = { plate = "plate_moving", relative_to = "plate_fixed", omega_x_rad_per_myr ='
            ' "omega_x_rad_per_Myr", omega_y_rad_per_myr = "omega_y_rad_per_Myr",'
            ' omega_z_rad_per_myr = "omega_z_rad_per_Myr" }',
            1.0,
            ("omega_x_rad_per_Myr", "omega_y_rad_per_Myr", "omega_z_rad_per_Myr"),
            id="rad/Myr, NUVEL-1A: DeMets et al. 1994 (from memory)",
        ),
        pytest.param(
            "itrf_plate_motion.csv",
            'only = { model = "ITRF2014-PMM" }\nconstants = { relative_to = "itrf" }',
            np.pi / (180.0 * 3.6),
            ("omega_x_mas_per_yr", "omega_y_mas_per_yr", "omega_z_mas_per_yr"),
            id="mas/yr, ITRF2014: Altamimi et al. 2017 (read)",
        ),
        pytest.param(
            "nnr_nuvel1a.csv",
            'constants = { relative_to = "nnr" }\ncolumns = { omega_x_rad_per_myr ='
            ' "variant_omega_x_rad_per_Myr_read", omega_y_rad_per_myr ='
            ' "variant_omega_y_rad_per_Myr_read", omega_z_rad_per_myr ='
            ' "variant_omega_z_rad_per_Myr_read" }',
            1.0,
            tuple(f"variant_omega_{axis}_rad_per_Myr_read" for axis in "xyz"),
            id="rad/Myr, NNR-NUVEL-1A as coded by Scharroo 1998 (read)",
        ),
        pytest.param(
            "nnr_morvel56.csv",
            'constants = { relative_to = "nnr" }\ncolumns = { plate = "abbrev_case_sensitive",'
            ' rate_deg_per_myr = "rate_deg_per_Myr" }',
            "pole",
            ("pole_lat_deg", "pole_lon_deg", "rate_deg_per_Myr"),
            id="deg/Myr, NNR-MORVEL56: Argus et al. 2011 (read)",
        ),
    ],
)
def test_angular_velocities_in_three_units(
    tmp_path: Path, name: str, maps: str, unit_of_table: str | float, columns: tuple[str, ...]
) -> None:
    """Every vector of the table turns its plate back by one Myr's worth: -omega, to 1e-15 rad/Myr.

    Sources: named with each table. 1 deg/Myr is exactly 3.6 mas/yr.
    """
    history = published(tmp_path, f'file = "{name}"\n{maps}\n')
    table = [row for row in records(name) if row.get("model", "ITRF2014-PMM") == "ITRF2014-PMM"]
    assert len(history) == 2 * len(table)
    for number, row in enumerate(table):
        given = [float(row[column]) for column in columns]
        if unit_of_table == "pole":
            omega = unit(*given[:2]) * np.deg2rad(given[2])
        else:
            omega = np.array(given) * unit_of_table
        zero, turned = (history.rows.row(2 * number + i) for i in (0, 1))
        assert (zero.age_ma, zero.angle_deg, turned.age_ma) == (0.0, 0.0, 1.0)
        turn = unit(turned.pole_lat_deg, turned.pole_lon_deg) * np.deg2rad(turned.angle_deg)
        np.testing.assert_allclose(turn, -omega, rtol=0.0, atol=1e-15)


def as_plain(fields: list[str]) -> str:
    return ",".join(fields)


def as_spaced(fields: list[str]) -> str:
    return "  " + "   ".join(fields)


def as_continental(fields: list[str]) -> str:
    return " ; ".join(field.replace(".", ",") for field in fields)


def as_remarked(fields: list[str]) -> str:
    return ",".join(fields) + "   % a remark, with a comma"


HEADED = "Moved,Still,Name,Age,Lat,Lon,Turn"
BY_NUMBER = """\
columns = { plate = 1, relative_to = 2, chron = 3, age_ma = 4, pole_lat_deg = 5, pole_lon_deg = 6, \
angle_deg = 7 }
"""
BY_NAME = """\
columns = { plate = "Moved", relative_to = "Still", chron = "Name", age_ma = "Age", \
pole_lat_deg = "Lat", pole_lon_deg = "Lon", angle_deg = "Turn" }
"""


@pytest.mark.parametrize(
    ("typed", "header", "described"),
    [
        pytest.param(as_plain, "", "header = false\n" + BY_NUMBER, id="headerless"),
        pytest.param(as_plain, HEADED + "\n", BY_NUMBER, id="by number"),
        pytest.param(as_plain, HEADED + "\n", BY_NAME, id="by name"),
        pytest.param(
            as_spaced,
            "! Moved Still ...\n",
            'header = false\ndelimiter = "whitespace"\ncomment = "!"\n' + BY_NUMBER,
            id="white space",
        ),
        pytest.param(
            as_continental,
            HEADED.replace(",", ";") + "\n",
            'delimiter = "semicolon"\ndecimal = ","\n' + BY_NAME,
            id="decimal commas, semicolons",
        ),
        pytest.param(
            as_remarked,
            "% from the atlas\n" + HEADED + "\n",
            'comment = "%"\ntrailing_comments = true\n' + BY_NAME,
            id="trailing comments",
        ),
        pytest.param(
            lambda fields: "\t".join(fields),
            HEADED.replace(",", "\t") + "\n",
            'delimiter = "tab"\n' + BY_NAME,
            id="tabs",
        ),
    ],
)
def test_any_layout_gives_the_same_rows(
    tmp_path: Path, typed: Callable[[list[str]], str], header: str, described: str
) -> None:
    """The printed numbers come through every layout to the last bit.

    Source: Klitgord & Schouten 1986 (from memory), typed anew by the test.
    """
    names = ["plate_moved", "plate_fixed", "anomaly", "age_Ma_in_source", "pole_lat_deg"]
    names += ["pole_lon_deg", "angle_deg_anticlockwise_positive"]
    lines = [typed([row[name] for name in names]) for row in KLITGORD]
    (tmp_path / "typed.txt").write_text(header + "\n".join(lines) + "\n", encoding="utf-8")
    history = History.read(write_manifest(tmp_path, 'file = "typed.txt"\n' + described))

    np.testing.assert_array_equal(numbers(history), printed_numbers())
    assert list(history.rows.chron) == [row["anomaly"] for row in KLITGORD]
    first = header.count("\n") + 1
    assert list(history.rows.line) == list(range(first, first + len(KLITGORD)))


def test_a_table_of_one_pair_without_labels(tmp_path: Path) -> None:
    """What never changes in a paper's table is said once: both plates and the reference.

    Source: Klitgord & Schouten 1986 (from memory).
    """
    lines = [f"{r['age_Ma_in_source']} {r['pole_lat_deg']} {r['pole_lon_deg']}" for r in KLITGORD]
    angles = [r["angle_deg_anticlockwise_positive"] for r in KLITGORD]
    text = "\n".join(f"{line} {angle}" for line, angle in zip(lines, angles, strict=True))
    (tmp_path / "typed.txt").write_text(text, encoding="utf-8")
    described = """\
file = "typed.txt"
header = false
delimiter = "whitespace"
columns = { age_ma = 1, pole_lat_deg = 2, pole_lon_deg = 3, angle_deg = 4 }
constants = { plate = "afr", relative_to = "nam", reference = "K&S" }
"""
    history = History.read(write_manifest(tmp_path, described))
    np.testing.assert_array_equal(numbers(history), printed_numbers())
    labels = set(zip(history.rows.plate, history.rows.relative_to, history.rows.reference, strict=True))
    assert labels == {("afr", "nam", "K&S")}


def test_ages_for_which_a_table_is_meant(tmp_path: Path) -> None:
    """Outside valid_from_ma..valid_to_ma the pair does not hold; at the bounds it does.

    Source: Klitgord & Schouten 1986 (from memory).
    """
    history = klitgord(tmp_path, "from_present = true\nvalid_from_ma = 20\nvalid_to_ma = 118\n")
    circuit = Circuit(history, "North_America")
    found = circuit.rotations("Africa", [0.0, 19.999, 20.0, 100.0, 118.0, 118.001])
    assert found.status.tolist() == [OUTSIDE, OUTSIDE, REACHED, REACHED, REACHED, OUTSIDE]
    assert circuit.covered("Africa") == [(20.0, 118.0)]
    # inside, the rotation is the one of the whole table
    whole = Circuit(klitgord(tmp_path, "from_present = true\n"), "North_America")
    np.testing.assert_array_equal(
        found.rotations.quaternions[2:5],
        whole.rotations("Africa", [20.0, 100.0, 118.0]).rotations.quaternions,
    )


def test_from_present(tmp_path: Path) -> None:
    """Without a row of age 0 a pair begins at its youngest row, unless the table says otherwise.

    Source: Klitgord & Schouten 1986 (from memory), youngest row at 10 Ma.
    """
    without = Circuit(klitgord(tmp_path), "North_America")
    assert without.rotations("Africa", [9.0, 10.0]).status.tolist() == [OUTSIDE, REACHED]
    held = Circuit(klitgord(tmp_path, "from_present = true\n"), "North_America")
    found = held.rotations("Africa", [0.0, 5.0])
    assert found.status.tolist() == [REACHED, REACHED]
    np.testing.assert_array_equal(found.rotations.quaternions[0], [1.0, 0.0, 0.0, 0.0])
    half = found.rotations.as_vectors()[1]
    printed = KLITGORD[0]
    angle = np.deg2rad(float(printed["angle_deg_anticlockwise_positive"]))
    whole = unit(float(printed["pole_lat_deg"]), float(printed["pole_lon_deg"])) * angle
    np.testing.assert_allclose(half, 0.5 * whole, atol=1e-15)


BULLARD = """\
file = "fit.csv"
citation = "Bullard, Everett & Smith 1965, Phil. Trans. R. Soc. A 258, 41-51 (from memory)"
from_present = true
rank = {rank}
constants = {{ plate = "Africa", relative_to = "North_America", chron = "fit" }}
"""


@pytest.mark.parametrize(("rank", "source"), [(-1, "Bullard"), (1, "Klitgord")])
def test_ranks_decide_between_two_papers(tmp_path: Path, rank: int, source: str) -> None:
    """Two papers on one pair: the table of the lowest rank is used as long as it holds.

    Sources: Klitgord & Schouten 1986, Bullard et al. 1965 (both from memory; the fit's age, which
    its table does not state, is the test's).
    """
    fit = next(
        r
        for r in records("finite_rotations.csv")
        if r["plate_moved"] == "Africa" and not r["age_Ma_in_source"]
    )
    pole = (fit["pole_lat_deg"], fit["pole_lon_deg"], fit["angle_deg_anticlockwise_positive"])
    (tmp_path / "fit.csv").write_text(
        f"age_ma,pole_lat_deg,pole_lon_deg,angle_deg\n170,{','.join(pole)}\n", encoding="utf-8"
    )
    table = 'file = "finite_rotations.csv"\nfrom_present = true\n' + COLUMNS + ONLY
    history = published(tmp_path, table, BULLARD.format(rank=rank))
    closing = next(row for row in KLITGORD if row["age_Ma_in_source"] == "170.0")
    expected = fit if source == "Bullard" else closing
    vector = Circuit(history, "North_America").rotations("Africa", 170.0).rotations.as_vectors()
    meant = unit(float(expected["pole_lat_deg"]), float(expected["pole_lon_deg"]))
    angle = np.deg2rad(float(expected["angle_deg_anticlockwise_positive"]))
    np.testing.assert_allclose(vector.ravel(), meant * angle, atol=1e-14)


def split(folder: Path, gap_myr: float, join: str) -> History:
    """Klitgord & Schouten 1986 (from memory) in two tables with two partners and a gap between."""
    names = ("pole_lat_deg", "pole_lon_deg", "angle_deg_anticlockwise_positive")
    for file, rows in (("young.csv", KLITGORD[:9]), ("old.csv", KLITGORD[8:])):
        lines = ["age_ma,pole_lat_deg,pole_lon_deg,angle_deg"]
        for row in rows:
            age = float(row["age_Ma_in_source"]) + (gap_myr if (file, row) == ("old.csv", rows[0]) else 0)
            lines.append(",".join([str(age), *(row[name] for name in names)]))
        (folder / file).write_text("\n".join(lines) + "\n", encoding="utf-8")
    (folder / "still.csv").write_text(
        "plate,relative_to,age_ma,pole_lat_deg,pole_lon_deg,angle_deg\n"
        "greenland,nam,0,,,0\ngreenland,nam,200,,,0\n",
        encoding="utf-8",
    )
    young = 'file = "young.csv"\nfrom_present = true\nconstants = { plate = "afr", relative_to = "nam" }\n'
    old = 'file = "old.csv"\nconstants = { plate = "afr", relative_to = "greenland" }\n'
    return History.read(write_manifest(folder, young + join, old, 'file = "still.csv"\n'))


def test_a_rounded_age_between_two_partners_is_joined_if_asked(tmp_path: Path) -> None:
    """84.0 beside 84.05 Ma is a gap of 0.05 Myr: bridged within join_within_myr, else a finding.

    Source: Klitgord & Schouten 1986 (from memory), split at An34 by the test.
    """
    open_ = split(tmp_path, 0.05, "")
    assert Circuit(open_, "nam").rotations("afr", 84.02).status.tolist() == [GAP]
    kinds = {finding.kind for finding in audit(open_, "nam")}
    assert "near gap" in kinds
    joined = split(tmp_path, 0.05, "join_within_myr = 0.1\n")
    assert Circuit(joined, "nam").rotations("afr", 84.02).status.tolist() == [REACHED]
    assert "near gap" not in {finding.kind for finding in audit(joined, "nam")}
    too_far = split(tmp_path, 0.2, "join_within_myr = 0.1\n")
    assert Circuit(too_far, "nam").rotations("afr", 84.1).status.tolist() == [GAP]


def test_how_long_a_rate_holds(tmp_path: Path) -> None:
    """A NUVEL-1A rate that is taken to hold to 3 Ma turns by three times itself there, no further.

    Source: DeMets et al. 1994, Geophys. Res. Lett. 21, 2191-2194, Table 1 (from memory).
    """
    columns = 'columns = { plate = "plate_moving", relative_to = "plate_fixed", rate_deg_per_myr = "rate_deg_per_Myr" }'
    table = f'file = "nuvel1a_relative_to_pacific.csv"\nrates_hold_to_ma = 3.0\n{columns}\n'
    circuit = Circuit(published(tmp_path, table), "Pacific")
    row = next(r for r in records("nuvel1a_relative_to_pacific.csv") if r["plate_moving"] == "Nazca")
    omega = unit(float(row["pole_lat_deg"]), float(row["pole_lon_deg"]))
    omega = omega * np.deg2rad(float(row["rate_deg_per_Myr"]))
    for age in (1.0, 2.5, 3.0):
        vector = circuit.rotations("Nazca", age).rotations.as_vectors().ravel()
        np.testing.assert_allclose(vector, -omega * age, atol=1e-15)
    assert circuit.rotations("Nazca", 3.001).status.tolist() == [OUTSIDE]


def test_what_was_read_stands_beside_what_was_printed(tmp_path: Path) -> None:
    """The listing shows each row's fields as printed, then as meant: M0 turned to the present.

    Source: Klitgord & Schouten 1986 (from memory); the table is described as turning the other way.
    """
    lines = list(listing(klitgord(tmp_path, 'turns = "to-present"\n', PICKS)))
    assert any("Klitgord & Schouten 1986" in line for line in lines[:3])
    assert any("turns to-present" in line for line in lines[:3])
    (line,) = [line for line in lines if "anomaly M0;" in line]
    printed = M0["angle_deg_anticlockwise_positive"]
    assert (
        f"plate_moved Africa; plate_fixed North_America; age_Ma_in_source {M0['age_Ma_in_source']}" in line
    )
    assert f"angle_deg_anticlockwise_positive {printed} " in line
    fields = [field.strip() for field in line.split("  ")]
    assert "afr relative to nam" in fields
    assert printed.removeprefix("-") in fields
    assert "M0r(y)" in line


def test_one_file_for_a_published_history(tmp_path: Path) -> None:
    """Written to netCDF and read back, rows, tables and citation are the same to the last bit.

    Source: Klitgord & Schouten 1986 (from memory).
    """
    history = klitgord(tmp_path, 'from_present = true\ntime_scale = "gts2012"\nrank = 2\n', PICKS)
    history.write(tmp_path / "history.nc")
    back = History.read(tmp_path / "history.nc")
    assert back.same_as(history)
    assert back.tables[0].citation.startswith("Klitgord & Schouten 1986")
    assert back.rows.printed[9].startswith("plate_moved Africa")
    place = Circuit(back, "nam").rotations("afr", 118.0).rotations.apply(unit(20.8, -17.0)).ravel()
    lat = float(np.rad2deg(np.arctan2(place[2], np.hypot(*place[:2]))))
    lon = float(np.rad2deg(np.arctan2(place[1], place[0])))
    # M0 takes Cap Blanc 20.8N 17W to 27.302395 -58.167059 (a separate small program, not published)
    assert apart_km(lat, lon, 27.302395, -58.167059) < 1e-4


def test_a_later_layout_is_refused(tmp_path: Path) -> None:
    """A file of a layout that this release does not know is refused by its version, with its name.

    Source: Klitgord & Schouten 1986 (from memory), its version changed by the test.
    """
    dataset = klitgord(tmp_path).to_dataset()
    dataset.attrs["rotation_history_version"] = 999
    dataset.to_netcdf(tmp_path / "later.nc", engine="netcdf4")
    with pytest.raises(
        HistoryError, match=r"later\.nc: rotation_history_version = 999: this release reads"
    ):
        History.read(tmp_path / "later.nc")
