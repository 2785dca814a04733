"""Turns of phrase that all reports share: counts, lists, shares, durations, standing sentences."""

from __future__ import annotations

from collections.abc import Sequence
from fractions import Fraction
from math import ceil

from intplan.errors import printable
from intplan.report.numbers import readable
from intplan.sheet import Sheet
from intplan.sheet.numbers import Number

CAUTION = (
    "A plan is a calculation: where people or machines are concerned, local codes and licensed "
    "practice decide."
)
ENDED = {
    "time": "The time limit came before the proof was complete.",
    "nodes": "The node limit came before the proof was complete.",
    "interrupt": "The search was interrupted before the proof was complete.",
    "range": (
        "A whole activity grew too large to go on with; "
        "give whole activities a `most` (and a `least`) to settle this."
    ),
}


def title_line(sheet: Sheet) -> str:
    """Return the sheet's title on a line of its own; nothing if it has none."""
    return f"{printable(sheet.title)}\n" if sheet.title else ""


def passes(sheet: Sheet) -> str:
    """Say what a plan would do that is better than a bound."""
    return "pass" if sheet.aim.sense == "maximize" else "fall below"


def percent_text(distance: Number, value: Number) -> str:
    """Write a distance as a share of a value, rounded up at the second place: ``0.94%``."""
    hundredths = ceil(abs(Fraction(distance) / Fraction(value)) * 10000)
    return f"{readable(Fraction(hundredths, 100))}%"


def seconds_text(seconds: float) -> str:
    """Write a duration to the millisecond below ten seconds, with one decimal above."""
    if seconds < 0.001:
        return "under 0.001 s"
    return f"{seconds:.3f} s" if seconds < 10 else f"{seconds:,.1f} s"


def count(number: int, noun: str) -> str:
    """Write a number of things: ``1 node``, ``1,200 activities``."""
    if number == 1:
        return f"1 {noun}"
    several = {"other activity": "other activities", "activity": "activities",
               "rule or bound": "rules or bounds",
               "other rule or bound": "other rules and bounds"}.get(noun, f"{noun}s")  # fmt: skip
    return f"{number:,} {several}"


def listing(parts: Sequence[str]) -> str:
    """Write a list as a sentence does: ``a, b and c``."""
    return parts[0] if len(parts) == 1 else f"{', '.join(parts[:-1])} and {parts[-1]}"


def few(names: Sequence[str], others: str = "others", most: int = 6) -> str:
    """Write a list as a sentence does, and count the `others` where there are many."""
    if len(names) <= most:
        return listing(names)
    return listing([*names[: most - 1], f"{len(names) - most + 1:,} {others}"])
