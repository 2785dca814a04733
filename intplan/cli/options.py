"""The options that several commands share, and how their values are read."""

from __future__ import annotations

import math
from collections.abc import Callable
from decimal import Decimal, InvalidOperation
from fractions import Fraction
from typing import Any, TypeVar

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
            self.fail(f"{value!r} is no percentage from 0 to 100, such as 0.5.", param, ctx)
        return Fraction(percent)


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


def limit_options(command: Command) -> Command:
    """Add the limits of a search."""
    for option in (
        click.option(
            "--node-limit", type=Count(), metavar="N", help="End the search after solving N nodes."
        ),
        click.option(
            "--gap",
            type=Percent(),
            default="0",
            metavar="PERCENT",
            help="Be content with a plan proven to be within PERCENT of the best; 0 if left out.",
        ),
        click.option(
            "--time-limit", type=Seconds(), metavar="SECONDS", help="End the search after that."
        ),
    ):
        command = option(command)
    return command
