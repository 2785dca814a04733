"""Runs a command line: finds the command, turns every failure into one line and an exit status.

Exit statuses: 0 yes, 1 no, 2 bad input or usage, 3 unfinished, 130 ended by a second interrupt.
"""

from __future__ import annotations

import os
import sys
import traceback
from collections.abc import Sequence
from typing import NamedTuple, NoReturn

import click

from intplan import __version__
from intplan.cli.console import Console, OutputError, silence
from intplan.cli.interrupts import ENDED_AT_ONCE, Interrupts

BAD_INPUT, UNFINISHED = 2, 3
THREADS = ("OPENBLAS_NUM_THREADS", "MKL_NUM_THREADS", "VECLIB_MAXIMUM_THREADS")


class Session(NamedTuple):
    """What every command is given, as ``ctx.obj``."""

    console: Console
    interrupts: Interrupts


@click.group(
    "intplan",
    invoke_without_command=True,
    subcommand_metavar="COMMAND ...",
    epilog="`intplan COMMAND --help` tells more. Exit status: 0 yes, 1 no, 2 bad input, "
    "3 unfinished.",
)
@click.version_option(__version__, message="intplan %(version)s")
@click.pass_context
def group(ctx: click.Context) -> int:
    """Plan in whole units, with a proof that no plan is better."""
    if ctx.invoked_subcommand is not None:
        return 0
    click.echo(ctx.get_help(), err=True)
    return BAD_INPUT


def main() -> NoReturn:
    """Run the command line of this process and end with its exit status.

    The linear algebra runs on one thread unless the environment says otherwise: at a planner's
    sizes several threads wait for each other longer than they compute.
    """
    for name in THREADS:
        os.environ.setdefault(name, "1")  # read once, when numpy is first imported
    status = run(sys.argv[1:])
    for stream in (sys.stdout, sys.stderr):
        try:
            stream.flush()
        except (OSError, ValueError):
            silence(stream)
    sys.exit(status)


def run(arguments: Sequence[str]) -> int:
    """Run one command line.

    Parameters
    ----------
    arguments : what follows the program's name

    Returns
    -------
    int
        The exit status.
    """
    from intplan.cli import commands, replan_commands  # noqa: F401  (each command joins the group)

    console = Console(as_json="--json" in arguments)
    interrupts = Interrupts()
    try:
        with interrupts:
            return _guarded(arguments, console, interrupts)
    except KeyboardInterrupt:
        console.error("interrupted before there was an answer", None)
        return UNFINISHED if interrupts.count < 2 else ENDED_AT_ONCE


def _guarded(arguments: Sequence[str], console: Console, interrupts: Interrupts) -> int:
    """Run a command line; whatever a user can cause becomes one line."""
    from intplan.errors import IntplanError, printable

    try:
        with group.make_context("intplan", list(arguments)) as ctx:
            ctx.obj = Session(console, interrupts)
            return group.invoke(ctx)
    except click.exceptions.Exit as end:
        return end.exit_code
    except click.UsageError as error:
        console.error(*_usage(error, arguments))
        return BAD_INPUT
    except IntplanError as error:
        console.error(error.message, error.where)
        return error.exit_status
    except OutputError as error:
        console.error(f"the answer could not be written: {error}", "stdout")
        return BAD_INPUT
    except MemoryError:
        console.error("memory ran out before there was an answer", None)
        return UNFINISHED
    except BrokenPipeError:
        silence(sys.stdout)
        return 0
    except Exception as error:
        if interrupts.count:  # libraries turn an interrupt of their loading into other errors
            raise KeyboardInterrupt from error
        traceback.print_exc()
        console.error(
            f"a fault in intplan itself, not in your input: {type(error).__name__}: "
            f"{printable(str(error))}",
            None,
        )
        return BAD_INPUT


def _usage(error: click.UsageError, arguments: Sequence[str]) -> tuple[str, str | None]:
    """Return what is wrong with a command line, and the command."""
    from intplan.errors import printable

    # What the parser itself finds comes without a context.
    known = arguments[:1] if arguments and arguments[0] in group.commands else ()
    path = error.ctx.command_path if error.ctx else " ".join(["intplan", *known])
    message = printable(error.format_message())
    stop = "" if message.endswith((".", "?")) else "."
    return f"{message}{stop} Try `{path} --help`.", path.removeprefix("intplan").strip() or None
