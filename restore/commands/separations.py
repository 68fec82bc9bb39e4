"""`oncewhere separation`: how far apart two sites stood, and in which direction."""

from __future__ import annotations

from typing import Any

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


class PlacedSite(click.ParamType[Any]):
    """LAT,LON,PLATE."""

    name = "site"

    def get_metavar(self, param: click.Parameter, ctx: click.Context) -> str:
        return "LAT,LON,PLATE"

    def convert(self, value: Any, param: click.Parameter | None, ctx: click.Context | None) -> Any:
        if isinstance(value, tuple):
            return value
        parts = value.split(",", 2)
        if len(parts) < 3 or not parts[2].strip():
            self.fail(f"{value!r}: write LAT,LON,PLATE", param, ctx)
        return (*Numbers("LAT", "LON").convert(",".join(parts[:2]), param, ctx), parts[2].strip())


@click.command()
@click.option("--first", required=True, type=PlacedSite(), help="Where the bearing is taken.")
@click.option("--second", required=True, type=PlacedSite(), help="The site it points to.")
@click.option("--ages", required=True, type=Ages(), help="0,10,20 or 0:120:10.")
@history_option()
@click.option("--frame", required=True, help="The plate or frame that positions and bearing are in.")
@click.option("--out", metavar="FILE", help="Write here: .csv, .json, .nc, .parquet.")
@convention_options
@radius_option
@debug_option
def separation(
    first: tuple[float, float, str],
    second: tuple[float, float, str],
    ages: tuple[float, ...] | None,
    history_file: str,
    frame: str,
    out: str | None,
    beyond: str,
    latitudes: str,
    radius_km: float,
) -> None:
    """Distance and bearing of two of today's sites at past ages, with the errors of the rows.

    \b
    oncewhere separation --first 10,-30,ovrath --second 5,10,quemmel --ages 0:100:20 \\
        --history scenario_files/history.toml --frame deep
    """
    if ages is None:
        raise click.UsageError("--ages own has no meaning here: give ages in Ma")
    from restore.files.tables import TableOut
    from restore.geometry.latitudes import Latitudes
    from restore.history.circuit import Circuit
    from restore.motion.separation import Site
    from restore.motion.separation import separation as between
    from restore.scenario.provenance import provenance

    history = read_history(history_file)
    circuit = Circuit(history, frame, beyond)
    found = between(circuit, Site(*first), Site(*second), ages, Latitudes(latitudes), radius_km)
    settings: dict[str, Any] = {"first": first, "second": second, "ages": list(ages), "frame": frame}
    settings |= {"latitudes": latitudes, "radius_km": radius_km, "beyond": beyond}
    columns = found.columns()
    said = {"frame": frame, "frame_kind": history.kind_of(frame), "latitudes": latitudes}
    said["errors"] = "error of rows only"
    columns |= {name: [text] * len(ages) for name, text in said.items()}
    with TableOut(out, provenance(history_inputs(history_file, history), settings)) as target:
        target.add(columns)
