"""`oncewhere redate`: a history or a table of sites restated to another time scale."""

from __future__ import annotations

from typing import Any

import click

from restore.commands.options import debug_option, layout_options, make_layout, say_findings


@click.command()
@click.argument("file", metavar="TABLE|HISTORY")
@click.option("--from", "from_name", metavar="SCALE", help="The clock of ages whose table names none.")
@click.option("--to", "to_name", required=True, metavar="SCALE", help="ck95, gts2004, gts2012, cent94, kg86"
              " or a table chron,young_ma,old_ma.")  # fmt: skip
@click.option("--out", metavar="FILE", help="A history goes to .nc, a table to .csv and the like.")
@layout_options
@debug_option
def redate(file: str, from_name: str | None, to_name: str, out: str | None, **layout: Any) -> int:
    """Restate the ages of FILE; show what moved, in Myr and, for a history, in km.

    \b
    oncewhere redate history.toml --from kg86 --to gts2012 --out history-gts2012.nc
    """
    from restore.history.timescale import TimeScale

    to = TimeScale.read(to_name)
    own = None if from_name is None else TimeScale.read(from_name)
    if _is_history(file, make_layout(**layout)):
        return _history(file, own, to, out)
    from restore.motion.site_redates import redate_sites
    from restore.scenario.provenance import provenance

    trail = provenance([file], {"from": from_name, "to": to_name})
    findings = redate_sites(file, make_layout(**layout), own, to, out, trail)
    say_findings(findings)
    return 1 if any(finding.severity == "error" for finding in findings) else 0


def _is_history(file: str, layout: Any) -> bool:
    """A manifest, a netCDF file, or a table with a partner column."""
    if file.lower().endswith((".toml", ".nc", ".nc4")):
        return True
    from restore.files.delimited import DelimitedReader

    with DelimitedReader(file, layout) as reader:
        return "relative_to" in reader.header


def _history(file: str, own: Any, to: Any, out: str | None) -> int:
    from restore.commands.options import read_history
    from restore.files.tables import TableOut
    from restore.history.redate import redate as restate

    history = read_history(file, mixed=True)
    done = restate(history, to, own)
    say_findings(done.findings)
    rows = done.history.rows
    columns: dict[str, Any] = {
        "plate": rows.plate.tolist(),
        "relative_to": rows.relative_to.tolist(),
        "chron": rows.chron.tolist(),
        "age_before_ma": history.rows.age_ma,
        "age_ma": rows.age_ma,
        "moved_myr": (rows.age_ma - history.rows.age_ma).round(9),
        "moved_km": [round(moved.km, 6) for moved in done.moved],
        "how": [moved.how for moved in done.moved],
        "loose": [moved.loose for moved in done.moved],
        "row": [history.place_of(moved.row) for moved in done.moved],
    }
    if out is not None:
        done.history.write(out)
    with TableOut(None, {}) as target:
        target.add(columns)
    return 0
