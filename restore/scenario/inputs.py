"""What a scenario works on: its history, its clock, its outlines and crust."""

from __future__ import annotations

from restore.errors import ScenarioError, raise_faults
from restore.files.rasters import read_field
from restore.findings import Finding
from restore.history.audit import audit
from restore.history.conventions import Table
from restore.history.redate import one_clock
from restore.history.riding import read_rides, with_rides
from restore.history.store import History
from restore.history.timescale import TimeScale
from restore.motion.ground import Ground
from restore.outlines import Outlines
from restore.outlines.audit import audit_outlines
from restore.scenario.faults import clock_faults, label_faults
from restore.scenario.schema import Scenario


def ground_of(scenario: Scenario) -> Ground | None:
    """The scenario's outlines and crustal ages."""
    outlines, crust = scenario.root.outlines, scenario.root.crust
    if outlines is None and crust is None:
        return None
    drawn = None
    if outlines is not None:
        kind = scenario.root.conventions.latitudes
        path = scenario.path(outlines.file)
        drawn = Outlines.read(path, outlines.plate_property, outlines.edges, kind)
    ages = None if crust is None else read_field(scenario.path(crust.file), crust.variable)
    return Ground(drawn, ages, 0.0 if outlines is None else outlines.within_km)


def opened(scenario: Scenario) -> tuple[History, TimeScale | None, tuple[Finding, ...]]:
    """The scenario's history on its one clock, with the pieces that ride on its plates; and remarks.

    Rides come after the clock: their ages are on it, and a handing-over must be where the restated
    rows put it. Raises ScenarioError with all labels and clocks at fault, and as `History.read` does.
    """
    history = History.read(scenario.history_file)
    faults = clock_faults(scenario, history)
    name, clock = scenario.root.history.time_scale, None
    findings: tuple[Finding, ...] = ()
    if name is not None and not faults:
        clock = TimeScale.read(name, scenario.folder)
        done = one_clock(history, clock)
        history, findings = done.history, done.findings
    rides = scenario.root.history.rides
    if rides is not None:
        path = scenario.path(rides)
        table = Table(file=path, title="pieces that ride", time_scale="" if clock is None else clock.name)
        history = with_rides(history, read_rides(path), path, table)
    raise_faults(ScenarioError, [*label_faults(scenario, history), *faults])
    return history, clock, findings


def audited(scenario: Scenario, history: History, ground: Ground | None) -> list[Finding]:
    """The audit of a scenario's history and of its outlines."""
    findings = audit(history, scenario.root.frame.name)
    if ground is not None and ground.outlines is not None:
        findings += audit_outlines(ground.outlines, history)
    return findings
