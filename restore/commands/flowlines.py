"""`oncewhere flowlines`: the paths along which two plates parted, and what was made along them."""

from __future__ import annotations

from collections import Counter
from typing import TYPE_CHECKING, Any

import click

from restore.commands.options import Age, history_inputs, make_layout, read_history, say_findings
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
    from restore.files.tables import TableOut
    from restore.motion.flowlines import Spreading
    from restore.motion.ridge_points import RidgePoints

AT_ONCE = 200_000
POSITIONS = ("lat_deg", "lon_deg")


@click.command()
@click.argument("points")
@pair_options
@ages_option()
@click.option("--jumps", metavar="FILE", help="Ridge jumps: start, age_ma, lat_deg, lon_deg[, on_plate,"
              " captured_by]; older crust came from the ridge point named.")  # fmt: skip
@click.option("--frame", metavar="F", help="Positions in this plate or frame, each at its own age.")
@click.option("--restored-age", type=Age(), help="With --frame: all positions at this age.")
@click.option("--every-myr", type=click.FloatRange(min=0, min_open=True),
              help="More rows, for drawing; `asked` is false on them.")  # fmt: skip
@click.option("--rates", is_flag=True, help="Instead: rates, azimuths and lengths by the rows' own stages, from"
              " the ridge to the oldest age.")  # fmt: skip
@click.option("--at-km", metavar="START:STOP:STEP", help="Instead: the crust's age at distances from the"
              " ridge along each arm, km.")  # fmt: skip
@click.option("--observed", metavar="FILE", help="Instead: how far observed points lie from the flowlines:"
              " plate, lat_deg, lon_deg[, point, start, sigma_km].")  # fmt: skip
@click.option("--by-stage", is_flag=True, help="With --observed: root mean square and mean by stage.")
@click.option("--outlines", metavar="FILE", help="Say which start points lie off the pair's boundary.")
@table_options
def flowlines(
    points: str,
    between: tuple[str, str],
    history_file: str,
    share: float | str,
    tolerance_m: float,
    ages: tuple[float, ...] | None,
    jumps: str | None,
    frame: str | None,
    restored_age: float | None,
    every_myr: float | None,
    rates: bool,
    at_km: str | None,
    observed: str | None,
    by_stage: bool,
    outlines: str | None,
    out: str | None,
    beyond: str,
    radius_km: float,
    latitudes: str,
    **layout: Any,
) -> int:
    """Both arms of the flowlines from ridge POINTS: start, lat_deg, lon_deg[, age_ma, on_plate].

    Distances of observed points are positive to the right, looking away from the ridge. Positions are in present-day coordinates of each plate unless --frame.

    \b
    oncewhere flowlines scenario_files/ridge.csv --between ovrath,quemmel --ages 0:60:5 \\
        --history scenario_files/history.toml
    """
    asked = need_ages(ages)
    _check_choices(rates, at_km, observed, by_stage, frame, restored_age, jumps)
    from restore.files.tables import TableOut
    from restore.geometry.latitudes import Latitudes
    from restore.motion.flowlines import Spreading
    from restore.motion.ridge_points import RidgePoints
    from restore.scenario.provenance import provenance

    history = read_history(history_file)
    shares = make_shares(share)
    spreading = Spreading.between(
        history, between, asked, shares, frame, beyond,
        latitudes=Latitudes(latitudes), radius_km=radius_km, tolerance_m=tolerance_m,
        every_myr=every_myr, restored_ma=restored_age,
    )  # fmt: skip
    starts = RidgePoints.read(points, between, make_layout(**layout))
    _say_off_boundary(starts, spreading, outlines, points)
    settings = {
        "between": list(between), "ages": list(asked), "share": shares.words(), "frame": frame,
        "restored_age": restored_age, "every_myr": every_myr, "tolerance_m": tolerance_m,
        "latitudes": latitudes, "radius_km": radius_km, "beyond": beyond,
    }  # fmt: skip
    more = [file for file in (jumps, observed, outlines, share) if isinstance(file, str)]
    inputs = [points, *history_inputs(history_file, history), *more]
    with TableOut(
        out, provenance(inputs, settings), None if rates or at_km or by_stage else POSITIONS
    ) as target:
        if rates or at_km:
            _write_along(target, spreading, starts, at_km, latitudes)
        elif observed is not None:
            _write_observed(target, spreading, starts, observed, by_stage, latitudes)
        else:
            return _write_positions(target, spreading, starts, jumps)
    return 0


def _check_choices(
    rates: bool,
    at_km: str | None,
    observed: str | None,
    by_stage: bool,
    frame: str | None,
    restored_age: float | None,
    jumps: str | None,
) -> None:
    others = [name for name, on in (("--rates", rates), ("--at-km", at_km), ("--observed", observed)) if on]
    if len(others) > 1:
        raise click.UsageError(f"{' and '.join(others)} are different tables: ask for one")
    if by_stage and observed is None:
        raise click.UsageError("--by-stage needs --observed FILE")
    if restored_age is not None and frame is None:
        raise click.UsageError("--restored-age needs --frame F")
    if others and (frame is not None or jumps is not None):
        raise click.UsageError(f"{others[0]} is for present-day coordinates without jumps: leave out"
                               " --frame and --jumps")  # fmt: skip


def _write_positions(target: TableOut, spreading: Spreading, starts: RidgePoints, jumps: str | None) -> int:
    from restore.motion.flowlines import FlowlineMaker
    from restore.motion.ridge_points import read_jumps

    its_jumps = read_jumps(jumps, starts, spreading.plates) if jumps is not None else None
    maker = FlowlineMaker(spreading, starts)
    frame = spreading.frame
    words = {"coordinates": "present-day, of each plate", "latitudes": spreading.latitudes.kind}
    if frame is not None:
        kind = frame.history.kind_of(frame.frame)
        words |= {"coordinates": frame.frame, "frame_kind": kind}
    size = max(1, AT_ONCE // (2 * len(maker.ages)))
    states: Counter[str] = Counter()
    for at in range(0, max(len(starts), 1), size):
        made = maker.make(starts.some(slice(at, at + size)), its_jumps)
        states.update(made.states())
        target.add(said(made.columns(), **words))
    return say_statuses(states.elements())


def _write_along(
    target: TableOut, spreading: Spreading, starts: RidgePoints, at_km: str | None, latitudes: str
) -> None:
    import numpy as np

    from restore.errors import InputError
    from restore.motion.ages import parse_ages
    from restore.motion.along import along, distance_columns, stage_columns

    if at_km is None:
        columns = stage_columns(along(spreading, starts))
        target.add(said(columns, latitudes=latitudes, errors="error of rows only"))
        return
    try:
        distances = parse_ages(at_km)
    except InputError:
        distances = None
    if distances is None:
        raise click.UsageError(f"--at-km {at_km!r}: write distances in km, 0,100,200 or 0:1000:100")
    target.add(distance_columns(along(spreading, starts), np.array(distances)))


def _write_observed(
    target: TableOut,
    spreading: Spreading,
    starts: RidgePoints,
    observed: str,
    by_stage: bool,
    latitudes: str,
) -> None:
    from restore.motion.observed import against_flowlines, read_observed

    table = read_observed(observed, spreading)
    misfits, half = against_flowlines(spreading, starts, table)
    columns = misfits.by_stage(half.edges, spreading) if by_stage else misfits.columns()
    target.add(said(columns, latitudes=latitudes, errors="error of rows only"))


def _say_off_boundary(starts: RidgePoints, spreading: Spreading, outlines: str | None, file: str) -> None:
    if outlines is None:
        return
    from restore.motion.boundary import off_boundary
    from restore.outlines import Outlines

    say_findings(off_boundary(starts, spreading, Outlines.read(outlines), file))
