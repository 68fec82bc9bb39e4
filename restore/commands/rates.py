"""`oncewhere rates`: how fast a plate moves relative to another, at points."""

from __future__ import annotations

from typing import TYPE_CHECKING, Any

import click

from restore.commands.options import (
    Age,
    Numbers,
    convention_options,
    debug_option,
    history_inputs,
    history_option,
    layout_options,
    make_layout,
    radius_option,
    read_history,
)

if TYPE_CHECKING:
    from restore.files.delimited import Layout
    from restore.history.ledger import Ledger


@click.command()
@click.option("--plate", help="The plate that moves.")
@click.option("--relative-to", metavar="OTHER", help="The plate or frame held still.")
@click.option("--at", type=Numbers("LAT", "LON"), help="One point.")
@click.option("--points", metavar="FILE", help="A table of points: lat_deg, lon_deg and any others;"
              " or lines (GeoJSON), whose vertices are taken.")  # fmt: skip
@click.option("--age", "age_ma", type=Age(), default=0.0, show_default=True, help="Age, Ma.")
@click.option("--average", type=Numbers("OLDER", "YOUNGER"), help="The mean between two ages instead.")
@click.option(
    "--at-on", type=click.Choice(["plate", "relative-to"]), default="plate", show_default=True,
    help="The points are today's on the plate, or positions in OTHER's coordinates at that age.",
)  # fmt: skip
@history_option(required=False)
@click.option("--pole", type=Numbers("LAT", "LON", "DEG_PER_MYR"), help="Instead of a history.")
@click.option(
    "--ledger", "ledger_file", metavar="FILE", help="Write the evidence: .json or, in words, .txt."
)
@click.option("--out", metavar="FILE", help="Write here: .csv, .json, .geojson, .nc, .parquet, .gpkg.")
@convention_options
@radius_option
@layout_options
@debug_option
def rates(
    plate: str | None,
    relative_to: str | None,
    at: tuple[float, float] | None,
    points: str | None,
    age_ma: float,
    average: tuple[float, float] | None,
    at_on: str,
    history_file: str | None,
    pole: tuple[float, float, float] | None,
    ledger_file: str | None,
    out: str | None,
    beyond: str,
    radius_km: float,
    latitudes: str,
    **layout: Any,
) -> None:
    """Velocities in mm/yr: east, north, speed, azimuth, with the errors of the rows.

    \b
    oncewhere rates --pole 56,-94,0.76 --at -28,-71
    oncewhere rates --plate ovrath --relative-to quemmel --at 10,-30 --history scenario_files/history.toml
    """
    _check_choices(at, points, history_file, pole, plate, relative_to, average, age_ma, ledger_file)
    from restore.files.points import beside
    from restore.files.tables import TableOut
    from restore.geometry.latitudes import Latitudes
    from restore.motion.rates import average_rates, rates_from_pole
    from restore.motion.rates import rates as rates_at
    from restore.scenario.provenance import provenance

    kind = Latitudes(latitudes)
    own, lat, lon = (
        ({}, [at[0]], [at[1]]) if at is not None else _read_points(str(points), make_layout(**layout))
    )
    inputs = [] if points is None else [points]
    if pole is not None:
        found = rates_from_pole(*pole, lat, lon, kind, radius_km)
    else:
        assert history_file is not None
        assert plate is not None
        assert relative_to is not None
        history = read_history(history_file)
        inputs += history_inputs(history_file, history)
        asked = (history, plate, relative_to, lat, lon)
        if average is not None:
            found = average_rates(*asked, *average, at_on, kind, radius_km, beyond)
        else:
            found = rates_at(*asked, age_ma, at_on, kind, radius_km, beyond)
        if ledger_file is not None and found.ledger is not None:
            _write_ledger(ledger_file, found.ledger)
    settings: dict[str, Any] = {
        "plate": plate,
        "relative_to": relative_to,
        "age_ma": age_ma,
        "average": average,
        "at_on": at_on,
    }
    settings |= {"pole": pole, "latitudes": latitudes, "radius_km": radius_km, "beyond": beyond}
    count = len(found.lat_deg)
    said = {"plate": plate or "", "relative_to": relative_to or "", "latitudes": latitudes}
    said["errors"] = "error of rows only" if pole is None else "not known"
    if pole is None:
        said["frame_kind"] = history.kind_of(str(relative_to))
    results = found.columns() | {name: [value] * count for name, value in said.items()}
    with TableOut(out, provenance(inputs, settings), ("then_lat_deg", "then_lon_deg")) as target:
        target.add(beside(own, results))


def _check_choices(
    at: tuple[float, float] | None,
    points: str | None,
    history_file: str | None,
    pole: tuple[float, float, float] | None,
    plate: str | None,
    relative_to: str | None,
    average: tuple[float, float] | None,
    age_ma: float,
    ledger_file: str | None,
) -> None:
    """Options that do not go together."""
    if (at is None) == (points is None):
        raise click.UsageError("give either --at LAT,LON or --points FILE")
    if (history_file is None) == (pole is None):
        raise click.UsageError("give either --history FILE or --pole LAT,LON,DEG_PER_MYR")
    if pole is None and (plate is None or relative_to is None):
        raise click.UsageError("with --history give --plate and --relative-to")
    if average is not None and age_ma:
        raise click.UsageError("--average says its own ages: leave out --age")
    if average is not None and (pole is not None or not average[0] > average[1] >= 0.0):
        raise click.UsageError("--average OLDER,YOUNGER goes with --history, the older age first")
    if ledger_file is not None and (pole is not None or not ledger_file.endswith((".json", ".txt"))):
        raise click.UsageError("--ledger FILE.json or FILE.txt goes with --history")


def _write_ledger(file: str, ledger: Ledger) -> None:
    """The chain behind the rates: at one age one entry, for a mean that of both ages."""
    import json

    from restore.files.atomic import whole_file

    with whole_file(file) as part:
        if file.endswith(".json"):
            part.write_text(json.dumps(ledger.as_records(), indent=1) + "\n", encoding="utf-8")
        else:
            lines = [line for item in range(len(ledger)) for line in ledger.words(item)]
            part.write_text("\n".join(lines) + "\n", encoding="utf-8")


def _read_points(file: str, layout: Layout) -> tuple[dict[str, list[str]], list[float], list[float]]:
    from restore.files.lines import read_lines
    from restore.files.points import read_points

    if not file.lower().endswith((".geojson", ".json", ".gpkg", ".shp")):
        return read_points(file, layout)
    lines = read_lines(file)
    own = {"line": [str(number) for number, one in enumerate(lines, 1) for _ in one.lat_deg]}
    lat = [float(value) for one in lines for value in one.lat_deg]
    return own, lat, [float(value) for one in lines for value in one.lon_deg]
