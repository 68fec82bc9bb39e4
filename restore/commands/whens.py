"""`oncewhere when`: when a site crossed a latitude, came within a distance, was nearest."""

from __future__ import annotations

from typing import Any

import click

from restore.commands.options import (
    Numbers,
    convention_options,
    debug_option,
    history_inputs,
    history_option,
    radius_option,
    read_history,
)
from restore.commands.separations import PlacedSite


class Range(click.ParamType[Any]):
    """YOUNGER:OLDER ages, Ma."""

    name = "range"

    def get_metavar(self, param: click.Parameter, ctx: click.Context) -> str:
        return "YOUNGER:OLDER"

    def convert(self, value: Any, param: click.Parameter | None, ctx: click.Context | None) -> Any:
        if isinstance(value, tuple):
            return value
        try:
            younger, older = (float(part) for part in value.split(":"))
        except ValueError:
            self.fail(f"{value!r}: write YOUNGER:OLDER, for example 0:120", param, ctx)
        if not 0.0 <= younger < older < float("inf"):
            self.fail(f"{value!r}: ages in Ma, the younger one first", param, ctx)
        return younger, older


@click.command()
@click.option("--site", required=True, type=PlacedSite(), help="The site, where it is today.")
@click.option("--during", required=True, type=Range(), help="The ages to search, Ma.")
@click.option("--latitude", type=float, help="When did it cross this latitude?")
@click.option("--near", type=Numbers("LAT", "LON"), help="A point that is fixed in the frame.")
@click.option("--near-site", type=PlacedSite(), help="Another site, moving with its own plate.")
@click.option("--near-line", metavar="FILE", help="A line that moves with --line-plate.")
@click.option("--line-plate", metavar="PLATE", help="The plate of the line.")
@click.option("--within-km", type=click.FloatRange(min=0, min_open=True), help="When did it come within this"
              " distance? Without it: when was it nearest?")  # fmt: skip
@history_option()
@click.option("--frame", required=True, help="The plate or frame that positions are in.")
@click.option("--out", metavar="FILE", help="Write here: .csv, .json, .geojson, .nc, .parquet.")
@convention_options
@radius_option
@debug_option
def when(
    site: tuple[float, float, str],
    during: tuple[float, float],
    latitude: float | None,
    near: tuple[float, float] | None,
    near_site: tuple[float, float, str] | None,
    near_line: str | None,
    line_plate: str | None,
    within_km: float | None,
    history_file: str,
    frame: str,
    out: str | None,
    beyond: str,
    latitudes: str,
    radius_km: float,
) -> None:
    """All ages at which something happened to a site, with their errors from the rows.

    What happened is said forward in time. A site is searched as far back as --during says: give the age
    of its crust there.

    \b
    oncewhere when --site 10,-30,ovrath --during 0:120 --latitude 12 \\
        --history scenario_files/history.toml --frame deep
    """
    asked = [question is not None for question in (latitude, near, near_site, near_line)]
    if sum(asked) != 1:
        raise click.UsageError("ask one thing: --latitude, --near, --near-site or --near-line")
    if (near_line is None) != (line_plate is None):
        raise click.UsageError("--near-line and --line-plate go together")
    if latitude is not None and within_km is not None:
        raise click.UsageError("--within-km goes with --near, --near-site or --near-line")
    from restore.files.tables import TableOut
    from restore.geometry.latitudes import Latitudes
    from restore.history.circuit import Circuit
    from restore.motion import when as questions
    from restore.motion.separation import Site
    from restore.scenario.provenance import provenance

    history = read_history(history_file)
    circuit, kind, asker = Circuit(history, frame, beyond), Latitudes(latitudes), Site(*site)
    inputs = history_inputs(history_file, history)
    if latitude is not None:
        events = questions.crosses_latitude(circuit, asker, latitude, *during, kind)
    elif near is not None:
        events = questions.near_point(circuit, asker, near, *during, within_km, kind, radius_km)
    elif near_site is not None:
        other = Site(*near_site)
        events = questions.near_site(circuit, asker, other, *during, within_km, kind, radius_km)
    else:
        from restore.files.lines import read_lines

        assert near_line is not None
        assert line_plate is not None
        inputs.append(near_line)
        lines = [(one.lat_deg, one.lon_deg) for one in read_lines(near_line)]
        events = questions.near_lines(
            circuit, asker, lines, line_plate, *during, within_km, kind, radius_km
        )
    name = f"{site[0]:g},{site[1]:g},{site[2]}"
    events = events or [questions.NEVER]
    columns = questions.as_columns([(name, event) for event in events])
    said = {"frame": frame, "frame_kind": history.kind_of(frame), "latitudes": latitudes}
    said["errors"] = "error of rows only"
    columns |= {name: [text] * len(events) for name, text in said.items()}
    settings: dict[str, Any] = {
        "site": site,
        "during": during,
        "latitude": latitude,
        "near": near,
        "within_km": within_km,
    }
    settings |= {"near_site": near_site, "line_plate": line_plate, "frame": frame}
    with TableOut(out, provenance(inputs, settings), ("lat_deg", "lon_deg")) as target:
        target.add(columns)
