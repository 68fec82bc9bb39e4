"""A small program of its own for Monte Carlo: chains of rows, drawn and recomposed with scipy.

Every row's rotation is perturbed on the right by u ~ N(0, C), the interpolation between rows and
the chain are built again for each draw, and the result is looked at where it lies. It shares no
formula with the package under test: rotations, logarithms and exponentials are scipy's.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np
from published.support import RADIUS_KM, east_north, lat_lon
from scipy.spatial.transform import Rotation

from restore.history.rows import Row


@dataclass(frozen=True)
class Link:
    """One pair on a chain: rows by age, the first at 0 Ma; `forward` from its plate to its partner.

    `vectors` (rows, 3): rotation vectors in rad; `covariances` (rows, 3, 3): rad^2, of the right
    perturbation; `dofs`: of estimated kappas.
    """

    plate: str
    relative_to: str
    forward: bool
    ages: np.ndarray
    vectors: np.ndarray
    covariances: np.ndarray
    dofs: np.ndarray

    def rows(self) -> list[Row]:
        """The rows as they are handed to the package."""
        rows = []
        for age, vector, covariance, dof in zip(
            self.ages, self.vectors, self.covariances, self.dofs, strict=True
        ):
            angle = float(np.rad2deg(np.linalg.norm(vector)))
            pole = lat_lon(vector) if angle else (float("nan"), float("nan"))
            rows.append(
                Row(
                    self.plate,
                    self.relative_to,
                    float(age),
                    *pole,
                    angle,
                    covariance,
                    dof=float(dof),
                )
            )
        return rows


def random_covariance(rng: np.random.Generator, sigma_km: tuple[float, float]) -> np.ndarray:
    """A covariance in rad^2 with axes in any direction, their sigmas within a range in km."""
    axes = Rotation.random(rng=rng).as_matrix()
    sigmas = rng.uniform(*sigma_km, 3) / RADIUS_KM
    return axes @ np.diag(sigmas**2) @ axes.T


def random_link(
    rng: np.random.Generator,
    pair: tuple[str, str],
    forward: bool,
    ages: Sequence[float],
    turn_deg: tuple[float, float] = (5.0, 40.0),
    sigma_km: tuple[float, float] = (2.0, 7.0),
) -> Link:
    """A pair that turns by some degrees about a new axis between each two rows."""
    rotation = Rotation.identity()
    vectors, covariances = [np.zeros(3)], [np.zeros((3, 3))]
    for _ in ages[1:]:
        axis = rng.standard_normal(3)
        axis *= np.deg2rad(rng.uniform(*turn_deg)) / np.linalg.norm(axis)
        rotation = rotation * Rotation.from_rotvec(axis)
        vectors.append(rotation.as_rotvec())
        covariances.append(random_covariance(rng, sigma_km))
    return Link(
        *pair,
        forward,
        np.array(ages, dtype=float),
        np.array(vectors),
        np.array(covariances),
        np.full(len(ages), np.inf),
    )


def random_chain(
    rng: np.random.Generator,
    directions: Sequence[bool],
    ages: Sequence[Sequence[float]],
    **kind: object,
) -> list[Link]:
    """Links from plate `p0` to the frame, one per direction; False: listed the other way."""
    chain = []
    for at, forward in enumerate(directions):
        ends = (f"p{at}", f"p{at + 1}")
        pair = ends if forward else ends[::-1]
        chain.append(random_link(rng, pair, forward, ages[at % len(ages)], **kind))  # type: ignore[arg-type]
    return chain


def rows_of(chain: Sequence[Link]) -> list[Row]:
    """All rows of a chain."""
    return [row for link in chain for row in link.rows()]


Draws = list[list[np.ndarray | None]]
"""For each link and each of its rows the errors u (draws, 3), rad; None for a row without error."""


def draw(rng: np.random.Generator, chain: Sequence[Link], count: int) -> Draws:
    """Errors of all rows of a chain, u ~ N(0, C)."""
    return [
        [
            rng.standard_normal((count, 3)) @ np.linalg.cholesky(covariance).T
            if np.any(covariance)
            else None
            for covariance in link.covariances
        ]
        for link in chain
    ]


def product(later: Rotation, earlier: Rotation) -> Rotation:
    """`earlier` first, `later` after it: Hamilton's product, ten times as fast as scipy's own."""
    xl, yl, zl, wl = np.moveaxis(later.as_quat(), -1, 0)
    xe, ye, ze, we = np.moveaxis(earlier.as_quat(), -1, 0)
    x = wl * xe + xl * we + yl * ze - zl * ye
    y = wl * ye - xl * ze + yl * we + zl * xe
    z = wl * ze + xl * ye - yl * xe + zl * we
    w = wl * we - xl * xe - yl * ye - zl * ze
    return Rotation.from_quat(np.stack([x, y, z, w], axis=-1))


def recompose(
    chain: Sequence[Link],
    ages: float | np.ndarray,
    drawn: Draws | None = None,
    stage_of: float | None = None,
) -> Rotation:
    """The chain's rotations at an age, or at one age per draw; without draws the mean rotation.

    `stage_of`: the age whose stage is used in every link (the youngest stage that holds it); past
    the oldest row the last stage goes on.
    """
    total = Rotation.identity()
    within = float(np.mean(ages)) if stage_of is None else stage_of
    for at, link in enumerate(chain):
        older = int(np.clip(np.searchsorted(link.ages, within, side="left"), 1, len(link.ages) - 1))
        ends = []
        for row in (older - 1, older):
            end, error = Rotation.from_rotvec(link.vectors[row]), drawn and drawn[at][row]
            ends.append(end if error is None else product(end, Rotation.from_rotvec(error)))
        fraction = (ages - link.ages[older - 1]) / (link.ages[older] - link.ages[older - 1])
        stage = product(ends[0].inv(), ends[1]).as_rotvec()
        turn = Rotation.from_rotvec(np.multiply(np.expand_dims(fraction, -1), stage))
        here = product(ends[0], turn)
        total = product(here if link.forward else here.inv(), total)
    return total


def tangent_steps(centre: np.ndarray, places: np.ndarray) -> np.ndarray:
    """Steps (draws, 2) to the east and north, rad, in the tangent plane at a place."""
    return places @ np.array(east_north(*lat_lon(centre))).T


def inside(steps: np.ndarray, major: float, minor: float, azimuth_deg: float) -> float:
    """The part of steps (east, north) that falls in an ellipse of the same unit."""
    turn = np.deg2rad(azimuth_deg)
    along = steps @ np.array([np.sin(turn), np.cos(turn)])
    across = steps @ np.array([np.cos(turn), -np.sin(turn)])
    return float(np.mean((along / major) ** 2 + (across / minor) ** 2 <= 1.0))


def scatter(samples: np.ndarray) -> np.ndarray:
    """The second moments of samples (draws, k) about their expected value, zero."""
    return samples.T @ samples / len(samples)


def misfit(matrix: np.ndarray, sampled: np.ndarray) -> float:
    """Relative difference of two covariances (Frobenius norm)."""
    return float(np.linalg.norm(matrix - sampled) / np.linalg.norm(sampled))
