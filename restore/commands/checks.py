"""`oncewhere check`: what an audit finds in a history or in a scenario."""

from __future__ import annotations

from pathlib import Path
from typing import TYPE_CHECKING

import click

from restore.commands.options import counted, debug_option, print_json
from restore.errors import OncewhereError

if TYPE_CHECKING:
    from restore.findings import Finding


@click.command()
@click.argument("file", metavar="HISTORY|SCENARIO")
@click.option("--json", "as_json", is_flag=True, help="Print the findings as JSON.")
@debug_option
def check(file: str, as_json: bool) -> int:
    """Say what is wrong or doubtful in a history or a scenario; exit 1 if anything is an error.

    \b
    oncewhere check scenario_files/history.toml
    """
    findings = _findings(file)
    if as_json:
        print_json([finding.as_record() for finding in findings])
    else:
        for finding in findings:
            click.echo(f"{finding.severity}: {finding.line()}")
        click.echo(_summary(findings), err=True)
    return 1 if any(finding.severity == "error" for finding in findings) else 0


def _summary(findings: list[Finding]) -> str:
    counts = {s: sum(f.severity == s for f in findings) for s in ("error", "warning", "note")}
    return ", ".join(counted(number, severity) for severity, number in counts.items())


def _findings(file: str) -> list[Finding]:
    from restore.findings import Finding, Place
    from restore.history.audit import audit
    from restore.history.store import History

    try:
        if Path(file).suffix.lower() == ".toml" and _is_scenario(file):
            from restore.scenario.run import label_faults
            from restore.scenario.schema import read_scenario

            scenario = read_scenario(file)
            history = History.read(scenario.history_file)
            return label_faults(scenario, history) or audit(history, scenario.root.frame.name)
        return audit(History.read(file))
    except OncewhereError as exc:
        if exc.findings:
            return list(exc.findings)
        return [Finding("error", "unreadable", Place(file), _without(str(exc), file))]


def _without(message: str, file: str) -> str:
    return message.removeprefix(f"{file}: ")


def _is_scenario(file: str) -> bool:
    from restore.files.toml import read_toml

    values = read_toml(file).values
    return "history" in values or "task" in values
