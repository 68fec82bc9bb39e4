"""Present-day plate motions against published tables and against PROJ, through manifests.

Tables are read as they stand; the two no-net-rotation tables have no column for their frame, so a
copy with one more column is written for them.
"""

from __future__ import annotations

from functools import cache
from pathlib import Path

import numpy as np
import pyproj
import pytest
from published.support import (
    DATA,
    RADIUS_KM,
    angular_velocity,
    east_north,
    numbers_in,
    records,
    with_column,
    worked_example,
    write_manifest,
)
from scipy.spatial.transform import Rotation

from restore.errors import HistoryError, TwoChainsError, UnknownPlateError
from restore.geometry.latitudes import Latitudes
from restore.history.circuit import Circuit
from restore.history.store import History
from restore.motion.rates import rates, rates_from_pole

PLACES = [
    (0.0, 0.0),
    (45.3, -120.7),
    (-33.9, 151.2),
    (71.0, 25.8),
    (12.5, 179.9),
    (-89.0, 10.0),
    (90.0, 0.0),
]

ITRF = [
    pytest.param(model, row["plate"], id=f"{model}-{row['plate']}")
    for model in ("ITRF2014", "ITRF2008")
    for row in records("itrf_plate_motion.csv")
    if row["model"] == f"{model}-PMM"
]


@cache
def history(manifest: str) -> History:
    """One of the manifests in the data folder."""
    return History.read(DATA / manifest)


def omega(of: History, plate: str, relative_to: str) -> np.ndarray:
    """Present-day angular velocity in rad/Myr as restore has it, along whatever chain there is."""
    return rates(of, plate, relative_to, 0.0, 0.0).omega[0]


def position(lat_deg: float, lon_deg: float) -> np.ndarray:
    """Geocentric position in metres of a geodetic place on GRS80 at height 0, by PROJ."""
    cart = pyproj.Transformer.from_pipeline(
        "+proj=pipeline +step +proj=unitconvert +xy_in=deg +xy_out=rad +step +proj=cart +ellps=GRS80"
    )
    return np.array(cart.transform(lon_deg, lat_deg, 0.0))


def moved_by_proj(model: str, plate: str, lat_deg: float, lon_deg: float) -> np.ndarray:
    """Displacement in metres in one year (2010 to 2011), by PROJ's plate-motion entry."""
    motion = pyproj.Transformer.from_pipeline(
        "+proj=pipeline +step +proj=unitconvert +xy_in=deg +xy_out=rad"
        " +step +proj=cart +ellps=GRS80"
        f" +step +init={model}:{plate} +t_epoch=2010.0"
    )
    later = motion.transform(lon_deg, lat_deg, 0.0, 2011.0)
    return np.array(later[:3]) - position(lat_deg, lon_deg)


@pytest.mark.parametrize(("model", "plate"), ITRF)
def test_velocities_equal_the_plate_motion_entries_of_proj(model: str, plate: str) -> None:
    """Every component of the velocity agrees with PROJ to 1e-6 m/yr.

    Source: ITRF2014, Altamimi et al. 2017, and ITRF2008, Altamimi et al. 2012, as the data files of
    PROJ (shipped with pyproj) hold them. PROJ moves a point of the GRS80 ellipsoid as omega x X.
    The same X is asked for here by its geodetic latitude, turned to a geocentric one on the way in
    (`geodetic`), with |X| as the radius; a sphere of one radius would be up to 0.3 % off. The
    velocity is compared along east and along geocentric north, where restore gives it; there is
    none along X. 1e-6 m/yr is a thirtieth of the last printed digit (0.001 mas/yr, 3e-5 m/yr);
    measured: 8e-10 m/yr.
    """
    of, geodetic = history(f"{model.lower()}.toml"), Latitudes("geodetic")
    for lat, lon in PLACES:
        start, step = position(lat, lon), moved_by_proj(model, plate, lat, lon)
        size = np.linalg.norm(start)
        east, north = east_north(np.rad2deg(np.arcsin(start[2] / size)), lon)
        frame = f"{model}-PMM"
        found = rates(of, plate, frame, lat, lon, latitudes=geodetic, radius_km=size / 1000.0)

        assert found.east_mm_yr[0] / 1000.0 == pytest.approx(step @ east, abs=1e-6)
        assert found.north_mm_yr[0] / 1000.0 == pytest.approx(step @ north, abs=1e-6)
        assert step @ start / size == pytest.approx(0.0, abs=1e-6)


@pytest.mark.parametrize("model", ["ITRF2014", "ITRF2008"])
def test_every_plate_that_proj_ships_is_compared(model: str) -> None:
    """The table holds the plates of PROJ's data file, no more and no fewer.

    Entries of PROJ that end in _T add a translation of the origin and are left out.
    """
    text = (Path(pyproj.datadir.get_data_dir()) / model).read_text(encoding="utf-8")
    lines = [line for line in text.splitlines() if "+proj=helmert" in line]
    shipped = {line[1 : line.index(">")] for line in lines if " +drx" in line and " +s=" not in line}
    shipped = {name for name in shipped if not name.endswith("_T")}
    of = history(f"{model.lower()}.toml")

    assert set(of.plates()) - {f"{model}-PMM"} == shipped


@pytest.mark.parametrize(("model", "plate"), ITRF)
def test_poles_of_the_plate_motion_models(model: str, plate: str) -> None:
    """Pole and rate equal the table's own computed columns to the printed digit.

    Source: columns `_computed` of itrf_plate_motion.csv, computed by a separate small program from
    the published components, not published.
    """
    row = next(
        r for r in records("itrf_plate_motion.csv") if r["model"] == f"{model}-PMM" and r["plate"] == plate
    )
    rows = history(f"{model.lower()}.toml").rows
    number = int(np.flatnonzero((rows.plate == plate) & (rows.age_ma == 1.0))[0])

    # the row turns back in time, so the forward rate is its negative, about the same pole
    assert rows.pole_lat_deg[number] == pytest.approx(
        float(row["pole_lat_geocentric_deg_computed"]), abs=0.5001e-4
    )
    assert rows.pole_lon_deg[number] == pytest.approx(float(row["pole_lon_deg_computed"]), abs=0.5001e-4)
    assert -rows.angle_deg[number] == pytest.approx(float(row["rate_deg_per_Myr_computed"]), abs=0.5001e-6)


def nnr_morvel56(folder: Path) -> str:
    """The table of NNR-MORVEL56 under a manifest, its frame in a column of a generated copy."""
    path = with_column("nnr_morvel56.csv", folder, "frame", "nnr")
    return f"""
file = '{path}'
citation = "Argus, Gordon & DeMets 2011, Geochem. Geophys. Geosyst. 12, Q11001, Table 1"
[table.columns]
plate = "abbrev_case_sensitive"
relative_to = "frame"
rate_deg_per_myr = "rate_deg_per_Myr"
"""


@pytest.fixture(scope="module")
def nnr(tmp_path_factory: pytest.TempPathFactory) -> History:
    """NNR-MORVEL56: 56 plates relative to no net rotation."""
    folder = tmp_path_factory.mktemp("nnr")
    return History.read(write_manifest(folder, nnr_morvel56(folder)))


MORVEL = records("morvel_relative_to_pacific.csv")


@pytest.mark.parametrize("row", MORVEL, ids=[row["plate_moving"] for row in MORVEL])
def test_nnr_morvel56_minus_the_pacific_is_morvel(nnr: History, row: dict[str, str]) -> None:
    """The chain plate > no net rotation > Pacific gives MORVEL to its rounding, 0.0017 deg/Myr.

    Sources: Argus, Gordon & DeMets 2011, Table 1; DeMets, Gordon & Argus 2010, Table 3 (from
    memory). Poles are printed to 0.1 and 0.01 deg, rates to 0.001 deg/Myr.
    """
    found = omega(nnr, row["plate_moving"].lower(), "pa")

    assert np.rad2deg(np.linalg.norm(found - pole_of(row))) < 0.00175


@pytest.mark.parametrize("row", MORVEL, ids=[row["plate_moving"] for row in MORVEL])
def test_morvel_through_its_manifest(row: dict[str, str]) -> None:
    """A table of poles and rates relative to the Pacific keeps its numbers through the manifest.

    Source: DeMets, Gordon & Argus 2010, Table 3 (from memory). The tolerance is rounding only.
    """
    pole = [float(row[name]) for name in ("pole_lat_deg", "pole_lon_deg", "rate_deg_per_Myr")]
    found = omega(history("morvel.toml"), row["plate_moving"].lower(), "pa")

    assert np.abs(found - angular_velocity(*pole)).max() < 1e-15
    plain = rates_from_pole(*pole, 10.0, 20.0)
    through = rates(history("morvel.toml"), row["plate_moving"].lower(), "pa", 10.0, 20.0)
    # 1e-9 mm/yr is rounding: speeds reach 500 mm/yr
    assert through.east_mm_yr[0] == pytest.approx(plain.east_mm_yr[0], abs=1e-9)
    assert through.north_mm_yr[0] == pytest.approx(plain.north_mm_yr[0], abs=1e-9)


def both_tables(folder: Path, hold_ma: float) -> Circuit:
    """MORVEL and NNR-MORVEL56 in one history, rates held for a time, seen from the Pacific."""
    held = f"rates_hold_to_ma = {hold_ma}\n"
    morvel = (DATA / "morvel.toml").read_text(encoding="utf-8").split("[[table]]")[1]
    morvel = morvel.replace('"morvel_rel', f'"{DATA.as_posix()}/morvel_rel')
    return Circuit(History.read(write_manifest(folder, held + nnr_morvel56(folder), held + morvel)), "pa")


def apart_after(hold_ma: float) -> dict[str, float]:
    """How far in km the chain over no net rotation leads from MORVEL's own pole, by scipy."""
    nnr = {row["abbrev_case_sensitive"]: pole_of(row) for row in records("nnr_morvel56.csv")}
    apart = {}
    for row in MORVEL:
        plate = row["plate_moving"].lower()
        chain = Rotation.from_rotvec(nnr["pa"] * hold_ma) * Rotation.from_rotvec(-nnr[plate] * hold_ma)
        direct = Rotation.from_rotvec(-pole_of(row) * hold_ma)
        apart[plate] = (direct.inv() * chain).magnitude() * RADIUS_KM
    return apart


def pole_of(row: dict[str, str]) -> np.ndarray:
    """The angular velocity that a row of poles and rates prints, rad/Myr."""
    names = ("pole_lat_deg", "pole_lon_deg", "rate_deg_per_Myr")
    return angular_velocity(*(float(row[name]) for name in names))


def test_two_tables_that_agree_are_one_history(tmp_path: Path) -> None:
    """MORVEL and NNR-MORVEL56 held for 0.1 Myr close every loop within a kilometre: no conflict."""
    circuit = both_tables(tmp_path, 0.1)

    assert max(apart_after(0.1).values()) < 0.05
    assert circuit.pieces.conflicts == ()
    assert len(circuit.history) == 2 * (56 + 24)
    assert circuit.rotations("nb", [0.0, 0.05, 0.1]).status.tolist() == [0, 0, 0]


def test_motions_about_fixed_poles_do_not_close_for_long(tmp_path: Path) -> None:
    """Held for 1 Myr the tables part by over a kilometre for the fastest plate, and only there.

    Two plates that turn about poles fixed in a third frame have no fixed relative pole: the loop
    opens as half of omega x omega t squared. Expected sizes are computed with scipy.
    """
    circuit = both_tables(tmp_path, 1.0)
    apart = apart_after(1.0)
    found = {conflict.plate: conflict.misfit_rad * RADIUS_KM for conflict in circuit.pieces.conflicts}

    assert set(found) == {plate for plate, km in apart.items() if km > 1.0} == {"ri"}
    # 1e-6 km: both are sums of a few rounded doubles times the radius
    assert found["ri"] == pytest.approx(apart["ri"], abs=1e-6)
    with pytest.raises(TwoChainsError, match=r"ri relative to pa at 0.5 Ma: two chains from ri differ"):
        circuit.at("ri", 0.5)


def test_labels_are_case_sensitive(nnr: History) -> None:
    """nb is Nubia and NB North Bismarck; an unknown case is refused, with the known one named.

    Source: Argus, Gordon & DeMets 2011, Table 1.
    """
    nubia = angular_velocity(47.68, -68.44, 0.292)
    north_bismarck = angular_velocity(-45.04, 127.64, 0.856)

    assert np.abs(omega(nnr, "nb", "nnr") - nubia).max() < 1e-15
    assert np.abs(omega(nnr, "NB", "nnr") - north_bismarck).max() < 1e-15
    with pytest.raises(UnknownPlateError, match=r"plate 'NA' is not in the history; did you mean 'na'"):
        omega(nnr, "NA", "nnr")


def test_na_is_a_label(tmp_path: Path) -> None:
    """North America's label NA in MORVEL is text, never a missing value; so is nan.

    Source: DeMets, Gordon & Argus 2010, Table 3 (from memory): 48.9N 71.7W, 0.750 deg/Myr.
    """
    table = f"""
file = '{DATA / "morvel_relative_to_pacific.csv"}'
[table.columns]
plate = "plate_moving"
relative_to = "plate_fixed"
rate_deg_per_myr = "rate_deg_per_Myr"
"""
    as_printed = History.read(write_manifest(tmp_path, table))
    renamed = History.read(
        write_manifest(tmp_path, table + '[table.plates]\nNA = "nan"\n', name="renamed.toml")
    )
    published = angular_velocity(48.9, -71.7, 0.750)

    assert "NA" in as_printed.plates()
    assert np.abs(omega(as_printed, "NA", "PA") - published).max() < 1e-15
    assert np.abs(omega(renamed, "nan", "PA") - published).max() < 1e-15


NUVEL1A = records("nuvel1a_relative_to_pacific.csv")


@pytest.mark.parametrize("row", NUVEL1A, ids=[row["plate_moving"] for row in NUVEL1A])
def test_nuvel1a_spherical_equals_cartesian(row: dict[str, str]) -> None:
    """Poles with rates and Cartesian components of one table agree below 1e-6 rad/Myr.

    Source: DeMets et al. 1994, Table 1 (from memory). 1e-6 rad/Myr is the last printed digit of the
    components.
    """
    plate = row["plate_moving"]
    spherical = omega(history("nuvel1a_poles.toml"), plate, "Pacific")
    cartesian = omega(history("nuvel1a_omegas.toml"), plate, "Pacific")
    printed = [float(row[f"omega_{axis}_rad_per_Myr"]) for axis in "xyz"]

    assert np.abs(spherical - cartesian).max() < 1e-6
    assert np.abs(spherical - printed).max() < 1e-6
    assert np.abs(cartesian - printed).max() < 1e-15


def nnr_nuvel1a(columns: str) -> list[object]:
    """Plates of NNR-NUVEL1A that NUVEL-1A has too; the others are skipped with their reason."""
    known = {row["plate_moving"] for row in NUVEL1A}
    marked = []
    for row in records("nnr_nuvel1a.csv"):
        plate, reason = row["plate"], ""
        if plate == "Pacific":
            continue
        if plate not in known:
            reason = f"not among the recalled rows of NUVEL-1A; {row['flag']}"
        elif columns == "iers" and not row["flag"].startswith("relative motion closes"):
            reason = row["flag"]
        skip = [pytest.mark.skip(reason=reason)] if reason else []
        marked.append(pytest.param(plate, marks=skip, id=plate))
    return marked


def nnr_nuvel1a_history(folder: Path, columns: str) -> History:
    """One of the two sets of NNR-NUVEL1A, relative to `nnr` in a column of a generated copy."""
    kind = {"iers": "memory", "variant": "read"}[columns]
    path = with_column("nnr_nuvel1a.csv", folder, "frame", "nnr")
    omegas = "\n".join(
        f'omega_{axis}_rad_per_myr = "{columns}_omega_{axis}_rad_per_Myr_{kind}"' for axis in "xyz"
    )
    table = f"file = '{path}'\n[table.columns]\nrelative_to = 'frame'\n{omegas}"
    return History.read(write_manifest(folder, table))


@pytest.mark.parametrize("plate", nnr_nuvel1a("iers"))
def test_nnr_nuvel1a_minus_the_pacific_is_nuvel1a(tmp_path: Path, plate: str) -> None:
    """Differences of the IERS set are NUVEL-1A to one unit of its last digit, 1e-6 rad/Myr.

    Sources: IERS Conventions, McCarthy & Petit 2004 (from memory); DeMets et al. 1994, Table 1
    (from memory). Rows whose remembered components do not close, or that have no partner, are
    skipped with the reason.
    """
    found = omega(nnr_nuvel1a_history(tmp_path, "iers"), plate, "Pacific")
    published = omega_printed(plate)

    assert np.abs(found - published).max() < 1e-6 + 1e-12


@pytest.mark.parametrize("plate", nnr_nuvel1a("variant"))
def test_nnr_nuvel1a_variant_minus_the_pacific_is_nuvel1a(tmp_path: Path, plate: str) -> None:
    """Differences of the variant set are NUVEL-1A to 2e-6 rad/Myr, Cocos among them.

    Source: NNR-NUVEL-1A as coded by R. Scharroo (Delft, 1998), read; DeMets et al. 1994 (from
    memory). The variant is rounded apart from the table, hence two units of the last digit.
    """
    found = omega(nnr_nuvel1a_history(tmp_path, "variant"), plate, "Pacific")
    published = omega_printed(plate)

    assert np.abs(found - published).max() < 2e-6 + 1e-12


def omega_printed(plate: str) -> np.ndarray:
    """The printed components of NUVEL-1A, rad/Myr."""
    row = next(row for row in NUVEL1A if row["plate_moving"] == plate)
    return np.array([float(row[f"omega_{axis}_rad_per_Myr"]) for axis in "xyz"])


def test_the_remembered_component_of_cocos_is_the_only_fault(tmp_path: Path) -> None:
    """Of Cocos only the flagged x is off; y and z close, so the flag is about one number."""
    found = omega(nnr_nuvel1a_history(tmp_path, "iers"), "Cocos", "Pacific")
    off = np.abs(found - omega_printed("Cocos"))

    assert off[0] > 1e-4
    assert off[1:].max() < 1e-6 + 1e-12


@pytest.mark.parametrize("number", ["T1", "T2"])
def test_three_plate_closures(tmp_path: Path, number: str) -> None:
    """Two motions relative to the Pacific give the third: Juan de Fuca relative to North America.

    Source: worked_examples.csv T1, T2: PANGA tables (Miller et al. 2001), Table 1, read; its header
    says microrad/yr, which is rad/Myr. Row PCFC-NA holds North America relative to the Pacific.
    """
    example = worked_example(number)
    juan, america = np.array(numbers_in(example["inputs"])).reshape(2, 3).astype(str)
    header = "plate,relative_to,omega_x_rad_per_myr,omega_y_rad_per_myr,omega_z_rad_per_myr"
    lines = [header, ",".join(["JUAN", "PCFC", *juan]), ",".join(["NA", "PCFC", *america])]
    path = tmp_path / "panga.csv"
    path.write_text("\n".join(lines) + "\n", encoding="utf-8")
    of = History.read(path)
    published = np.array(numbers_in(example["published_output"]))

    # inputs and output are printed to 1e-6, and the difference of two such numbers is exact
    assert np.abs(omega(of, "JUAN", "NA") - published).max() < 1e-12
    assert np.abs(omega(of, "NA", "JUAN") + published).max() < 1e-12
    assert np.abs(omega(of, "PCFC", "NA") + america.astype(float)).max() < 1e-12


def test_a_table_without_its_unit_is_refused(tmp_path: Path) -> None:
    """Angular velocities come with their unit in the header; without one the table is refused."""
    path = tmp_path / "bare.csv"
    path.write_text("plate,relative_to,omega_x,omega_y,omega_z\na,b,1,2,3\n", encoding="utf-8")
    with pytest.raises(HistoryError, match="omega columns end in their unit"):
        History.read(path)


def test_units_of_angular_velocities(tmp_path: Path) -> None:
    """1 deg/Myr is exactly 3.6 mas/yr, and 111.195080 mm/yr at 90 deg from the pole.

    Source: constants.csv: the first exact, the second computed by a separate small program, not
    published; the speed is printed to 1e-6 mm/yr.
    """
    found = []
    for unit, value in (("deg_per_myr", "1"), ("mas_per_yr", "3.6")):
        path = tmp_path / f"{unit}.csv"
        header = ",".join(f"omega_{axis}_{unit}" for axis in "xyz")
        path.write_text(f"plate,relative_to,{header}\na,b,0,0,{value}\n", encoding="utf-8")
        found.append(rates(History.read(path), "a", "b", 0.0, 0.0, radius_km=6371.0087714))

    assert found[0].speed_mm_yr[0] == pytest.approx(111.195080, abs=0.5001e-6)
    assert found[1].speed_mm_yr[0] == pytest.approx(found[0].speed_mm_yr[0], abs=1e-12)
    assert found[0].azimuth_deg[0] == pytest.approx(90.0, abs=1e-12)
