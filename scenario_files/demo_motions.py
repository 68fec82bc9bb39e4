"""Rotation histories of the demo world and the tables that tell them.

A row turns ``plate`` from where it is today to where it was at ``age_ma`` with
``relative_to`` held still. Between rows the angular velocity is constant.
"""

from __future__ import annotations

import csv
from collections.abc import Sequence
from dataclasses import dataclass
from itertools import pairwise
from pathlib import Path

import numpy as np
from demo_sphere import EARTH_RADIUS_KM, Array, pole_of, turn
from scipy.spatial.transform import Rotation

FRAME = "deep"
PAIR = ("ovrath", "quemmel")
OPENING_SINCE_MA = 100.0
OPENING_POLE = (78.0, 160.0)
PARTNER_CHANGE_MA = 50.0
COVARIANCE_FACTOR = 1e-7


@dataclass(frozen=True)
class Motion:
    """How one plate moves against another.

    ``spin`` is pole latitude, pole longitude (degrees) and rate (degrees per
    Myr, towards the past) around which the stages wander a little; ``phase``
    shifts that wander; ``table`` says which file tells the pair.
    """

    plate: str
    relative_to: str
    spin: tuple[float, float, float]
    ages: tuple[float, ...]
    phase: float
    table: str = "poles"
    surveyed: bool = True
    moves_until: float = 120.0


MOTIONS = (
    Motion("quemmel", FRAME, (-0.9, 174.1, 0.215), (0, 15, 32, 54, 77, 98, 120), 0.3),
    Motion(
        *PAIR,
        (*OPENING_POLE, 0.30),
        (0, 9.7, 20.1, 33.1, 47.9, 67.6, 83.4, 100, 120),
        1.1,
        moves_until=OPENING_SINCE_MA,
    ),
    Motion("pazzel", "ovrath", (-54.7, -22.2, 0.381), (0, 21, 45, 70, 95, 120), 2.0, surveyed=False),
    Motion("glufta", "quemmel", (8.1, 26.0, 0.149), (0, 11, 26, 43, 62, 84, 104, 120), 2.9),
    Motion("zobbet", "quemmel", (7.5, -5.2, 0.300), (0, 18, 36, 58, 81, 101, 120), 3.7),
    Motion("snivar", "glufta", (-33.8, -32.4, 0.143), (0, 12, 25, 38, 50), 4.4),
    Motion("snivar", "zobbet", (-54.7, 156.1, 0.120), (50, 64, 83, 102, 120), 5.2),
    Motion("wirrum", "glufta", (27.3, -45.8, 0.272), (0, 16, 40, 66, 92, 120), 0.8, "rim"),
    Motion("ibbun", "wirrum", (-74.6, 69.6, 0.305), (0, 10, 24, 41, 60, 79, 99, 120), 1.7, "rim"),
)


@dataclass(frozen=True)
class Row:
    """One finite rotation: age in Ma, pole and angle in degrees (4 decimals)."""

    age_ma: float
    pole_lat_deg: float
    pole_lon_deg: float
    angle_deg: float

    @classmethod
    def of(cls, age_ma: float, rotation: Rotation) -> Row:
        """Round a rotation to what a table prints."""
        return cls(float(age_ma), *(round(value, 4) for value in pole_of(rotation)))

    def rotation(self) -> Rotation:
        """Return the rotation that the printed numbers mean."""
        return turn(self.pole_lat_deg, self.pole_lon_deg, self.angle_deg)


class History:
    """The rows of each pair, and the rotations that follow from them."""

    def __init__(self, rows: dict[tuple[str, str], list[Row]] | None = None) -> None:
        self.rows = rows or {}

    def rotation(self, plate: str, relative_to: str, age_ma: float) -> Rotation:
        """Return the rotation of one pair at an age within its rows."""
        rows = self.rows[plate, relative_to]
        for young, old in pairwise(rows):
            if young.age_ma <= age_ma <= old.age_ma:
                share = (age_ma - young.age_ma) / (old.age_ma - young.age_ma)
                start = young.rotation()
                stage = (old.rotation() * start.inv()).as_rotvec()
                return Rotation.from_rotvec(share * stage) * start
        if len(rows) == 1 and rows[0].age_ma == age_ma:
            return rows[0].rotation()
        raise ValueError(f"{plate} relative to {relative_to} is not told at {age_ma} Ma")

    def to_frame(self, plate: str, age_ma: float, young_side: bool = True) -> Rotation:
        """Return the rotation of ``plate`` to the mantle frame through its circuit.

        At an age where a plate changes its partner, ``young_side`` chooses the
        partner it had afterwards rather than the one it had before.
        """
        total = Rotation.identity()
        while plate != FRAME:
            partners = [
                pair
                for pair, rows in self.rows.items()
                if pair[0] == plate and rows[0].age_ma <= age_ma <= rows[-1].age_ma
            ]
            pair = partners[0] if young_side else partners[-1]
            total = self.rotation(*pair, age_ma) * total
            plate = pair[1]
        return total

    def chain(self, plate: str, age_ma: float) -> list[str]:
        """Return the plates from ``plate`` to the mantle frame at an age."""
        names = [plate]
        while names[-1] != FRAME:
            names.append(
                next(
                    pair[1]
                    for pair, rows in self.rows.items()
                    if pair[0] == names[-1] and rows[0].age_ma <= age_ma <= rows[-1].age_ma
                )
            )
        return names

    def velocity(self, plate: str, age_ma: float, step: float = 0.02) -> Array:
        """Return the angular velocity to the mantle, rad/Myr forward in time."""
        older = self.to_frame(plate, age_ma + step)
        younger = self.to_frame(plate, age_ma)
        return np.asarray((younger * older.inv()).as_rotvec() / step)


def stage(motion: Motion, young: float, old: float) -> Rotation:
    """Return the turn of one stage: a steady spin that wanders slowly with age."""
    if old > motion.moves_until:
        return Rotation.identity()
    middle = (young + old) / 2
    lat, lon, rate = motion.spin
    swing = np.sin(middle / 21.0 + motion.phase)
    sway = np.cos(middle / 34.0 + motion.phase)
    return turn(lat + 2.0 * sway, lon + 3.0 * swing, rate * (1 + 0.1 * swing) * (old - young))


def build_history() -> History:
    """Return the whole history in the rounded numbers that the tables print."""
    history = History()
    for motion in MOTIONS:
        first = motion.ages[0]
        if first == 0.0:
            now = Rotation.identity()
        else:
            held = history.to_frame(motion.relative_to, first)
            now = held.inv() * history.to_frame(motion.plate, first)
        rows = [Row.of(first, now)]
        for young, old in pairwise(motion.ages):
            now = stage(motion, young, old) * now
            rows.append(Row.of(old, now))
        history.rows[motion.plate, motion.relative_to] = rows
    return history


def spread(age_ma: float, axes: Array, rng: np.random.Generator) -> Array:
    """Return a covariance in rad^2 whose sizes grow with age from 2 to 25 km."""
    share = age_ma / 120.0
    sizes = np.array([2.3 + 4.0 * share, 3.0 + 9.0 * share, 4.0 + 20.0 * share])
    sizes *= rng.uniform(0.92, 1.0, 3) / EARTH_RADIUS_KM
    tilt = Rotation.from_rotvec(rng.normal(0, 0.15, 3)).as_matrix()
    shape = tilt @ axes
    return np.asarray(shape @ np.diag(sizes**2) @ shape.T)


def covariance_cells(motion: Motion, row: Row, axes: Array, rng: np.random.Generator) -> list[str]:
    """Return the cells kappa, dof, six numbers and factor of one row."""
    if row.age_ma == 0.0 or not motion.surveyed:
        return [""] * 9
    known = rng.uniform() < 0.25
    kappa = round(float(np.exp(rng.uniform(np.log(0.35), np.log(2.8)))), 2)
    dof = int(rng.integers(10, 121))
    matrix = spread(row.age_ma, axes, rng) * (1.0 if known else kappa) / COVARIANCE_FACTOR
    numbers = [f"{matrix[i, j]:.3f}" for i in range(3) for j in range(i, 3)]
    return [*(["", ""] if known else [f"{kappa:.2f}", str(dof)]), *numbers, "1e-7"]


POLES_HEADER = (
    *("plate", "relative_to", "age_ma", "pole_lat_deg", "pole_lon_deg", "angle_deg"),
    *("kappa", "dof", "cov_a", "cov_b", "cov_c", "cov_d", "cov_e", "cov_f", "cov_factor"),
    *("reference", "note"),
)

NOTES = {
    ("ovrath", "quemmel", 100.0): "first opening of the ocean",
    ("ovrath", "quemmel", 120.0): "one plate before the opening",
    ("snivar", "glufta", 50.0): "change of partner",
    ("snivar", "zobbet", 50.0): "change of partner, tied through the circuit",
    ("zobbet", "quemmel", 58.0): "few crossings",
}


def poles_rows(history: History, rng: np.random.Generator) -> list[Sequence[str]]:
    """Return the rows of the main table, header first."""
    table: list[Sequence[str]] = [POLES_HEADER]
    for number, motion in enumerate(m for m in MOTIONS if m.table == "poles"):
        axes = np.linalg.qr(rng.normal(size=(3, 3)))[0]
        for row in history.rows[motion.plate, motion.relative_to]:
            zero = row.age_ma == 0.0
            pole = ["", ""] if zero else [f"{row.pole_lat_deg:.4f}", f"{row.pole_lon_deg:.4f}"]
            angle = "0" if zero else f"{row.angle_deg:.4f}"
            key = (motion.plate, motion.relative_to, row.age_ma)
            table.append(
                [
                    *(motion.plate, motion.relative_to, f"{row.age_ma:g}", *pole, angle),
                    *covariance_cells(motion, row, axes, rng),
                    "" if zero else f"Survey report {12 + 3 * number}",
                    "today" if zero else NOTES.get(key, ""),
                ]
            )
    return table


def rim_rows(history: History) -> list[Sequence[str]]:
    """Return the rows of the second table: no zero rows, turning towards the present."""
    table: list[Sequence[str]] = [["Moving", "Held", "t_Ma", "Lat", "Lon", "Turn"]]
    for motion in MOTIONS:
        if motion.table != "rim":
            continue
        for row in history.rows[motion.plate, motion.relative_to][1:]:
            pole = (f"{row.pole_lat_deg:.4f}", f"{row.pole_lon_deg:.4f}")
            pair = (motion.plate, motion.relative_to)
            table.append([*pair, f"{row.age_ma:g}", *pole, f"{-row.angle_deg:.4f}"])
    return table


def write_table(path: Path, rows: Sequence[Sequence[str]], delimiter: str = ",") -> None:
    """Write delimited text with plain line ends."""
    with path.open("w", encoding="utf-8", newline="") as stream:
        csv.writer(stream, delimiter=delimiter, lineterminator="\n").writerows(rows)
