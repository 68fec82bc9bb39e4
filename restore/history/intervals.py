"""Time cut at the ends of all pairs, and in each piece the tree of links that leads to a frame.

Between two cuts the set of pairs that hold does not change, so each plate has one chain there. At a
cut itself the younger piece's links are used, and a pair that only begins there serves plates that
have no other link.
"""

from __future__ import annotations

from collections.abc import Callable, Iterable, Sequence
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
        """The piece in which each age (Ma) lies."""
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


Misfits = Callable[[Chain, Chain, Floats, Floats], Floats]
MOST_AHEAD = 512


def cut_time(
    pairs: Sequence[Pair], plates: Sequence[str], frame: str, misfits: Misfits, tolerance_rad: float
) -> Pieces:
    """Cut time at the pairs' ends and find the chains to `frame` in each piece.

    `misfits(one, other, younger_ma, older_ma)`: greatest angles in radians between two chains over
    spans of age (n,); chains that differ by no more than `tolerance_rad` count as one.
    """
    code = {plate: i for i, plate in enumerate(plates)}
    cuts = np.unique([age for pair in pairs for age in (pair.youngest_ma, pair.oldest_ma)])
    builder = _ChainBuilder(pairs, code, code[frame], _Loops(cuts, misfits), tolerance_rad)
    rows = np.full((2 * len(cuts) + 1, len(plates)), NO_CHAIN, dtype=np.int32)
    starting: dict[float, list[int]] = {}
    ending: dict[float, list[int]] = {}
    for i, pair in enumerate(pairs):
        starting.setdefault(pair.youngest_ma, []).append(i)
        ending.setdefault(pair.oldest_ma, []).append(i)
    for i, cut in enumerate(cuts):
        begun, ended = starting.get(float(cut), []), ending.get(float(cut), [])
        builder.forest.fill_in(begun)
        rows[2 * i + 1] = builder.numbers(2 * i + 1)
        builder.forest.change(begun, ended)
        rows[2 * i + 2] = builder.numbers(2 * i + 2)
    rows[0, code[frame]] = builder.number_of(())
    columns = np.ascontiguousarray(rows.T)
    return Pieces(cuts, columns, tuple(builder.chains), tuple(builder.conflicts), tuple(builder.closings))


class _Forest:
    """The spanning forest of lowest rank over the pairs that hold, followed from piece to piece.

    Pairs are ordered by rank, then by number; with a strict order there is one such forest (Kruskal
    1956), whatever the order of the changes, so that only what changes costs time. The frame is at
    the top of its tree. `above`: node -> (pair, node above it); `moved`: nodes that were hung
    elsewhere since this was last emptied; `spare`: pairs that hold and are not needed.
    """

    def __init__(self, ends: list[tuple[int, int]], ranks: list[int], nodes: int, root: int) -> None:
        self.ends = ends
        self.root = root
        self.order = [(0, rank, pair) for pair, rank in enumerate(ranks)]
        self.above: list[tuple[int, int] | None] = [None] * nodes
        self.below: list[set[int]] = [set() for _ in range(nodes)]
        self.moved: set[int] = set()
        self.spare: set[int] = set()

    def fill_in(self, begun: list[int]) -> None:
        """Pairs that only begin here serve nodes that no other pair ties."""
        for pair in begun:
            self.order[pair] = (1, *self.order[pair][1:])
        for pair in sorted(begun, key=self.order.__getitem__):
            one, other = self.ends[pair]
            if self._top(one) != self._top(other):
                self._tie(pair)

    def change(self, begun: list[int], ended: list[int]) -> None:
        """From now on pairs that began hold like any other, and those that ended do not."""
        for pair in begun:
            self.order[pair] = (0, *self.order[pair][1:])
        for pair in begun:
            if self.lower_end(pair) is None:
                self._insert(pair)
        for pair in ended:
            self._remove(pair)

    def lower_end(self, pair: int) -> int | None:
        """The node that a pair of the forest ties to the one above it; None if it is not needed."""
        for node, other in (self.ends[pair], self.ends[pair][::-1]):
            if self.above[node] == (pair, other):
                return node
        return None

    def under(self, nodes: Iterable[int]) -> set[int]:
        """Nodes with all that hang under them."""
        found: set[int] = set()
        waiting = list(nodes)
        while waiting:
            node = waiting.pop()
            if node not in found:
                found.add(node)
                waiting.extend(self.below[node])
        return found

    def _top(self, node: int) -> int:
        while (above := self.above[node]) is not None:
            node = above[1]
        return node

    def _insert(self, pair: int) -> None:
        one, other = self.ends[pair]
        if self._top(one) != self._top(other):
            self._tie(pair)
            return
        last = max(self._between(one, other), key=self.order.__getitem__)
        if self.order[pair] < self.order[last]:
            self._cut(last)
            self._tie(pair)
            self.spare.add(last)
        else:
            self.spare.add(pair)

    def _remove(self, pair: int) -> None:
        self.spare.discard(pair)
        if self.lower_end(pair) is None:
            return
        self._cut(pair)
        bridges = [p for p in self.spare if len({self._top(node) for node in self.ends[p]}) == 2]
        if bridges:
            best = min(bridges, key=self.order.__getitem__)
            self.spare.remove(best)
            self._tie(best)

    def _between(self, one: int, other: int) -> list[int]:
        """The pairs on the way between two nodes of one tree."""
        ways: list[list[int]] = [[], []]
        for way, node in zip(ways, (one, other), strict=True):
            while (above := self.above[node]) is not None:
                way.append(above[0])
                node = above[1]
        while ways[0] and ways[1] and ways[0][-1] == ways[1][-1]:
            for way in ways:
                way.pop()
        return ways[0] + ways[1]

    def _tie(self, pair: int) -> None:
        """Hang the tree of one end, turned over, under the other end."""
        upper, lower = self.ends[pair]
        if self._top(lower) == self.root:
            upper, lower = lower, upper
        here, node = (pair, upper), lower
        while True:
            before = self.above[node]
            if before is not None:
                self.below[before[1]].remove(node)
            self.above[node] = here
            self.below[here[1]].add(node)
            self.moved.add(node)
            if before is None:
                return
            here, node = (before[0], node), before[1]

    def _cut(self, pair: int) -> None:
        node = self.lower_end(pair)
        assert node is not None
        above = self.above[node]
        assert above is not None
        self.below[above[1]].remove(node)
        self.above[node] = None
        self.moved.add(node)


class _Loops:
    """The misfits of loops by piece, asked for some pieces ahead, for most loops go on."""

    def __init__(self, cuts: Floats, misfits: Misfits) -> None:
        # piece 2i + 1 is the age cuts[i], piece 2i + 2 goes on to the next cut; none is asked for piece 0
        self.younger = np.zeros(2 * len(cuts) + 1)
        self.younger[1::2] = self.younger[2::2] = cuts
        self.older = np.append(self.younger[1:], self.younger[-1:])
        self.older[1::2] = cuts
        self.misfits = misfits
        self.known: dict[tuple[Chain, Chain], tuple[int, Floats]] = {}

    def misfit(self, one: Chain, other: Chain, piece: int) -> tuple[float, float, float]:
        """The ages of a piece and the misfit of two chains in it, radians."""
        first, sizes = self.known.get((one, other), (piece, np.zeros(0)))
        if not first <= piece < first + len(sizes):
            ahead = slice(piece, piece + min(max(4, 2 * len(sizes)), MOST_AHEAD))
            first, sizes = piece, self.misfits(one, other, self.younger[ahead], self.older[ahead])
            self.known[one, other] = first, sizes
        return float(self.younger[piece]), float(self.older[piece]), float(sizes[piece - first])


class _ChainBuilder:
    """Numbers the chains to the frame in one piece after another, sharing equal ones."""

    def __init__(
        self,
        pairs: Sequence[Pair],
        code: dict[str, int],
        root: int,
        loops: _Loops,
        tolerance_rad: float,
    ) -> None:
        self.pairs = pairs
        self.names = list(code)
        self.ends = [(code[pair.plate], code[pair.relative_to]) for pair in pairs]
        self.forest = _Forest(self.ends, [pair.rank for pair in pairs], len(code), root)
        self.forest.moved.add(root)
        self.loops = loops
        self.tolerance = tolerance_rad
        self.chains: list[Chain] = []
        self.known: dict[Chain, int] = {}
        self.chain_to: list[Chain | None] = [None] * len(code)
        self.column = np.full(len(code), NO_CHAIN, dtype=np.int32)
        self.waiting: set[int] = set()
        self.conflicts: list[Conflict] = []
        self.closings: list[Conflict] = []

    def number_of(self, chain: Chain) -> int:
        """The number of a chain, a new one if it has none."""
        if chain not in self.known:
            self.known[chain] = len(self.chains)
            self.chains.append(chain)
        return self.known[chain]

    def numbers(self, piece: int) -> NDArray[np.int32]:
        """Chain numbers (plates,) in a piece, by its number."""
        changed = self._follow()
        hidden: set[int] = set()
        if self.forest.spare:
            lower = [self.forest.lower_end(p) for p in self._doubtful_pairs(piece)]
            hidden = self.forest.under(node for node in lower if node is not None)
        todo = changed | self.waiting
        self.waiting = {node for node in todo & hidden if self.chain_to[node] is not None}
        fresh = []
        for node in todo:
            chain = self.chain_to[node]
            if chain is None or node in hidden:
                self.column[node] = NO_CHAIN
            elif chain in self.known:
                self.column[node] = self.known[chain]
            else:
                fresh.append((len(chain), self._place(chain), node, chain))
        # numbered from the frame outwards, so that the numbers do not depend on what changed
        for *_, node, chain in sorted(fresh):
            self.column[node] = self.number_of(chain)
        if not hidden:
            return self.column
        shown = self.column.copy()
        shown[list(hidden)] = AMBIGUOUS
        return shown

    def _place(self, chain: Chain) -> list[tuple[int, int, int]]:
        return [self.forest.order[link.pair] for link in reversed(chain)]

    def _follow(self) -> set[int]:
        """Bring the chains up to date with the forest; returns the nodes whose chain may be new."""
        above = self.forest.above
        changed = self.forest.under(self.forest.moved)
        self.forest.moved.clear()
        for start in changed:
            over = above[start]
            if over is not None and over[1] in changed:
                continue
            waiting = [start]
            while waiting:
                node = waiting.pop()
                self.chain_to[node] = self._chain(node)
                waiting.extend(self.forest.below[node])
        return changed

    def _chain(self, node: int) -> Chain | None:
        over = self.forest.above[node]
        if over is None:
            return () if node == self.forest.root else None
        pair, partner = over
        rest = self.chain_to[partner]
        return None if rest is None else (Link(pair, self.ends[pair][0] == node), *rest)

    def _doubtful_pairs(self, piece: int) -> set[int]:
        """Pairs on loops that do not close and that no rank decides."""
        doubtful: set[int] = set()
        for pair in sorted(self.forest.spare, key=self.forest.order.__getitem__):
            plate, partner = self.ends[pair]
            one, rest = self.chain_to[plate], self.chain_to[partner]
            if one is None or rest is None:
                continue
            other: Chain = (Link(pair, True), *rest)
            while one and other and one[-1] == other[-1]:
                one, other = one[:-1], other[:-1]
            loop = {link.pair for link in (*one, *other)}
            if all(self.pairs[p].rank < self.pairs[pair].rank for p in loop if p != pair):
                continue
            younger, older, size = self.loops.misfit(one, other, piece)
            closes = size <= self.tolerance
            loops = self.closings if closes else self.conflicts
            loops.append(Conflict(younger, older, self.names[plate], one, other, size))
            if not closes:
                doubtful |= loop
        return doubtful
