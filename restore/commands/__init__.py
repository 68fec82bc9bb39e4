"""The `oncewhere` command: a group whose commands are loaded when they are called."""

from __future__ import annotations

import os
import sys
from collections.abc import Sequence
from importlib import import_module
from typing import Any

import click

from restore.errors import OncewhereError

COMMANDS = {
    "run": ("runs", "Do a whole job that a scenario file says."),
    "check": ("checks", "Audit a history or a scenario."),
    "sites": ("sites", "Restore dated sites to their own or to given ages."),
    "lines": ("lines", "Restore coasts, outlines, any lines and polygons."),
    "flowlines": ("flowlines", "The paths along which two plates parted, and what was made along them."),
    "isochrons": ("isochrons", "The lines of crust of one age on both plates, from a ridge."),
    "trails": ("trails", "The lines that hotspots left on a plate."),
    "circles": ("circles", "Small circles about a pole through points."),
    "rates": ("rates", "How fast a plate moves relative to another, at points."),
    "margin": ("margins", "What happens along a line between two plates."),
    "when": ("whens", "When a site crossed a latitude, came near, was nearest."),
    "velocity-field": ("fields", "Velocities on a global grid, each cell on its own plate."),
    "pole": ("poles", "The rotation of a plate from today to an age."),
    "stage": ("poles", "The motion of a plate from an older to a younger age."),
    "compare": ("poles", "Whether two histories differ, by how much and how surely."),
    "separation": ("separations", "How far apart two sites stood, and in which direction."),
    "closure": ("loops", "What rotation is left over round a loop of plates."),
    "differences": ("loops", "The rows in which two histories differ, and by how many km."),
    "redate": ("redates", "Restate a history or a table of sites to another time scale."),
    "draws": ("draws", "Histories drawn from the errors of the rows."),
}


class _ReaderGoneError(Exception):
    """The reader of a pipe has seen enough."""


class LazyGroup(click.Group):
    """Lists its commands without importing them."""

    def invoke(self, ctx: click.Context) -> Any:
        try:
            return super().invoke(ctx)
        except BrokenPipeError:
            # click would end with 1, as if something had failed
            raise _ReaderGoneError from None

    def list_commands(self, ctx: click.Context) -> list[str]:
        return list(COMMANDS)

    def get_command(self, ctx: click.Context, name: str) -> click.Command | None:
        if name not in COMMANDS:
            return None
        module = import_module(f"restore.commands.{COMMANDS[name][0]}")
        command: click.Command = getattr(module, name.replace("-", "_"))
        return command

    def resolve_command(
        self, ctx: click.Context, args: list[str]
    ) -> tuple[str | None, click.Command | None, list[str]]:
        if args and args[0] not in COMMANDS:
            from restore.findings import did_you_mean

            ctx.fail(f"no command {args[0]!r}; {did_you_mean(args[0], COMMANDS)}")
        return super().resolve_command(ctx, args)

    def format_commands(self, ctx: click.Context, formatter: click.HelpFormatter) -> None:
        with formatter.section("Commands"):
            formatter.write_dl([(name, text) for name, (_, text) in COMMANDS.items()])


@click.group(cls=LazyGroup, context_settings={"help_option_names": ["-h", "--help"]})
@click.version_option(package_name="oncewhere", prog_name="oncewhere")
def oncewhere() -> None:
    """Where dated things were: positions on the moving plates of the past, from published finite
    poles, with error ellipses and the evidence behind every number.

    Not for navigation or safety decisions.
    """


def main(args: Sequence[str] | None = None) -> None:
    """Run the command. Exit codes: 0 done, 1 data or domain at fault, 2 command misused."""
    sys.exit(call(sys.argv[1:] if args is None else list(args)))


def call(args: Sequence[str]) -> int:
    """Run the command with arguments and return its exit code."""
    debug = "--debug" in args
    try:
        result: Any = oncewhere.main(
            [arg for arg in args if arg != "--debug"], prog_name="oncewhere", standalone_mode=False
        )
        return result if isinstance(result, int) else 0
    except click.exceptions.Exit as exc:
        return exc.exit_code
    except click.ClickException as exc:
        return _misused(exc)
    except _ReaderGoneError:
        # the interpreter must not complain on its way out
        os.dup2(os.open(os.devnull, os.O_WRONLY), sys.stdout.fileno())
        return 0
    except (KeyboardInterrupt, click.Abort):
        _complain("stopped")
        return 130
    except OncewhereError as exc:
        if debug:
            raise
        _complain(str(exc))
        return 1
    except Exception as exc:
        if debug:
            raise
        _complain(f"internal fault ({type(exc).__name__}: {exc}); --debug shows where")
        return 1


def _misused(exc: click.ClickException) -> int:
    if isinstance(exc, click.exceptions.NoArgsIsHelpError):
        click.echo(exc.format_message(), err=True)
        return exc.exit_code
    _complain(exc.format_message())
    if isinstance(exc, click.UsageError) and exc.ctx is not None:
        click.echo(f"usage: {exc.ctx.command_path} --help", err=True)
    return exc.exit_code


def _complain(message: str) -> None:
    for line in message.splitlines():
        click.echo(f"error: {line}", err=True)
