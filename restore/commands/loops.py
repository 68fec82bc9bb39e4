"""`oncewhere closure` and `oncewhere differences`: whether a history agrees, with itself or another."""

from __future__ import annotations

from typing import Any

import click

from restore.commands.options import Ages, debug_option, history_inputs, history_option, read_history


@click.command()
@click.argument("loop", metavar="PLATE,PLATE,PLATE[,...]")
@click.option("--ages", required=True, type=Ages(), help="0,10,20 or 0:120:10.")
@history_option()
@click.option("--velocities", is_flag=True, help="Of angular velocities at those ages, not of rotations.")
@click.option("--out", metavar="FILE", help="Write here: .csv, .json, .nc, .parquet.")
@debug_option
def closure(
    loop: str, ages: tuple[float, ...] | None, history_file: str, velocities: bool, out: str | None
) -> None:
    """The rotation left over after a walk round a loop of plates by their own pairs.

    \b
    oncewhere closure snivar,glufta,zobbet --ages 50 --history history.toml
    """
    if ages is None:
        raise click.UsageError("--ages own has no meaning here: give ages in Ma")
    from restore.files.tables import TableOut
    from restore.history.closure import closure as close
    from restore.history.closure import velocity_closure
    from restore.scenario.provenance import provenance

    history = read_history(history_file)
    labels = [label.strip() for label in loop.split(",")]
    settings = {"loop": labels, "ages": list(ages), "velocities": velocities}
    columns: dict[str, Any]
    if velocities:
        records = [velocity_closure(history, labels, age) for age in ages]
        columns = {name: [record[name] for record in records] for name in records[0]}
        columns["loop"] = [" > ".join(record["loop"]) for record in records]
        del columns["omega_rad_per_myr"]
    else:
        columns = close(history, labels, ages).columns()
    columns["errors"] = ["error of rows only"] * len(ages)
    with TableOut(out, provenance(history_inputs(history_file, history), settings)) as target:
        target.add(columns)


@click.command()
@click.argument("first", metavar="HISTORY")
@click.argument("second", metavar="OTHER")
@click.option("--out", metavar="FILE", help="Write here: .csv, .json, .nc, .parquet.")
@debug_option
def differences(first: str, second: str, out: str | None) -> None:
    """Rows that stand in one of two histories only, or differ; and by how many km.

    \b
    oncewhere differences old.toml new.toml
    """
    from restore.files.tables import TableOut
    from restore.history.differences import differences as between
    from restore.scenario.provenance import provenance

    histories = [read_history(file, mixed=True) for file in (first, second)]
    inputs = [
        file for path, h in zip((first, second), histories, strict=True) for file in history_inputs(path, h)
    ]
    with TableOut(out, provenance(inputs, {})) as target:
        target.add(between(*histories))
