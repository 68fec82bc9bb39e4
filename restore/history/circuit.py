"""Circuit: the chain that ties each plate to a frame at each age, and the rotations along it."""

from __future__ import annotations

import copy
from collections.abc import Iterator, Sequence
from dataclasses import dataclass

import numpy as np
from numpy.typing import ArrayLike, NDArray

from restore.errors import (
    DomainError,
    GapError,
    InputError,
    OutsideHistoryError,
    TwoChainsError,
    UnknownPlateError,
)
from restore.findings import did_you_mean
from restore.geometry.rotations import Rotations
from restore.geometry.sphere import EARTH_RADIUS_KM, Floats
from restore.geometry.uncertain import RowErrors, Sensitivity
from restore.history import links
from restore.history.intervals import AMBIGUOUS, NO_CHAIN, Pieces, cut_time, joined
from restore.history.links import Chain, Ints, Step
from restore.history.store import History

REACHED, GAP, OUTSIDE, TWO_CHAINS, NO_PLATE = range(5)
SAYS = ("restored", "gap in history", "outside the history", "two chains", "no plate here")
BEYOND = ("refuse", "hold", "extend")
TOLERANCE_KM = 1.0
BLOCK = 8192


class Circuit:
    """The chains of a history to one frame, decided once when it is built.

    `frame`: any label of the history. `beyond`: what happens past the oldest age of a plate's chain:
    `refuse`, `hold` the last rotation, or `extend` the last stage. `mixed_clocks` lets tables on
    several time scales meet, as an audit must. Raises UnknownPlateError for a frame that the history lacks,
    InputError for another `beyond` or for mixed clocks.
    """

    def __init__(
        self, history: History, frame: str, beyond: str = "refuse", mixed_clocks: bool = False
    ) -> None:
        if beyond not in BEYOND:
            raise InputError(f"beyond = {beyond!r}: must be one of {', '.join(BEYOND)}")
        clocks = sorted({table.time_scale for table in history.tables if table.time_scale})
        if len(clocks) > 1 and not mixed_clocks:
            raise InputError(
                f"the history is on {len(clocks)} clocks ({', '.join(clocks)}); restate it to one time scale"
            )
        self.history = history
        self.frame = frame
        self.beyond = beyond
        self.plates = tuple(history.plates())
        self._code = {plate: i for i, plate in enumerate(self.plates)}
        self._check_label(frame, "frame")
        self.pairs = joined(links.pairs_of(history))
        self.stages = links.Stages.of(history.rows.rotations().quaternions, self.pairs)
        tolerance = TOLERANCE_KM / EARTH_RADIUS_KM
        self.pieces: Pieces = cut_time(self.pairs, self.plates, frame, self._misfits, tolerance)
        self._reach_ends()

    def _check_label(self, label: str, role: str = "plate") -> None:
        if label not in self._code:
            hint = did_you_mean(label, self.plates)
            raise UnknownPlateError(f"{role} {label!r} is not in the history; {hint}".rstrip("; "))

    def _misfits(self, one: Chain, other: Chain, younger: Floats, older: Floats) -> Floats:
        """Greatest angles between two chains over the rows' ages in spans from younger to older, radians."""
        rows = np.unique(np.concatenate([self.stages.ages[link.pair] for link in (*one, *other)]))
        begins = np.searchsorted(rows, younger, side="left")
        counts = np.searchsorted(rows, older, side="right") - begins
        starts = np.cumsum(5 + counts) - (5 + counts)
        ages = np.empty(int((5 + counts).sum()))
        inside = np.arange(5)[:, np.newaxis] + starts
        ages[inside] = younger
        long = older > younger
        ages[inside[:, long]] = np.linspace(younger[long], older[long], 5)
        number = np.repeat(np.arange(len(starts)), counts)
        order = np.arange(len(number)) - np.repeat(np.cumsum(counts) - counts, counts)
        ages[starts[number] + 5 + order] = rows[begins[number] + order]
        first, second = (Rotations(links.compose(self.stages, chain, ages)) for chain in (one, other))
        sizes: Floats = np.maximum.reduceat(first.angle_to(second), starts)
        return sizes

    def _reach_ends(self) -> None:
        """For each plate the youngest and oldest piece in which it has a chain."""
        has = self.pieces.chain_of != NO_CHAIN
        count = has.shape[1]
        self._first_piece = np.where(has.any(axis=1), has.argmax(axis=1), count)
        self._last_piece = np.where(has.any(axis=1), count - 1 - has[:, ::-1].argmax(axis=1), -1)

    def with_rows(self, quaternions: Floats) -> Circuit:
        """The same chains with other rotations `(rows, 4)` in the rows, such as drawn ones."""
        other = copy.copy(self)
        other.stages = links.Stages.of(quaternions, self.pairs)
        return other

    def codes(self, plates: Sequence[str] | NDArray[np.object_]) -> Ints:
        """Numbers of plate labels, -1 for a label that the history lacks."""
        return np.array([self._code.get(plate, -1) for plate in plates], dtype=np.int64)

    def oldest_ma(self, plate: str) -> float:
        """The oldest age at which the plate has a chain to the frame, Ma; NaN if it never has."""
        self._check_label(plate)
        last = int(self._last_piece[self._code[plate]])
        return float(self.pieces.cuts[(last - 1) // 2]) if last >= 1 else np.nan

    def oldest_by_code(self, codes: Ints) -> Floats:
        """The oldest age (Ma) of each plate's chain, by number; NaN where it never has one."""
        last = self._last_piece[np.where(codes >= 0, codes, 0)]
        ends = self.pieces.cuts[(np.maximum(last, 1) - 1) // 2] if len(self.pieces.cuts) else np.nan
        return np.where((codes >= 0) & (last >= 1), ends, np.nan)

    def find(self, codes: Ints, ages: Floats) -> tuple[NDArray[np.int32], NDArray[np.int8], Floats]:
        """Chain number, status and the age to use, for plates by number (n,) and ages (n,).

        The chain is -1 where the status is not REACHED. With `beyond = "hold"` the age to use is
        the oldest of the plate's chain where the asked one is beyond it.
        """
        known = codes >= 0
        safe = np.where(known, codes, 0)
        piece = self.pieces.piece(ages)
        used = ages
        if self.beyond != "refuse":
            last = self._last_piece[safe]
            past = (piece > last) & (last >= 0)
            piece = np.where(past, last, piece)
            if self.beyond == "hold":
                ends = self.pieces.cuts[(np.maximum(last, 1) - 1) // 2]
                used = np.where(past, np.minimum(ages, ends), ages)
        chain = self.pieces.chain_of[safe, piece]
        status = np.zeros(chain.shape, dtype=np.int8)
        if np.any(chain < 0) or not np.all(known) or np.any(np.isnan(ages)):
            between = (piece > self._first_piece[safe]) & (piece < self._last_piece[safe])
            status[chain == NO_CHAIN] = OUTSIDE
            status[(chain == NO_CHAIN) & between] = GAP
            status[chain == AMBIGUOUS] = TWO_CHAINS
            status[~known | np.isnan(ages) | (ages < 0.0)] = OUTSIDE
            chain = np.where(status == REACHED, chain, NO_CHAIN)
        return chain, status, used

    def blocks(
        self, chain: NDArray[np.int32], size: int = BLOCK
    ) -> Iterator[tuple[Chain, NDArray[np.int64]]]:
        """Items (numbers) that share a chain, in blocks that fit the cache."""
        if len(chain) == 0:
            return
        small = chain.astype(np.int16) if len(self.pieces.chains) < 32_000 else chain
        order = np.argsort(small, kind="stable")
        starts = np.flatnonzero(np.diff(small[order], prepend=small[order[0]] - 1))
        for start, end in zip(starts, np.append(starts[1:], len(order)), strict=True):
            number = int(chain[order[start]])
            if number >= 0:
                for at in range(int(start), int(end), size):
                    yield self.pieces.chains[number], order[at : min(at + size, int(end))]

    def rotations(
        self, plates: str | Sequence[str] | NDArray[np.object_], ages: ArrayLike
    ) -> CircuitRotations:
        """Rotations from today to each age, of plates and ages (Ma) broadcast together.

        Nothing is raised for a plate or an age without an answer: its rotation is NaN and `status`
        says why (see `SAYS`). `at` raises instead.
        """
        labels = np.asarray(plates, dtype=object)
        unique, inverse = np.unique(labels.astype(str), return_inverse=True)
        codes = self.codes(list(unique))[inverse].reshape(labels.shape)
        return self.rotations_by_code(codes, np.asarray(ages, dtype=np.float64))

    def rotations_by_code(self, codes: Ints, ages: Floats) -> CircuitRotations:
        """As `rotations`, of plates by their numbers (see `codes`)."""
        codes, ages = np.broadcast_arrays(codes, ages)
        shape = codes.shape
        chain, status, used = self.find(codes.ravel(), ages.ravel())
        quaternions = np.full((len(chain), 4), np.nan)
        for its_chain, items in self.blocks(chain):
            quaternions[items] = links.compose(self.stages, its_chain, used[items])
        rotations = Rotations(quaternions.reshape(*shape, 4))
        return CircuitRotations(self, codes.ravel(), used, chain, status, rotations)

    def at(self, plate: str, age_ma: float) -> CircuitRotations:
        """The rotation of one plate at one age.

        Raises UnknownPlateError, OutsideHistoryError, GapError or TwoChainsError.
        """
        self._check_label(plate)
        found = self.rotations(plate, age_ma)
        if found.status[0] != REACHED:
            raise self.no_answer(plate, age_ma, int(found.status[0]))
        return found

    def no_answer(self, plate: str, age_ma: float, status: int) -> DomainError:
        """The error that says why a plate has no rotation at an age."""
        where = f"{plate} relative to {self.frame} at {age_ma:g} Ma"
        if status == TWO_CHAINS:
            for conflict in self.pieces.conflicts:
                if conflict.younger_ma <= age_ma <= conflict.older_ma:
                    return TwoChainsError(
                        f"{where}: two chains from {conflict.plate} differ by up to"
                        f" {conflict.misfit_rad * EARTH_RADIUS_KM:.1f} km:"
                        f" {self.say(conflict.plate, conflict.one)} and"
                        f" {self.say(conflict.plate, conflict.other)}; rank their tables"
                    )
            return TwoChainsError(f"{where}: two chains")
        first = int(self._first_piece[self._code[plate]])
        if first >= self.pieces.chain_of.shape[1]:
            return OutsideHistoryError(
                f"{where}: no chain of pairs leads from {plate} to {self.frame} at any age"
            )
        spans = ", ".join(f"{young:g}..{old:g}" for young, old in self.covered(plate))
        kind = GapError if status == GAP else OutsideHistoryError
        return kind(f"{where}: {SAYS[status]}; the chain holds at {spans} Ma")

    def covered(self, plate: str) -> list[tuple[float, float]]:
        """The spans of age (younger, older), Ma, in which the plate has a chain to the frame."""
        self._check_label(plate)
        has = self.pieces.chain_of[self._code[plate]] != NO_CHAIN
        at_cuts = np.flatnonzero(has[1::2])
        if not len(at_cuts):
            return []
        begins = ~has[2 * at_cuts]
        begins[0] = True
        starts = at_cuts[begins]
        ends = at_cuts[np.append(np.flatnonzero(begins)[1:], len(at_cuts)) - 1]
        cuts = self.pieces.cuts
        return [(float(cuts[i]), float(cuts[j])) for i, j in zip(starts, ends, strict=True)]

    def say(self, plate: str, chain: Chain) -> str:
        """A chain in words: the plates from one end to the other."""
        labels = [plate]
        for link in chain:
            pair = self.pairs[link.pair]
            labels.append(pair.relative_to if link.forward else pair.plate)
        return " > ".join(labels)

    def row_ages(self, plate: str, younger_ma: float, older_ma: float) -> Floats:
        """Ages strictly between two at which the plate's motion changes: rows of its links, cuts."""
        self._check_label(plate)
        code = self._code[plate]
        pieces = self.pieces.piece(np.array([younger_ma, older_ma]))
        ages = [self.pieces.cuts]
        for number in np.unique(self.pieces.chain_of[code, pieces[0] : pieces[1] + 1]):
            if number >= 0:
                ages += [self.stages.ages[link.pair] for link in self.pieces.chains[int(number)]]
        merged = np.unique(np.concatenate(ages))
        inside: Floats = merged[(merged > younger_ma) & (merged < older_ma)]
        return inside


@dataclass(frozen=True, eq=False)
class CircuitRotations:
    """Rotations from a Circuit: the mean, its chain and rows, and the Jacobians of the rows.

    Flat columns (n,): `codes` of plates, `ages` used (Ma), `chain` numbers, `status`. `rotations`
    has the shape that was asked; NaN where `status` is not REACHED.
    """

    circuit: Circuit
    codes: Ints
    ages: Floats
    chain: NDArray[np.int32]
    status: NDArray[np.int8]
    rotations: Rotations

    def steps(self, just_younger: bool = False) -> Iterator[tuple[NDArray[np.int64], list[Step]]]:
        """Items (numbers) that share a chain, in blocks, with the links they go along."""
        stages = self.circuit.stages
        for chain, items in self.circuit.blocks(self.chain):
            yield items, list(links.steps_along(stages, chain, self.ages[items], just_younger))

    def sensitivity(self) -> Sensitivity:
        """Jacobians (n, m, 3, 3) of each rotation by the rows it used, in the plate's coordinates.

        A row with no say (at the exact age of another, or an implied zero row) has the number -1.
        """
        count = len(self.chain)
        longest = max((len(self.circuit.pieces.chains[c]) for c in self.chain if c >= 0), default=0)
        rows = np.full((count, 2 * longest), -1, dtype=np.int64)
        matrices = np.zeros((count, 2 * longest, 3, 3))
        for items, steps in self.steps():
            basis = [np.broadcast_to(e, (len(items), 3)) for e in np.eye(3)]
            pulled = links.pull_back(self.circuit.stages, steps, basis)
            for at, (younger, older, _) in enumerate(pulled):
                for place, part in ((2 * at, younger), (2 * at + 1, older)):
                    matrix = np.stack(part.pulled, axis=-2)
                    used = np.any(matrix != 0.0, axis=(-1, -2))
                    rows[items, place] = np.where(used, part.rows, -1)
                    matrices[items, place] = matrix
        return (
            Sensitivity.combined([Sensitivity(rows, matrices)])
            if longest
            else Sensitivity(np.full((count, 1), -1), np.zeros((count, 1, 3, 3)))
        )

    def covariance(self, errors: RowErrors | None = None) -> Floats:
        """Covariances (n, 3, 3), rad^2, in the plate's coordinates; NaN where a row's is not known."""
        errors = self.circuit.history.row_errors() if errors is None else errors
        covariance = self.sensitivity().covariance(errors)
        return np.where((self.status == REACHED)[:, np.newaxis, np.newaxis], covariance, np.nan)
