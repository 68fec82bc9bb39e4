"""`oncewhere run`: a whole job from a scenario file to a folder of results."""

from __future__ import annotations

import click

from restore.commands.options import debug_option, default_threads, say_findings


@click.command()
@click.argument("scenario", metavar="SCENARIO.toml")
@click.option("--out", metavar="DIR", help="A new folder; SCENARIO-results beside the file if not named.")
@click.option("--continue", "go_on", is_flag=True, help="Go on in a folder of an earlier run.")
@debug_option
def run(scenario: str, out: str | None, go_on: bool) -> int:
    """Do all tasks of SCENARIO.toml and write their results, findings and record.

    \b
    oncewhere run scenario_files/demo.toml --out demo-results
    """
    from restore.scenario.run import run_scenario, said_tasks

    done = run_scenario(
        scenario, out, go_on, default_threads(), lambda line: click.echo(f"... {line}", err=True)
    )
    say_findings(done.findings)
    for line in said_tasks(done):
        click.echo(line)
    click.echo(f"results in {done.folder}")
    return 1 if done.failed else 0
