"""`oncewhere isochrons`: the lines of crust of one age on both plates."""

from __future__ import annotations

import functools
import os
from typing import TYPE_CHECKING, Any

import click

from restore.commands.options import Age, history_inputs, make_layout, one_clock, read_history, say_findings
from restore.commands.spreading import (
    ages_option,
    make_shares,
    need_ages,
    pair_options,
    said,
    say_statuses,
    table_options,
)

if TYPE_CHECKING:
    from restore.motion.flowlines import Spreading
    from restore.motion.isochrons import RidgeLine
    from restore.motion.site_clock import SiteClock


@click.command()
@click.argument("line")
@functools.partial(pair_options, clock=False)
@ages_option(required=False)
@click.option(
    "--chrons", metavar="LABELS", help="Chrons, such as C5n.2n(o),C6n(y); they need a time scale."
)
@click.option("--time-scale", metavar="NAME|FILE", help="The one clock of the history and of --chrons.")
@click.option(
    "--ridge-age", type=Age(), default=0.0, help="The age at which an extinct ridge lay there, Ma."
)
@click.option("--on-plate", default="", help="The plate whose coordinates an extinct ridge is given in.")
@click.option("--longest-km", type=click.FloatRange(min=0.1),
              help="Put points on the ridge line so that none are farther apart.")  # fmt: skip
@click.option("--observed", metavar="FILE", help="Instead: how far picks lie from the isochrons of their age:"
              " plate, lat_deg, lon_deg, age_ma[, point, sigma_km].")  # fmt: skip
@click.option("--by-stage", is_flag=True, help="With --observed: root mean square and mean by stage.")
@table_options
def isochrons(
    line: str,
    between: tuple[str, str],
    history_file: str,
    share: float | str,
    tolerance_m: float,
    ages: tuple[float, ...] | None,
    chrons: str | None,
    time_scale: str | None,
    ridge_age: float,
    on_plate: str,
    longest_km: float | None,
    observed: str | None,
    by_stage: bool,
    out: str | None,
    beyond: str,
    radius_km: float,
    latitudes: str,
    **layout: Any,
) -> int:
    """The isochrons that a ridge LINE left on both plates, today's shape of the ridge assumed at all ages.

    LINE is GeoJSON, or a table lat_deg, lon_deg[, line]. With --out FILE.geojson they are lines, else
    a table of their points.

    \b
    oncewhere isochrons scenario_files/ridge.geojson --between ovrath,quemmel --ages 10,20,40 \\
        --history scenario_files/history.toml --out isochrons.geojson
    """
    _check_choices(ages, chrons, ridge_age, on_plate, observed, by_stage)
    from restore.geometry.latitudes import Latitudes
    from restore.motion.flowlines import Spreading
    from restore.motion.isochrons import densified_line, read_ridge

    history, clock = one_clock(read_history(history_file, mixed=True), time_scale, None)
    named = _named_ages(chrons, clock)
    ages = tuple(sorted(named)) if named else ages
    asked = (0.0,) if observed is not None and ages is None else need_ages(ages)
    shares = make_shares(share)
    spreading = Spreading.between(
        history, between, asked, shares, None, beyond,
        latitudes=Latitudes(latitudes), radius_km=radius_km, tolerance_m=tolerance_m,
    )  # fmt: skip
    lines = read_ridge(line, make_layout(**layout))
    _say_repeated(lines, line)
    if longest_km is not None:
        lines = [densified_line(one, longest_km, spreading) for one in lines]
    settings = {
        "between": list(between), "ages": list(asked), "chrons": chrons, "time_scale": time_scale,
        "share": shares.words(), "ridge_age": ridge_age, "on_plate": on_plate, "tolerance_m": tolerance_m,
        "latitudes": latitudes, "radius_km": radius_km, "beyond": beyond,
    }  # fmt: skip
    more = [file for file in (observed, share) if isinstance(file, str)]
    inputs = [line, *history_inputs(history_file, history), *more]
    if observed is not None:
        _write_observed(spreading, lines, observed, by_stage, out, inputs, settings)
        return 0
    return _write_lines(spreading, lines, named, (ridge_age, on_plate), out, inputs, settings)


def _check_choices(
    ages: tuple[float, ...] | None,
    chrons: str | None,
    ridge_age: float,
    on_plate: str,
    observed: str | None,
    by_stage: bool,
) -> None:
    if by_stage and observed is None:
        raise click.UsageError("--by-stage needs --observed FILE")
    if (ages is None) == (chrons is None) and observed is None:
        raise click.UsageError("give either --ages or --chrons")
    if on_plate and not ridge_age > 0.0:
        raise click.UsageError("--on-plate goes with --ridge-age: today's ridge is on both plates")
    if ridge_age > 0.0 and not on_plate:
        raise click.UsageError("--ridge-age needs --on-plate: the plate whose coordinates the line is in")


def _named_ages(chrons: str | None, clock: SiteClock | None) -> dict[float, str]:
    """The ages of the chrons that were asked, on the run's clock."""
    if chrons is None:
        return {}
    from restore.motion.isochrons import chron_ages

    if clock is None:
        raise click.UsageError("--chrons needs --time-scale: the history names no clock")
    return chron_ages(chrons.split(","), clock.to)


def _say_repeated(lines: list[RidgeLine], file: str) -> None:
    from restore.findings import Finding, Place
    from restore.motion.isochrons import repeated_points

    for one in lines:
        count = repeated_points(one)
        if count:
            what = f"line {one.name!r}: {count} points repeat the one before them"
            if count == 1:
                what = f"line {one.name!r}: 1 point repeats the one before it"
            note = Finding("note", "repeated points", Place(file), what, remedy="they are kept")
            say_findings([note])


def _write_lines(
    spreading: Spreading,
    lines: list[RidgeLine],
    named: dict[float, str],
    extinct: tuple[float, str],
    out: str | None,
    inputs: list[str],
    settings: dict[str, Any],
) -> int:
    from restore.files.atomic import check_target, refuse_input
    from restore.files.tables import TableOut
    from restore.files.vectors import write_geojson
    from restore.motion.isochrons import ASSUMES
    from restore.motion.isochrons import isochrons as isochrons_of
    from restore.scenario.provenance import provenance

    record = provenance(inputs, {**settings, "assumes": ASSUMES})
    found = isochrons_of(spreading, lines, named, *extinct)
    code = say_statuses(state for arm in found.arms for state in arm.states())
    if out is not None and os.path.splitext(out)[1].lower() == ".geojson":
        check_target(out)
        refuse_input(out, inputs)
        write_geojson(out, found.features(), record)
        return code
    with TableOut(out, record, ("lat_deg", "lon_deg")) as target:
        target.add(said(found.columns(), latitudes=spreading.latitudes.kind))
    return code


def _write_observed(
    spreading: Spreading,
    lines: list[RidgeLine],
    observed: str,
    by_stage: bool,
    out: str | None,
    inputs: list[str],
    settings: dict[str, Any],
) -> None:
    from restore.files.tables import TableOut
    from restore.motion.isochrons import ASSUMES
    from restore.motion.observed import against_isochrons, read_observed
    from restore.scenario.provenance import provenance

    misfits, half = against_isochrons(spreading, lines, read_observed(observed, spreading, aged=True))
    columns = misfits.by_stage(half.edges, spreading) if by_stage else misfits.columns()
    record = provenance(inputs, {**settings, "assumes": ASSUMES})
    where = None if by_stage else ("lat_deg", "lon_deg")
    words = {"latitudes": spreading.latitudes.kind, "errors": "error of rows only", "assumes": ASSUMES}
    with TableOut(out, record, where) as target:
        target.add(said(columns, **words))
