"""`oncewhere velocity-field`: velocities on a global grid, each cell on its own plate."""

from __future__ import annotations

import click

from restore.commands.options import (
    Ages,
    convention_options,
    debug_option,
    history_inputs,
    history_option,
    radius_option,
    read_history,
)


@click.command("velocity-field")
@click.option("--outlines", required=True, metavar="FILE", help="The plates' outlines.")
@click.option("--frame", required=True, help="The plate or frame that velocities are relative to.")
@click.option("--ages", type=Ages(), default="0", show_default=True, help="0,10,20 or 0:120:10.")
@click.option("--step-deg", type=click.FloatRange(min=0, min_open=True), default=1.0, show_default=True,
              help="Spacing of the cells; it divides 180.")  # fmt: skip
@history_option()
@click.option("--out", required=True, metavar="FILE.nc", help="A CF netCDF file.")
@convention_options
@radius_option
@debug_option
def velocity_field(
    outlines: str,
    frame: str,
    ages: tuple[float, ...] | None,
    step_deg: float,
    history_file: str,
    out: str,
    beyond: str,
    latitudes: str,
    radius_km: float,
) -> None:
    """Velocities of today's cells at past ages, where their material then was.

    \b
    oncewhere velocity-field --outlines scenario_files/outlines.geojson --frame deep --ages 0:100:20 \\
        --history scenario_files/history.toml --out velocities.nc
    """
    if ages is None:
        raise click.UsageError("--ages own has no meaning here: give ages in Ma")
    from restore.history.circuit import Circuit
    from restore.motion.velocity_field import grid_on_plates, write_velocity_field
    from restore.outlines import Outlines
    from restore.scenario.provenance import provenance

    history = read_history(history_file)
    circuit = Circuit(history, frame, beyond)
    grid = grid_on_plates(circuit, Outlines.read(outlines, latitudes=latitudes), step_deg)
    settings = {"frame": frame, "ages": list(ages), "step_deg": step_deg, "latitudes": latitudes}
    settings |= {"radius_km": radius_km, "beyond": beyond}
    trail = provenance([*history_inputs(history_file, history), outlines], settings)
    write_velocity_field(out, circuit, grid, ages, history.kind_of(frame), trail, radius_km)
