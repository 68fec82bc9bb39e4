"""Points moved back through time, many at once: the hot path under sites, lines and grids.

Items that share a chain go through the kernels together, in blocks that fit the cache. Every item
is computed by the same sums whatever else is in its block, so results do not depend on the order of
rows, the size of chunks or the number of threads.
"""

from __future__ import annotations

from collections.abc import Callable, Iterable
from concurrent.futures import ThreadPoolExecutor
from dataclasses import dataclass, field
from typing import Any

import numpy as np
from numpy.typing import NDArray

from restore.geometry import so3
from restore.geometry.latitudes import Latitudes
from restore.geometry.sphere import Floats, lat_lon, tangent_frame, unit_vectors, wrap_longitude
from restore.geometry.uncertain import Ellipse, confidence_factor, ellipse, welch_satterthwaite
from restore.history import links
from restore.history.circuit import BLOCK, REACHED, Circuit
from restore.history.links import Chain, Ints


@dataclass(eq=False)
class Spread:
    """Variances in the tangent plane at restored points, rad^2: east, north and their covariance.

    `squares_by_dof`: sum over rows of (variance)^2 / nu, for the degrees of freedom.
    """

    east: Floats
    north: Floats
    cov: Floats
    squares_by_dof: Floats

    @classmethod
    def unknown(cls, shape: tuple[int, ...]) -> Spread:
        """NaN everywhere."""
        return cls(*(np.full(shape, np.nan) for _ in range(4)))

    def ellipse(self, radius_km: float) -> tuple[Ellipse, Floats]:
        """The 95 % ellipses, and the degrees of freedom behind them (infinite where all is known)."""
        dof = welch_satterthwaite(self.east + self.north, self.squares_by_dof)
        return ellipse(self.east, self.north, self.cov, confidence_factor(dof), radius_km), dof


@dataclass(frozen=True, eq=False)
class Moved:
    """Restored points: degrees `(...)`, longitude in [-180, 180); NaN where `status` is not REACHED.

    `ages`: the ages used (with `beyond = "hold"` the held one). `spread` only if errors were asked.
    """

    lat_deg: Floats
    lon_deg: Floats
    status: NDArray[np.int8]
    ages: Floats
    spread: Spread | None = None


@dataclass(frozen=True, eq=False)
class Points:
    """Points of today on plates: degrees and plate numbers of a Circuit, all `(n,)`.

    `latitudes` says what the degrees mean; `position_sigma` (n,), radians, and `age_sigma` (n,),
    Myr, are the points' own errors, NaN counting as none.
    """

    lat_deg: Floats
    lon_deg: Floats
    codes: Ints
    latitudes: Latitudes = field(default_factory=Latitudes)
    position_sigma: Floats | None = None
    age_sigma: Floats | None = None

    def vectors(self, items: NDArray[np.int64] | slice) -> Floats:
        """Unit vectors of some of the points."""
        return unit_vectors(self.latitudes.inward(self.lat_deg[items]), self.lon_deg[items])


def _run(task: Callable[..., None], jobs: Iterable[tuple[object, ...]], threads: int) -> None:
    if threads <= 1:
        for job in jobs:
            task(*job)
        return
    with ThreadPoolExecutor(threads) as pool:
        for future in [pool.submit(task, *job) for job in jobs]:
            future.result()


def _write(out: Moved, where: Any, points: Points, moved: Floats) -> None:
    lat, lon = lat_lon(moved)
    out.lat_deg[where] = points.latitudes.outward(lat)
    out.lon_deg[where] = lon


def move_own(
    circuit: Circuit, points: Points, ages: Floats, errors: bool = False, threads: int = 1
) -> Moved:
    """Each point to its own age (n,), Ma. At 0 Ma a point keeps its digits."""
    chain, status, used = circuit.find(points.codes, ages)
    count = len(chain)
    spread = Spread.unknown((count,)) if errors else None
    out = Moved(np.full(count, np.nan), np.full(count, np.nan), status, np.array(used), spread)
    table = _CovarianceTable(circuit) if errors else None

    def task(its_chain: Chain, items: NDArray[np.int64]) -> None:
        start = points.vectors(items)
        if table is None:
            turn = links.compose(circuit.stages, its_chain, used[items])
            _write(out, items, points, so3.rotate(turn, start))
        else:
            _move_with_errors(circuit, points, its_chain, items, start, out, table)

    _run(task, circuit.blocks(chain), threads)
    _keep_today(out, points, used == 0.0)
    return out


def move_common(
    circuit: Circuit, points: Points, ages: Floats, errors: bool = False, threads: int = 1
) -> Moved:
    """Every point to each of the ages (k,), Ma; results `(n, k)`. At 0 Ma points keep their digits."""
    count, steps = len(points.codes), len(ages)
    unique, plate = np.unique(points.codes, return_inverse=True)
    grid_codes, grid_ages = np.repeat(unique, steps), np.tile(ages, len(unique))
    chain, status, used = circuit.find(grid_codes, grid_ages)
    turns = np.full((len(chain), 4), np.nan)
    for its_chain, items in circuit.blocks(chain):
        turns[items] = links.compose(circuit.stages, its_chain, used[items])
    matrices = so3.matrices(turns).reshape(len(unique), steps, 3, 3)
    by_plate = _RowsByPlate(circuit, chain, used, turns, len(unique), steps) if errors else None
    flat = [np.full((steps, count), np.nan).T for _ in range(2)]
    spread = Spread(*(np.full((steps, count), np.nan).T for _ in range(4))) if errors else None
    status_of = np.ascontiguousarray(status.reshape(len(unique), steps).T)
    used_of = used.reshape(len(unique), steps)
    out = Moved(flat[0], flat[1], status_of[:, plate].T, used_of[plate], spread)

    def task(number: int, items: NDArray[np.int64]) -> None:
        start = points.vectors(items)
        run = slice(int(items[0]), int(items[-1]) + 1)
        where = run if run.stop - run.start == len(items) else items
        moved = np.moveaxis(np.empty((3, len(items))), 0, -1)
        for k in range(steps):
            if status_of[k, number] != REACHED:
                continue
            turn = matrices[number, k]
            for i in range(3):
                component = moved[..., i]
                np.multiply(start[..., 0], turn[i, 0], out=component)
                component += start[..., 1] * turn[i, 1]
                component += start[..., 2] * turn[i, 2]
            _write(out, (where, k), points, moved)
            if by_plate is not None:
                by_plate.spread(out, points, number, k, items, moved)

    jobs = (
        (number, items[at : at + BLOCK])
        for number, items in _members(plate, len(unique))
        for at in range(0, len(items), BLOCK)
    )
    _run(task, jobs, threads)
    _keep_today(out, points, out.ages == 0.0)
    return out


def _members(plate: NDArray[np.int64], count: int) -> Iterable[tuple[int, NDArray[np.int64]]]:
    order = np.argsort(plate.astype(np.int32), kind="stable")
    ends = np.cumsum(np.bincount(plate, minlength=count))
    for number in range(count):
        yield number, order[(ends[number - 1] if number else 0) : ends[number]]


def _keep_today(out: Moved, points: Points, today: NDArray[np.bool_]) -> None:
    """At 0 Ma a point is where it is, to the last digit."""
    today = today & (out.status == REACHED)
    if not np.any(today):
        return
    rows = np.nonzero(today)[0]
    out.lat_deg[today] = points.lat_deg[rows]
    out.lon_deg[today] = wrap_longitude(points.lon_deg[rows])


class _CovarianceTable:
    """The rows' covariances as six runs, with a last entry of zeros for an implied zero row."""

    def __init__(self, circuit: Circuit) -> None:
        errors = circuit.history.row_errors()
        pairs = ((0, 0), (0, 1), (0, 2), (1, 1), (1, 2), (2, 2))
        covariance = np.concatenate([errors.covariance, np.zeros((1, 3, 3))])
        self.six = [np.ascontiguousarray(covariance[:, i, j]) for i, j in pairs]
        self.unknown = np.append(~errors.known, False)
        self.per_dof = np.append(1.0 / errors.dof, 0.0)
        self.some_unknown = bool(self.unknown.any())
        self.some_estimated = bool(self.per_dof.any())

    def products(self, rows: Ints, a: Floats, b: Floats) -> tuple[Floats, Floats, Floats]:
        """A C a, b C b and a C b for covectors (n, 3) and the covariance of each one's row."""
        xx, xy, xz, yy, yz, zz = (column.take(rows, mode="wrap") for column in self.six)
        ax, ay, az = a[..., 0], a[..., 1], a[..., 2]
        bx, by, bz = b[..., 0], b[..., 1], b[..., 2]
        px, py, pz = xx * ax + xy * ay + xz * az, xy * ax + yy * ay + yz * az, xz * ax + yz * ay + zz * az
        qx, qy, qz = xx * bx + xy * by + xz * bz, xy * bx + yy * by + yz * bz, xz * bx + yz * by + zz * bz
        return ax * px + ay * py + az * pz, bx * qx + by * qy + bz * qz, bx * px + by * py + bz * pz


def _move_with_errors(
    circuit: Circuit,
    points: Points,
    chain: Chain,
    items: NDArray[np.int64],
    start: Floats,
    out: Moved,
    table: _CovarianceTable,
) -> None:
    """One block of points to their own ages, with the variances that rows, site and age bring.

    A point's step is `A (u x x)`; along east that is `u . A^T north`, along north `-u . A^T east`.
    """
    # at a row's age a site's own age error moves it at the rate of the stage just younger
    just_younger = points.age_sigma is not None
    steps = list(links.steps_along(circuit.stages, chain, out.ages[items], just_younger))
    turn = _composed(steps, len(items))
    moved = so3.rotate(turn, start)
    _write(out, items, points, moved)
    east, north = tangent_frame(moved)
    on_east, on_north = so3.rotate_back(turn, north), -so3.rotate_back(turn, east)
    total = [np.zeros(len(items)) for _ in range(4)]
    by_age = [np.zeros(len(items)), np.zeros(len(items))]
    unknown = np.zeros(len(items), dtype=bool)
    pulled = links.pull_back(circuit.stages, steps, (on_east, on_north))
    for step, (younger, older, velocity) in zip(steps, pulled, strict=True):
        for part, idle in ((younger, 1.0), (older, 0.0)):
            terms = table.products(part.rows, *part.pulled)
            for sum_, term in zip(total, terms, strict=False):
                sum_ += term
            if table.some_estimated:
                total[3] += (terms[0] + terms[1]) ** 2 * table.per_dof.take(part.rows, mode="wrap")
            if table.some_unknown:
                unknown |= table.unknown.take(part.rows, mode="wrap") & (step.fraction != idle)
        for sum_, term in zip(by_age, velocity.per_myr, strict=True):
            sum_ += term
    for sum_ in total[:3]:
        sum_[unknown] = np.nan
    _add_own_errors(points, items, total, by_age)
    _store(out, items, total)


def _add_own_errors(
    points: Points, items: NDArray[np.int64], total: list[Floats], by_age: list[Floats]
) -> None:
    """Add the site's position error, and its age sigma times the motion per Myr."""
    if points.age_sigma is not None:
        sigma = np.nan_to_num(points.age_sigma[items])
        # the motion of a pair of one row is not known, which must not matter to a site without sigma
        east, north = (np.where(sigma > 0.0, rate * sigma, 0.0) for rate in by_age)
        total[0] += east * east
        total[1] += north * north
        total[2] += east * north
    if points.position_sigma is not None:
        square = np.nan_to_num(points.position_sigma[items]) ** 2
        total[0] += square
        total[1] += square


def _store(out: Moved, where: Any, total: list[Floats]) -> None:
    assert out.spread is not None
    spread = out.spread
    for target, values in zip(
        (spread.east, spread.north, spread.cov, spread.squares_by_dof), total, strict=True
    ):
        target[where] = values


def _composed(steps: list[links.Step], count: int) -> Floats:
    total: Floats | None = None
    for step in steps:
        total = step.rotation if total is None else so3.multiply(step.rotation, total)
    return np.broadcast_to(so3.IDENTITY, (count, 4)) if total is None else total


class _RowsByPlate:
    """For each plate and age the covariance that each row brings, in the frame's coordinates."""

    def __init__(
        self,
        circuit: Circuit,
        chain: NDArray[np.int32],
        ages: Floats,
        turns: Floats,
        plates: int,
        steps: int,
    ) -> None:
        from restore.geometry.rotations import Rotations
        from restore.history.circuit import CircuitRotations

        codes = np.zeros(len(chain), dtype=np.int64)
        found = CircuitRotations(circuit, codes, ages, chain, chain.astype(np.int8), Rotations(turns))
        sensitivity = found.sensitivity().mapped(so3.matrices(turns))
        errors = circuit.history.row_errors()
        parts = sensitivity.contributions(errors)
        row = np.where(sensitivity.rows >= 0, sensitivity.rows, 0)
        per_dof = 1.0 / errors.dof[row] if len(errors.dof) else np.zeros(row.shape)
        shape = (plates, steps, parts.shape[1])
        self.parts = parts.reshape(*shape, 3, 3)
        self.total = self.parts.sum(axis=2)
        self.per_dof = np.where(sensitivity.rows >= 0, per_dof, 0.0).reshape(shape)

    def spread(
        self,
        out: Moved,
        points: Points,
        number: int,
        k: int,
        items: NDArray[np.int64],
        moved: Floats,
    ) -> None:
        """Variances of points of one plate at one age: along east `n C n`, along north `e C e`."""
        east, north = tangent_frame(moved)
        matrix = self.total[number, k]
        total = [
            _form(matrix, north, north),
            _form(matrix, east, east),
            -_form(matrix, north, east),
            np.zeros(len(items)),
        ]
        for part, per_dof in zip(self.parts[number, k], self.per_dof[number, k], strict=True):
            if per_dof > 0.0:
                trace = _form(part, north, north) + _form(part, east, east)
                total[3] += trace**2 * per_dof
        if points.position_sigma is not None:
            square = np.nan_to_num(points.position_sigma[items]) ** 2
            total[0] += square
            total[1] += square
        _store(out, (items, k), total)


def _form(matrix: Floats, a: Floats, b: Floats) -> Floats:
    """A M b for covectors (n, 3) and one matrix, summed in a fixed order."""
    total = np.zeros(len(a))
    for i in range(3):
        for j in range(3):
            total += matrix[i, j] * (a[..., i] * b[..., j])
    return total
