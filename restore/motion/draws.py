"""Monte Carlo answers for restored points, where the ellipse of the linear form is too rough."""

from __future__ import annotations

import functools
from dataclasses import dataclass, replace

import numpy as np
from numpy.typing import NDArray

from restore.geometry.sphere import (
    Floats,
    angular_distance,
    destination,
    lat_lon,
    unit_vectors,
    wrap_longitude,
)
from restore.history.circuit import Circuit
from restore.history.drawn import check_count, drawn_rotations
from restore.motion.points import Points, move_own

MOST_AT_ONCE = 4_000_000
QUANTILES = (0.025, 0.5, 0.975)


@dataclass(frozen=True)
class Draws:
    """How many draws, and the seed that makes them repeatable."""

    count: int
    seed: int = 1

    def __post_init__(self) -> None:
        check_count(self.count)


@functools.lru_cache(maxsize=1)
def _drawn_circuits(circuit: Circuit, draws: Draws) -> list[Circuit]:
    quaternions = drawn_rotations(circuit.history, draws.count, draws.seed)
    return [circuit.with_rows(rows) for rows in quaternions]


def drawn_columns(
    circuit: Circuit,
    points: Points,
    ages: Floats,
    ranges: tuple[Floats, Floats] | None,
    draws: Draws,
    numbers: NDArray[np.int64],
    radius_km: float,
) -> dict[str, Floats]:
    """Summaries (n,) of the drawn positions of points at ages (n,), Ma.

    `ranges`: youngest and oldest age of those points (NaN for the others) whose age is drawn evenly
    between the two. `numbers` (n,): a number of each point's own, which seeds its draws, so
    that they depend on nothing else. The columns: the mean position, the radius about it
    that holds 95 % of the draws, the 2.5, 50 and 97.5 % quantiles of latitude and of longitude (in
    [-180, 180), counted about the mean). NaN where a row's error is not known.
    """
    count = len(ages)
    size = max(1, MOST_AT_ONCE // draws.count)
    parts = []
    for at in range(0, count, size):
        some = slice(at, at + size)
        cut = None if ranges is None else (ranges[0][some], ranges[1][some])
        drawn = _positions(circuit, _part(points, some), ages[some], cut, draws, numbers[some])
        parts.append(_summary(drawn, points, radius_km))
    if not parts:
        parts = [_summary(np.zeros((draws.count, 0, 3)), points, radius_km)]
    columns = {name: np.concatenate([part[name] for part in parts]) for name in parts[0]}
    known = ~np.isnan(move_own(circuit, points, ages, errors=True).spread.east)  # type: ignore[union-attr]
    return {name: np.where(known, values, np.nan) for name, values in columns.items()}


def _part(points: Points, some: slice) -> Points:
    def cut(values: Floats | None) -> Floats | None:
        return None if values is None else values[some]

    return replace(
        points,
        lat_deg=points.lat_deg[some],
        lon_deg=points.lon_deg[some],
        codes=points.codes[some],
        position_sigma=cut(points.position_sigma),
        age_sigma=cut(points.age_sigma),
    )


def _positions(
    circuit: Circuit,
    points: Points,
    ages: Floats,
    ranges: tuple[Floats, Floats] | None,
    draws: Draws,
    numbers: NDArray[np.int64],
) -> Floats:
    """Unit vectors (draws, n, 3) of the drawn positions."""
    uniform, normal, steps = _site_draws(draws, numbers)
    drawn_ages = np.broadcast_to(ages, (draws.count, len(ages)))
    if points.age_sigma is not None:
        drawn_ages = np.maximum(drawn_ages + normal * np.nan_to_num(points.age_sigma), 0.0)
    if ranges is not None:
        within = ranges[0] + uniform * (ranges[1] - ranges[0])
        drawn_ages = np.where(np.isnan(ranges[0]), drawn_ages, within)
    start = points.vectors(slice(None))
    positions = np.full((draws.count, len(ages), 3), np.nan)
    for number, drawn in enumerate(_drawn_circuits(circuit, draws)):
        chain, _, used = drawn.find(points.codes, drawn_ages[number])
        origin = start
        if points.position_sigma is not None:
            sigma = np.nan_to_num(points.position_sigma)
            east, north = steps[number, :, 0] * sigma, steps[number, :, 1] * sigma
            heading = np.rad2deg(np.arctan2(east, north))
            origin = destination(start, heading, np.hypot(east, north))
        found = drawn.rotations_by_code(points.codes, used)
        positions[number] = np.where((chain >= 0)[:, None], found.rotations.apply(origin), np.nan)
    return positions


def _site_draws(draws: Draws, numbers: NDArray[np.int64]) -> tuple[Floats, Floats, Floats]:
    """Per draw and site: a uniform and a normal number for its age, two normal ones for its place."""
    uniform = np.empty((draws.count, len(numbers)))
    normal = np.empty((draws.count, len(numbers)))
    steps = np.empty((draws.count, len(numbers), 2))
    for at, number in enumerate(numbers.tolist()):
        generator = np.random.default_rng([draws.seed, 1, number])
        uniform[:, at] = generator.random(draws.count)
        normal[:, at] = generator.standard_normal(draws.count)
        steps[:, at] = generator.standard_normal((draws.count, 2))
    return uniform, normal, steps


def _summary(positions: Floats, points: Points, radius_km: float) -> dict[str, Floats]:
    mean = positions.mean(axis=0)
    mean_lat, mean_lon = lat_lon(mean)
    centre = unit_vectors(mean_lat, mean_lon)
    if positions.shape[1] == 0:
        empty = np.zeros(0)
        positions, mean_lat, mean_lon = np.zeros((1, 0, 3)), empty, empty
    radius = np.quantile(angular_distance(centre, positions), 0.95, axis=0) * radius_km
    lat, lon = lat_lon(positions)
    lats = np.quantile(points.latitudes.outward(lat), QUANTILES, axis=0)
    around = np.quantile(wrap_longitude(lon - mean_lon), QUANTILES, axis=0)
    lons = wrap_longitude(mean_lon + around)
    return {
        "draws_mean_lat_deg": points.latitudes.outward(mean_lat),
        "draws_mean_lon_deg": mean_lon,
        "draws_radius_95_km": radius,
        "draws_south_deg": lats[0],
        "draws_middle_lat_deg": lats[1],
        "draws_north_deg": lats[2],
        "draws_west_deg": lons[0],
        "draws_middle_lon_deg": lons[1],
        "draws_east_deg": lons[2],
    }
