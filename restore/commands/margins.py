"""`oncewhere margin`: what happens along a line between two plates."""

from __future__ import annotations

import click

from restore.commands.options import (
    Ages,
    Numbers,
    convention_options,
    debug_option,
    history_inputs,
    history_option,
    radius_option,
    read_history,
)
from restore.commands.spreading import Pair


@click.command()
@click.argument("line")
@click.option("--between", required=True, type=Pair(), help="The plates on both sides; A moves, B is held.")
@click.option("--ages", type=Ages(), default="0", show_default=True, help="0,10,20 or 0:120:10.")
@click.option("--total", type=Numbers("OLDER", "YOUNGER"), help="Instead of rates: crust made or consumed"
              " between two ages, km2 and km, by segment.")  # fmt: skip
@click.option("--left", metavar="PLATE", help="The plate to the left of the line as drawn.")
@click.option("--outlines", metavar="FILE", help="Or outlines that show which plate is on which side.")
@click.option("--every-km", type=click.FloatRange(min=0, min_open=True), default=50.0, show_default=True,
              help="Longest segment.")  # fmt: skip
@click.option("--at-on", type=click.Choice(["plate", "relative-to"]), default="plate", show_default=True,
              help="The line is today's on A, carried back with it, or stays in B's coordinates.")  # fmt: skip
@history_option()
@click.option("--out", metavar="FILE", help="Write here: .csv, .json, .geojson, .nc, .parquet, .gpkg.")
@convention_options
@radius_option
@debug_option
def margin(
    line: str,
    between: tuple[str, str],
    ages: tuple[float, ...] | None,
    total: tuple[float, float] | None,
    left: str | None,
    outlines: str | None,
    every_km: float,
    at_on: str,
    history_file: str,
    out: str | None,
    beyond: str,
    latitudes: str,
    radius_km: float,
) -> None:
    """Rates normal and parallel to LINE, obliquity and regime, by segment.

    \b
    oncewhere margin scenario_files/margin.geojson --between ovrath,ibbun --ages 0,20 \\
        --outlines scenario_files/outlines.geojson --history scenario_files/history.toml
    """
    if total is not None and ages != (0.0,):
        raise click.UsageError("--total says its own ages: leave out --ages")
    if total is not None and not total[0] > total[1] >= 0.0:
        raise click.UsageError("--total OLDER,YOUNGER: the older age first")
    if ages is None:
        raise click.UsageError("--ages own has no meaning here: give ages in Ma")
    from restore.files.lines import read_lines
    from restore.files.tables import TableOut
    from restore.geometry.latitudes import Latitudes
    from restore.motion.margins import margin_line, margin_table, margin_totals_table
    from restore.outlines import Outlines
    from restore.scenario.provenance import provenance

    history = read_history(history_file)
    kind = Latitudes(latitudes)
    drawn = None if outlines is None else Outlines.read(outlines, latitudes=latitudes)
    if left is None and drawn is None:
        click.echo(f"note: {between[0]} is taken to lie to the left of the line; --left or --outlines say"
                   " otherwise", err=True)  # fmt: skip
    lines = [(one.lat_deg, one.lon_deg) for one in read_lines(line)]
    segments = margin_line(lines, between, left, drawn, every_km, kind)
    if total is not None:
        columns = margin_totals_table(history, between, segments, *total, at_on, kind, radius_km)
    else:
        columns = margin_table(history, between, segments, ages, at_on, kind, radius_km, beyond)
    settings = {"between": list(between), "ages": list(ages), "total": total, "left": left, "at_on": at_on}
    settings |= {"every_km": every_km, "latitudes": latitudes, "radius_km": radius_km}
    inputs = [line, *history_inputs(history_file, history), *([outlines] if outlines else [])]
    with TableOut(out, provenance(inputs, settings), ("lat_deg", "lon_deg")) as target:
        target.add(columns)
