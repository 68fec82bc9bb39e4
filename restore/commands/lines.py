"""`oncewhere lines`: lines and polygons restored as vectors."""

from __future__ import annotations

from typing import Any

import click

from restore.commands.options import (
    Ages,
    convention_options,
    debug_option,
    history_inputs,
    history_option,
    read_history,
    say_counts,
    say_findings,
)


@click.command()
@click.argument("file")
@history_option()
@click.option("--frame", required=True, help="The plate or frame that positions are given in.")
@click.option("--ages", required=True, type=Ages(), help="0,10,20 or 0:120:10.")
@click.option("--outlines", metavar="FILE", help="Plates' outlines, along which what has no plate is cut.")
@click.option("--plate-property", default="plate", show_default=True,
              help="The property of FILE that holds the plate.")  # fmt: skip
@click.option("--outline-property", default="plate", show_default=True,
              help="The property of the outlines that does.")  # fmt: skip
@click.option("--edges", type=click.Choice(["great-circle", "straight"]), default="great-circle",
              show_default=True, help="What edges are, the outlines' too; straight: in longitude and"
              " latitude.")  # fmt: skip
@click.option("--interior", type=click.Choice(["left", "smaller"]), default="left", show_default=True,
              help="The inside of an outer ring.")  # fmt: skip
@click.option("--longest-deg", type=click.FloatRange(1e-3, 90), default=0.5, show_default=True,
              help="Longer edges are densified.")  # fmt: skip
@click.option("--out", metavar="FILE", help="Write here: .geojson, .json, .gpkg.")
@click.option("--strict", is_flag=True, help="Exit 1 if anything is not restored.")
@convention_options
@debug_option
def lines(
    file: str,
    history_file: str,
    frame: str,
    ages: tuple[float, ...] | None,
    outlines: str | None,
    plate_property: str,
    outline_property: str,
    edges: str,
    interior: str,
    longest_deg: float,
    out: str | None,
    strict: bool,
    beyond: str,
    latitudes: str,
) -> int:
    """Restore the points, lines and polygons in FILE to given ages, as vectors.

    \b
    oncewhere lines scenario_files/margin.geojson --history scenario_files/history.toml \\
        --frame deep --ages 0:120:20 --outlines scenario_files/outlines.geojson
    """
    if ages is None:
        raise click.UsageError("--ages own has no meaning here: give ages in Ma")
    from restore.files.atomic import check_target, refuse_input
    from restore.files.vectors import check_vector_ending, write_vectors
    from restore.motion.lines import restore_lines
    from restore.outlines import Outlines
    from restore.scenario.provenance import provenance

    if out is not None:
        check_vector_ending(out)
        check_target(out)
    history = read_history(history_file)
    inputs = [file, *history_inputs(history_file, history), *([outlines] if outlines else [])]
    settings: dict[str, Any] = {"frame": frame, "frame_kind": history.kind_of(frame), "ages": list(ages)}
    settings |= {"outlines": outlines, "plate_property": plate_property, "edges": edges}
    settings |= {"outline_property": outline_property, "interior": interior}
    settings |= {"longest_deg": longest_deg, "latitudes": latitudes, "beyond": beyond}
    trail = provenance(inputs, settings)
    if out is not None:
        refuse_input(out, inputs)
    drawn = None if outlines is None else Outlines.read(outlines, outline_property, edges, latitudes)
    restored = restore_lines(
        file, history, frame, ages, outlines=drawn, plate_property=plate_property, edges=edges,
        interior=interior, longest_deg=longest_deg, latitudes=latitudes, beyond=beyond,
    )  # fmt: skip
    say_findings(restored.findings)
    write_vectors(out, restored.features(), trail)
    counts = restored.counts()
    say_counts(counts)
    return 1 if strict and set(counts) - {"restored"} else 0
