"""Time cut at the ends of all pairs, and in each piece the tree of links that leads to a frame.

Between two cuts the set of pairs that hold does not change, so each plate has one chain there. At a
cut itself the younger piece's links are used, and a pair that only begins there serves plates that
have no other link.
"""

from __future__ import annotations

from collections import deque
from collections.abc import Callable, Sequence
from dataclasses import dataclass, replace

import numpy as np
from numpy.typing import NDArray

from restore.geometry.sphere import Floats
from restore.history.links import Chain, Link, Pair

NO_CHAIN, AMBIGUOUS = -1, -2


@dataclass(frozen=True)
class Conflict:
    """Two ways to the frame that differ: ages of the piece, the two chains from a common plate."""

    younger_ma: float
    older_ma: float
    plate: str
    one: Chain
    other: Chain
    misfit_rad: float


@dataclass(frozen=True, eq=False)
class Pieces:
    """Time in pieces: cut, open piece, cut, ..., numbered so that a lookup is one searchsorted.

    Piece 2i lies between `cuts[i - 1]` and `cuts[i]`, piece 2i + 1 is the age `cuts[i]` itself.
    `chain_of` (plates, pieces): number of the plate's chain, or NO_CHAIN, or AMBIGUOUS. `conflicts`
    are loops that do not close, `closings` those that do.
    """

    cuts: Floats
    chain_of: NDArray[np.int32]
    chains: tuple[Chain, ...]
    conflicts: tuple[Conflict, ...]
    closings: tuple[Conflict, ...]

    def piece(self, ages: Floats) -> NDArray[np.int64]:
        """The piece in which each age lies."""
        right = np.searchsorted(self.cuts, ages, side="left")
        at_cut = np.zeros(ages.shape, dtype=bool)
        inside = right < len(self.cuts)
        at_cut[inside] = self.cuts[right[inside]] == ages[inside]
        return 2 * right + at_cut


def joined(pairs: Sequence[Pair]) -> list[Pair]:
    """Pairs whose plate goes on with another pair after a gap that is short enough to be joined.

    The younger pair is held on, at the velocity of its last stage, to where the older one begins.
    """
    by_plate: dict[str, list[Pair]] = {}
    for pair in pairs:
        by_plate.setdefault(pair.plate, []).append(pair)
    result = []
    for pair in pairs:
        starts = [
            other.youngest_ma
            for other in by_plate[pair.plate]
            if 0.0 < other.youngest_ma - pair.oldest_ma <= max(pair.join_within_myr, other.join_within_myr)
        ]
        covered = any(
            other is not pair and other.youngest_ma <= pair.oldest_ma < other.oldest_ma
            for other in by_plate[pair.plate]
        )
        result.append(replace(pair, held_to_ma=min(starts)) if starts and not covered else pair)
    return result


Misfit = Callable[[Chain, Chain, float, float], float]


def cut_time(
    pairs: Sequence[Pair], plates: Sequence[str], frame: str, misfit: Misfit, tolerance_rad: float
) -> Pieces:
    """Cut time at the pairs' ends and find the chains to `frame` in each piece.

    `misfit(one, other, younger_ma, older_ma)`: greatest angle in radians between two chains over
    ages; chains that differ by no more than `tolerance_rad` count as one.
    """
    code = {plate: i for i, plate in enumerate(plates)}
    cuts = np.unique([age for pair in pairs for age in (pair.youngest_ma, pair.oldest_ma)])
    builder = _TreeBuilder(pairs, code, code[frame], misfit, tolerance_rad)
    columns = np.full((len(plates), 2 * len(cuts) + 1), NO_CHAIN, dtype=np.int32)
    before: tuple[int, ...] = ()
    starting: dict[float, list[int]] = {}
    ending: dict[float, list[int]] = {}
    for i, pair in enumerate(pairs):
        starting.setdefault(pair.youngest_ma, []).append(i)
        ending.setdefault(pair.oldest_ma, []).append(i)
    for i, cut in enumerate(cuts):
        older_end = float(cuts[i + 1]) if i + 1 < len(cuts) else float(cut)
        begun = starting.get(float(cut), [])
        columns[:, 2 * i + 1] = builder.tree(before, tuple(begun), float(cut), float(cut))
        ended = set(ending.get(float(cut), []))
        before = tuple(sorted((set(before) | set(begun)) - ended))
        columns[:, 2 * i + 2] = builder.tree(before, (), float(cut), older_end)
    columns[:, 0] = builder.tree((), (), 0.0, 0.0)
    return Pieces(cuts, columns, tuple(builder.chains), tuple(builder.conflicts), tuple(builder.closings))


class _TreeBuilder:
    """Builds the tree of links to the frame for one piece after another, sharing equal chains."""

    def __init__(
        self,
        pairs: Sequence[Pair],
        code: dict[str, int],
        root: int,
        misfit: Misfit,
        tolerance_rad: float,
    ) -> None:
        self.pairs = pairs
        self.names = list(code)
        self.ends = [(code[pair.plate], code[pair.relative_to]) for pair in pairs]
        self.root = root
        self.misfit = misfit
        self.tolerance = tolerance_rad
        self.chains: list[Chain] = []
        self.number: dict[Chain, int] = {}
        self.conflicts: list[Conflict] = []
        self.closings: list[Conflict] = []

    def _chain_number(self, chain: Chain) -> int:
        if chain not in self.number:
            self.number[chain] = len(self.chains)
            self.chains.append(chain)
        return self.number[chain]

    def tree(
        self, active: tuple[int, ...], begun: tuple[int, ...], younger: float, older: float
    ) -> NDArray[np.int32]:
        """Chain numbers (plates,) with the pairs in `active`; those in `begun` only fill in."""
        result = np.full(len(self.names), NO_CHAIN, dtype=np.int32)
        used, spare = self._spanning(active, begun)
        neighbours: dict[int, list[tuple[int, int, bool]]] = {}
        for pair in used:
            plate, partner = self.ends[pair]
            neighbours.setdefault(partner, []).append((plate, pair, True))
            neighbours.setdefault(plate, []).append((partner, pair, False))
        chain_to: dict[int, Chain] = {self.root: ()}
        queue = deque([self.root])
        while queue:
            here = queue.popleft()
            for there, pair, forward in neighbours.get(here, ()):
                if there not in chain_to:
                    chain_to[there] = (Link(pair, forward), *chain_to[here])
                    queue.append(there)
        doubtful = self._doubtful_pairs(spare, chain_to, younger, older)
        for plate, chain in chain_to.items():
            if doubtful and any(link.pair in doubtful for link in chain):
                result[plate] = AMBIGUOUS
            else:
                result[plate] = self._chain_number(chain)
        return result

    def _spanning(self, active: tuple[int, ...], begun: tuple[int, ...]) -> tuple[list[int], list[int]]:
        """Pairs of a spanning forest, lowest rank first (Kruskal 1956), and the ones left over."""
        group = list(range(len(self.names)))

        def leader(node: int) -> int:
            while group[node] != node:
                group[node] = group[group[node]]
                node = group[node]
            return node

        used, spare = [], []
        for late, members in ((False, active), (True, begun)):
            for pair in sorted(members, key=lambda p: (self.pairs[p].rank, p)):
                one, other = (leader(end) for end in self.ends[pair])
                if one != other:
                    group[one] = other
                    used.append(pair)
                elif not late:
                    spare.append(pair)
        return used, spare

    def _doubtful_pairs(
        self, spare: list[int], chain_to: dict[int, Chain], younger: float, older: float
    ) -> set[int]:
        """Pairs on loops that do not close and that no rank decides."""
        doubtful: set[int] = set()
        for pair in spare:
            plate, partner = self.ends[pair]
            if plate not in chain_to or partner not in chain_to:
                continue
            other: Chain = (Link(pair, True), *chain_to[partner])
            one = chain_to[plate]
            while one and other and one[-1] == other[-1]:
                one, other = one[:-1], other[:-1]
            loop = {link.pair for link in (*one, *other)}
            if all(self.pairs[p].rank < self.pairs[pair].rank for p in loop if p != pair):
                continue
            size = self.misfit(one, other, younger, older)
            closes = size <= self.tolerance
            loops = self.closings if closes else self.conflicts
            loops.append(Conflict(younger, older, self.names[plate], one, other, size))
            if not closes:
                doubtful |= loop
        return doubtful
