"""What the commands about spreading share: options, labels, the way a table goes out."""

from __future__ import annotations

from collections import Counter
from collections.abc import Callable, Iterable, Mapping
from typing import TYPE_CHECKING, Any, TypeVar

import click

from restore.commands.options import (
    Ages,
    convention_options,
    debug_option,
    history_option,
    layout_options,
    radius_option,
    say_counts,
)

if TYPE_CHECKING:
    from restore.motion.shares import Shares

Decorated = TypeVar("Decorated", bound=Callable[..., Any])


class Pair(click.ParamType[Any]):
    """A,B: two labels."""

    name = "pair"

    def get_metavar(self, param: click.Parameter, ctx: click.Context) -> str:
        return "A,B"

    def convert(self, value: Any, param: click.Parameter | None, ctx: click.Context | None) -> Any:
        if isinstance(value, tuple):
            return value
        labels = tuple(label.strip() for label in value.split(","))
        if len(labels) != 2 or not all(labels):
            self.fail(f"{value!r}: write two plates, A,B", param, ctx)
        if labels[0] == labels[1]:
            self.fail(f"{value!r}: name two different plates", param, ctx)
        return labels


class Share(click.ParamType[Any]):
    """A number in 0..1, or the name of a table."""

    name = "share"

    def get_metavar(self, param: click.Parameter, ctx: click.Context) -> str:
        return "0..1|FILE"

    def convert(self, value: Any, param: click.Parameter | None, ctx: click.Context | None) -> Any:
        try:
            share = float(value)
        except ValueError:
            return str(value)
        if not 0.0 <= share <= 1.0:
            self.fail(f"{value}: the part of new crust that the first plate keeps lies in 0..1", param, ctx)
        return share


def pair_options(command: Decorated, clock: bool = True) -> Decorated:
    """The options of every command about what two plates made between them; without `clock`, the command
    has its own --time-scale.
    """
    options: tuple[Callable[[Any], Any], ...] = (
        click.option("--between", required=True, type=Pair(), help="The two plates that part."),
        history_option(clock=clock),
        click.option("--share", type=Share(), default=0.5, show_default=True,
                     help="The part of new crust that A, the first plate, keeps: a number, or a table"
                     " younger_ma, older_ma, share."),
        click.option("--tolerance-m", type=click.FloatRange(min=0, min_open=True), default=10.0,
                     show_default=True, help="Where several links make the path, its steps are halved"
                     " until the arms move less than this."),
    )  # fmt: skip
    return _applied(command, options)


def table_options(command: Decorated) -> Decorated:
    """--out and what numbers mean."""
    options: tuple[Callable[[Any], Any], ...] = (
        click.option("--out", metavar="FILE",
                     help="Write here: .csv, .json, .geojson, .nc, .parquet, .gpkg."),
        convention_options,
        radius_option,
        layout_options,
        debug_option,
    )  # fmt: skip
    return _applied(command, options)


def ages_option(required: bool = True) -> Callable[[Decorated], Decorated]:
    """--ages."""
    return click.option("--ages", required=required, type=Ages(), help="0,10,20 or 0:120:10, Ma.")


def _applied(command: Decorated, options: tuple[Callable[[Any], Any], ...]) -> Decorated:
    for option in reversed(options):
        command = option(command)
    return command


def need_ages(ages: tuple[float, ...] | None) -> tuple[float, ...]:
    """The ages, which cannot be each row's own here."""
    if ages is None:
        raise click.UsageError("--ages own has no meaning here: give ages in Ma")
    return ages


def make_shares(share: float | str) -> Shares:
    """The shares that --share names."""
    from restore.motion.shares import Shares

    return Shares.read(share) if isinstance(share, str) else Shares.constant(share)


def said(columns: Mapping[str, Any], **words: str) -> dict[str, Any]:
    """Columns with some words that hold for every row."""
    count = len(next(iter(columns.values())))
    return {**columns, **{name: [text] * count for name, text in words.items() if name not in columns}}


def say_statuses(states: Iterable[str]) -> int:
    """How many rows have each status, on standard error, unless all are restored; the exit code.

    The code is 1 if not one row has an answer.
    """
    counts = Counter(states)
    if set(counts) - {"restored"}:
        say_counts(counts)
    return 1 if counts and not counts["restored"] else 0
