"""Options and small doings that the commands share. Nothing here loads numpy by itself."""

from __future__ import annotations

import json
import os
import sys
from collections.abc import Callable, Iterable, Iterator, Mapping
from contextlib import contextmanager
from typing import TYPE_CHECKING, Any, TypeVar

import click

from restore.errors import InputError
from restore.motion.ages import parse_ages

if TYPE_CHECKING:
    from restore.files.delimited import Layout
    from restore.findings import Finding
    from restore.history.store import History
    from restore.motion.ground import Ground
    from restore.motion.site_clock import SiteClock

Decorated = TypeVar("Decorated", bound=Callable[..., Any])
BEYOND = ("refuse", "hold", "extend")
LATITUDES = ("as-given", "geodetic")


class Ages(click.ParamType[Any]):
    """own, 0,10,20 or 0:120:10."""

    name = "ages"

    def convert(self, value: Any, param: click.Parameter | None, ctx: click.Context | None) -> Any:
        try:
            return parse_ages(value)
        except InputError as exc:
            self.fail(str(exc), param, ctx)


class Numbers(click.ParamType[Any]):
    """Some numbers separated by commas; the first may be a latitude."""

    name = "numbers"

    def __init__(self, *names: str) -> None:
        self.names = names

    def get_metavar(self, param: click.Parameter, ctx: click.Context) -> str:
        return ",".join(self.names)

    def convert(self, value: Any, param: click.Parameter | None, ctx: click.Context | None) -> Any:
        if isinstance(value, tuple):
            return value
        parts = value.split(",")
        try:
            numbers = tuple(float(part) for part in parts)
        except ValueError:
            numbers = ()
        if len(numbers) != len(self.names) or not all(abs(n) < float("inf") for n in numbers):
            self.fail(f"{value!r}: write {','.join(self.names)}", param, ctx)
        if self.names[0] == "LAT" and not -90.0 <= numbers[0] <= 90.0:
            self.fail(f"{value!r}: a latitude must lie in -90..90", param, ctx)
        if self.names[:2] == ("LAT", "LON") and not -360.0 <= numbers[1] <= 360.0:
            self.fail(f"{value!r}: a longitude must lie in -360..360", param, ctx)
        return numbers


class Age(click.ParamType[Any]):
    """One age, Ma."""

    name = "Ma"

    def convert(self, value: Any, param: click.Parameter | None, ctx: click.Context | None) -> Any:
        try:
            age = float(value)
        except ValueError:
            self.fail(f"{value!r} is not a number", param, ctx)
        if not 0.0 <= age < float("inf"):
            self.fail(f"{value!r}: an age is finite, in Ma, positive into the past", param, ctx)
        return age


def history_option(required: bool = True, clock: bool = True) -> Callable[[Decorated], Decorated]:
    """--history, and with `clock` --time-scale, which `read_history` finds by itself."""

    def decorate(command: Decorated) -> Decorated:
        if clock:
            command = click.option(
                "--time-scale", metavar="SCALE", expose_value=False, callback=_remember_clock,
                help="The one clock of the run; tables on another are restated to it.",
            )(command)  # fmt: skip
        return click.option(
            "--history", "history_file", required=required, metavar="FILE",
            help="Rotation history: a .csv table, a .toml manifest or a .nc file.",
        )(command)  # fmt: skip

    return decorate


def _remember_clock(ctx: click.Context, _: click.Parameter, value: str | None) -> None:
    ctx.meta["oncewhere.time_scale"] = value


def radius_option(command: Decorated) -> Decorated:
    """--radius-km."""
    return click.option(
        "--radius-km",
        type=click.FloatRange(min=1.0, max=1e6),
        default=6371.0088,
        show_default=True,
        help="Radius of the sphere.",
    )(command)


def convention_options(command: Decorated) -> Decorated:
    """--latitudes and --beyond: what numbers mean."""
    for option in (
        click.option("--beyond", type=click.Choice(BEYOND), default="refuse", show_default=True,
                     help="Past the oldest row: refuse, hold the last place, or extend the last stage."),
        click.option("--latitudes", type=click.Choice(LATITUDES), default="as-given", show_default=True,
                     help="What latitudes are: used as given, or geodetic (GRS80)."),
    ):  # fmt: skip
        command = option(command)
    return command


def layout_options(command: Decorated) -> Decorated:
    """--delimiter, --decimal, --comment, --encoding, --columns: how the table of sites is written."""
    for option in (
        click.option("--columns", metavar="OURS=THEIRS,...", default="",
                     help="Column map: by name or number, as lat_deg=Lat,lon_deg=3."),
        click.option("--no-header", is_flag=True, help="The table has no header; map columns by number."),
        click.option("--encoding", default="utf-8-sig", help="Encoding of the table (utf-8)."),
        click.option("--comment", default="", help="Lines that start with this are passed over."),
        click.option("--decimal", type=click.Choice([".", ","]), default=".", help="Decimal mark."),
        click.option("--delimiter", default=",", show_default=True,
                     help="One character, or comma, semicolon, tab, space, bar, whitespace."),
    ):  # fmt: skip
        command = option(command)
    return command


def debug_option(command: Decorated) -> Decorated:
    """--debug, which is taken off before the command sees its arguments."""
    return click.option("--debug", is_flag=True, expose_value=False,
                        help="Show the traceback of an error.")(command)  # fmt: skip


def make_layout(
    delimiter: str, decimal: str, comment: str, encoding: str, no_header: bool, columns: str
) -> Layout:
    """The layout that the options describe."""
    from restore.files.delimited import Layout

    mapping: dict[str, str | int] = {}
    for part in filter(None, columns.split(",")):
        ours, equals, theirs = part.partition("=")
        if not equals or not theirs.strip():
            raise click.BadParameter(f"{part!r}: write ours=theirs", param_hint="--columns")
        name = theirs.strip()
        mapping[ours.strip()] = int(name) if name.isdigit() else name
    try:
        return Layout(
            delimiter=delimiter,
            comment=comment,
            header=not no_header,
            decimal=decimal,
            encoding=encoding,
            columns=mapping,
        )
    except InputError as exc:
        raise click.UsageError(str(exc)) from None


def read_history(path: str, mixed: bool = False) -> History:
    """Read a history on the clock that --time-scale names, and say its warnings on standard error.

    Unless `mixed`, tables on several clocks are refused if no clock is named: ages of one must not meet
    those of another.
    """
    from restore.history.redate import clock_of
    from restore.history.redate import one_clock as restated
    from restore.history.store import History

    history = History.read(path)
    say_findings(history.findings)
    context = click.get_current_context(silent=True)
    name = None if context is None else context.meta.get("oncewhere.time_scale")
    if mixed and name is None:
        return history
    scale = clock_of(history, name)
    if scale is None or name is None:
        return history
    done = restated(history, scale)
    say_findings(done.findings)
    return done.history


def one_clock(
    history: History, name: str | None, table_name: str | None
) -> tuple[History, SiteClock | None]:
    """The history on the run's one clock, and the way of a site table's ages to it."""
    from restore.history.redate import clock_of
    from restore.history.redate import one_clock as restated
    from restore.history.timescale import TimeScale
    from restore.motion.site_clock import SiteClock

    scale = clock_of(history, name)
    if scale is None:
        if table_name is None:
            return history, None
        raise click.UsageError("--table-time-scale needs --time-scale: the history names no clock")
    done = restated(history, scale)
    say_findings(done.findings)
    return done.history, SiteClock(scale, TimeScale.read(table_name) if table_name else None)


def riding(history: History, file: str | None) -> History:
    """The history with the pieces that a table of rides names."""
    if file is None:
        return history
    from restore.history.riding import read_rides, with_rides

    return with_rides(history, read_rides(file), file)


def make_ground(
    outlines: str | None,
    plate_property: str,
    edges: str,
    within_km: float,
    crust_age: str | None,
    latitudes: str,
) -> Ground | None:
    """Outlines and crustal ages as the options name them; None if they name neither."""
    if outlines is None and within_km > 0.0:
        raise click.UsageError("--within-km needs --outlines")
    if outlines is None and edges != "great-circle":
        raise click.UsageError("--edges needs --outlines: sites have none")
    if outlines is None and crust_age is None:
        return None
    from restore.files.rasters import read_field
    from restore.motion.ground import Ground
    from restore.outlines import Outlines

    crust = None
    if crust_age is not None:
        file, _, variable = crust_age.partition(":")
        crust = read_field(file, variable or None)
    drawn = None if outlines is None else Outlines.read(outlines, plate_property, edges, latitudes)
    return Ground(drawn, crust, within_km)


def history_inputs(path: str, history: History) -> list[str]:
    """The files behind a history: itself, and a manifest's tables."""
    tables = [] if path.endswith((".nc", ".nc4")) else [table.file for table in history.tables]
    return [path, *tables]


MOST_SAID = 100


def say_findings(findings: Iterable[Finding]) -> None:
    """One line per finding on standard error; past a hundred only their number."""
    listed = list(findings)
    for finding in listed[:MOST_SAID]:
        click.echo(f"{finding.severity}: {finding.line()}", err=True)
    if len(listed) > MOST_SAID:
        click.echo(f"... and {len(listed) - MOST_SAID} more", err=True)


def print_json(value: Any) -> None:
    """A value as JSON on standard output."""
    click.echo(json.dumps(value, indent=2, allow_nan=False))


def default_threads() -> int:
    """Threads for the hot path; they never change a result."""
    return min(4, os.cpu_count() or 1)


@contextmanager
def progress(path: str, out: str | None) -> Iterator[Callable[[int], None]]:
    """A bar on a terminal over the bytes of a file, shown once there is a second chunk; else nothing.

    A table that goes to the terminal itself leaves no place for a bar.
    """
    if not sys.stderr.isatty() or (out is None and sys.stdout.isatty()):
        yield lambda done: None
        return
    from rich.console import Console
    from rich.progress import Progress

    total = os.path.getsize(path) if os.path.isfile(path) else 0
    # rich would take standard output to the terminal, away from the file or pipe it goes to
    bar = Progress(console=Console(stderr=True), transient=True, redirect_stdout=False)
    task = bar.add_task(os.path.basename(path), total=total)

    def advance(done: int) -> None:
        if done < total and not bar.live.is_started:
            bar.start()
        bar.update(task, completed=done)

    try:
        yield advance
    finally:
        bar.stop()


def say_counts(counts: Mapping[str, int]) -> None:
    """How many rows have each status, on standard error."""
    said = ", ".join(f"{number} {status}" for status, number in sorted(counts.items()))
    rows = counted(sum(counts.values()), "row")
    click.echo(f"{rows}: {said}" if said else rows, err=True)


def counted(number: int, what: str) -> str:
    """A number of things in words: 1 row, 2 rows."""
    return f"{number} {what}" if number == 1 else f"{number} {what}s"
