"""`history.toml`: several tables in one history, each described as it was published."""

from __future__ import annotations

import math
import os
from collections.abc import Mapping
from pathlib import Path
from typing import Any

from restore.errors import HistoryError, InputError, raise_faults
from restore.files.delimited import Layout
from restore.files.toml import TomlDocument, read_toml
from restore.findings import Finding, did_you_mean
from restore.history.conventions import CHOICES, Conventions, Table
from restore.history.reading import KNOWN_COLUMNS
from restore.history.timescale import SOURCES

FRAME_KINDS = ("plate", "mantle", "spin-axis")
KEYS: dict[str, type | tuple[type, ...]] = {"version": int, "title": str, "frames": dict, "table": list}
LAYOUT_KEYS: dict[str, type | tuple[type, ...]] = {
    "delimiter": str,
    "comment": str,
    "trailing_comments": bool,
    "header": bool,
    "decimal": str,
    "encoding": str,
    "columns": dict,
}
CONSTANT_COLUMNS = ("plate", "relative_to", "chron", "reference", "note", "covariance_in")
TABLE_KEYS: dict[str, type | tuple[type, ...]] = {
    "file": str,
    "title": str,
    "citation": str,
    **dict.fromkeys(CHOICES, str),
    **LAYOUT_KEYS,
    "plates": dict,
    "rank": int,
    "from_present": bool,
    "join_within_myr": (int, float),
    "rates_hold_to_ma": (int, float),
    "valid_from_ma": (int, float),
    "valid_to_ma": (int, float),
    "time_scale": str,
    "chrons": dict,
    "constants": dict,
    "only": dict,
}


class Manifest:
    """The tables of a manifest with their files resolved beside it, the frames and the title."""

    def __init__(self, title: str, frames: dict[str, str], tables: list[Table]) -> None:
        self.title = title
        self.frames = frames
        self.tables = tables


def read_manifest(path: str | os.PathLike[str]) -> Manifest:
    """Read `history.toml`.

    Raises HistoryError with one line per fault, all faults at once.
    """
    document = read_toml(path, HistoryError)
    findings: list[Finding] = []
    _check_keys(document, document.values, KEYS, (), findings)
    values = document.values
    if values.get("version", 0) != 1 and type(values.get("version", 0)) is int:
        what = f"version = {values.get('version')!r}"
        findings.append(_fault(document, what, "this release reads version = 1", "version"))
    frames = values.get("frames", {})
    for name, kind in frames.items() if isinstance(frames, dict) else ():
        if kind not in FRAME_KINDS:
            remedy = "must be one of " + ", ".join(FRAME_KINDS)
            findings.append(_fault(document, f"frame kind {kind!r}", remedy, "frames", name))
    tables = values.get("table", [])
    if not tables:
        findings.append(_fault(document, "no [[table]] is named", "a history needs one", "table"))
    if not isinstance(tables, list):
        tables = []
    described = [_table(document, i, table, findings) for i, table in enumerate(tables)]
    raise_faults(HistoryError, findings)
    return Manifest(
        str(values.get("title", "")), dict(frames), [table for table in described if table is not None]
    )


def _fault(document: TomlDocument, what: str, remedy: str, *path: str | int) -> Finding:
    return Finding("error", "manifest", document.place(*path), what, remedy=remedy)


def _check_keys(
    document: TomlDocument,
    values: Mapping[str, Any],
    known: Mapping[str, type | tuple[type, ...]],
    path: tuple[str | int, ...],
    findings: list[Finding],
) -> None:
    for key, value in values.items():
        if key not in known:
            findings.append(_fault(document, f"unknown key {key!r}", did_you_mean(key, known), *path, key))
            continue
        kinds = known[key]
        wrong = not isinstance(value, kinds) or (isinstance(value, bool) and kinds is not bool)
        if wrong:
            names = {str: "a text", bool: "true or false", int: "a whole number", dict: "a table"}
            names[list] = "an array"
            wanted = "a number" if isinstance(kinds, tuple) else names[kinds]
            if key == "table" and isinstance(value, dict):
                findings.append(_fault(document, "[table] is one table", "write [[table]]", *path, key))
                continue
            what = f"{key} = {value!r}"
            findings.append(_fault(document, what, f"must be {wanted}", *path, key))


def _table(document: TomlDocument, index: int, values: object, findings: list[Finding]) -> Table | None:
    path = ("table", index)
    if not isinstance(values, dict):
        findings.append(_fault(document, "table is not a table", "write [[table]]", *path))
        return None
    before = len(findings)
    _check_keys(document, values, TABLE_KEYS, path, findings)
    if "file" not in values:
        findings.append(_fault(document, "the table names no file", "add file = '...'", *path))
    _check_values(document, values, path, findings)
    _check_maps(document, values, path, findings)
    if len(findings) > before:
        return None
    try:
        layout = Layout(**{"comment": "#", **{k: values[k] for k in LAYOUT_KEYS if k in values}})
        conventions = Conventions(**{k: values[k] for k in CHOICES if k in values})
    except InputError as exc:
        findings.append(_fault(document, str(exc), "", *path))
        return None
    time_scale = _time_scale(document, values.get("time_scale", ""), path, findings)
    if time_scale is None:
        return None
    return Table(
        file=os.fspath(Path(document.file).parent / values["file"]),
        title=values.get("title", ""),
        citation=values.get("citation", ""),
        conventions=conventions,
        rank=values.get("rank", 0),
        from_present=values.get("from_present", False),
        join_within_myr=float(values.get("join_within_myr", 0.0)),
        rates_hold_to_ma=float(values.get("rates_hold_to_ma", 1.0)),
        layout=layout,
        valid_from_ma=float(values.get("valid_from_ma", 0.0)),
        valid_to_ma=float(values.get("valid_to_ma", math.inf)),
        time_scale=time_scale,
        **{key: _texts(values.get(key, {})) for key in ("plates", "chrons", "constants", "only")},
    )


def _check_values(
    document: TomlDocument, values: Mapping[str, Any], path: tuple[str | int, ...], findings: list[Finding]
) -> None:
    """Numbers and choices of one table."""
    for key in values.get("constants", {}) if isinstance(values.get("constants", {}), dict) else ():
        if key not in CONSTANT_COLUMNS:
            hint = did_you_mean(key, CONSTANT_COLUMNS)
            findings.append(_fault(document, f"unknown key {key!r}", hint, *path, "constants", key))
    for key in ("join_within_myr", "rates_hold_to_ma", "valid_from_ma", "valid_to_ma"):
        value = values.get(key, 1)
        endless = key == "valid_to_ma" and value == math.inf
        if isinstance(value, (int, float)) and not 0 <= value < math.inf and not endless:
            rule = "must not be negative" if value < 0 else "must be finite"
            findings.append(_fault(document, f"{key} = {value}", rule, *path, key))
    if values.get("rates_hold_to_ma") == 0:
        what = "rates_hold_to_ma = 0"
        findings.append(_fault(document, what, "must be above 0", *path, "rates_hold_to_ma"))
    span = [
        values.get(key, default) for key, default in (("valid_from_ma", 0.0), ("valid_to_ma", math.inf))
    ]
    if all(isinstance(age, (int, float)) for age in span) and not span[0] <= span[1]:
        what = f"valid_from_ma = {span[0]:g} is above valid_to_ma = {span[1]:g}"
        findings.append(_fault(document, what, "the younger age comes first", *path, "valid_from_ma"))
    for key, allowed in CHOICES.items():
        if isinstance(values.get(key), str) and values[key] not in allowed:
            hint = "must be one of " + ", ".join(allowed)
            findings.append(_fault(document, f"{key} = {values[key]!r}", hint, *path, key))


def _check_maps(
    document: TomlDocument, values: Mapping[str, Any], path: tuple[str | int, ...], findings: list[Finding]
) -> None:
    """The maps of columns (to a name or a number), of plates and of chrons (to texts)."""
    for key in ("columns", "plates", "chrons"):
        entries = values.get(key, {})
        for name, value in entries.items() if isinstance(entries, dict) else ():
            place = (*path, key, name)
            if key == "columns" and name not in KNOWN_COLUMNS:
                what = f"{name!r} is not a column that is read"
                findings.append(_fault(document, what, did_you_mean(name, KNOWN_COLUMNS), *place))
            elif isinstance(value, str) or (key == "columns" and type(value) is int):
                continue
            else:
                wanted = "a name or a whole number" if key == "columns" else "a text"
                findings.append(_fault(document, f"{name} = {value!r}", f"must be {wanted}", *place))


def _time_scale(
    document: TomlDocument, name: str, path: tuple[str | int, ...], findings: list[Finding]
) -> str | None:
    """The name of a published scale, or the path of a table beside the manifest."""
    if not name or name in SOURCES:
        return name
    beside = Path(document.file).parent / name
    if beside.is_file():
        return os.fspath(beside)
    what = f"time_scale = {name!r} is neither a known scale nor a file beside the manifest"
    findings.append(_fault(document, what, did_you_mean(name, SOURCES), *path, "time_scale"))
    return None


def _texts(mapping: Mapping[str, Any]) -> tuple[tuple[str, str], ...]:
    """A table of a manifest as pairs of texts."""
    return tuple((str(key), str(value)) for key, value in mapping.items())
