"""Half stages: how the crust of one arm moved away from the ridge, as products of fractional stages.

With R(t) the rotation of the first plate A relative to the second plate B, and beta the part of new
crust that B keeps, the crust of age t on B is `P(t) b0`, `P = S_n^beta ... S_1^beta`,
`S_k = R(t_k) R(t_(k-1))^-1`; on A it is `R(t)^-1 P(t) b0`. Stages are cut at the ages of the rows.
Where several links make the path its stage poles wander between two rows; there each interval is
halved until the arm moves less than a tolerance. Ages that are asked never cut a stage.
"""

from __future__ import annotations

import copy
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from restore.errors import InputError
from restore.geometry import so3
from restore.geometry.sphere import EARTH_RADIUS_KM, Floats
from restore.history.circuit import GAP, OUTSIDE, REACHED, Circuit
from restore.history.links import Ints
from restore.history.tracked import Tracked
from restore.motion.shares import Shares

MOST_STEPS = 1 << 14
EXTENDED_MYR = 10.0


@dataclass(frozen=True, eq=False)
class Arms:
    """At ages `(n,)`: `arm` P(t), `turn` R(t), the unbroken `span` of ages each lies in, `status`."""

    arm: Tracked
    turn: Tracked
    span: Ints
    status: NDArray[np.int8]


class HalfStages:
    """The mesh of half stages of `plate` (A) and the Circuit's frame (B), to beyond `oldest_ma`.

    `tolerance_m`: how far, in metres, the end of the oldest arm of the history may move when every step
    of a composed path is halved once more. `errors`: whether the rows' errors are tracked. Raises
    InputError for a tolerance that is not above 0 or is out of reach, DomainError (its leaves) where
    no chain joins the two plates.
    """

    def __init__(
        self,
        circuit: Circuit,
        plate: str,
        shares: Shares,
        oldest_ma: float,
        tolerance_m: float = 10.0,
        radius_km: float = EARTH_RADIUS_KM,
        errors: bool = False,
    ) -> None:
        if not tolerance_m > 0.0:
            raise InputError(f"tolerance_m = {tolerance_m:g}: must be above 0, in metres")
        if plate == circuit.frame:
            raise InputError(f"between {plate!r} and itself nothing spreads; name two plates")
        self.circuit, self.plate, self.shares = circuit, plate, shares
        self.tracks_errors = errors
        self._code = circuit.codes([plate])
        self.edges = self._edges(oldest_ma)
        self._mesh(tolerance_m / 1000.0 / radius_km)

    def _edges(self, oldest_ma: float) -> Floats:
        """Ages at which stages are cut: rows, changes of partner, changes of share."""
        covered = self.circuit.covered(self.plate)
        if not covered:
            raise self.circuit.no_answer(self.plate, oldest_ma, OUTSIDE)
        youngest, oldest = covered[0][0], covered[-1][1]
        self._oldest_ma = oldest
        inner = self.circuit.row_ages(self.plate, youngest, oldest)
        rows = self._without_idle(np.unique(np.concatenate([[youngest], inner, [oldest]])))
        self._intervals = max(len(rows) - 1, 1)
        if self.circuit.beyond != "refuse" and oldest_ma > oldest:
            more = np.arange(oldest, oldest_ma + EXTENDED_MYR, EXTENDED_MYR)[1:]
            rows = np.concatenate([rows, more])
        cuts = self.shares.cuts()
        edges = np.union1d(rows, cuts[(cuts > rows[0]) & (cuts < rows[-1])])
        last = min(int(np.searchsorted(edges, oldest_ma)), len(edges) - 1)
        return edges[: last + 1]

    def _without_idle(self, ages: Floats) -> Floats:
        """Ages without those at which only other plates' chains change."""
        middles = 0.5 * (ages[1:] + ages[:-1])
        chain, _, _ = self.circuit.find(np.repeat(self._code, len(middles)), middles)
        keep = np.ones(len(ages), dtype=bool)
        for k in range(1, len(ages) - 1):
            if chain[k - 1] == chain[k] >= 0:
                links = self.circuit.pieces.chains[chain[k]]
                keep[k] = any(ages[k] in self.circuit.stages.ages[link.pair] for link in links)
        kept: Floats = ages[keep]
        return kept

    def _mesh(self, tolerance: float) -> None:
        edges = self.edges
        middles = 0.5 * (edges[1:] + edges[:-1])
        chain, status, _ = self.circuit.find(np.repeat(self._code, len(middles)), middles)
        at_edge, _, _ = self.circuit.find(np.repeat(self._code, len(edges)), edges)
        # where a table of shares says nothing no arm is asked for
        betas = np.nan_to_num(1.0 - self.shares.at(middles))
        lengths = [len(self.circuit.pieces.chains[c]) if c >= 0 else 0 for c in chain]
        # at a change of partner the older chain begins just after; its step, if any, is a stage of its own
        starts = np.where(at_edge[:-1] == chain, edges[:-1], np.nextafter(edges[:-1], np.inf))
        composed = (np.array(lengths, dtype=np.int64) > 1) & (status == REACHED)
        pieces = np.ones(len(middles), dtype=np.int64)
        pieces[composed] = self._refined(
            starts[composed], edges[1:][composed], betas[composed], tolerance / self._intervals
        )
        nodes, step_beta, step_status = [edges[:1]], [np.zeros(0)], [np.zeros(0, dtype=np.int8)]
        for i, count in enumerate(pieces.tolist()):
            ages = np.linspace(starts[i], edges[i + 1], count + 1)
            ages = ages if starts[i] > edges[i] else ages[1:]
            nodes.append(ages)
            step_beta.append(np.full(len(ages), betas[i]))
            step_status.append(np.full(len(ages), status[i], dtype=np.int8))
        self.nodes = np.concatenate(nodes)
        self._beta = np.concatenate(step_beta)
        found = self.circuit.rotations(self.plate, self.nodes)
        good = found.status == REACHED
        sound = (np.concatenate(step_status) == REACHED) & good[1:] & good[:-1]
        self._span = np.concatenate([[0], np.cumsum(~sound)])
        self.turns = Tracked.of(found, self.tracks_errors)
        steps = (self.turns[1:] @ self.turns[:-1].inverse()).power(self._beta)
        quaternions = np.where(sound[:, np.newaxis], steps.quaternions, so3.IDENTITY)
        jacobians = np.where(sound[:, None, None, None], steps.jacobians, 0.0)
        self.arms = Tracked(quaternions, steps.rows, jacobians).products()

    def _refined(self, younger: Floats, older: Floats, betas: Floats, tolerance: float) -> Ints:
        """How many steps each composed interval needs."""
        needed = np.ones(len(younger), dtype=np.int64)
        open_, before, count = np.arange(len(younger)), None, 1
        while len(open_):
            ends = _interval_arms(
                self.circuit, self._code, younger[open_], older[open_], betas[open_], count
            )
            if before is not None:
                moved = so3.angle(so3.multiply(so3.conjugate(before), ends))
                needed[open_] = count
                # a NaN comes from a chain that cannot be followed, which more steps do not mend
                still = moved > tolerance
                open_, ends = open_[still], ends[still]
            before, count = ends, 2 * count
            if count > MOST_STEPS and len(open_):
                raise InputError(
                    f"tolerance of {tolerance * self._intervals:.3g} rad is not reached between"
                    f" {younger[open_[0]]:g} and {older[open_[0]]:g} Ma with {MOST_STEPS} steps; ask for a larger one"
                )
        return needed

    def without_errors(self) -> HalfStages:
        """The same stages, their errors no longer tracked."""
        plain = copy.copy(self)
        plain.tracks_errors = False
        plain.turns = self.turns.without_rows()
        plain.arms = self.arms.without_rows()
        return plain

    def at(self, ages: Floats) -> Arms:
        """The half stages up to each age `(n,)`, Ma, counted from the youngest age of its span."""
        found = self.circuit.rotations(self.plate, ages)
        turn = Tracked.of(found, self.tracks_errors)
        before = np.clip(np.searchsorted(self.nodes, ages, side="right") - 1, 0, len(self.nodes) - 1)
        beta = np.append(self._beta, 0.0)[before]
        arm = (turn @ self.turns[before].inverse()).power(beta) @ self.arms[before]
        return Arms(arm, turn, self._span[before], found.status)

    def reach(self, start_ma: float, first: bool, ages: Floats) -> Reach:
        """Where a start point of age `start_ma` (Ma) went by each age `(n,)`, on either plate.

        `first`: the start point is given in coordinates of the first plate, else of the second.
        """
        origin, there = self.at(np.array([start_ma])), self.at(ages)
        on_second = there.arm @ origin.arm.inverse()
        if first:
            on_second = on_second @ origin.turn
        on_first = there.turn.inverse() @ on_second
        status = np.where(there.status == REACHED, origin.status[0], there.status)
        apart = (status == REACHED) & (there.span != origin.span[0])
        status = np.where(apart, GAP, status).astype(np.int8)
        return Reach((on_first, on_second), status)


@dataclass(frozen=True, eq=False)
class Reach:
    """From a start point to the crust of each age `(n,)`: on the first plate and on the second."""

    on: tuple[Tracked, Tracked]
    status: NDArray[np.int8]


def _interval_arms(
    circuit: Circuit, code: Ints, younger: Floats, older: Floats, betas: Floats, count: int
) -> Floats:
    """The products `(k, 4)` over k intervals, each cut into `count` steps (a power of two)."""
    fraction = np.arange(count + 1) / count
    ages = younger[:, None] + fraction * (older - younger)[:, None]
    ages[:, -1] = older
    turns = circuit.rotations_by_code(np.broadcast_to(code[:1], ages.shape), ages).rotations.quaternions
    stages = so3.logarithm(so3.multiply(turns[:, 1:], so3.conjugate(turns[:, :-1])))
    steps = so3.exponential(betas[:, None, None] * stages)
    while steps.shape[1] > 1:
        steps = so3.multiply(steps[:, 1::2], steps[:, ::2])
    product: Floats = steps[:, 0]
    return product
