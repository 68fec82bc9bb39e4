"""Geomagnetic polarity time scales: the ages of chrons, and restating ages from one to another.

Published scales come with the package (see `SOURCES`); any table `chron,young_ma,old_ma` is read the
same way. Restating changes ages, never rotations.
"""

from __future__ import annotations

import math
import os
import re
from collections.abc import Container, Mapping, Sequence
from dataclasses import dataclass
from pathlib import Path

import numpy as np
from numpy.typing import ArrayLike, NDArray

from restore.errors import InputError, TableError, raise_faults
from restore.files.delimited import Chunk, DelimitedReader, Layout, parse_number
from restore.findings import Finding, did_you_mean
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
_EDGE = re.compile(r"^(?P<chron>[^()]+?)\s*(?:\((?P<edge>y|o|0|1|[01]\.[0-9]*|\.[0-9]+)\))?$")


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
        if found is None:
            raise InputError(f"chron {text!r}: write name(y), name(o) or name(0.5), from the young edge")
        edge = found["edge"]
        if edge is None and math.isnan(fraction):
            raise InputError(f"chron {text!r}: say which edge, {text}(y) or {text}(o), or a chron_fraction")
        if edge is not None and not math.isnan(fraction):
            raise InputError(f"chron {text!r} has an edge and chron_fraction = {fraction:g}: give one")
        if edge is not None:
            fraction = {"y": 0.0, "o": 1.0}[edge] if edge in "yo" else float(edge)
        if not 0.0 <= fraction <= 1.0:
            raise InputError(f"chron_fraction = {fraction:g}: must lie in 0..1, from the young edge")
        return cls(found["chron"], fraction)

    def __str__(self) -> str:
        edge = {0.0: "y", 1.0: "o"}.get(self.fraction)
        # short, and yet read back as the same number
        return f"{self.name}({edge or np.format_float_positional(self.fraction, trim='-')})"


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
        if path.is_file():
            return cls(name, os.fspath(path), _read_chrons(path, Layout(comment="#")))
        hint = did_you_mean(name, SOURCES)
        raise InputError(
            f"time scale {name!r} is neither known nor a file; {hint}, or name a table chron,young_ma,old_ma"
        )

    def same_as(self, other: TimeScale) -> bool:
        """Whether two scales date the same reversals alike, whatever they are called."""
        return self.edges() == other.edges()

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


COLUMNS = ("chron", "young_ma", "old_ma")


def _read_chrons(path: Path, layout: Layout) -> dict[str, tuple[float, float]]:
    """The chrons of a table; raises TableError with one line per fault, all faults at once."""
    chrons: dict[str, tuple[float, float]] = {}
    findings: list[Finding] = []
    with DelimitedReader(path, layout) as reader:
        at = [reader.column(name) or 0 for name in COLUMNS]
        before = -math.inf
        for chunk in reader.chunks():
            for row in range(len(chunk)):
                fault = reader.length_fault(chunk, row) or _chron_fault(chunk, row, at, chrons, before)
                if isinstance(fault, Finding):
                    findings.append(fault)
                    continue
                name, young, old = fault
                before = young if math.isnan(old) else old
                chrons[name] = (young, old)
    raise_faults(TableError, findings)
    if not chrons:
        raise TableError(f"{path}: no chrons; a time scale needs at least one")
    return chrons


def _chron_fault(
    chunk: Chunk, row: int, at: Sequence[int], known: Container[str], before: float
) -> Finding | tuple[str, float, float]:
    """Name, young and old edge of a row, or what is wrong with it."""

    def fault(column: int, what: str, remedy: str) -> Finding:
        return Finding("error", "time scale", chunk.place(row, at[column]), what, remedy=remedy)

    name, *texts = (chunk.columns[column][row].strip() for column in at)
    if not name:
        return fault(0, "chron is empty", "every row names one")
    if name in known:
        return fault(0, f"chron {name!r} stands twice", "keep one row")
    edges = []
    for column, text in enumerate(texts, start=1):
        try:
            edges.append(parse_number(text))
        except ValueError:
            edges.append(math.inf)
        if math.isinf(edges[-1]):
            return fault(column, f"{COLUMNS[column]} = {text!r}", "an age is a finite number, in Ma")
    young, old = edges
    if math.isnan(young):
        return fault(1, "young_ma is empty", "only old_ma may be, where it is not known")
    if not (young >= 0.0 and before <= young):
        rule = "ages are not negative and rise down the table"
        return fault(1, f"young_ma = {texts[0]} of {name} after {max(before, 0.0):g} Ma", rule)
    if old <= young:
        rule = "the old edge is older than the young one"
        return fault(2, f"old_ma = {texts[1]} of {name} with young_ma = {texts[0]}", rule)
    return name, young, old


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
