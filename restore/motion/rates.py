"""How fast a plate moves relative to another, at points, now or at a past age."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import ArrayLike

from restore.errors import InputError
from restore.geometry import so3
from restore.geometry.latitudes import Latitudes
from restore.geometry.sphere import (
    EARTH_RADIUS_KM,
    Floats,
    angular_distance,
    compass_deg,
    cross,
    dot,
    lat_lon,
    tangent_frame,
    unit_vectors,
)
from restore.geometry.uncertain import Sensitivity
from restore.history.circuit import REACHED, Circuit, CircuitRotations
from restore.history.ledger import Ledger
from restore.history.poles import stage_pole
from restore.history.store import History
from restore.history.velocity import Functional, angular_velocity, sensitivity

AT_ON = ("plate", "relative-to")


@dataclass(frozen=True, eq=False)
class Rates:
    """Velocities of a plate relative to its partner at points `(n,)`.

    `lat_deg`, `lon_deg` as asked; `then_*` the point in the partner's coordinates at that age, where
    east, north and azimuth are given. mm/yr (= km/Myr), degrees; `pole_distance_deg` from the pole
    about which the plate moves. `covariance` (n, 2, 2) of (east, north), (mm/yr)^2: error of rows
    only, NaN where not known. `omega` (n, 3): angular velocity, rad/Myr, in the partner's coordinates.
    """

    lat_deg: Floats
    lon_deg: Floats
    then_lat_deg: Floats
    then_lon_deg: Floats
    age_ma: Floats
    east_mm_yr: Floats
    north_mm_yr: Floats
    pole_distance_deg: Floats
    covariance: Floats
    omega: Floats
    sensitivity: Sensitivity | None = None
    found: CircuitRotations | None = None
    ledger: Ledger | None = None

    @property
    def speed_mm_yr(self) -> Floats:
        """Speed, mm/yr."""
        speed: Floats = np.hypot(self.east_mm_yr, self.north_mm_yr)
        return speed

    @property
    def azimuth_deg(self) -> Floats:
        """Direction of motion, degrees clockwise from north, [0, 360); NaN where nothing moves."""
        return np.where(self.speed_mm_yr > 0.0, compass_deg(self.east_mm_yr, self.north_mm_yr), np.nan)

    def sigmas(self) -> tuple[Floats, Floats]:
        """1-sigma of speed (mm/yr) and of azimuth (degrees), to first order."""
        speed = self.speed_mm_yr
        with np.errstate(invalid="ignore", divide="ignore"):
            e, n = self.east_mm_yr / speed, self.north_mm_yr / speed
            ee, nn, en = self.covariance[:, 0, 0], self.covariance[:, 1, 1], self.covariance[:, 0, 1]
            along = e * e * ee + n * n * nn + 2.0 * e * n * en
            across = n * n * ee + e * e * nn - 2.0 * e * n * en
            azimuth = np.rad2deg(np.sqrt(np.maximum(across, 0.0)) / speed)
        return np.sqrt(np.maximum(along, 0.0)), np.where(speed > 0.0, azimuth, np.nan)

    def columns(self) -> dict[str, Floats]:
        """The columns of the command, in its order."""
        speed_sigma, azimuth_sigma = self.sigmas()
        return {
            "lat_deg": self.lat_deg,
            "lon_deg": self.lon_deg,
            "then_lat_deg": self.then_lat_deg,
            "then_lon_deg": self.then_lon_deg,
            "age_ma": self.age_ma,
            "east_mm_yr": self.east_mm_yr,
            "north_mm_yr": self.north_mm_yr,
            "speed_mm_yr": self.speed_mm_yr,
            "azimuth_deg": self.azimuth_deg,
            "pole_distance_deg": self.pole_distance_deg,
            "speed_sigma_mm_yr": speed_sigma,
            "azimuth_sigma_deg": azimuth_sigma,
        }


def rates(
    history: History,
    plate: str,
    relative_to: str,
    lat_deg: ArrayLike,
    lon_deg: ArrayLike,
    age_ma: ArrayLike = 0.0,
    at_on: str = "plate",
    latitudes: Latitudes | None = None,
    radius_km: float = EARTH_RADIUS_KM,
    beyond: str = "refuse",
) -> Rates:
    """Velocities of `plate` relative to `relative_to` at points (degrees) and ages (Ma), broadcast.

    `at_on = "plate"`: the points are today's on the plate, carried back first; `"relative-to"`: they
    are positions in the partner's coordinates at that age. At a row's age the stage just younger
    counts, at 0 Ma the first. v = omega x r. Raises DomainError where the history has no answer.
    """
    if at_on not in AT_ON:
        raise InputError(f"at_on = {at_on!r}: must be one of {', '.join(AT_ON)}")
    if plate == relative_to:
        raise InputError(
            f"plate and relative_to are both {plate!r}: a plate does not move relative to itself"
        )
    kind = latitudes or Latitudes()
    lat, lon, age = np.broadcast_arrays(
        *(np.atleast_1d(np.asarray(a, dtype=np.float64)) for a in (lat_deg, lon_deg, age_ma))
    )
    _check_points(lat, lon)
    circuit = Circuit(history, relative_to, beyond)
    circuit.at(plate, float(age[0]) if len(age) else 0.0)
    found = circuit.rotations(plate, age)
    bad = np.flatnonzero(found.status != REACHED)
    if len(bad):
        raise circuit.no_answer(plate, float(age[bad[0]]), int(found.status[bad[0]]))
    eta = angular_velocity(found)
    omega = found.rotations.apply(eta)
    asked = unit_vectors(kind.inward(lat), lon)
    then = found.rotations.apply(asked) if at_on == "plate" else asked
    then_lat, then_lon = lat_lon(then)
    east, north = tangent_frame(then)
    moving = cross(omega, then) * radius_km
    v_east, v_north = dot(moving, east), dot(moving, north)
    scaled = _functionals(found, then, (v_east / radius_km, v_north / radius_km), eta, at_on)
    jacobians = sensitivity(found, scaled).mapped(np.eye(2) * radius_km)
    today = (age == 0.0) | (at_on != "plate")
    return Rates(
        lat,
        lon,
        np.where(today, lat, kind.outward(then_lat)),
        np.where(today, lon, then_lon),
        age,
        v_east,
        v_north,
        np.rad2deg(angular_distance(omega, then)),
        jacobians.covariance(history.row_errors()),
        omega,
        jacobians,
        found,
        _ledger(circuit, plate, age),
    )


def _check_points(lat_deg: Floats, lon_deg: Floats) -> None:
    """Raise InputError for the first point that is not on the globe."""
    for name, values, limit in (("lat_deg", lat_deg, 90.0), ("lon_deg", lon_deg, 360.0)):
        bad = np.flatnonzero(~(np.abs(values) <= limit))
        if len(bad):
            raise InputError(
                f"point {bad[0]}: {name} = {values[bad[0]]:g}: must lie in -{limit:g}..{limit:g}"
            )


def average_rates(
    history: History,
    plate: str,
    relative_to: str,
    lat_deg: ArrayLike,
    lon_deg: ArrayLike,
    older_ma: float,
    younger_ma: float,
    at_on: str = "plate",
    latitudes: Latitudes | None = None,
    radius_km: float = EARTH_RADIUS_KM,
    beyond: str = "refuse",
) -> Rates:
    """Mean velocities of `plate` at points (degrees) between two ages (Ma).

    The stage `S = R(t1) R(t2)^-1` over its time, `w = log(S) / (t2 - t1)`, in the partner's coordinates: at
    today's point of the plate half way along the stage, or with `at_on = "relative-to"` at the point itself. Rows that both ages use cancel in the errors. Raises
    InputError if the ages are not in order, DomainError where the history has no answer.
    """
    if at_on not in AT_ON:
        raise InputError(f"at_on = {at_on!r}: must be one of {', '.join(AT_ON)}")
    kind = latitudes or Latitudes()
    stage = stage_pole(history, plate, relative_to, older_ma, younger_ma, beyond=beyond)
    lat, lon = np.broadcast_arrays(
        *(np.atleast_1d(np.asarray(a, dtype=np.float64)) for a in (lat_deg, lon_deg))
    )
    span = older_ma - younger_ma
    vector = stage.rotation.as_vectors()
    _check_points(lat, lon)
    then = unit_vectors(kind.inward(lat), lon)
    if at_on == "plate":
        older = Circuit(history, relative_to, beyond).at(plate, older_ma).rotations
        then = stage.rotation.power(0.5).apply(older.apply(then))
    omega = np.broadcast_to(vector / span, then.shape)
    east, north = tangent_frame(then)
    moving = cross(omega, then) * radius_km
    covariance = np.full((len(lat), 2, 2), np.nan)
    if stage.covariance is not None:
        jacobian = np.linalg.inv(so3.right_jacobian(vector)) / span
        of_omega = jacobian @ stage.covariance @ jacobian.T
        components = np.stack([north, -east], axis=-2) * radius_km
        covariance = components @ of_omega @ np.swapaxes(components, -1, -2)
    then_lat, then_lon = lat_lon(then)
    return Rates(
        lat,
        lon,
        kind.outward(then_lat),
        then_lon,
        np.full(lat.shape, 0.5 * (older_ma + younger_ma)),
        dot(moving, east),
        dot(moving, north),
        np.rad2deg(angular_distance(omega, then)),
        covariance,
        omega,
        ledger=stage.ledger,
    )


def _ledger(circuit: Circuit, plate: str, ages: Floats) -> Ledger:
    """The chain behind rates at each of the ages, once."""
    found = circuit.rotations(plate, np.unique(ages))
    return Ledger.of(found, found.sensitivity(), just_younger=True)


def _functionals(
    found: CircuitRotations, then: Floats, speed: tuple[Floats, Floats], eta: Floats, at_on: str
) -> list[Functional]:
    """How the velocity's east and north components (rad/Myr) move with the chain's errors.

    A point of the plate is carried along by the error u: its direction turns with it, less what the
    local north turns by (tan lat times the step to the east). A point fixed in the partner's
    coordinates feels only the change of omega, `A (u x eta + d_eta)`.
    """
    east, north = tangent_frame(then)
    back = found.rotations.inverse()
    own_east, own_north = back.apply(east), back.apply(north)
    if at_on == "relative-to":
        return [
            Functional(cross(eta, own_north), own_north),
            Functional(-cross(eta, own_east), -own_east),
        ]
    level = np.hypot(then[..., 0], then[..., 1])
    tangent = np.divide(then[..., 2], level, out=np.zeros_like(level), where=level > 0.0)
    turning = tangent[..., np.newaxis] * own_north - back.apply(then)
    v_east, v_north = (v[..., np.newaxis] for v in speed)
    return [Functional(v_north * turning, own_north), Functional(-v_east * turning, -own_east)]


def rates_from_pole(
    pole_lat_deg: float,
    pole_lon_deg: float,
    rate_deg_per_myr: float,
    lat_deg: ArrayLike,
    lon_deg: ArrayLike,
    latitudes: Latitudes | None = None,
    radius_km: float = EARTH_RADIUS_KM,
) -> Rates:
    """Velocities at points (degrees) about a pole (degrees), anticlockwise positive (deg/Myr).

    v = omega R sin(delta), as the vector product omega x r.
    """
    kind = latitudes or Latitudes()
    lat, lon = np.broadcast_arrays(
        *(np.atleast_1d(np.asarray(a, dtype=np.float64)) for a in (lat_deg, lon_deg))
    )
    _check_points(lat, lon)
    then = unit_vectors(kind.inward(lat), lon)
    axis = unit_vectors(kind.inward(pole_lat_deg), pole_lon_deg)
    omega = np.broadcast_to(axis * np.deg2rad(rate_deg_per_myr), then.shape)
    east, north = tangent_frame(then)
    moving = cross(omega, then) * radius_km
    pole = axis if rate_deg_per_myr >= 0.0 else -axis
    return Rates(
        lat,
        lon,
        lat,
        lon,
        np.zeros(lat.shape),
        dot(moving, east),
        dot(moving, north),
        np.rad2deg(angular_distance(np.broadcast_to(pole, then.shape), then)),
        np.full((*lat.shape, 2, 2), np.nan),
        omega,
    )
