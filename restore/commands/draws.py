"""`oncewhere draws`: complete histories drawn from the errors of the rows, one file each."""

from __future__ import annotations

import click

from restore.commands.options import debug_option, read_history, say_findings


@click.command()
@click.argument("history_file", metavar="HISTORY")
@click.option("--count", type=click.IntRange(min=1), required=True, help="How many.")
@click.option(
    "--seed", type=click.IntRange(min=0), default=1, show_default=True, help="Same seed, same draws."
)
@click.option("--out", metavar="DIR", required=True, help="A new folder for draw-001.nc, ...")
@debug_option
def draws(history_file: str, count: int, seed: int, out: str) -> None:
    """Write COUNT possible histories, drawn from the covariances of the rows of HISTORY.

    \b
    oncewhere draws scenario_files/history.toml --count 20 --out drawn
    """
    from pathlib import Path

    from restore.errors import InputError
    from restore.history.drawn import drawn_history, drawn_rotations, undrawn

    history = read_history(history_file, mixed=True)
    folder = Path(out)
    if folder.exists():
        raise InputError(f"{out}: is there already; name a new folder")
    remark = undrawn(history)
    say_findings([remark] if remark else [])
    try:
        folder.mkdir(parents=True)
    except OSError as exc:
        raise InputError(f"{out}: cannot be made: {exc.strerror}") from None
    width = max(3, len(str(count)))
    for number, rows in enumerate(drawn_rotations(history, count, seed), start=1):
        drawn_history(history, rows, number).write(folder / f"draw-{number:0{width}d}.nc")
    click.echo(f"{count} {'history' if count == 1 else 'histories'} in {out}", err=True)
