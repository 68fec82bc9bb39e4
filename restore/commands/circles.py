"""`oncewhere circles`: small circles about a pole through points, as lines."""

from __future__ import annotations

import os
from typing import TYPE_CHECKING, Any

import click

from restore.commands.options import Age, Numbers, history_inputs, history_option, make_layout, read_history
from restore.commands.spreading import said, table_options

if TYPE_CHECKING:
    from restore.geometry.latitudes import Latitudes
    from restore.motion.circle_lines import CircleLine


@click.command()
@click.argument("points")
@click.option("--pole", type=Numbers("LAT", "LON"), help="The pole, instead of one from a history.")
@history_option(required=False)
@click.option("--plate", help="The plate whose stage pole it is.")
@click.option("--relative-to", metavar="OTHER", help="The plate or frame held still.")
@click.option("--from", "from_age", type=Age(), help="The older age of the stage, Ma.")
@click.option("--to", "to_age", type=Age(), default=0.0, show_default=True, help="The younger age, Ma.")
@click.option("--coordinates", default="relative-to", show_default=True, metavar="relative-to|plate|FRAME",
              help="Whose coordinates the points and the circles are in.")  # fmt: skip
@click.option("--arc", type=Numbers("FROM_DEG", "TO_DEG"), default=(0.0, 360.0),
              help="How far the circles go, degrees about the pole from each point; 0,360 unless said.")  # fmt: skip
@click.option("--step-deg", type=click.FloatRange(min=0, min_open=True), default=1.0, show_default=True,
              help="The greatest angle between two points of a circle.")  # fmt: skip
@table_options
def circles(
    points: str,
    pole: tuple[float, float] | None,
    history_file: str | None,
    plate: str | None,
    relative_to: str | None,
    from_age: float | None,
    to_age: float,
    coordinates: str,
    arc: tuple[float, float],
    step_deg: float,
    out: str | None,
    beyond: str,
    radius_km: float,
    latitudes: str,
    **layout: Any,
) -> None:
    """Small circles about a pole through POINTS (lat_deg, lon_deg): fracture zones follow those of a stage.

    With --out FILE.geojson they are lines, else a table of their points.

    \b
    oncewhere circles scenario_files/ridge.csv --pole 62,-30 --arc -20,20
    oncewhere circles scenario_files/ridge.csv --plate ovrath --relative-to quemmel --from 20 \\
        --history scenario_files/history.toml --out circles.geojson
    """
    if (history_file is None) == (pole is None):
        raise click.UsageError("give either --history FILE or --pole LAT,LON")
    if pole is None and (plate is None or relative_to is None or from_age is None):
        raise click.UsageError("with --history give --plate, --relative-to and --from")
    if not 0.0 < arc[1] - arc[0] <= 360.0:
        raise click.UsageError(
            f"--arc {arc[0]:g},{arc[1]:g}: the end must lie above the start, by at most 360"
        )
    from restore.files.points import read_points
    from restore.geometry.latitudes import Latitudes
    from restore.motion.circle_lines import circle_lines

    kind = Latitudes(latitudes)
    own, lat, lon = read_points(points, make_layout(**layout))
    inputs = [points]
    if pole is None:
        assert history_file is not None
        history = read_history(history_file)
        inputs += history_inputs(history_file, history)
        assert plate is not None
        assert relative_to is not None
        assert from_age is not None
        axis = _stage_axis(history, plate, relative_to, (from_age, to_age), coordinates, beyond, kind)
    else:
        axis = pole
    settings = {
        "pole": list(axis), "plate": plate, "relative_to": relative_to, "from_age": from_age, "to_age": to_age,
        "coordinates": coordinates, "arc_deg": list(arc), "step_deg": step_deg, "latitudes": latitudes,
        "radius_km": radius_km,
    }  # fmt: skip
    lines = circle_lines(axis, own, lat, lon, kind, arc, step_deg)
    _write(lines, out, inputs, settings, radius_km)


def _write(
    lines: list[CircleLine], out: str | None, inputs: list[str], settings: dict[str, Any], radius_km: float
) -> None:
    from restore.motion.circle_lines import circle_columns
    from restore.scenario.provenance import provenance

    record = provenance(inputs, settings)
    if out is not None and os.path.splitext(out)[1].lower() == ".geojson":
        from restore.files.atomic import check_target, refuse_input
        from restore.files.vectors import write_geojson

        check_target(out)
        refuse_input(out, inputs)
        write_geojson(out, [line.feature() for line in lines], record)
        return
    from restore.files.tables import TableOut

    with TableOut(out, record, ("lat_deg", "lon_deg")) as target:
        target.add(said(circle_columns(lines, radius_km), latitudes=str(settings["latitudes"])))


def _stage_axis(
    history: Any,
    plate: str,
    relative_to: str,
    ages: tuple[float, float],
    coordinates: str,
    beyond: str,
    kind: Latitudes,
) -> tuple[float, float]:
    from restore.errors import DomainError
    from restore.history.poles import stage_pole

    found = stage_pole(history, plate, relative_to, *ages, coordinates, beyond, kind)
    record = found.as_record()
    if record["pole_lat_deg"] is None:
        raise DomainError(
            f"{plate} relative to {relative_to}, {ages[0]:g} to {ages[1]:g} Ma: a zero rotation has no pole to"
            " draw circles about; take another stage"
        )
    return record["pole_lat_deg"], record["pole_lon_deg"]
