"""`oncewhere sites`: dated sites restored, streamed from file to file."""

from __future__ import annotations

from typing import Any

import click

from restore.commands.options import (
    Ages,
    convention_options,
    debug_option,
    default_threads,
    history_inputs,
    history_option,
    layout_options,
    make_ground,
    make_layout,
    one_clock,
    progress,
    radius_option,
    read_history,
    riding,
    say_counts,
    say_findings,
)

FRAME_KINDS = ("plate", "mantle", "spin-axis")


@click.command()
@click.argument("table")
@history_option(clock=False)
@click.option("--frame", required=True, help="The plate or frame that positions are given in.")
@click.option("--frame-kind", type=click.Choice(FRAME_KINDS), help="Kind of the frame, if the history"
              " does not say.")  # fmt: skip
@click.option("--ages", type=Ages(), default="own", show_default=True, help="own, 0,10,20 or 0:120:10.")
@click.option("--outlines", metavar="FILE", help="Plates' outlines: labels for sites without one.")
@click.option("--plate-property", default="plate", show_default=True, help="The property that holds it.")
@click.option("--edges", type=click.Choice(["great-circle", "straight"]), default="great-circle",
              show_default=True, help="What the outlines' edges are.")  # fmt: skip
@click.option("--within-km", type=click.FloatRange(min=0), default=0.0, show_default=True,
              help="Sites on no outline go to the nearest one within this distance.")  # fmt: skip
@click.option("--crust-age", metavar="FILE[:VARIABLE]", help="A grid of crustal ages, Ma, for host ages.")
@click.option("--rides", metavar="FILE", help="Pieces that rode on other plates: plate,rides_on,"
              "youngest_ma,oldest_ma.")  # fmt: skip
@click.option("--time-scale", metavar="SCALE", help="The one clock of the run; ages of tables that name"
              " another are restated to it.")  # fmt: skip
@click.option("--table-time-scale", metavar="SCALE", help="The clock of the ages in TABLE.")
@click.option("--out", metavar="FILE", help="Write here: .csv, .json, .geojson, .nc, .parquet, .gpkg.")
@click.option(
    "--ledger", "ledger_file", metavar="FILE", help="Write the evidence: .csv, .json or, in words, .txt."
)
@click.option("--draws", type=click.IntRange(min=1), help="Monte Carlo answers besides the linear ones.")
@click.option("--seed", type=click.IntRange(min=0), default=1, show_default=True, help="Of the draws.")
@click.option("--strict", is_flag=True, help="Exit 1 if any row is not restored.")
@convention_options
@radius_option
@layout_options
@debug_option
def sites(
    table: str,
    history_file: str,
    frame: str,
    frame_kind: str | None,
    ages: tuple[float, ...] | None,
    outlines: str | None,
    plate_property: str,
    edges: str,
    within_km: float,
    crust_age: str | None,
    rides: str | None,
    time_scale: str | None,
    table_time_scale: str | None,
    out: str | None,
    ledger_file: str | None,
    draws: int | None,
    seed: int,
    strict: bool,
    beyond: str,
    radius_km: float,
    latitudes: str,
    **layout: Any,
) -> int:
    """Restore the sites in TABLE to where they stood, with 95 % ellipses.

    \b
    oncewhere sites scenario_files/cores.csv --history scenario_files/history.toml --frame deep
    """
    from restore.geometry.latitudes import Latitudes
    from restore.history.circuit import Circuit
    from restore.motion.draws import Draws
    from restore.motion.site_files import restore_file
    from restore.motion.sites import SiteJob
    from restore.scenario.provenance import provenance

    history, clock = one_clock(read_history(history_file, mixed=True), time_scale, table_time_scale)
    history = riding(history, rides)
    stated = history.frames.get(frame)
    if frame_kind is not None and stated not in {None, frame_kind}:
        raise click.UsageError(
            f"--frame-kind {frame_kind}: the history says that {frame} is of kind {stated}"
        )
    ground = make_ground(outlines, plate_property, edges, within_km, crust_age, latitudes)
    job = SiteJob(
        Circuit(history, frame, beyond),
        ages,
        Latitudes(latitudes),
        radius_km,
        frame_kind or history.kind_of(frame),
        default_threads(),
        None if draws is None else Draws(draws, seed),
        clock,
        ground,
    )
    settings: dict[str, Any] = {
        "frame": frame,
        "frame_kind": job.frame_kind,
        "ages": "own" if ages is None else list(ages),
        "latitudes": latitudes,
        "radius_km": radius_km,
        "beyond": beyond,
    }
    if clock is not None:
        settings |= {"time_scale": clock.to.name, "table_time_scale": table_time_scale}
    inputs = [table, *history_inputs(history_file, history), *([rides] if rides else [])]
    if ground is not None:
        named = {"outlines": outlines, "edges": edges, "within_km": within_km, "crust_age": crust_age}
        settings |= named
        inputs += [file for file in (outlines, crust_age and crust_age.partition(":")[0]) if file]
    trail = provenance(inputs, settings)
    with progress(table, out) as advance:
        done = restore_file(
            table, job, make_layout(**layout), out, ledger_file, trail, say_findings, advance
        )
    say_counts(done.counts)
    return 1 if done.malformed or (strict and set(done.counts) - {"restored"}) else 0
