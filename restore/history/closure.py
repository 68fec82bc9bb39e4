"""Closure of a loop of plates: the rotation that is left over, and whether errors explain it."""

from __future__ import annotations

import copy
from collections.abc import Sequence
from dataclasses import dataclass, replace
from itertools import pairwise
from typing import Any

import numpy as np
from numpy.typing import ArrayLike

from restore.errors import InputError, OutsideHistoryError
from restore.geometry.rotations import Rotations
from restore.geometry.sphere import EARTH_RADIUS_KM, Floats, lat_lon
from restore.geometry.uncertain import significance
from restore.history import links
from restore.history.circuit import Circuit, CircuitRotations
from restore.history.links import Chain, Link
from restore.history.store import History
from restore.history.velocity import Functional, angular_velocity, sensitivity


@dataclass(frozen=True, eq=False)
class Closure:
    """The misfit of a loop at ages `(n,)`, Ma: the rotations left over `(n,)`, their covariances
    (n, 3, 3), rad^2, NaN where not known, and degrees of freedom.
    """

    loop: tuple[str, ...]
    ages: Floats
    misfit: Rotations
    covariance: Floats
    dof: Floats
    found: CircuitRotations

    def columns(self) -> dict[str, Any]:
        """As columns; `probability` that errors of rows alone leave such a misfit, NaN if not known."""
        lat, lon, angle = self.misfit.as_poles()
        vectors = self.misfit.as_vectors()
        tests = [significance(*one) for one in zip(vectors, self.covariance, self.dof, strict=True)]
        return {
            "loop": [" > ".join(self.loop)] * len(self.ages),
            "age_ma": self.ages,
            "pole_lat_deg": lat,
            "pole_lon_deg": lon,
            "angle_deg": angle,
            "greatest_km": np.deg2rad(angle) * EARTH_RADIUS_KM,
            "statistic": np.array([test.statistic for test in tests]),
            "probability": np.array([test.probability for test in tests]),
        }


def closure(history: History, plates: Sequence[str], ages: ArrayLike) -> Closure:
    """Go round a loop of plates by their own pairs and see what rotation is left, at ages (Ma).

    `plates`: at least three, in order; the last is tied to the first again. Raises InputError if two
    neighbours are no pair of the history, OutsideHistoryError where a pair does not hold.
    """
    names = tuple(plates)
    if names and names[0] == names[-1]:
        names = names[:-1]
    if len(set(names)) < 3 or len(set(names)) != len(names):
        raise InputError(f"loop {','.join(plates)}: name at least three different plates")
    circuit = Circuit(history, names[0])
    loop = (*names, names[0])
    chain = tuple(_link(circuit, one, other) for one, other in pairwise(loop))
    age = np.atleast_1d(np.asarray(ages, dtype=np.float64))
    for link in chain:
        pair = circuit.pairs[link.pair]
        outside = (age < pair.youngest_ma) | (age > pair.oldest_ma)
        if np.any(outside):
            raise OutsideHistoryError(
                f"{pair.plate} relative to {pair.relative_to} at {age[outside][0]:g} Ma: the pair holds at"
                f" {pair.youngest_ma:g}..{pair.oldest_ma:g} Ma"
            )
    found = along(circuit, chain, age)
    jacobians, errors = found.sensitivity(), history.row_errors()
    return Closure(
        loop, age, found.rotations, jacobians.covariance(errors), jacobians.effective_dof(errors), found
    )


def velocity_closure(history: History, plates: Sequence[str], age_ma: float) -> dict[str, Any]:
    """The angular velocity left over round a loop of plates at an age (Ma), and its significance.

    Sum of the pairs' angular velocities in coordinates of the first plate: components (rad/Myr), its
    pole and rate (deg/Myr), the greatest speed on the globe (mm/yr), and the probability that errors
    of rows alone leave it (Gordon et al. 1987, Geophys. Res. Lett. 14, 587-590: three plates). Raises
    as `closure` does.
    """
    found = closure(history, plates, age_ma).found
    eta = angular_velocity(found)[0]
    nothing = np.zeros((1, 3))
    parts = [Functional(nothing, axis[np.newaxis]) for axis in np.eye(3)]
    jacobians = sensitivity(found, parts)
    errors = history.row_errors()
    covariance = jacobians.covariance(errors)[0]
    test = significance(eta, covariance, float(jacobians.effective_dof(errors)[0]))
    lat, lon = lat_lon(eta)
    rate = float(np.linalg.norm(eta))
    return {
        "loop": [*closure(history, plates, age_ma).loop],
        "age_ma": age_ma,
        "omega_rad_per_myr": eta.tolist(),
        "pole_lat_deg": float(lat),
        "pole_lon_deg": float(lon),
        "rate_deg_per_myr": float(np.rad2deg(rate)),
        "greatest_mm_yr": rate * EARTH_RADIUS_KM,
        "statistic": test.statistic,
        "probability": test.probability,
    }


def _link(circuit: Circuit, one: str, other: str) -> Link:
    """The pair of lowest rank between two plates, in the direction of the loop."""
    best: Link | None = None
    for number, pair in enumerate(circuit.pairs):
        for forward, ends in (
            (True, (pair.plate, pair.relative_to)),
            (False, (pair.relative_to, pair.plate)),
        ):
            if ends == (one, other) and (best is None or pair.rank < circuit.pairs[best.pair].rank):
                best = Link(number, forward)
    if best is None:
        raise InputError(f"loop: {one} and {other} are no pair of this history")
    return best


def along(circuit: Circuit, chain: Chain, ages: Floats) -> CircuitRotations:
    """The rotations along any chain of pairs, one that leads back to its start included."""
    wider = copy.copy(circuit)
    wider.pieces = replace(circuit.pieces, chains=(*circuit.pieces.chains, chain))
    numbers = np.full(len(ages), len(circuit.pieces.chains), dtype=np.int32)
    turns = Rotations(links.compose(circuit.stages, chain, ages))
    status = np.zeros(len(ages), dtype=np.int8)
    return CircuitRotations(wider, np.zeros(len(ages), dtype=np.int64), ages, numbers, status, turns)
