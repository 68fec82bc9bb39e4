"""The tasks of a scenario, one function per kind: from its inputs to its result file."""

from __future__ import annotations

import functools
import math
from collections import Counter
from collections.abc import Mapping
from dataclasses import dataclass, field, replace
from pathlib import Path
from typing import Any

from restore.errors import InputError
from restore.files.delimited import parse_number
from restore.files.lines import read_lines
from restore.files.points import beside, read_points
from restore.files.tables import TableOut
from restore.files.vectors import write_geojson, write_vectors
from restore.findings import Finding
from restore.geometry.latitudes import Latitudes
from restore.history.circuit import Circuit
from restore.history.ledger import Segment
from restore.history.store import History
from restore.history.timescale import TimeScale
from restore.motion.ages import parse_ages
from restore.motion.draws import Draws
from restore.motion.flowlines import FlowlineMaker, Spreading
from restore.motion.ground import Ground
from restore.motion.isochrons import ASSUMES, isochrons, read_ridge
from restore.motion.lines import restore_lines
from restore.motion.margins import margin_line, margin_table
from restore.motion.rates import rates
from restore.motion.ridge_points import RidgePoints
from restore.motion.separation import Site
from restore.motion.shares import Shares
from restore.motion.site_clock import SiteClock
from restore.motion.site_files import restore_file
from restore.motion.sites import SiteJob
from restore.motion.trails import Hotspots, TrailMaker
from restore.motion.when import NEVER, Event, as_columns, crosses_latitude, near_point
from restore.scenario import kinds
from restore.scenario.schema import Scenario

POSITIONS = ("lat_deg", "lon_deg")


@dataclass(frozen=True, eq=False)
class Bench:
    """What all tasks of a run share, and the folder that they write to."""

    scenario: Scenario
    history: History
    circuit: Circuit
    clock: TimeScale | None
    ground: Ground | None
    folder: Path
    threads: int = 1

    @property
    def latitudes(self) -> Latitudes:
        """The run's latitudes."""
        return Latitudes(self.scenario.root.conventions.latitudes)

    @property
    def radius_km(self) -> float:
        """The run's radius, km."""
        return self.scenario.root.conventions.radius_km

    @property
    def beyond(self) -> str:
        """What the run does past the oldest row."""
        return self.scenario.root.conventions.beyond

    def words(self) -> dict[str, str]:
        """What every table in the frame says of itself."""
        frame = self.scenario.root.frame
        return {"frame": frame.name, "frame_kind": frame.kind, "latitudes": self.latitudes.kind}


@dataclass
class Outcome:
    """What a task came to: its files, rows by status, findings, segments of the ledger."""

    files: list[str]
    rows: Counter[str] = field(default_factory=Counter)
    findings: list[Finding] = field(default_factory=list)
    segments: dict[Segment, None] = field(default_factory=dict)


def do_task(task: kinds.Task, bench: Bench, trail: Mapping[str, Any]) -> Outcome:
    """Do one task. Raises what its kind raises; then no file of its own is left."""
    return _do(task, bench, trail)


@functools.singledispatch
def _do(task: kinds.Task, bench: Bench, trail: Mapping[str, Any]) -> Outcome:
    raise AssertionError(f"no doer for {task.kind!r} in {bench.folder} ({len(trail)} entries)")


def _table(
    task: kinds.Task,
    bench: Bench,
    trail: Mapping[str, Any],
    columns: Mapping[str, Any],
    words: Mapping[str, str],
) -> Outcome:
    """Write one table with some words that hold for every row."""
    name = f"{task.name}.csv"
    count = len(next(iter(columns.values())))
    columns = {**columns, **{key: [text] * count for key, text in words.items() if key not in columns}}
    with TableOut(bench.folder / name, trail) as target:
        target.add(columns)
    return Outcome([name], Counter(columns.get("status", ())))


@_do.register
def _(task: kinds.SitesTask, bench: Bench, trail: Mapping[str, Any]) -> Outcome:
    clock = None
    if bench.clock is not None:
        own = TimeScale.read(task.time_scale, bench.scenario.folder) if task.time_scale else None
        clock = SiteClock(bench.clock, own)
    job = SiteJob(
        bench.circuit,
        parse_ages(task.ages),
        bench.latitudes,
        bench.radius_km,
        bench.scenario.root.frame.kind,
        bench.threads,
        None if task.draws is None else Draws(task.draws, task.seed),
        clock,
        bench.ground,
    )
    name = f"{task.name}.csv"
    table = bench.scenario.path(task.file)
    done = restore_file(table, job, task.table.layout(), bench.folder / name, None, trail)
    return Outcome([name], done.counts, done.findings, done.segments)


@_do.register
def _(task: kinds.RatesTask, bench: Bench, trail: Mapping[str, Any]) -> Outcome:
    own, lat, lon = read_points(bench.scenario.path(task.file), task.table.layout())
    found = rates(
        bench.history, task.plate, task.relative_to, lat, lon, task.age_ma, task.at_on,
        bench.latitudes, bench.radius_km, bench.beyond,
    )  # fmt: skip
    words = {"plate": task.plate, "relative_to": task.relative_to, "latitudes": bench.latitudes.kind}
    words |= {"frame_kind": bench.history.kind_of(task.relative_to), "errors": "error of rows only"}
    results = found.columns() | {key: [text] * len(lat) for key, text in words.items()}
    return _table(task, bench, trail, beside(own, results), {})


@_do.register
def _(task: kinds.LinesTask, bench: Bench, trail: Mapping[str, Any]) -> Outcome:
    restored = restore_lines(
        bench.scenario.path(task.file), bench.history, bench.circuit.frame, task.listed(),
        outlines=None if bench.ground is None else bench.ground.outlines,
        plate_property=task.plate_property, edges=task.edges,
        latitudes=bench.latitudes.kind, beyond=bench.beyond,
    )  # fmt: skip
    name = f"{task.name}.geojson"
    write_vectors(bench.folder / name, restored.features(), trail)
    return Outcome([name], restored.counts(), list(restored.findings))


def _spreading(
    task: kinds.FlowlinesTask | kinds.IsochronsTask, bench: Bench, every_myr: float | None
) -> Spreading:
    share = task.share
    shares = (
        Shares.constant(share) if not isinstance(share, str) else Shares.read(bench.scenario.path(share))
    )
    return Spreading.between(
        bench.history, task.pair(), task.listed(), shares, None, bench.beyond,
        latitudes=bench.latitudes, radius_km=bench.radius_km, every_myr=every_myr,
    )  # fmt: skip


@_do.register
def _(task: kinds.FlowlinesTask, bench: Bench, trail: Mapping[str, Any]) -> Outcome:
    spreading = _spreading(task, bench, task.every_myr)
    starts = RidgePoints.read(bench.scenario.path(task.file), task.pair(), task.table.layout())
    columns = FlowlineMaker(spreading, starts).make(starts, None).columns()
    words = {"coordinates": "present-day, of each plate", "latitudes": bench.latitudes.kind}
    return _table(task, bench, trail, columns, words)


@_do.register
def _(task: kinds.IsochronsTask, bench: Bench, trail: Mapping[str, Any]) -> Outcome:
    spreading = _spreading(task, bench, None)
    lines = read_ridge(bench.scenario.path(task.file), task.table.layout())
    found = isochrons(spreading, lines, {})
    name = f"{task.name}.geojson"
    write_geojson(bench.folder / name, found.features(), {**trail, "assumes": ASSUMES})
    return Outcome([name], Counter(state for arm in found.arms for state in arm.states()))


@_do.register
def _(task: kinds.TrailsTask, bench: Bench, trail: Mapping[str, Any]) -> Outcome:
    paths = None if task.paths is None else bench.scenario.path(task.paths)
    hotspots = Hotspots.read(bench.scenario.path(task.file), paths, task.table.layout())
    frame = bench.circuit.frame
    maker = TrailMaker(bench.history, task.plate, frame, bench.latitudes, bench.radius_km, bench.beyond)
    return _table(
        task, bench, trail, maker.make(hotspots, task.listed(), task.shown).columns(), bench.words()
    )


@_do.register
def _(task: kinds.MarginTask, bench: Bench, trail: Mapping[str, Any]) -> Outcome:
    lines = [(one.lat_deg, one.lon_deg) for one in read_lines(bench.scenario.path(task.file))]
    outlines = None if bench.ground is None else bench.ground.outlines
    segments = margin_line(lines, task.pair(), task.left, outlines, task.every_km, bench.latitudes)
    columns = margin_table(
        bench.history, task.pair(), segments, task.listed(), "plate", bench.latitudes, bench.radius_km,
        bench.beyond,
    )  # fmt: skip
    return _table(task, bench, trail, columns, {})


@_do.register
def _(task: kinds.WhenTask, bench: Bench, trail: Mapping[str, Any]) -> Outcome:
    own, lat, lon = read_points(bench.scenario.path(task.file), task.table.layout())
    younger = task.during[0]
    events: list[tuple[str, Event]] = []
    hosts = _optional_ages(task, own, "host_age_ma")
    for row, (one_lat, one_lon) in enumerate(zip(lat, lon, strict=True)):
        site = Site(one_lat, one_lon, own["plate"][row].strip())
        name = own["site"][row] if "site" in own else str(row + 1)
        # before its crust was there the site was nowhere
        older = min(task.during[1], hosts[row])
        if not older > younger:
            events.append((name, replace(NEVER, what="crust not yet formed")))
            continue
        if task.latitude is not None:
            found = crosses_latitude(bench.circuit, site, task.latitude, younger, older, bench.latitudes)
        else:
            assert task.near is not None
            point = (task.near[0], task.near[1])
            found = near_point(
                bench.circuit, site, point, younger, older, task.within_km, bench.latitudes, bench.radius_km
            )
        events += [(name, event) for event in found or [NEVER]]
    words = {**bench.words(), "errors": "error of rows only"}
    return _table(task, bench, trail, as_columns(events), words)


def _optional_ages(task: kinds.Task, own: Mapping[str, list[str]], name: str) -> list[float]:
    """Ages (Ma) of a column of the user's, infinite where there is none.

    Raises InputError for a value that is no number.
    """
    column = str(task.table.columns.get(name, name))
    if column not in own:
        return [math.inf] * len(next(iter(own.values())))
    ages = []
    for row, text in enumerate(own[column], start=1):
        try:
            age = parse_number(text, task.table.decimal)
        except ValueError:
            raise InputError(f"{task.file}: row {row}: {name} = {text!r} is not a number") from None
        ages.append(math.inf if math.isnan(age) else age)
    return ages
