"""`oncewhere check`: what an audit finds in a history or in a scenario."""

from __future__ import annotations

import re
from pathlib import Path
from typing import TYPE_CHECKING

import click

from restore.commands.options import counted, debug_option, print_json, riding
from restore.errors import OncewhereError

if TYPE_CHECKING:
    from restore.findings import Finding
    from restore.history.store import History


OUTLINE_ENDINGS = frozenset({".geojson", ".json", ".gpkg", ".shp", ".parquet", ".geoparquet", ".fgb"})


@click.command()
@click.argument("file", metavar="HISTORY|SCENARIO|OUTLINES")
@click.option("--json", "as_json", is_flag=True, help="Print the findings as JSON.")
@click.option(
    "--rows/--no-rows", "rows", default=None, help="Print what was read, to hold against the paper"
    " (a manifest's by default)."
)  # fmt: skip
@click.option("--rides", metavar="FILE", help="Pieces that rode on other plates; with --out they go into the"
              " history.")  # fmt: skip
@click.option("--out", metavar="FILE.nc", help="Write the history as one netCDF file, if it has no error.")
@debug_option
def check(file: str, as_json: bool, rows: bool | None, rides: str | None, out: str | None) -> int:
    """Say what is wrong or doubtful in a history, a scenario or outlines; exit 1 if anything is an error.

    \b
    oncewhere check scenario_files/history.toml --out history.nc
    """
    findings, history = _audited(file, rides)
    failed = any(finding.severity == "error" for finding in findings)
    if as_json:
        print_json([finding.as_record() for finding in findings])
    else:
        manifest = file.lower().endswith(".toml") and history is not None and not _is_scenario(file)
        if history is not None and (manifest if rows is None else rows):
            from restore.history.listing import listing

            click.echo("\n".join(listing(history)))
        for finding in findings:
            click.echo(f"{finding.severity}: {finding.line()}")
        click.echo(_summary(findings), err=True)
    if out is not None and history is not None and not failed:
        history.write(out)
        click.echo(f"{len(history)} rows in {out}", err=True)
    return 1 if failed else 0


def _summary(findings: list[Finding]) -> str:
    counts = {s: sum(f.severity == s for f in findings) for s in ("error", "warning", "note")}
    return ", ".join(counted(number, severity) for severity, number in counts.items())


def _audited(file: str, rides: str | None = None) -> tuple[list[Finding], History | None]:
    """The findings of a file, and the history if it can be read at all."""
    from restore.history.audit import audit
    from restore.history.store import History
    from restore.outlines import Outlines
    from restore.outlines.audit import audit_outlines

    try:
        if Path(file).suffix.lower() == ".toml" and _is_scenario(file):
            from restore.scenario.inputs import audited, ground_of, opened
            from restore.scenario.schema import read_scenario

            scenario = read_scenario(file)
            history, _, remarks = opened(scenario)
            return [*remarks, *audited(scenario, history, ground_of(scenario))], history
        if Path(file).suffix.lower() in OUTLINE_ENDINGS:
            return audit_outlines(Outlines.read(file)), None
        history = riding(History.read(file), rides)
        return audit(history), history
    except OncewhereError as exc:
        if exc.findings:
            return list(exc.findings), None
        return [_unreadable(line, file) for line in str(exc).splitlines()], None


def _unreadable(message: str, file: str) -> Finding:
    """An error that is no finding yet; its message begins with its place, if it has one."""
    from restore.findings import Finding, Place

    found = re.match(r"(?P<file>[^:]+)(:(?P<line>\d+))?(:(?P<column>\d+))?: ", message)
    if found is None or (found["line"] is None and found["file"] != file):
        return Finding("error", "unreadable", Place(file), message)
    line, column = (None if number is None else int(number) for number in found.group("line", "column"))
    return Finding("error", "unreadable", Place(found["file"], line, column), message[found.end() :])


def _is_scenario(file: str) -> bool:
    from restore.files.toml import read_toml

    values = read_toml(file).values
    return "history" in values or "task" in values
