"""What a scenario works on: its history, its clock, its outlines and crust."""

from __future__ import annotations

from restore.files.rasters import read_field
from restore.findings import Finding
from restore.history.redate import one_clock
from restore.history.riding import read_rides, with_rides
from restore.history.store import History
from restore.history.timescale import TimeScale
from restore.motion.ground import Ground
from restore.outlines import Outlines
from restore.scenario.schema import Scenario


def read_scenario_history(scenario: Scenario) -> History:
    """The scenario's history, with the pieces that ride on its plates."""
    history = History.read(scenario.history_file)
    rides = scenario.root.history.rides
    if rides is None:
        return history
    return with_rides(history, read_rides(scenario.path(rides)), scenario.path(rides))


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


def on_the_clock(
    scenario: Scenario, history: History
) -> tuple[History, TimeScale | None, tuple[Finding, ...]]:
    """The history restated to the scenario's clock, if it names one."""
    name = scenario.root.history.time_scale
    if name is None:
        return history, None, ()
    clock = TimeScale.read(name, scenario.folder)
    done = one_clock(history, clock)
    return done.history, clock, done.findings
