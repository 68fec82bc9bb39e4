"""Links: every pair's stages as flat arrays, and the kernels that compose them along a chain.

A stage lies between two neighbouring rows of one pair. All stages of all pairs stand one after the
other, so that a lookup is one `searchsorted` and one gather.
"""

from __future__ import annotations

from collections.abc import Iterator, Sequence
from dataclasses import dataclass
from typing import NamedTuple

import numpy as np
from numpy.typing import NDArray

from restore.geometry import so3
from restore.geometry.sphere import Floats
from restore.history.store import History

Ints = NDArray[np.int64]


class Link(NamedTuple):
    """One pair on a chain; `forward`: from its plate to its partner, else the other way."""

    pair: int
    forward: bool


Chain = tuple[Link, ...]


@dataclass(frozen=True, eq=False)
class Pair:
    """All rows of one (plate, relative_to) at one rank, with the ages between which they hold."""

    plate: str
    relative_to: str
    rank: int
    ages: Floats
    rows: Ints
    join_within_myr: float
    held_from_ma: float
    held_to_ma: float

    @property
    def youngest_ma(self) -> float:
        """Age from which the pair holds: its youngest row, 0 where it is known from the present."""
        return self.held_from_ma

    @property
    def oldest_ma(self) -> float:
        """Age to which the pair holds: its oldest row, or the end of a joined gap."""
        return self.held_to_ma


def pairs_of(history: History) -> list[Pair]:
    """The pairs of a history in order of first appearance; row -1 is an implied zero row."""
    rows = history.rows
    members: dict[tuple[str, str, int], list[int]] = {}
    for number in range(len(rows)):
        rank = history.tables[int(rows.table[number])].rank
        members.setdefault((rows.plate[number], rows.relative_to[number], rank), []).append(number)
    pairs = []
    for (plate, relative_to, rank), numbers in members.items():
        order = sorted(numbers, key=lambda n: float(rows.age_ma[n]))
        tables = [history.tables[int(rows.table[n])] for n in order]
        if rows.age_ma[order[0]] > 0.0 and tables[0].from_present:
            order.insert(0, -1)
        ages = np.array([0.0 if n < 0 else rows.age_ma[n] for n in order])
        join = max(table.join_within_myr for table in tables)
        numbers_ = np.array(order, dtype=np.int64)
        start = max(float(ages[0]), *(table.valid_from_ma for table in tables))
        end = min(float(ages[-1]), *(table.valid_to_ma for table in tables))
        if start <= end:
            pairs.append(Pair(plate, relative_to, rank, ages, numbers_, join, start, end))
    return pairs


@dataclass(frozen=True, eq=False)
class Stages:
    """Stages of all pairs, by stage number.

    `start_ma`, `length_myr` (infinite for a pair of one row), `half` (half the stage angle,
    radians), `start` and `side` (4, stages): quaternions of the arc; `axis` (3, stages): unit vector
    of the stage in the plate's coordinates; `younger`, `older`: row numbers, -1 for an implied zero
    row. `first`: first stage of each pair; `ages`: each pair's row ages.
    """

    start_ma: Floats
    length_myr: Floats
    half: Floats
    start: Floats
    side: Floats
    axis: Floats
    younger: Ints
    older: Ints
    first: Ints
    ages: tuple[Floats, ...]

    @classmethod
    def of(cls, rows: Floats, pairs: Sequence[Pair]) -> Stages:
        """All stages of `pairs`, computed once, from the quaternions (rows, 4) of a history's rows."""
        quaternions = np.concatenate([rows, so3.IDENTITY[None]])
        younger, older, start_ma, lengths, first = [], [], [], [], []
        count = 0
        for pair in pairs:
            first.append(count)
            if len(pair.ages) == 1:
                younger.append(pair.rows)
                older.append(pair.rows)
                start_ma.append(pair.ages)
                lengths.append(np.full(1, np.inf))
            else:
                younger.append(pair.rows[:-1])
                older.append(pair.rows[1:])
                start_ma.append(pair.ages[:-1])
                lengths.append(np.diff(pair.ages))
            count += len(younger[-1])
        rows_younger = np.concatenate(younger) if younger else np.zeros(0, np.int64)
        rows_older = np.concatenate(older) if older else np.zeros(0, np.int64)
        between = so3.arc(quaternions[rows_younger], quaternions[rows_older])
        axis = so3.multiply(so3.conjugate(between.start), between.side)[..., 1:]
        return cls(
            np.concatenate(start_ma) if start_ma else np.zeros(0),
            np.concatenate(lengths) if lengths else np.zeros(0),
            between.half,
            np.ascontiguousarray(between.start.T),
            np.ascontiguousarray(between.side.T),
            np.ascontiguousarray(axis.T),
            rows_younger,
            rows_older,
            np.array(first, dtype=np.int64),
            tuple(pair.ages for pair in pairs),
        )

    def find(self, pair: int, ages: Floats, just_younger: bool = False) -> Ints:
        """The stage of a pair in which each age lies; at a row's age the stage that begins there,
        or with `just_younger` the one that ends there.
        """
        inner = self.ages[pair][1:-1]
        found = np.searchsorted(inner, ages, side="left" if just_younger else "right")
        found += self.first[pair]
        return found


class Step(NamedTuple):
    """One link of a chain at each of n ages: what the kernels need of it.

    `stage` (n,), `turned` (n,): half-angle f*w along the arc; `rotation` (n, 4): of the link, in
    the direction of the chain.
    """

    link: Link
    stage: Ints
    fraction: Floats
    rotation: Floats


def steps_along(stages: Stages, chain: Chain, ages: Floats, just_younger: bool = False) -> Iterator[Step]:
    """The links of a chain at ages (n,), Ma, from the plate outwards.

    `just_younger` picks, at a row's age, the stage just younger: its velocity is the rate there.
    """
    for link in chain:
        stage = stages.find(link.pair, ages, just_younger)
        # a quotient, so that the fraction at the older row's exact age is exactly 1
        fraction = (ages - stages.start_ma.take(stage)) / stages.length_myr.take(stage)
        turned = fraction * stages.half.take(stage)
        cos, sin = np.cos(turned), np.sin(turned)
        rotation = np.moveaxis(np.empty((4, len(ages))), 0, -1)
        for i in range(4):
            component = rotation[..., i]
            np.multiply(cos, stages.start[i].take(stage), out=component)
            component += sin * stages.side[i].take(stage)
            if i and not link.forward:
                np.negative(component, out=component)
        yield Step(link, stage, fraction, rotation)


def compose(stages: Stages, chain: Chain, ages: Floats) -> Floats:
    """Quaternions (n, 4) of a chain at ages (n,), Ma: today's position to the one in the frame."""
    total: Floats | None = None
    for step in steps_along(stages, chain, ages):
        total = step.rotation if total is None else so3.multiply(step.rotation, total)
    if total is None:
        return np.broadcast_to(so3.IDENTITY, (len(ages), 4))
    return total


class PulledRows(NamedTuple):
    """What one row's error means to each covector: `c . u = ... + pulled . u_row`."""

    rows: Ints
    pulled: tuple[Floats, ...]


class PulledVelocity(NamedTuple):
    """The rate of change of each `c . u` with age, per Myr, due to one link's stage."""

    per_myr: tuple[Floats, ...]


def pull_back(
    stages: Stages, steps: Sequence[Step], covectors: Sequence[Floats]
) -> Iterator[tuple[PulledRows, PulledRows, PulledVelocity]]:
    """Follow covectors (n, 3) from the plate along the chain down to the rows.

    A result's error is `c . u`, with u the small rotation of the whole chain in the plate's
    coordinates. Of a composition AB, `u = u_B + B^T u_A`, so c passes on as `B c`; of an inverse,
    `u = -A u_A`; of a stage, `u = (I - G) u_younger + G u_older` (see `so3.stage_weights`).
    """
    current = [np.asarray(c) for c in covectors]
    for step in steps:
        passed = [so3.rotate(step.rotation, c) for c in current]
        own = current if step.link.forward else [-c for c in passed]
        half = stages.half.take(step.stage)
        axis = np.moveaxis(stages.axis.take(step.stage, axis=1), 0, -1)
        weights = so3.stage_weights(step.fraction, half)
        older = tuple(so3.pull_back_stage(c, axis, weights) for c in own)
        younger = tuple(c - o for c, o in zip(own, older, strict=True))
        myr = stages.length_myr.take(step.stage)
        speed = np.where(np.isinf(myr), np.nan, 2.0 * half / myr)
        velocity = tuple(
            speed * (c[..., 0] * axis[..., 0] + c[..., 1] * axis[..., 1] + c[..., 2] * axis[..., 2])
            for c in own
        )
        yield (
            PulledRows(stages.younger.take(step.stage), younger),
            PulledRows(stages.older.take(step.stage), older),
            PulledVelocity(velocity),
        )
        current = passed
