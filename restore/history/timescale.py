"""Geomagnetic polarity time scales: the ages of chrons, and restating ages from one to another.

Published scales come with the package (see `SOURCES`); any table `chron,young_ma,old_ma` is read the
same way. Restating changes ages, never rotations.
"""

from __future__ import annotations

import math
import os
import re
from collections.abc import Mapping
from dataclasses import dataclass
from pathlib import Path

import numpy as np
from numpy.typing import ArrayLike, NDArray

from restore.errors import InputError, TableError
from restore.files.delimited import DelimitedReader, Layout, parse_number
from restore.findings import did_you_mean
from restore.geometry.sphere import Floats

LONG_INTERVAL_MYR = 5.0
"""An interval without reversals longer than this dates rows inside it only loosely."""

SOURCES = {
    "ck95": "Cande & Kent 1995, J. Geophys. Res. 100, 6093-6095, Table 2 (read)",
    "gts2004": "Ogg & Smith in Gradstein, Ogg & Smith 2004, A Geologic Time Scale 2004 (read)",
    "gts2012": "Ogg 2012 in Gradstein et al., The Geologic Time Scale 2012 (recalled, not read)",
    "cent94": "Channell, Erba, Nakanishi & Tamaki 1995, SEPM Spec. Publ. 54, 51-63 (read)",
    "kg86": "Kent & Gradstein 1986, The Geology of North America M (read)",
}
_EDGE = re.compile(r"^(?P<chron>[^()]+?)\s*(?:\((?P<edge>y|o|[01]|0?\.[0-9]+)\))?$")


@dataclass(frozen=True)
class Chron:
    """A chron as a row names it: its name, and the fraction of it counted from the young edge."""

    name: str
    fraction: float

    @classmethod
    def parse(cls, text: str, fraction: float = math.nan) -> Chron:
        """From `C5n.2n(o)`, `C5n.2n(y)`, `C5n.2n(0.5)`, or a bare name with a fraction in [0, 1].

        Raises InputError if there is neither an edge nor a fraction, or both.
        """
        found = _EDGE.match(text.strip())
        edge = found["edge"] if found else None
        if found is None or (edge is None and math.isnan(fraction)):
            raise InputError(f"chron {text!r}: say which edge, {text}(y) or {text}(o), or a chron_fraction")
        if edge is not None and not math.isnan(fraction):
            raise InputError(f"chron {text!r} has an edge and chron_fraction = {fraction:g}: give one")
        if edge is None and not 0.0 <= fraction <= 1.0:
            raise InputError(f"chron_fraction = {fraction:g}: must lie in 0..1, from the young edge")
        if edge is not None:
            fraction = {"y": 0.0, "o": 1.0}[edge] if edge in "yo" else float(edge)
        return cls(found["chron"], fraction)

    def __str__(self) -> str:
        edge = {0.0: "y", 1.0: "o"}.get(self.fraction, f"{self.fraction:g}")
        return f"{self.name}({edge})"


@dataclass(frozen=True)
class TimeScale:
    """Ages of chrons, Ma: name -> (young edge, old edge); NaN where an edge is not known."""

    name: str
    source: str
    chrons: Mapping[str, tuple[float, float]]

    @classmethod
    def read(cls, name: str, folder: str | os.PathLike[str] = ".") -> TimeScale:
        """A scale of the package by name, or a table on disk (relative to `folder`).

        Raises InputError for an unknown name, TableError for a table at fault.
        """
        if name in SOURCES:
            path = Path(__file__).parent / "scales" / f"{name}.csv"
            return cls(name, SOURCES[name], _read_chrons(path, Layout(comment="#")))
        path = Path(folder) / name
        if path.suffix or path.exists():
            return cls(name, os.fspath(path), _read_chrons(path, Layout(comment="#")))
        hint = did_you_mean(name, SOURCES)
        raise InputError(f"time scale {name!r} is not known; {hint}, or name a table chron,young_ma,old_ma")

    def age_of(self, chron: Chron) -> float:
        """The age of a chron's edge or of a place inside it, Ma.

        Raises InputError if the scale lacks the chron or the edge.
        """
        if chron.name not in self.chrons:
            hint = did_you_mean(chron.name, self.chrons)
            hint = hint if hint.startswith("did") else "a paper's own names need a stated pick"
            raise InputError(f"chron {chron.name!r} is not in time scale {self.name}; {hint}")
        young, old = self.chrons[chron.name]
        # 0 * NaN is NaN: an edge that is asked alone must not need the other
        age = young if chron.fraction == 0.0 else old
        if 0.0 < chron.fraction < 1.0:
            age = young + chron.fraction * (old - young)
        if math.isnan(age):
            raise InputError(f"time scale {self.name} has no age for that edge of {chron.name}")
        return age

    def edges(self) -> dict[tuple[str, str], float]:
        """Every known reversal: (chron, "y" or "o") -> age, Ma."""
        known = {}
        for name, (young, old) in self.chrons.items():
            for edge, age in (("y", young), ("o", old)):
                if not math.isnan(age):
                    known[name, edge] = age
        return known


def _read_chrons(path: Path, layout: Layout) -> dict[str, tuple[float, float]]:
    with DelimitedReader(path, layout) as reader:
        at = {name: reader.column(name) for name in ("chron", "young_ma", "old_ma")}
        (chunk,) = reader.chunks(size=2**62)
        chrons: dict[str, tuple[float, float]] = {}
        before = -math.inf
        for row in range(len(chunk)):
            texts = {name: chunk.columns[i][row].strip() for name, i in at.items() if i is not None}
            name = texts["chron"]
            try:
                young, old = (parse_number(texts[n], layout.decimal) for n in ("young_ma", "old_ma"))
            except ValueError as exc:
                raise TableError(f"{chunk.place(row)}: {str(exc)!r} is not a number") from None
            if not name:
                raise TableError(f"{chunk.place(row, 0)}: chron is empty; every row names one")
            if name in chrons:
                raise TableError(f"{chunk.place(row, 0)}: chron {name!r} stands twice; keep one row")
            if not 0.0 <= young < math.inf or old <= young or young < before:
                raise TableError(
                    f"{chunk.place(row)}: {name} {young:g}..{old:g} Ma: ages rise down the table, the"
                    " young edge before the old one"
                )
            before = young if math.isnan(old) else old
            chrons[name] = (young, old)
    if not chrons:
        raise TableError(f"{path}: no chrons; a time scale needs at least one")
    return chrons


@dataclass(frozen=True, eq=False)
class Restatement:
    """Ages carried from one scale to another by interpolation between the reversals of both."""

    older: TimeScale
    newer: TimeScale
    from_ma: Floats
    to_ma: Floats

    @classmethod
    def between(cls, from_scale: TimeScale, to_scale: TimeScale) -> Restatement:
        """The reversals that both scales date, in order of age; 0 Ma is 0 Ma in every scale.

        Raises InputError if the two share fewer than two reversals or order them differently.
        """
        one, other = from_scale.edges(), to_scale.edges()
        pairs = sorted({(one[key], other[key]) for key in one.keys() & other.keys()})
        if len(pairs) < 2:
            raise InputError(
                f"time scales {from_scale.name} and {to_scale.name} share {len(pairs)} reversals;"
                " ages between them cannot be restated"
            )
        if one.get(("C1n", "y")) == 0.0 and pairs[0] != (0.0, 0.0):
            pairs.insert(0, (0.0, 0.0))
        from_ma, to_ma = (np.array(side) for side in zip(*pairs, strict=True))
        if np.any(np.diff(from_ma) <= 0.0) or np.any(np.diff(to_ma) < 0.0):
            at = int(np.flatnonzero((np.diff(from_ma) <= 0.0) | (np.diff(to_ma) < 0.0))[0])
            raise InputError(
                f"time scales {from_scale.name} and {to_scale.name} order the reversals near"
                f" {from_ma[at]:g} Ma differently"
            )
        return cls(from_scale, to_scale, from_ma, to_ma)

    def __call__(self, ages: ArrayLike) -> Floats:
        """Ages in Ma restated; NaN outside the reversals that both scales date."""
        age = np.asarray(ages, dtype=np.float64)
        inside = (age >= self.from_ma[0]) & (age <= self.from_ma[-1])
        return np.where(inside, np.interp(age, self.from_ma, self.to_ma), np.nan)

    def loose(self, ages: ArrayLike) -> NDArray[np.bool_]:
        """Whether an age (Ma) lies inside an interval without reversals longer than LONG_INTERVAL_MYR."""
        age = np.asarray(ages, dtype=np.float64)
        at = np.clip(np.searchsorted(self.from_ma, age, side="right") - 1, 0, len(self.from_ma) - 2)
        long = self.from_ma[at + 1] - self.from_ma[at] > LONG_INTERVAL_MYR
        inside = (age > self.from_ma[at]) & (age < self.from_ma[at + 1])
        return np.asarray(long & inside)

    def span(self) -> str:
        """The ages that can be restated, in words."""
        return f"{self.from_ma[0]:g}..{self.from_ma[-1]:g} Ma of {self.older.name}"
