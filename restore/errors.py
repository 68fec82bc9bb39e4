"""Every error that oncewhere raises on purpose.

    OncewhereError
    |-- InputError (ValueError)        something in a file or an argument is at fault
    |   |-- TableError                 a delimited table
    |   |-- HistoryError               a rotation history or its manifest
    |   `-- ScenarioError              a scenario file
    |-- DomainError (ValueError)       the question has no answer in this history
    |   |-- UnknownPlateError (KeyError)
    |   |-- OutsideHistoryError
    |   |-- GapError
    |   `-- TwoChainsError
    `-- MissingPackageError (ImportError)   an optional package is needed

An error may carry findings: one per fault, each with its place in a file.
"""

from __future__ import annotations

from collections.abc import Sequence
from typing import TYPE_CHECKING

if TYPE_CHECKING:
    from restore.findings import Finding


class OncewhereError(Exception):
    """Root of all errors of this package; `findings` holds the faults one by one."""

    def __init__(self, message: str, findings: Sequence[Finding] = ()) -> None:
        super().__init__(message)
        self.findings = tuple(findings)

    def __str__(self) -> str:
        return str(self.args[0])


class InputError(OncewhereError, ValueError):
    """A file or an argument holds something that cannot be used."""


class TableError(InputError):
    """A delimited table cannot be read as described."""


class HistoryError(InputError):
    """A rotation history or its manifest is at fault."""


class ScenarioError(InputError):
    """A scenario file is at fault."""


class DomainError(OncewhereError, ValueError):
    """The question is well put but this history has no answer to it."""


class UnknownPlateError(DomainError, KeyError):
    """A plate or frame is not in the history."""


class OutsideHistoryError(DomainError):
    """The age lies outside the ages that the history covers for the plate."""


class GapError(DomainError):
    """The age lies in a gap between two parts of the history."""


class TwoChainsError(DomainError):
    """Two chains lead to the frame and give different answers."""


class MissingPackageError(OncewhereError, ImportError):
    """An optional package is needed for what was asked."""


def raise_faults(kind: type[InputError], findings: Sequence[Finding]) -> None:
    """Raise `kind` with one line per fault if any finding is an error."""
    faults = [finding for finding in findings if finding.severity == "error"]
    if faults:
        raise kind("\n".join(finding.line() for finding in faults), findings)
