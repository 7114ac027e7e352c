"""The command ``capmuster``: finds the subcommand, loads nothing else, and turns errors into one line."""

from __future__ import annotations

import os
import sys
from importlib import import_module
from io import TextIOWrapper
from typing import TYPE_CHECKING

import click

from capmuster.enumerate.errors import CapmusterError
from capmuster.rank._version import __version__

if TYPE_CHECKING:
    from collections.abc import Sequence

_COMMANDS = (
    "list", "show", "draw", "curve", "deck", "verify", "rank", "export", "parts", "count", "survey",
)  # fmt: skip
_FAILED = 1
_BAD_INPUT = 2
_INTERRUPTED = 130


class _LazyGroup(click.Group):
    """Subcommands in the order of the job, each in a module of its own that is imported on use."""

    def list_commands(self, ctx: click.Context) -> list[str]:
        del ctx
        return list(_COMMANDS)

    def get_command(self, ctx: click.Context, cmd_name: str) -> click.Command | None:
        del ctx
        if cmd_name not in _COMMANDS:
            return None
        command = import_module(f"capmuster.rank.commands.{cmd_name}").command
        assert isinstance(command, click.Command)  # noqa: S101 -- each module defines one
        return command


@click.group(
    cls=_LazyGroup,
    invoke_without_command=True,
    context_settings={"help_option_names": ["-h", "--help"], "max_content_width": 100},
)
@click.version_option(__version__, prog_name="capmuster")
@click.pass_context
def group(context: click.Context) -> None:
    """Find, rank and export two-phase switched-capacitor converters.

    \b
    Every topology of a ratio:       capmuster list --ratio 2/5 --capacitors 4
    One of them in detail:           capmuster show 'I-G/O-I'
    The same as a drawing:           capmuster draw 'I-G/O-I' --to doubler.svg
    The best ones for a rail:        capmuster rank greenhouse-node
    A shortlist for the review:      capmuster export greenhouse-node --to shortlist.xlsx
    The parts to buy for a board:    capmuster parts pump-shelf
    """
    if context.invoked_subcommand is None:
        click.echo(context.get_help())


def main(arguments: Sequence[str] | None = None) -> None:
    """Run the command line; exit status 2 on bad input, 130 when interrupted, 1 when output fails."""
    for stream in (sys.stdout, sys.stderr):
        if isinstance(stream, TextIOWrapper):
            stream.reconfigure(errors="replace")  # a terminal without Ω shows a question mark instead
    try:
        status = group.main(args=arguments, prog_name="capmuster", standalone_mode=False)
        sys.stdout.flush()
    except CapmusterError as error:
        click.echo(f"capmuster: {error}", err=True)
        status = _BAD_INPUT
    except click.UsageError as error:
        path = error.ctx.command_path if error.ctx else "capmuster"
        message = " ".join(error.format_message().split()).rstrip(".")
        click.echo(f"capmuster: {message}; see {path} --help", err=True)
        status = _BAD_INPUT
    except click.ClickException as error:
        error.show()
        status = error.exit_code
    except (click.Abort, KeyboardInterrupt):
        click.echo("capmuster: interrupted", err=True)
        status = _INTERRUPTED
    except BrokenPipeError:
        _drop_output()  # the reader of a pipe has seen enough
        status = 0
    except OSError as error:
        click.echo(f"capmuster: {error.strerror or error}", err=True)
        _drop_output()
        status = _FAILED
    sys.exit(status if isinstance(status, int) else 0)


def _drop_output() -> None:
    """Keep Python from trying again, and complaining, while it shuts down."""
    os.dup2(os.open(os.devnull, os.O_WRONLY), sys.stdout.fileno())
