"""`oncewhere trails`: the lines that hotspots left on a plate."""

from __future__ import annotations

from typing import TYPE_CHECKING, Any

import click

from restore.commands.options import history_inputs, history_option, make_layout, read_history
from restore.commands.spreading import ages_option, need_ages, said, say_statuses, table_options

if TYPE_CHECKING:
    from restore.motion.trails import Hotspots, TrailMaker


@click.command()
@click.argument("hotspots")
@click.option("--plate", required=True, help="The plate that moves over the hotspots.")
@click.option("--frame", required=True, help="The plate or frame that the hotspots' places are in.")
@ages_option()
@history_option()
@click.option("--shown", type=click.Choice(["crust", "passage"]), default="crust", show_default=True,
              help="crust: where the crust that passed over the hotspot lies today; passage: the path, in the"
              " frame, of the crust that today lies over it.")  # fmt: skip
@click.option("--paths", metavar="FILE", help="Hotspots that move: hotspot, age_ma, lat_deg, lon_deg.")
@click.option("--samples", metavar="FILE", help="Instead: dated samples against the trails: lat_deg,"
              " lon_deg[, sample, hotspot, age_ma, age_sigma_myr].")  # fmt: skip
@table_options
def trails(
    hotspots: str,
    plate: str,
    frame: str,
    ages: tuple[float, ...] | None,
    history_file: str,
    shown: str,
    paths: str | None,
    samples: str | None,
    out: str | None,
    beyond: str,
    radius_km: float,
    latitudes: str,
    **layout: Any,
) -> int:
    """The trail of each of HOTSPOTS on a plate: hotspot, lat_deg, lon_deg, their places in the frame.

    \b
    oncewhere trails scenario_files/hotspots.csv --plate ovrath --frame deep --ages 0:60:5 \\
        --history scenario_files/history.toml
    """
    asked = need_ages(ages)
    if samples is not None and shown != "crust":
        raise click.UsageError("--samples lie on the crust: leave out --shown passage")
    from restore.files.tables import TableOut
    from restore.geometry.latitudes import Latitudes
    from restore.motion.trails import Hotspots, TrailMaker
    from restore.scenario.provenance import provenance

    history = read_history(history_file)
    table = Hotspots.read(hotspots, paths, make_layout(**layout))
    maker = TrailMaker(history, plate, frame, Latitudes(latitudes), radius_km, beyond)
    code = 0
    if samples is None:
        columns = maker.make(table, asked, shown).columns()
        code = say_statuses(columns["status"])
    else:
        columns = _samples(maker, table, samples, max(asked))
    settings = {
        "plate": plate, "frame": frame, "ages": list(asked), "shown": shown,
        "latitudes": latitudes, "radius_km": radius_km, "beyond": beyond,
    }  # fmt: skip
    more = [file for file in (paths, samples) if file is not None]
    inputs = [hotspots, *history_inputs(history_file, history), *more]
    words = {"frame": frame, "frame_kind": history.kind_of(frame), "latitudes": latitudes}
    with TableOut(out, provenance(inputs, settings), ("lat_deg", "lon_deg")) as target:
        target.add(said(columns, **words))
    return code


def _samples(maker: TrailMaker, hotspots: Hotspots, file: str, oldest_ma: float) -> dict[str, Any]:
    from restore.motion.trails import compare_samples, read_samples

    return compare_samples(maker, hotspots, read_samples(file, hotspots), oldest_ma)
