"""A scenario run: audit, tasks one after the other, and a record of everything in `run.json`."""

from __future__ import annotations

import json
import os
import time
from collections.abc import Callable, Iterable, Mapping
from dataclasses import dataclass, field
from pathlib import Path
from typing import Any

from restore.errors import InputError, OncewhereError
from restore.files.atomic import whole_file
from restore.files.delimited import DelimitedReader
from restore.files.tables import csv_text, texts
from restore.findings import Finding, Place
from restore.history.circuit import Circuit
from restore.history.ledger import Segment, entries
from restore.scenario.inputs import audited, ground_of, opened
from restore.scenario.kinds import Task
from restore.scenario.provenance import (
    CAUTION,
    command_line,
    input_records,
    provenance,
    sha256_of,
    versions,
)
from restore.scenario.schema import read_scenario
from restore.scenario.tasks import Bench, do_task

RECORD = "run.json"


@dataclass
class Run:
    """What a run came to: the folder, each task's record, and all findings."""

    folder: Path
    tasks: dict[str, dict[str, Any]] = field(default_factory=dict)
    findings: list[Finding] = field(default_factory=list)

    @property
    def failed(self) -> bool:
        """Whether a task failed or a row was malformed."""
        return any(record["state"] != "done" for record in self.tasks.values()) or any(
            finding.severity == "error" for finding in self.findings
        )


def run_scenario(
    path: str | os.PathLike[str],
    out: str | os.PathLike[str] | None = None,
    go_on: bool = False,
    threads: int = 1,
    say: Callable[[str], None] = lambda line: None,
) -> Run:
    """Run a scenario into a new folder (`out`, or `<scenario>-results` beside it).

    With `go_on` a folder of an earlier run is continued: tasks whose inputs and settings are
    unchanged and whose file is as it was are not done again. Raises ScenarioError with all faults of
    the scenario at once, HistoryError for its history, InputError if the folder is there already.
    """
    scenario = read_scenario(path)
    history, clock, findings = opened(scenario)
    folder = Path(out) if out is not None else Path(path).with_name(f"{Path(path).stem}-results")
    before = _make_folder(folder, go_on)
    run = Run(folder)
    ground = ground_of(scenario)
    run.findings += [*findings, *audited(scenario, history, ground)]
    circuit = Circuit(history, scenario.root.frame.name, scenario.root.conventions.beyond)
    bench = Bench(scenario, history, circuit, clock, ground, folder, threads)
    runner = _Runner(bench, run, before)
    runner.write_record()
    for task in scenario.tasks:
        kept = runner.unchanged(task)
        say(f"{task.name}: {'kept' if kept else task.kind}")
        run.tasks[task.name] = runner.keep(kept) if kept else runner.do(task)
        runner.write_record()
    runner.write_findings()
    runner.write_ledger()
    runner.write_record()
    return run


def _make_folder(folder: Path, go_on: bool) -> dict[str, Any]:
    if folder.exists():
        if not folder.is_dir():
            raise InputError(f"{folder}: is a file; results go into a folder")
        record = folder / RECORD
        if not go_on:
            if any(folder.iterdir()):
                raise InputError(f"{folder}: is there already; name another with --out, or --continue")
        elif record.is_file():
            try:
                before: dict[str, Any] = json.loads(record.read_text(encoding="utf-8"))["tasks"]
                return before
            except (ValueError, KeyError, TypeError):
                raise InputError(f"{record}: is no record of a run; name a new folder") from None
        elif any(folder.iterdir()):
            raise InputError(f"{folder}: holds no {RECORD} of an earlier run; name a new folder")
        return {}
    try:
        folder.mkdir(parents=True)
    except OSError as exc:
        raise InputError(f"{folder}: cannot be made: {exc.strerror}") from None
    return {}


def _finding(record: Mapping[str, Any]) -> Finding:
    """A finding from the record of an earlier run."""
    place = Place(record["file"], record["line"], record["column"])
    return Finding(
        record["severity"], record["kind"], place, record["what"], record["km"], record["remedy"]
    )


class _Runner:
    """Does the tasks of one run and keeps its record."""

    def __init__(self, bench: Bench, run: Run, before: dict[str, Any]) -> None:
        self.bench = bench
        self.before = before
        self.keeps = False
        self.scenario = bench.scenario
        self.run = run
        scenario, history = bench.scenario, bench.history
        tables = [] if scenario.history_file.endswith((".nc", ".nc4")) else history.tables
        files = [scenario.history_file, *(table.file for table in tables)]
        self.history_inputs = [file for file in files if file]
        parts = (scenario.root.outlines, scenario.root.crust)
        self.ground_inputs = [scenario.path(part.file) for part in parts if part is not None]
        self.segments: dict[Segment, None] = {}
        self.began = time.time()

    def settings(self, task: Task) -> dict[str, Any]:
        """All that decides a task's result besides its inputs."""
        root = self.scenario.root
        return {
            "frame": root.frame.name,
            "frame_kind": root.frame.kind,
            **root.conventions.model_dump(),
            "time_scale": root.history.time_scale,
            "outlines": None if root.outlines is None else root.outlines.model_dump(),
            "crust": None if root.crust is None else root.crust.model_dump(),
            "task": task.model_dump(),
        }

    def inputs(self, task: Task) -> list[str]:
        """The files behind a task."""
        named = [self.scenario.path(name) for name in (task.file, *task.more_files().values())]
        return [*named, *self.history_inputs, *self.ground_inputs]

    def unchanged(self, task: Task) -> dict[str, Any] | None:
        """The earlier record of a task that need not be done again."""
        before: dict[str, Any] | None = self.before.get(task.name)
        if not before or before.get("state") != "done":
            return None
        same = before.get("settings") == json.loads(json.dumps(self.settings(task)))
        same = same and before.get("inputs") == input_records(self.inputs(task))
        for name, digest in before.get("files", {}).items():
            path = self.run.folder / name
            same = same and path.is_file() and sha256_of(path) == digest
        return before if same else None

    def keep(self, record: dict[str, Any]) -> dict[str, Any]:
        """Take over the earlier record of a task, with what was found then."""
        self.keeps = True
        self.run.findings += [_finding(found) for found in record.get("findings", ())]
        return record

    def do(self, task: Task) -> dict[str, Any]:
        """Do one task; a fault in its data fails it and not the others."""
        settings, inputs = self.settings(task), self.inputs(task)
        record: dict[str, Any] = {"kind": task.kind, "state": "done", "settings": settings}
        record["inputs"] = input_records(inputs)
        trail = provenance(inputs, settings)
        already = len(self.run.findings)
        try:
            done = do_task(task, self.bench, trail)
            if done.rows:
                record["rows"] = dict(sorted(done.rows.items()))
            self.run.findings += done.findings
            self.segments.update(done.segments)
            record["files"] = {name: sha256_of(self.run.folder / name) for name in done.files}
        except OncewhereError as exc:
            record |= {"state": "failed", "reason": str(exc)}
            place = self.scenario.document.place("task", self.scenario.tasks.index(task))
            for line in str(exc).splitlines():
                self.run.findings.append(Finding("error", "task failed", place, f"{task.name}: {line}"))
        record["findings"] = [found.as_record() for found in self.run.findings[already:]]
        return record

    def write_findings(self) -> None:
        """Write `findings.csv`: those of the audit and of every task."""
        columns = [finding.as_record() for finding in self.run.findings]
        names = ["severity", "kind", "file", "line", "column", "what", "km", "remedy"]
        table = {name: [record[name] for record in columns] for name in names}
        with whole_file(self.run.folder / "findings.csv") as part:
            part.write_text(csv_text(table), encoding="utf-8")

    def write_ledger(self) -> None:
        """Write `ledger.csv`: the entries that results of all tasks share; kept tasks' entries stay."""
        path = self.run.folder / "ledger.csv"
        columns = entries(self.bench.circuit, self.segments)
        if self.keeps and path.is_file():
            with DelimitedReader(path) as reader:
                (before,) = reader.chunks(size=2**62)
            if before.header == list(columns):
                fresh = set(columns["ledger_id"])
                kept = [row for row in zip(*before.columns, strict=True) if row[0] not in fresh]
                rows = [*kept, *(zip(*(texts(n, v) for n, v in columns.items()), strict=True))]
                rows.sort(key=lambda row: (row[0], int(row[1])))
                columns = {name: [row[i] for row in rows] for i, name in enumerate(columns)}
        with whole_file(path) as part:
            part.write_text(csv_text(columns), encoding="utf-8")

    def write_record(self) -> None:
        """Write `run.json` as it stands; a task that is still to come keeps its earlier record."""
        root = self.scenario.root
        names = [task.name for task in self.scenario.tasks]
        coming = {n: self.before[n] for n in names if n in self.before and n not in self.run.tasks}
        record = {
            "title": root.title,
            "made_by": versions(),
            "command": command_line(),
            "began_utc": time.strftime("%Y-%m-%dT%H:%M:%SZ", time.gmtime(self.began)),
            "seconds": round(time.time() - self.began, 3),
            "scenario": input_records([self.scenario.document.file])[0],
            "inputs": input_records(self.history_inputs),
            "frame": root.frame.model_dump(),
            "conventions": root.conventions.model_dump(),
            "errors": "error of rows (and of sites where said); the model's own error is not in them",
            "caution": CAUTION,
            "tasks": {**self.run.tasks, **coming},
        }
        with whole_file(self.run.folder / RECORD) as part:
            part.write_text(json.dumps(record, indent=2, allow_nan=False) + "\n", encoding="utf-8")


def said_tasks(run: Run) -> Iterable[str]:
    """One line per task: what became of it."""
    for name, record in run.tasks.items():
        rows = record.get("rows")
        detail = ""
        if rows:
            detail = " (" + ", ".join(f"{number} {status}" for status, number in rows.items()) + ")"
        if record["state"] == "failed":
            detail = ": " + record["reason"].splitlines()[0]
        yield f"{name}: {record['state']}{detail} {', '.join(record.get('files', {}))}".rstrip()
