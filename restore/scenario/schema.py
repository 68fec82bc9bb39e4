"""The scenario file, version 1: read, checked as a whole, and every fault said with its place."""

from __future__ import annotations

import os
from dataclasses import dataclass
from pathlib import Path
from typing import Annotated, Any, Literal

from pydantic import (
    BaseModel,
    Field,
    StrictStr,
    ValidationError,
)

from restore.errors import ScenarioError, raise_faults
from restore.files.toml import TomlDocument, read_toml
from restore.findings import Finding, did_you_mean
from restore.scenario.kinds import TASKS, Part, Task

MORE_FILES = ("share", "paths")


class HistoryPart(Part):
    """Which history."""

    file: StrictStr
    time_scale: StrictStr | None = None
    rides: StrictStr | None = None


class OutlinesPart(Part):
    """The plates' outlines, for sites without a label."""

    file: StrictStr
    plate_property: StrictStr = "plate"
    edges: Literal["great-circle", "straight"] = "great-circle"
    within_km: Annotated[float, Field(ge=0.0, allow_inf_nan=False, strict=True)] = 0.0


class CrustPart(Part):
    """A grid of crustal ages, Ma, for host ages."""

    file: StrictStr
    variable: StrictStr | None = None


class FramePart(Part):
    """What positions are given in."""

    name: StrictStr
    kind: Literal["plate", "mantle", "spin-axis"]


class ConventionsPart(Part):
    """What numbers mean; these are the defaults."""

    latitudes: Literal["as-given", "geodetic"] = "as-given"
    radius_km: Annotated[float, Field(gt=0.0, allow_inf_nan=False, strict=True)] = 6371.0088
    beyond: Literal["refuse", "hold", "extend"] = "refuse"


class _Root(Part):
    version: Annotated[int, Field(ge=1, le=1, strict=True)]
    title: StrictStr = ""
    history: HistoryPart
    frame: FramePart
    conventions: ConventionsPart = ConventionsPart()
    outlines: OutlinesPart | None = None
    crust: CrustPart | None = None
    task: list[dict[str, Any]] = Field(min_length=1)


@dataclass(frozen=True)
class Scenario:
    """A checked scenario. Files are named relative to the folder of the scenario."""

    document: TomlDocument
    root: _Root
    tasks: tuple[Task, ...]

    @property
    def folder(self) -> Path:
        """The folder that file names are relative to."""
        return Path(self.document.file).parent

    def path(self, name: str) -> str:
        """A file of the scenario as a path."""
        return os.fspath(self.folder / name)

    @property
    def history_file(self) -> str:
        """The history's path."""
        return self.path(self.root.history.file)


def read_scenario(path: str | os.PathLike[str]) -> Scenario:
    """Read and check a scenario file.

    Raises ScenarioError with one line per fault (file:line:column, what is wrong, what would be
    right), all faults at once, missing files among them.
    """
    document = read_toml(path, ScenarioError)
    findings: list[Finding] = []
    root = _validated(_Root, document.values, (), document, findings)
    tasks = [_task(document, i, values, findings) for i, values in enumerate(_task_values(document))]
    _check_names(document, tasks, findings)
    _check_files(document, findings)
    findings.sort(key=lambda finding: (finding.place.line or 0, finding.place.column or 0))
    raise_faults(ScenarioError, findings)
    assert root is not None
    return Scenario(document, root, tuple(task for task in tasks if task is not None))


def _task_values(document: TomlDocument) -> list[Any]:
    tasks = document.values.get("task")
    return tasks if isinstance(tasks, list) else []


def _fault(document: TomlDocument, path: tuple[str | int, ...], what: str, remedy: str) -> Finding:
    return Finding("error", "scenario", document.place(*path), what, remedy=remedy)


def _task(document: TomlDocument, index: int, values: Any, findings: list[Finding]) -> Task | None:
    path: tuple[str | int, ...] = ("task", index)
    if not isinstance(values, dict):
        findings.append(_fault(document, path, "a task is not a table", "write [[task]]"))
        return None
    kind = values.get("kind")
    if kind not in TASKS:
        what = "the task has no kind" if kind is None else f"kind = {kind!r}"
        remedy = did_you_mean(str(kind), TASKS) or "must be one of " + ", ".join(TASKS)
        findings.append(_fault(document, (*path, "kind"), what, remedy))
        return None
    task: Task | None = _validated(TASKS[kind], values, path, document, findings)
    return task


def _validated(
    model: type[Any],
    values: dict[str, Any],
    path: tuple[str | int, ...],
    document: TomlDocument,
    findings: list[Finding],
) -> Any:
    try:
        return model.model_validate(values)
    except ValidationError as exc:
        before = len(findings)
        for error in exc.errors(include_url=False):
            finding = _finding(model, error, path, document)
            if finding not in findings[before:]:
                findings.append(finding)
        return None


def _finding(
    model: type[BaseModel], error: Any, path: tuple[str | int, ...], document: TomlDocument
) -> Finding:
    """A fault of pydantic's in our words."""
    where = error["loc"]
    key = str(where[-1]) if where else ""
    if error["type"] == "extra_forbidden":
        known = _fields(model, where[:-1])
        return _fault(document, (*path, *where), f"unknown key {key!r}", did_you_mean(key, known))
    if error["type"] == "missing":
        return _fault(document, (*path, *where), f"the key {key!r} is missing", MISSING.get(key, ""))
    if where == ("task",):
        return _fault(document, ("task",), "no [[task]] is named", "a scenario needs at least one")
    what = f"{'.'.join(str(part) for part in where)} = {error['input']!r}"
    if error["type"] == "value_error" and isinstance(error["input"], dict):
        what, _, remedy = str(error["ctx"]["error"]).partition(": ")
        inner = what.partition(" = ")[0]
        where = (*where, inner) if inner in error["input"] else where
        return _fault(document, (*path, *where), what, remedy)
    return _fault(document, (*path, *where), what, _remedy(error))


MISSING = {
    "version": "add version = 1",
    "history": "add [history] with file = '...'",
    "frame": "add [frame] with a name and a kind",
    "task": "add a [[task]]",
    "name": "it names the result's file",
    "kind": "must be plate, mantle or spin-axis",
    "file": "add file = '...'",
    "plate": "name the plate that moves",
    "relative_to": "name the plate or frame held still",
}
RULES = {
    "string_pattern_mismatch": "a task's name is the name of its file: letters, digits, - and _",
    "string_type": "must be a text",
    "float_type": "must be a number",
    "float_parsing": "must be a number",
    "finite_number": "must be finite",
    "int_type": "must be a whole number",
    "int_from_float": "must be a whole number",
    "bool_type": "must be true or false",
    "dict_type": "must be a table",
    "model_type": "must be a table",
    "model_attributes_type": "must be a table",
}


def _remedy(error: Any) -> str:
    """What would be right, in our words."""
    context = error.get("ctx", {})
    if error["type"] == "value_error":
        return str(context["error"])
    if error["loc"] == ("version",) and error["type"] != "int_type":
        return "this release reads version = 1"
    if error["type"] == "literal_error":
        choices = context["expected"].replace("'", "").replace(" or ", ", ").split(", ")
        close = did_you_mean(str(error["input"]), choices)
        hint = f"; {close}" if close.startswith("did") else ""
        return f"must be {context['expected']}{hint}"
    if error["type"] in {"greater_than", "greater_than_equal"}:
        bound = context.get("gt", context.get("ge"))
        return f"must be {'above' if 'gt' in context else 'at least'} {bound:g}"
    message: str = error["msg"]
    return RULES.get(error["type"], message[:1].lower() + message[1:])


def _fields(model: type[BaseModel], where: tuple[str | int, ...]) -> list[str]:
    for part in where:
        field = model.model_fields.get(str(part))
        annotation = None if field is None else field.annotation
        if isinstance(annotation, type) and issubclass(annotation, BaseModel):
            model = annotation
    return list(model.model_fields)


def _check_names(document: TomlDocument, tasks: list[Task | None], findings: list[Finding]) -> None:
    seen: dict[str, int] = {}
    for index, task in enumerate(tasks):
        if task is None:
            continue
        if task.name.lower() in seen:
            first = document.place("task", seen[task.name.lower()], "name")
            what, remedy = f"name = {task.name!r} stands twice", f"the first is on line {first.line}"
            findings.append(_fault(document, ("task", index, "name"), what, remedy))
        seen.setdefault(task.name.lower(), index)


def _check_files(document: TomlDocument, findings: list[Finding]) -> None:
    """Files that the scenario names and that are not there."""
    folder = Path(document.file).parent
    values = document.values
    named: list[tuple[tuple[str | int, ...], Any]] = []
    for part, key in (("history", "file"), ("history", "rides"), ("outlines", "file"), ("crust", "file")):
        if isinstance(values.get(part), dict):
            named.append(((part, key), values[part].get(key)))
    for index, task in enumerate(_task_values(document)):
        if isinstance(task, dict):
            named.append((("task", index, "file"), task.get("file")))
            named += [
                (("task", index, key), task[key]) for key in MORE_FILES if isinstance(task.get(key), str)
            ]
    for path, name in named:
        if not isinstance(name, str) or (folder / name).is_file():
            continue
        reason = "is a folder" if (folder / name).is_dir() else "no such file"
        beside = [p.name for p in folder.iterdir() if p.is_file()] if folder.is_dir() else []
        hint = did_you_mean(name, beside)
        remedy = hint if hint.startswith("did") else "names are relative to the scenario's folder"
        findings.append(_fault(document, path, f"{path[-1]} = {name!r}: {reason}", remedy))
