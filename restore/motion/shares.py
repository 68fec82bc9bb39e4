"""Which part of new crust the first plate of a pair keeps: always the same, or stage by stage."""

from __future__ import annotations

import os
from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np

from restore.errors import InputError
from restore.files.columns import read_columns
from restore.geometry.sphere import Floats


@dataclass(frozen=True, eq=False)
class Shares:
    """Shares `(k,)` in [0, 1] of the first plate, between a younger and an older age each, Ma.

    Raises InputError for a share outside [0, 1] and for stages that overlap or are not in order of age.
    """

    younger_ma: Floats
    older_ma: Floats
    share: Floats
    source: str = "share"

    def __post_init__(self) -> None:
        for value in self.share:
            if not 0.0 <= value <= 1.0:
                raise InputError(
                    f"{self.source} = {value:g}: the part of new crust that the first plate keeps lies in 0..1"
                )
        ordered = np.all(self.older_ma > self.younger_ma)
        if not (ordered and np.all(self.younger_ma[1:] >= self.older_ma[:-1])):
            raise InputError(
                f"{self.source}: stages must not overlap and rise in age, each younger_ma below its older_ma"
            )

    @classmethod
    def constant(cls, share: float) -> Shares:
        """One share at all ages."""
        return cls(np.array([0.0]), np.array([np.inf]), np.array([float(share)]))

    @classmethod
    def of(cls, share: float | Shares | Sequence[Sequence[float]]) -> Shares:
        """From a number, or from rows of (younger_ma, older_ma, share)."""
        if isinstance(share, Shares):
            return share
        if isinstance(share, (int, float)):
            return cls.constant(share)
        columns = np.array(sorted(tuple(row) for row in share), dtype=np.float64).reshape(-1, 3).T
        return cls(*columns)

    @classmethod
    def read(cls, path: str | os.PathLike[str]) -> Shares:
        """From a table `younger_ma, older_ma, share`; raises TableError or InputError."""
        names = ("younger_ma", "older_ma", "share")
        numbers = read_columns(path, names, required=names).numbers
        order = np.argsort(numbers["younger_ma"], kind="stable")
        younger, older, share = (numbers[name][order] for name in names)
        return cls(younger, older, share, f"{os.fspath(path)}: share")

    def cuts(self) -> Floats:
        """The ages at which the share may change, Ma."""
        ages = np.unique(np.concatenate([self.younger_ma, self.older_ma]))
        finite: Floats = ages[np.isfinite(ages)]
        return finite

    def at(self, ages: Floats) -> Floats:
        """The shares at ages inside stages; NaN where the table says nothing."""
        number = np.searchsorted(self.younger_ma, ages, side="right") - 1
        safe = np.maximum(number, 0)
        if not len(self.share):
            return np.full(np.shape(ages), np.nan)
        covered = (number >= 0) & (ages <= self.older_ma[safe])
        return np.where(covered, self.share[safe], np.nan)

    def check_covers(self, younger_ma: float, older_ma: float) -> None:
        """Raise InputError if the stages leave out any age between two, Ma."""
        edges = np.unique(np.concatenate([[younger_ma, older_ma], self.cuts()]))
        edges = edges[(edges >= younger_ma) & (edges <= older_ma)]
        middles = 0.5 * (edges[1:] + edges[:-1])
        bare = np.flatnonzero(np.isnan(self.at(middles)))
        if len(bare):
            raise InputError(
                f"{self.source}: says nothing for {edges[bare[0]]:g}..{edges[bare[0] + 1]:g} Ma; the stages"
                f" must cover {younger_ma:g}..{older_ma:g} Ma"
            )

    def words(self) -> str | list[list[float]]:
        """As a result's provenance says them."""
        if len(self.share) == 1 and np.isinf(self.older_ma[0]):
            return f"{self.share[0]:g}"
        rows: list[list[float]] = np.stack([self.younger_ma, self.older_ma, self.share], axis=-1).tolist()
        return rows
