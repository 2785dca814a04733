"""The options that several commands share, and how their values are read."""

from __future__ import annotations

import math
import re
from collections.abc import Callable
from decimal import Decimal, InvalidOperation
from fractions import Fraction
from itertools import pairwise
from typing import Any, NoReturn, TypeVar

import click

Command = TypeVar("Command", bound=Callable[..., Any])


class Seconds(click.ParamType):
    """A time in seconds, more than none."""

    name = "seconds"

    def convert(
        self, value: Any, param: click.Parameter | None, ctx: click.Context | None
    ) -> float:
        """Read the text of an option."""
        try:
            seconds = float(value)
        except ValueError:
            seconds = math.nan
        if not 0 < seconds < math.inf:
            self.fail(f"{value!r} is no number of seconds above 0.", param, ctx)
        return seconds


class Percent(click.ParamType):
    """A percentage from 0, kept as it was written."""

    name = "percent"

    def convert(
        self, value: Any, param: click.Parameter | None, ctx: click.Context | None
    ) -> Fraction:
        """Read the text of an option."""
        try:
            percent = Decimal(str(value).removesuffix("%"))
        except InvalidOperation:
            percent = Decimal(-1)
        if not (percent.is_finite() and 0 <= percent <= 100 and abs(percent.adjusted()) < 300):
            self.refuse(value, param, ctx)
        return Fraction(percent)

    def refuse(
        self, value: Any, param: click.Parameter | None, ctx: click.Context | None
    ) -> NoReturn:
        """Say that a text is no percentage."""
        self.fail(f"{value!r} is no percentage from 0 to 100, such as 0.5.", param, ctx)


class ChangeCommand(click.Command):
    """A command that has ``--stay-close``, whose number may be left out.

    What begins with a minus would be taken for the next option, and refused as such.
    """

    def parse_args(self, ctx: click.Context, args: list[str]) -> list[str]:
        """Read the words of a command line."""
        words = [word for arg in args for word in re.split("(?<=^--stay-close)=", arg)]
        for option, value in pairwise(words):
            if option == "--stay-close" and re.match(r"-(?:[.\d]|inf|nan)", value):
                param = next(param for param in self.params if option in param.opts)
                Percent().refuse(value, param, ctx)
        return super().parse_args(ctx, args)


class Count(click.ParamType):
    """A whole number from 1."""

    name = "count"

    def convert(self, value: Any, param: click.Parameter | None, ctx: click.Context | None) -> int:
        """Read the text of an option."""
        text = str(value)
        if not (text.isascii() and text.isdigit() and len(text) < 19 and int(text) > 0):
            self.fail(f"{value!r} is no whole number from 1.", param, ctx)
        return int(text)


def output_options(command: Command) -> Command:
    """Add ``--json`` and ``--quiet``."""
    for option in (
        click.option("--quiet", is_flag=True, help="No status line and no notes on stderr."),
        click.option(
            "--json", "as_json", is_flag=True, help="One JSON object on stdout, for errors too."
        ),
    ):
        command = option(command)
    return command


def time_option(command: Command) -> Command:
    """Add ``--time-limit``."""
    return click.option(
        "--time-limit", type=Seconds(), metavar="SECONDS", help="End the search after that."
    )(command)


def node_option(command: Command) -> Command:
    """Add ``--node-limit``."""
    return click.option(
        "--node-limit", type=Count(), metavar="N", help="End the search after solving N nodes."
    )(command)


def limit_options(command: Command) -> Command:
    """Add the limits of a search, and the gap that is good enough."""
    gap = click.option(
        "--gap",
        type=Percent(),
        default="0",
        metavar="PERCENT",
        help="Be content with a plan proven to be within PERCENT of the best; 0 if left out.",
    )
    return time_option(gap(node_option(command)))


def change_options(command: Command) -> Command:
    """Add the changes of rules, and how close the new plan is to stay."""
    for option in (
        click.option(
            "--stay-close",
            type=Percent(),
            metavar="[PERCENT]",
            is_flag=False,
            flag_value="0",
            help="Of the plans within PERCENT of the best, take the closest to the old one; "
            "without a number, of the best plans only.",
        ),
        click.option(
            "--freeze",
            multiple=True,
            metavar="NAME",
            help="Keep an activity at its amount in the old plan. May be repeated.",
        ),
        click.option(
            "--set",
            "settings",
            multiple=True,
            metavar="LIMITS",
            help='New limits of a rule, as it is shown, or of an activity: "oven <= 14", '
            '"loaf most = 800". May be repeated.',
        ),
        click.option(
            "--waive",
            multiple=True,
            metavar="NAME",
            help='Take out a rule or a bound ("loaf most"). May be repeated.',
        ),
        click.option(
            "--add",
            "additions",
            multiple=True,
            metavar="RULE",
            help='A new rule, "name: algebra" or "name: {rule = ..., give = ...}". '
            "May be repeated.",
        ),
    ):
        command = option(command)
    return command


def bend_option(command: Command) -> Command:
    """Add the rules that may bend to free a clash."""
    return click.option(
        "--may-bend",
        multiple=True,
        metavar="RULE",
        help="Where rules clash, let only the rules so named give way. May be repeated.",
    )(command)
