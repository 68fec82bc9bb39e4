"""oncewhere: where dated things were, how sure that is, relative to what, and on whose evidence.

Positions are latitudes and longitudes in degrees at every public door, unit vectors inside, with
the component axis last. Names load on first use, so that importing the package costs nothing.
"""

from __future__ import annotations

from importlib import import_module
from typing import TYPE_CHECKING, Any

_HOMES = {
    "Circuit": "restore.history.circuit",
    "DomainError": "restore.errors",
    "GapError": "restore.errors",
    "History": "restore.history.store",
    "HistoryError": "restore.errors",
    "InputError": "restore.errors",
    "MissingPackageError": "restore.errors",
    "OncewhereError": "restore.errors",
    "OutsideHistoryError": "restore.errors",
    "Rotations": "restore.geometry.rotations",
    "Row": "restore.history.rows",
    "ScenarioError": "restore.errors",
    "TableError": "restore.errors",
    "TwoChainsError": "restore.errors",
    "UnknownPlateError": "restore.errors",
    "finite_pole": "restore.history.poles",
    "flowlines": "restore.motion.spreading",
    "rates": "restore.motion.rates",
    "restore_lines": "restore.motion.lines",
    "restore_sites": "restore.motion.sites",
    "run_scenario": "restore.scenario.run",
    "stage_pole": "restore.history.poles",
    "trails": "restore.motion.trails",
}

__all__ = sorted(_HOMES)  # noqa: PLE0605

if TYPE_CHECKING:
    from restore.errors import (
        DomainError,
        GapError,
        HistoryError,
        InputError,
        MissingPackageError,
        OncewhereError,
        OutsideHistoryError,
        ScenarioError,
        TableError,
        TwoChainsError,
        UnknownPlateError,
    )
    from restore.geometry.rotations import Rotations
    from restore.history.circuit import Circuit
    from restore.history.poles import finite_pole, stage_pole
    from restore.history.rows import Row
    from restore.history.store import History
    from restore.motion.lines import restore_lines
    from restore.motion.rates import rates
    from restore.motion.sites import restore_sites
    from restore.motion.spreading import flowlines
    from restore.motion.trails import trails
    from restore.scenario.run import run_scenario


def __getattr__(name: str) -> Any:
    if name not in _HOMES:
        raise AttributeError(f"module 'restore' has no attribute {name!r}")
    return getattr(import_module(_HOMES[name]), name)


def __dir__() -> list[str]:
    return sorted([*globals(), *_HOMES])
