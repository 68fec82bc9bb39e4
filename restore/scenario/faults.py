"""Faults of a scenario that only its history can show: labels it lacks, clocks that do not fit."""

from __future__ import annotations

from restore.errors import InputError
from restore.findings import Finding, did_you_mean
from restore.history.store import History
from restore.history.timescale import TimeScale
from restore.scenario.kinds import SitesTask
from restore.scenario.schema import Scenario

Path = tuple[str | int, ...]


def label_faults(scenario: Scenario, history: History) -> list[Finding]:
    """Labels that the scenario names and the history lacks, and a frame that is not what it says."""
    known = history.plates()
    root = scenario.root
    named: list[tuple[tuple[str | int, ...], str]] = [(("frame", "name"), root.frame.name)]
    for index, task in enumerate(scenario.tasks):
        for key, label in task.labels().items():
            parts = (int(part) if part.isdigit() else part for part in key.split("."))
            named.append((("task", index, *parts), label))
    findings = []
    for path, label in named:
        if label not in known:
            key = next(part for part in reversed(path) if isinstance(part, str))
            what = f"{'frame.' if path[0] == 'frame' else ''}{key} = {label!r} is not in the history"
            place = scenario.document.place(*path)
            findings.append(Finding("error", "scenario", place, what, remedy=did_you_mean(label, known)))
    stated = history.frames.get(root.frame.name)
    if stated is not None and stated != root.frame.kind:
        what = f"frame.kind = {root.frame.kind!r}"
        remedy = f"the history says that {root.frame.name} is of kind {stated}"
        place = scenario.document.place("frame", "kind")
        findings.append(Finding("error", "scenario", place, what, remedy=remedy))
    return findings


def clock_faults(scenario: Scenario, history: History) -> list[Finding]:
    """A run has one clock: the scenario names it as soon as any table names one, and knows every name."""
    named: list[tuple[Path, str | None]] = [(("history", "time_scale"), scenario.root.history.time_scale)]
    for index, task in enumerate(scenario.tasks):
        if isinstance(task, SitesTask):
            named.append((("task", index, "time_scale"), task.time_scale))
    findings = []
    for path, name in named:
        try:
            if name is not None:
                TimeScale.read(name, scenario.folder)
        except InputError as exc:
            place = scenario.document.place(*path)
            findings.append(Finding("error", "scenario", place, str(exc)))
    of_tables = sorted({table.time_scale for table in history.tables if table.time_scale})
    tasks = [name for _, name in named[1:] if name]
    if named[0][1] is None and (of_tables or tasks):
        what = f"history.time_scale is missing, and a table names {(of_tables + tasks)[0]}"
        place = scenario.document.place("history")
        findings.append(Finding("error", "scenario", place, what, remedy="name the run's one clock"))
    return findings
