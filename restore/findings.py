"""Findings: what a reader or an audit noticed, where, and what to do about it."""

from __future__ import annotations

import difflib
from collections.abc import Iterable
from dataclasses import dataclass


@dataclass(frozen=True, order=True)
class Place:
    """A place in a file: lines from 1 (the header of a table is line 1), columns from 1.

    In a table the column is the number of the field, in TOML that of the character.
    """

    file: str = ""
    line: int | None = None
    column: int | None = None

    def __str__(self) -> str:
        parts = [self.file or "<input>"]
        if self.line is not None:
            parts.append(str(self.line))
            if self.column is not None:
                parts.append(str(self.column))
        return ":".join(parts)


@dataclass(frozen=True)
class Finding:
    """One message: severity `error`, `warning` or `note`; `km` says how far it matters, if known."""

    severity: str
    kind: str
    place: Place
    what: str
    km: float | None = None
    remedy: str = ""

    def line(self) -> str:
        """The finding as one line of text: place, what, size, remedy."""
        size = "" if self.km is None else f" ({self.km:.4g} km)"
        remedy = f"; {self.remedy}" if self.remedy else ""
        return f"{self.place}: {self.what}{size}{remedy}"

    def as_record(self) -> dict[str, object]:
        """The finding as plain values: severity, kind, file, line, column, what, km, remedy."""
        return {
            "severity": self.severity,
            "kind": self.kind,
            "file": self.place.file,
            "line": self.place.line,
            "column": self.place.column,
            "what": self.what,
            "km": self.km,
            "remedy": self.remedy,
        }


def did_you_mean(word: str, known: Iterable[str]) -> str:
    """A remedy for a misspelt word: the closest known one, or all when they are few."""
    choices = sorted(known)
    close = difflib.get_close_matches(word, choices, n=1, cutoff=0.6)
    if not close:
        close = [c for c in choices if c.lower() == word.lower()][:1]
    if close:
        return f"did you mean {close[0]!r}?"
    if 0 < len(choices) <= 12:
        return "known: " + ", ".join(choices)
    return ""
