"""Finite poles and stage poles of one plate relative to another, with errors and their ledger."""

from __future__ import annotations

import math
from collections.abc import Sequence
from dataclasses import dataclass
from typing import Any

import numpy as np

from restore.errors import InputError
from restore.geometry import so3
from restore.geometry.latitudes import Latitudes
from restore.geometry.rotations import Rotations
from restore.geometry.sphere import EARTH_RADIUS_KM, Floats, tangent_frame
from restore.geometry.uncertain import Ellipse, Sensitivity, confidence_factor, ellipse
from restore.history.circuit import Circuit
from restore.history.ledger import Ledger
from restore.history.store import History

COORDINATES = ("relative-to", "plate")


@dataclass(frozen=True, eq=False)
class Pole:
    """A finite or stage rotation: its pole, error and ledger.

    `covariance` (3, 3) rad^2 of a small rotation acting first, or None where a row's is not known;
    `dof` behind it, infinite where every kappa is known.
    """

    plate: str
    relative_to: str
    rotation: Rotations
    covariance: Floats | None
    dof: float
    ledger: Ledger
    age_ma: float | None = None
    from_age_ma: float | None = None
    to_age_ma: float | None = None
    coordinates: str = ""
    latitudes: Latitudes = Latitudes()

    @property
    def rate_deg_per_myr(self) -> float:
        """Angle over the time between the two ages of a stage, deg/Myr."""
        assert self.from_age_ma is not None
        assert self.to_age_ma is not None
        return float(self.rotation.angle_deg()) / (self.from_age_ma - self.to_age_ma)

    def pole_error(self) -> tuple[Ellipse, float] | None:
        """95 % ellipse of the pole in degrees of arc, and the sigma of the angle in degrees.

        `dv = Jr^-1(v) u` for the rotation vector v; the pole moves by dv across v over the angle.
        None where the covariance is not known or the rotation has no pole.
        """
        vector = self.rotation.as_vectors()
        angle = float(np.linalg.norm(vector))
        if self.covariance is None or math.isnan(float(self.rotation.as_poles()[0])):
            return None
        jacobian = np.linalg.inv(so3.right_jacobian(vector))
        of_vector = jacobian @ self.covariance @ jacobian.T
        pole = vector / angle
        east, north = tangent_frame(pole)
        var_east, var_north = east @ of_vector @ east, north @ of_vector @ north
        terms = np.array([var_east, var_north, east @ of_vector @ north]) / angle**2
        factor = confidence_factor(self.dof)
        in_degrees = ellipse(terms[0], terms[1], terms[2], factor, math.degrees(1.0))
        return in_degrees, math.degrees(math.sqrt(max(float(pole @ of_vector @ pole), 0.0)))

    def as_record(self) -> dict[str, Any]:
        """Plain values, as `--json` prints them."""
        lat, lon, angle = (float(v) for v in self.rotation.as_poles())
        none = math.isnan(lat)
        if not none:
            lat = float(self.latitudes.outward(lat))
        record: dict[str, Any] = {"plate": self.plate, "relative_to": self.relative_to}
        record["frame_kind"] = self.ledger.circuit.history.kind_of(self.relative_to)
        if self.age_ma is not None:
            record["age_ma"] = self.age_ma
        else:
            record |= {"from_age_ma": self.from_age_ma, "to_age_ma": self.to_age_ma}
            record |= {"coordinates": self.coordinates}
        record |= {
            "pole_lat_deg": None if none else lat,
            "pole_lon_deg": None if none else lon,
            "angle_deg": angle,
        }
        if self.age_ma is None:
            record["rate_deg_per_myr"] = self.rate_deg_per_myr
        record["quaternion_wxyz"] = [float(v) for v in self.rotation.as_quaternions()]
        record["covariance_rad2"] = None if self.covariance is None else self.covariance.tolist()
        record |= self._error_record()
        record["latitudes"] = self.latitudes.kind
        record["errors"] = "error of rows only"
        record["ledger"] = self.ledger.as_records()
        return record

    def _error_record(self) -> dict[str, Any]:
        error = self.pole_error()
        names = ("major", "minor", "azimuth")
        record: dict[str, Any] = {f"pole_ellipse_{name}_deg": None for name in names}
        record["angle_sigma_deg"] = None
        record["dof"] = None if math.isinf(self.dof) or math.isnan(self.dof) else self.dof
        if error is not None:
            for name, value in zip(names, error[0], strict=True):
                record[f"pole_ellipse_{name}_deg"] = float(value)
            record["angle_sigma_deg"] = error[1]
        return record


def _known(covariance: Floats) -> Floats | None:
    return None if np.isnan(covariance).any() else covariance


def finite_pole(
    history: History,
    plate: str,
    relative_to: str,
    age_ma: float,
    beyond: str = "refuse",
    latitudes: Latitudes | None = None,
) -> Pole:
    """The rotation of `plate` relative to `relative_to` from today to `age_ma` (Ma).

    Raises DomainError (its leaves) where the history has no answer.
    """
    found = Circuit(history, relative_to, beyond).at(plate, age_ma)
    sensitivity = found.sensitivity()
    errors = history.row_errors()
    return Pole(
        plate,
        relative_to,
        Rotations(found.rotations.quaternions.reshape(4)),
        _known(sensitivity.covariance(errors)[0]),
        float(sensitivity.effective_dof(errors)[0]),
        Ledger.of(found, sensitivity),
        age_ma=age_ma,
        latitudes=latitudes or Latitudes(),
    )


def stage_pole(
    history: History,
    plate: str,
    relative_to: str,
    from_age_ma: float,
    to_age_ma: float,
    coordinates: str = "relative-to",
    beyond: str = "refuse",
    latitudes: Latitudes | None = None,
) -> Pole:
    """The motion of `plate` relative to `relative_to` from an older to a younger age (Ma).

    `coordinates`: `relative-to`, R(t1) R(t2)^-1, in coordinates of the partner; `plate`,
    R(t2)^-1 R(t1), in the plate's own present-day coordinates; or any other label of the history:
    as the partner stood in that frame at the younger age. Raises InputError if the ages are not in
    order and DomainError where the history has no answer.
    """
    if not from_age_ma > to_age_ma:
        raise InputError(
            f"stage from {from_age_ma:g} to {to_age_ma:g} Ma: the first age must be the older one"
        )
    circuit = Circuit(history, relative_to, beyond)
    for age in (from_age_ma, to_age_ma):
        circuit.at(plate, age)
    found = circuit.rotations([plate, plate], [from_age_ma, to_age_ma])
    older, younger = found.rotations[0], found.rotations[1]
    both = found.sensitivity()
    part = [Sensitivity(both.rows[i : i + 1], both.matrices[i : i + 1]) for i in range(2)]
    # R1 R2^-1 = R1 (R2^-1): u = R2 (u1 - u2); in plate coordinates R2^-1 R1: u1 - S^T u2
    if coordinates == "plate":
        rotation = older.inverse() @ younger
        own = [part[0].mapped(-rotation.inverse().as_matrices()), part[1]]
    else:
        rotation = younger @ older.inverse()
        turn_back = older.as_matrices()
        own = [part[0].mapped(-turn_back), part[1].mapped(turn_back)]
    turn = Rotations.identity()
    if coordinates not in COORDINATES:
        to_frame = Circuit(history, coordinates, beyond).at(relative_to, to_age_ma)
        turn = Rotations(to_frame.rotations.quaternions.reshape(4))
        # Q exp(q) T exp(-q) Q^-1: the frame's own error turns the pole along with it
        own.append(to_frame.sensitivity().mapped(rotation.as_matrices().T - np.eye(3)))
    sensitivity = Sensitivity.combined(own).mapped(turn.as_matrices())
    errors = history.row_errors()
    labels = {"relative-to": relative_to, "plate": plate}
    return Pole(
        plate,
        relative_to,
        turn @ rotation @ turn.inverse(),
        _known(sensitivity.covariance(errors)[0]),
        float(sensitivity.effective_dof(errors)[0]),
        Ledger.of(found, both),
        from_age_ma=from_age_ma,
        to_age_ma=to_age_ma,
        coordinates=labels.get(coordinates, coordinates),
        latitudes=latitudes or Latitudes(),
    )


def pole_words(poles: Sequence[Pole]) -> list[str]:
    """Each pole in one line of words."""
    return [_words(pole) for pole in poles]


def _words(pole: Pole) -> str:
    lat, lon, angle = (float(v) for v in pole.rotation.as_poles())
    if pole.age_ma is not None:
        what = f"{pole.plate} relative to {pole.relative_to}, today to {pole.age_ma:g} Ma: "
    else:
        what = f"{pole.plate} relative to {pole.relative_to}, {pole.from_age_ma:g} to"
        what += f" {pole.to_age_ma:g} Ma, in coordinates of {pole.coordinates}: "
    if math.isnan(lat):
        return what + "zero rotation, no pole"
    what += f"pole {float(pole.latitudes.outward(lat)):.6f} {lon:.6f}, angle {angle:.6f} deg"
    if pole.age_ma is None:
        what += f", {pole.rate_deg_per_myr:.6f} deg/Myr"
    error = pole.pole_error()
    if error is None:
        return what + "; error not known"
    shape, sigma = error
    return (
        f"{what}; 95 % ellipse of the pole {float(shape.major_km):.4g} x {float(shape.minor_km):.4g} deg,"
        f" azimuth {float(shape.azimuth_deg):.1f}; sigma of the angle {sigma:.4g} deg (error of rows only)"
    )


def compare(one: Pole, other: Pole, radius_km: float = EARTH_RADIUS_KM) -> dict[str, Any]:
    """How two independent rotations of the same plates differ: angle, greatest distance, significance.

    `angle_deg` and `greatest_km` of the rotation that leads from one to the other; `probability`
    that errors alone make such a difference (chi-square with 3 degrees of freedom, or F where kappa
    was estimated), None where an error is not known. Independent: the two share no rows.
    """
    from restore.geometry.uncertain import significance, welch_satterthwaite

    between = one.rotation.inverse() @ other.rotation
    angle = float(so3.angle(between.quaternions))
    record: dict[str, Any] = {
        "angle_deg": math.degrees(angle),
        "greatest_km": angle * radius_km,
        "statistic": None,
        "probability": None,
        "dof": None,
    }
    if one.covariance is not None and other.covariance is not None:
        turned = between.as_matrices().T @ one.covariance @ between.as_matrices()
        traces = np.array([np.trace(turned), np.trace(other.covariance)])
        nu = welch_satterthwaite(traces.sum(), (traces**2 / np.array([one.dof, other.dof])).sum())
        test = significance(between.as_vectors(), turned + other.covariance, float(nu))
        record["statistic"], record["probability"] = test.statistic, test.probability
        record["dof"] = None if math.isinf(test.dof) else test.dof
    return record
