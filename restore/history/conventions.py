"""How a published table is to be read, and the way from its conventions to ours.

Ours: a row turns `plate` from where it is today to where it was at `age_ma`, `relative_to` held
still, anticlockwise positive seen from outside; its covariance is in present-day coordinates of
`plate`. Nothing is guessed: a table that is written otherwise says so.
"""

from __future__ import annotations

import math
from dataclasses import dataclass, field

import numpy as np

from restore.errors import HistoryError
from restore.files.delimited import Layout
from restore.geometry import so3
from restore.geometry.latitudes import KINDS, Latitudes
from restore.geometry.sphere import Floats, tangent_frame, unit_vectors
from restore.geometry.uncertain import confidence_factor

TURNS = ("to-past", "to-present")
SIDES = ("plate", "relative_to")
ANGLES = ("anticlockwise", "clockwise")
CHOICES = {
    "turns": TURNS,
    "holds": SIDES,
    "positive_angle": ANGLES,
    "latitudes": KINDS,
    "covariance_in": SIDES,
}

RADIANS_PER_MYR = {
    "_deg_per_myr": math.pi / 180.0,
    "_rad_per_myr": 1.0,
    "_mas_per_yr": math.pi / (180.0 * 3.6),  # 1 deg/Myr is exactly 3.6 mas/yr
}


@dataclass(frozen=True)
class Conventions:
    """The conventions of one table.

    `turns`: `to-past` rotations take today's position to the past one, `to-present` bring it back.
    `holds`: the side of the pair that the printed rotation holds still, `relative_to` or `plate`.
    `positive_angle`: the sense of a positive angle. `latitudes`: of the poles, `as-given` or
    `geodetic`. `covariance_in`: whose present-day coordinates covariances are in; "" means the side
    that moves. Raises HistoryError for a value that is none of these.
    """

    turns: str = "to-past"
    holds: str = "relative_to"
    positive_angle: str = "anticlockwise"
    latitudes: str = "as-given"
    covariance_in: str = ""

    def __post_init__(self) -> None:
        if not self.covariance_in:
            moving = "plate" if self.holds == "relative_to" else "relative_to"
            object.__setattr__(self, "covariance_in", moving)
        for name, allowed in CHOICES.items():
            value = getattr(self, name)
            if value not in allowed:
                raise HistoryError(f"{name} = {value!r}: must be one of {', '.join(allowed)}")

    def angle_as_meant(self, angle_deg: float) -> float:
        """A printed finite angle as ours: the sign that the table's conventions give it, degrees."""
        flips = (self.turns == "to-present") + (self.holds == "plate")
        flips += self.positive_angle == "clockwise"
        return -angle_deg if flips % 2 and angle_deg != 0.0 else angle_deg

    def rate_as_meant(self, rate: float) -> float:
        """A printed rate as ours: forward in time, of `plate` relative to `relative_to`.

        A rate has a direction in time by itself, so `turns` has no say in it.
        """
        flips = (self.holds == "plate") + (self.positive_angle == "clockwise")
        return -rate if flips % 2 else rate

    def latitude_as_meant(self, lat_deg: float) -> float:
        """A printed pole latitude as ours, geocentric, degrees."""
        return float(Latitudes(self.latitudes).inward(lat_deg))

    def covariance_as_meant(self, quaternion: Floats, covariance: Floats) -> Floats:
        """A covariance (3, 3) in the coordinates of the plate, given the rotation as meant.

        `A_hat = expm([w]x) A = A expm([u]x)` with w = A u, so C = A^T C_left A (FORMULAS: Chang 1988).
        """
        if self.covariance_in == "plate":
            return covariance
        turn = so3.matrices(quaternion)
        turned: Floats = turn.T @ covariance @ turn
        return turned


@dataclass(frozen=True)
class Table:
    """One table of a history: where it stands, whose it is and how it is to be read.

    `rank`: where two chains differ, the pair of the lowest rank is used. `from_present`: pairs hold
    down to 0 Ma without a row of age 0. `join_within_myr`: gaps up to this length between two pairs
    of a plate are bridged with the younger pair's last stage. `rates_hold_to_ma`: to what age an
    angular velocity is taken to hold. `valid_from_ma`, `valid_to_ma`: the ages for which its pairs are
    meant; outside they do not hold. `time_scale`: the clock of its ages. `plates`, `chrons`: labels
    as printed -> as meant; a paper's own anomaly names need a stated pick, such as "6y" -> "C6n(y)".
    `constants`: our text columns that are the same in every row; `only`: the table's columns and the
    texts that the rows to be read have there.
    """

    file: str = ""
    title: str = ""
    citation: str = ""
    conventions: Conventions = field(default_factory=Conventions)
    rank: int = 0
    from_present: bool = False
    join_within_myr: float = 0.0
    rates_hold_to_ma: float = 1.0
    valid_from_ma: float = 0.0
    valid_to_ma: float = math.inf
    time_scale: str = ""
    layout: Layout = field(default_factory=lambda: Layout(comment="#"))
    plates: tuple[tuple[str, str], ...] = ()
    chrons: tuple[tuple[str, str], ...] = ()
    constants: tuple[tuple[str, str], ...] = ()
    only: tuple[tuple[str, str], ...] = ()

    def label(self, printed: str) -> str:
        """The plate label of this history for one printed in the table."""
        return dict(self.plates).get(printed, printed)

    def chron(self, printed: str) -> str:
        """The chron that a printed one is picked as."""
        return dict(self.chrons).get(printed, printed)


def published_covariance(entries: list[float], kappa: float, factor: float) -> Floats:
    """`C = (1/kappa) [[a,b,c],[b,d,e],[c,e,f]] * factor`, rad^2 (the form of Royer & Chang 1991)."""
    a, b, c, d, e, f = entries
    matrix = np.array([[a, b, c], [b, d, e], [c, e, f]])
    scaled: Floats = matrix * (factor / kappa)
    return scaled


def is_positive_definite(matrix: Floats) -> bool:
    """Whether a symmetric matrix (3, 3) is positive definite beyond rounding."""
    values = np.linalg.eigvalsh(matrix)
    return bool(values[0] > 1e-14 * values[-1] > 0.0)


def covariance_from_ellipse(
    lat_deg: float,
    lon_deg: float,
    angle_deg: float,
    major_deg: float,
    minor_deg: float,
    azimuth_deg: float,
    angle_sigma_deg: float,
) -> Floats:
    """Covariance (3, 3), rad^2, of a rotation whose pole has a 95 % ellipse and angle a sigma.

    Semi-axes, azimuth of the longer and sigma in degrees. The rotation vector v = angle * pole then
    has the covariance `angle^2 C_pole + sigma^2 p p^T`, and u = Jr(v) dv.
    """
    pole = unit_vectors(lat_deg, lon_deg)
    east, north = tangent_frame(pole)
    turn, angle = math.radians(azimuth_deg), math.radians(angle_deg)
    longer = math.sin(turn) * east + math.cos(turn) * north
    shorter = np.cross(longer, pole)
    factor = float(confidence_factor())
    spread = np.outer(longer, longer) * (math.radians(major_deg) / factor) ** 2
    spread += np.outer(shorter, shorter) * (math.radians(minor_deg) / factor) ** 2
    of_vector = angle**2 * spread + np.outer(pole, pole) * math.radians(angle_sigma_deg) ** 2
    jacobian = so3.right_jacobian(angle * pole)
    covariance: Floats = jacobian @ of_vector @ jacobian.T
    return covariance
