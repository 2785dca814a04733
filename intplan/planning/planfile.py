"""Plans as CSV files with the columns ``activity`` and ``amount``: hand-made ones in, ours out."""

from __future__ import annotations

import csv
import io
import os
import re
import sys
from collections.abc import Iterator, Mapping, Sequence
from decimal import Decimal
from fractions import Fraction
from typing import NamedTuple

from intplan.errors import PlanFileError, excerpt, nearest, unknown
from intplan.files import read_file, write_atomically
from intplan.planning.numbers import has_short_decimal
from intplan.planning.numbers import nearest as nearest_number
from intplan.sheet import Sheet
from intplan.sheet.names import normal
from intplan.sheet.numbers import Number, fraction_text, lowest

COLUMNS = ("activity", "amount")
LARGEST_FILE = 64 << 20  # bytes
LONGEST_AMOUNT = 10_000  # characters
LARGEST_POWER = 400  # of ten; doubles end at 308
LARGEST_AMOUNT = int(sys.float_info.max)  # what other programs can take back
NAMES_SHOWN = 5
SEPARATORS = ";\t"  # what other programs put between columns
FIRST_LINE = "; the first line names the columns: activity,amount"
DECIMAL = re.compile(r"[+-]?(?:[0-9]+(?:\.[0-9]*)?|\.[0-9]+)(?:[eE](?P<power>[+-]?[0-9]+))?")
RATIO = re.compile(r"(?P<top>[+-]?[0-9]+)/(?P<bottom>[0-9]+)")


class PlanFile(NamedTuple):
    """A plan as it was read: one exact amount an activity, in the sheet's order, and warnings."""

    amounts: list[Number]
    warnings: list[str]


class _Header(NamedTuple):
    """Where a file has its columns, and how many it has."""

    activity: int
    amount: int
    cells: int


def read_plan(path: str | os.PathLike[str], sheet: Sheet) -> PlanFile:
    """Read a plan for a sheet.

    Parameters
    ----------
    path : a CSV file, UTF-8, comma between cells; other columns than the two are passed over
    sheet : names the activities

    Returns
    -------
    PlanFile
        Activities that the file leaves out count as 0, which a warning says.

    Raises
    ------
    PlanFileError
        With line and column, where a name is unknown or comes twice, an amount is no number, or
        is a fraction of a whole activity.
    """
    where = os.fspath(path)
    rows = _rows(read_file(path, LARGEST_FILE, PlanFileError), where)
    _, names = next(rows, (1, []))
    header = _read_header(names, where)
    amounts: dict[str, Number] = {}
    lines: dict[str, int] = {}
    for line, cells in rows:
        if len(cells) != header.cells:
            hint = "; a decimal has a point, not a comma" if len(cells) > header.cells else ""
            if any(mark in cells[0] for mark in SEPARATORS):
                hint = "; put a comma between columns"
            raise PlanFileError(
                f"{_cells(len(cells))} where the header has {header.cells}{hint}",
                where=f"{where}, line {line}",
            )
        name = normal(cells[header.activity].strip())
        place = f"{where}, line {line}, column {header.activity + 1}"
        _check_name(name, sheet, lines, place)
        lines[name] = line
        place = f"{where}, line {line}, column {header.amount + 1}"
        amounts[name] = _read_amount(cells[header.amount], name, sheet, place)
    missing = [a.name for a in sheet.activities if a.name not in amounts]
    return PlanFile(
        [amounts.get(activity.name, 0) for activity in sheet.activities],
        [_missing_sentence(missing)] if missing else [],
    )


def write_plan(path: str | os.PathLike[str], sheet: Sheet, amounts: Mapping[str, Number]) -> None:
    """Write a plan that `read_plan` takes back exactly.

    Parameters
    ----------
    path : the CSV file to write
    sheet : gives the order of the activities
    amounts : by name; a number without a short decimal is written as ``p/q``
    """
    text = io.StringIO()
    writer = csv.writer(text, lineterminator="\n")
    writer.writerow(COLUMNS)
    for activity in sheet.activities:
        writer.writerow([activity.name, amount_text(amounts[activity.name])])
    write_atomically(path, text.getvalue().encode())


def amount_text(amount: Number) -> str:
    """Write an amount as a plain decimal if a short one is exact, else as ``p/q``."""
    if amount.denominator == 1 or not has_short_decimal(amount):
        return fraction_text(amount)
    return format(Decimal(repr(nearest_number(amount))), "f")


def _rows(raw: bytes, where: str) -> Iterator[tuple[int, list[str]]]:
    """Yield the lines that are not empty, each with its number."""
    try:
        text = raw.decode("utf-8-sig")
    except UnicodeDecodeError as error:
        line = raw.count(b"\n", 0, error.start) + 1
        raise PlanFileError(
            "this is no UTF-8 text; save the file as CSV in UTF-8", where=f"{where}, line {line}"
        ) from error
    reader = csv.reader(io.StringIO(text, newline=""), strict=True)
    line = 1
    try:
        for cells in reader:
            if any(cell.strip() for cell in cells):
                yield line, cells
            line = reader.line_num + 1
    except csv.Error as error:
        raise PlanFileError(f"this is no CSV ({error})", where=f"{where}, line {line}") from error


def _read_header(cells: Sequence[str], where: str) -> _Header:
    if not cells:
        raise PlanFileError("the file is empty; it needs the columns activity,amount", where=where)
    names = [cell.strip().lower() for cell in cells]
    for column in COLUMNS:
        if column in names:
            if names.count(column) > 1:
                raise PlanFileError(f"two columns are called {column}", where=f"{where}, line 1")
            continue
        close = nearest(column, names)
        if any(mark in cells[0] for mark in SEPARATORS):
            hint = "; put a comma between columns"
        else:
            hint = f"; is {excerpt(close)} meant to be it?" if close else FIRST_LINE
        raise PlanFileError(f"there is no column {column}{hint}", where=f"{where}, line 1")
    return _Header(names.index("activity"), names.index("amount"), len(names))


def _check_name(name: str, sheet: Sheet, lines: Mapping[str, int], place: str) -> None:
    if name in lines:
        raise PlanFileError(f"{name} is already given in line {lines[name]}", where=place)
    if name not in sheet.activity_index:
        message = unknown("activity", name, sheet.activity_index) if name else "a name is missing"
        raise PlanFileError(message, where=place)


def _read_amount(cell: str, name: str, sheet: Sheet, place: str) -> Number:
    amount = _parse_amount(cell.strip())
    if not cell.strip():
        raise PlanFileError(f"{name} has no amount", where=place)
    if amount is None:
        shown = excerpt(cell.strip())
        hint = "; a decimal has a point, thousands no mark" if "," in cell else ""
        raise PlanFileError(
            f"the amount of {name} is {shown}, no number such as 12, 2.5 or 7/3{hint}", where=place
        )
    if abs(amount) > LARGEST_AMOUNT:
        raise PlanFileError(
            f"the amount of {name} is larger than doubles hold (about 1.8e308)", where=place
        )
    if amount.denominator != 1 and sheet.activities[sheet.activity_index[name]].whole:
        raise PlanFileError(
            f"{name} comes in whole units, and its amount is {amount_text(amount)}", where=place
        )
    return amount


def _parse_amount(text: str) -> Number | None:
    """Return the exact number that a cell holds, None if it holds something else."""
    if len(text) > LONGEST_AMOUNT:
        return None
    if ratio := RATIO.fullmatch(text):
        top, bottom = (int(Decimal(ratio[part])) for part in ("top", "bottom"))
        number = Fraction(top, bottom) if bottom else None
    elif decimal := DECIMAL.fullmatch(text):
        power = decimal["power"] or "0"
        fits = len(power) <= 5 and abs(int(power)) <= LARGEST_POWER
        number = Fraction(Decimal(text)) if fits else None
    else:
        number = None
    return None if number is None else lowest(number)


def _missing_sentence(names: Sequence[str]) -> str:
    if len(names) == 1:
        return f"{names[0]} is not in the plan and counts as 0"
    shown = ", ".join(names[:NAMES_SHOWN])
    more = f" and {len(names) - NAMES_SHOWN} more" if len(names) > NAMES_SHOWN else ""
    return f"{len(names)} activities are not in the plan and count as 0: {shown}{more}"


def _cells(count: int) -> str:
    return "1 cell" if count == 1 else f"{count} cells"
