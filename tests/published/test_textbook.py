"""Worked examples of textbooks and exact cases, each with its source.

Texts of worked_examples.csv say for each row where its numbers come from.
"""

from __future__ import annotations

import math
from pathlib import Path

import numpy as np
import pytest
from published.support import RADIUS_KM, numbers_in, unit, worked_example

from restore.geometry.dipole import expected_inclination_deg, palaeolatitude_deg, virtual_pole
from restore.geometry.rotations import Rotations
from restore.geometry.sphere import angular_distance, azimuth_deg, unit_vectors
from restore.history.circuit import Circuit
from restore.history.rows import Row
from restore.history.store import History
from restore.motion.rates import rates, rates_from_pole


def test_v3_speed_and_azimuth_from_a_pole() -> None:
    """Nazca relative to South America at the coast of Chile: 8.43 cm/yr towards 77.35 deg.

    Source: Fowler, The Solid Earth, worked example; inputs read, answer from memory (V3): pole 56N
    94W, 0.76 deg/Myr, point 28S 71W, R 6371 km; the distance a from the pole is 86.26 deg.
    """
    found = rates_from_pole(56.0, -94.0, 0.76, -28.0, -71.0, radius_km=6371.0)
    speed_cm, distance, _, azimuth = numbers_in(worked_example("V3")["published_output"])

    assert (speed_cm, distance, azimuth) == (8.43, 86.26, 77.35)
    assert found.speed_mm_yr[0] / 10.0 == pytest.approx(speed_cm, abs=0.005)
    assert found.pole_distance_deg[0] == pytest.approx(distance, abs=0.005)
    assert found.azimuth_deg[0] == pytest.approx(azimuth, abs=0.005)


def test_v3_through_a_history(tmp_path: Path) -> None:
    """The same motion from a table of rates (V3); with Nazca held still it points the other way."""
    path = tmp_path / "fowler.csv"
    path.write_text(
        "plate,relative_to,pole_lat_deg,pole_lon_deg,rate_deg_per_myr\nnazca,south-america,56,-94,0.76\n",
        encoding="utf-8",
    )
    of = History.read(path)
    there = rates(of, "nazca", "south-america", -28.0, -71.0, radius_km=6371.0)
    back = rates(of, "south-america", "nazca", -28.0, -71.0, radius_km=6371.0)

    assert there.speed_mm_yr[0] == pytest.approx(84.3, abs=0.05)
    assert there.azimuth_deg[0] == pytest.approx(77.35, abs=0.005)
    assert back.speed_mm_yr[0] == pytest.approx(84.3, abs=0.05)
    assert back.azimuth_deg[0] == pytest.approx(257.35, abs=0.005)


def test_g1_great_circle_distance_and_course() -> None:
    """Los Angeles to New York: 0.623585 rad, 2144 nautical miles, course 1.150035 rad.

    Source: Williams, Aviation Formulary (G1), read in a forum copy, course from memory. A nautical
    mile is a minute of arc there. The source's inputs are cut to six digits: 2e-6 rad.
    """
    los_angeles = unit_vectors(33.0 + 57.0 / 60.0, -(118.0 + 24.0 / 60.0))
    new_york = unit_vectors(40.0 + 38.0 / 60.0, -(73.0 + 47.0 / 60.0))
    distance = float(angular_distance(los_angeles, new_york))
    course = math.radians(float(azimuth_deg(los_angeles, new_york)))
    published = numbers_in(worked_example("G1")["published_output"])

    assert published == [0.623585, 2144.0, 1.150035]
    assert distance == pytest.approx(published[0], abs=2e-6)
    assert math.degrees(distance) * 60.0 == pytest.approx(published[1], abs=0.5)
    assert course == pytest.approx(published[2], abs=2e-6)


@pytest.mark.parametrize("number", ["L1", "L2", "L3", "L4"])
def test_l_palaeolatitude_of_a_dipole(number: str) -> None:
    """tan I = 2 tan lat, both ways, north and south.

    Source: Butler 1992, Paleomagnetism, eq. 1.15, an exact formula (L1 to L4); values recomputed by
    a separate small program, printed to 1e-6 deg (0.1 m).
    """
    example = worked_example(number)
    inclination = float(example["inputs"].split()[1])
    latitude = float(example["recomputed_plain_numpy"])

    assert float(palaeolatitude_deg(inclination)) == pytest.approx(latitude, abs=0.5001e-6)
    assert float(palaeolatitude_deg(-inclination)) == pytest.approx(-latitude, abs=0.5001e-6)
    # an inclination is at most twice as sensitive as the latitude
    assert float(expected_inclination_deg(latitude)) == pytest.approx(inclination, abs=1.1e-6)


def test_l_palaeolatitude_at_the_ends() -> None:
    """A dipole's field is level at its equator and upright at its poles (exact)."""
    assert palaeolatitude_deg([0.0, 90.0, -90.0]).tolist() == [0.0, 90.0, -90.0]
    assert expected_inclination_deg([0.0, 90.0, -90.0]).tolist() == [0.0, 90.0, -90.0]


def test_p1_virtual_geomagnetic_pole() -> None:
    """Site 30N 250E, I 45, D 25, a95 2.0: pole 67.8N 342.7E, p 63.4, dp 1.6, dm 2.5 deg.

    Source: Butler 1992, ch. 7 worked example (P1), from memory. The longitude is on the far branch,
    lon + 180 - beta. Recomputed with one more digit by a separate small program, not published.
    """
    example = worked_example("P1")
    lat, lon, p, dp, dm = numbers_in(example["published_output"])
    finer = numbers_in(example["recomputed_plain_numpy"])
    found = virtual_pole(30.0, 250.0, 45.0, 25.0, 2.0)
    given = [float(value) for value in found]

    assert (lat, lon, p, dp, dm) == (67.8, 342.7, 63.4, 1.6, 2.5)
    for value, printed in zip(given, (lat, lon - 360.0, p, dp, dm), strict=True):
        assert value == pytest.approx(printed, abs=0.05)
    for value, printed in zip(given, (finer[0], finer[1] - 360.0, *finer[2:]), strict=True):
        assert value == pytest.approx(printed, abs=0.00501)


AXES = {"x": (0.0, 0.0), "y": (0.0, 90.0)}


@pytest.mark.parametrize(
    ("number", "first", "then", "sign"), [("F1", "x", "y", -1.0), ("F2", "y", "x", 1.0)]
)
def test_f_finite_rotations_do_not_commute(number: str, first: str, then: str, sign: float) -> None:
    """Quarter turns about x and y give 120 deg about (1,1,-1) or (1,1,1), by the order.

    Source: exact (F1, F2). Tolerance: rounding, 1e-12 deg.
    """
    later = Rotations.from_poles(*AXES[then], 90.0)
    lat, lon, angle = (float(v) for v in (later @ Rotations.from_poles(*AXES[first], 90.0)).as_poles())

    assert lat == pytest.approx(sign * math.degrees(math.atan(1.0 / math.sqrt(2.0))), abs=1e-12)
    assert (lon, angle) == (pytest.approx(45.0, abs=1e-12), pytest.approx(120.0, abs=1e-12))
    printed = numbers_in(worked_example(number)["published_output"])
    assert (lat, lon, angle) == pytest.approx(printed, abs=0.5001e-4)


@pytest.mark.parametrize(("number", "first", "then"), [("F1", "x", "y"), ("F2", "y", "x")])
def test_f_a_chain_turns_the_nearest_link_first(number: str, first: str, then: str) -> None:
    """The link nearest the plate acts first, so the chain gives the same poles (F1, F2, exact)."""
    rows = [
        Row("plate", "middle", 10.0, *AXES[first], 90.0),
        Row("middle", "frame", 10.0, *AXES[then], 90.0),
    ]
    found = Circuit(History.from_rows(rows), "frame").at("plate", 10.0).rotations

    printed = numbers_in(worked_example(number)["published_output"])
    assert [float(v) for v in found.as_poles()] == pytest.approx(printed, abs=0.5001e-4)


def test_h1_full_and_half_spreading_rate() -> None:
    """South Atlantic since anomaly 5: 31.9 mm/yr full, 16.0 half; published "about 32" full.

    Source: abstract of Cande & Kent 1992, read (rate); rotation of An5, Nurnberg & Mueller 1991,
    from memory; age 10.949 Ma of CK95; 31.9 and 16.0 recomputed by a separate small program (H1).
    Half of the full opening lies between the axis and the isochron.
    """
    rows = [
        Row("south-america", "africa", 0.0, math.nan, math.nan, 0.0),
        Row("south-america", "africa", 10.949, 60.0, -39.0, 3.15),
    ]
    of = History.from_rows(rows)
    full = rates(of, "south-america", "africa", -30.0, -5.0).speed_mm_yr[0]
    other = rates(of, "africa", "south-america", -30.0, -5.0).speed_mm_yr[0]

    assert full == pytest.approx(32.0, abs=0.5)
    assert full == pytest.approx(31.9, abs=0.05)
    assert full / 2.0 == pytest.approx(16.0, abs=0.05)
    assert other == pytest.approx(full, abs=1e-9)


def test_h1_the_path_is_a_small_circle() -> None:
    """The opening of H1 as a length: rate times age is the arc of the small circle about the pole.

    Exact: R sin(distance to the pole) times the angle. The middle of the path is half of it.
    """
    rows = [
        Row("south-america", "africa", 0.0, math.nan, math.nan, 0.0),
        Row("south-america", "africa", 10.949, 60.0, -39.0, 3.15),
    ]
    of = History.from_rows(rows)
    point, pole = unit(-30.0, -5.0), unit(60.0, -39.0)
    arc = RADIUS_KM * np.linalg.norm(np.cross(pole, point)) * math.radians(3.15)
    full = rates(of, "south-america", "africa", -30.0, -5.0).speed_mm_yr[0]
    path = Circuit(of, "africa").rotations("south-america", [0.0, 5.4745, 10.949]).rotations

    # km, rounding; chords of half the angle turn about the pole by 1.575 deg each
    assert full * 10.949 == pytest.approx(arc, abs=1e-9)
    first, second = (path[i].inverse() @ path[i + 1] for i in range(2))
    assert float(first.angle_deg()) == pytest.approx(1.575, abs=1e-12)
    assert float(second.angle_deg()) == pytest.approx(1.575, abs=1e-12)
