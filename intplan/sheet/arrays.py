"""Sheets from arrays: dense or sparse, in exact numbers, each float by its shortest decimal."""

from __future__ import annotations

import math
from collections.abc import Callable, Sequence
from typing import Any

import numpy as np

from intplan.errors import SheetError
from intplan.sheet.algebra import Terms
from intplan.sheet.model import (
    Activity,
    Aim,
    Rule,
    Sense,
    Sheet,
    check_bounds,
    check_size,
)
from intplan.sheet.names import name_problem, normal
from intplan.sheet.numbers import (
    EXACT_INTEGERS,
    Number,
    NumberError,
    check_spread,
    exact,
    from_float,
    show,
)

Place = Callable[[int], str]


def sheet_from_arrays(
    aim: Any,
    rows: Any,
    *,
    row_least: Any,
    row_most: Any,
    least: Any,
    most: Any,
    whole: Any,
    maximize: bool,
    names: Sequence[str] | None,
    rule_names: Sequence[str] | None,
    title: str,
    measure: str,
) -> Sheet:
    """Do the work of `Sheet.from_arrays`, which describes the parameters."""
    aim_terms, count = _aim(aim)
    sparse = hasattr(rows, "tocoo")
    matrix = rows if sparse or rows is None else _array(rows, "rows")
    if count is None:
        count = _columns(matrix, least, most, whole, names)
    shape = (0, count) if matrix is None else tuple(matrix.shape)
    if shape in ((0,), (0, 0)):
        shape = (0, count)
    if len(shape) != 2 or shape[1] != count:
        raise SheetError(f"the shape is {shape}; expected (rules, {count} activities)", "rows")
    check_size(shape[0], count, "rows")
    if shape[0] == 0 or matrix is None:
        lines: list[Terms] = [()] * shape[0]
    else:
        lines = _sparse_terms(matrix) if sparse else _dense_terms(matrix)
    sense: Sense | None = None if aim is None else "maximize" if maximize else "minimize"
    return Sheet(
        title=title,
        measure=measure,
        aim=Aim(sense, aim_terms),
        activities=_activities(count, least, most, whole, names),
        rules=_rules(lines, row_least, row_most, rule_names),
    )


def _aim(aim: Any) -> tuple[Terms, int | None]:
    """Return the terms of the aim and the number of activities, as far as the aim tells."""
    if aim is None:
        return (), None
    array = _array(aim, "aim")
    if array.ndim != 1:
        raise SheetError(f"the shape is {array.shape}; expected (activities,)", "aim")
    values = _entries(array, lambda j: f"aim[{j}]")
    terms = tuple((j, c) for j, c in enumerate(values) if c)
    _spread(terms, (), "aim")
    return terms, array.size


def _columns(matrix: Any, *others: Any) -> int:
    """Return the number of activities where there is no aim to tell it."""
    if matrix is not None and len(matrix.shape) == 2:
        return int(matrix.shape[1])
    if matrix is not None and tuple(matrix.shape) != (0,):
        raise SheetError(f"the shape is {matrix.shape}; expected (rules, activities)", "rows")
    for other in others:
        if other is not None and np.ndim(other) == 1:
            return len(other)
    raise SheetError("an empty sheet: nothing tells the number of activities", "rows")


def _array(values: Any, what: str) -> np.ndarray:
    """Return `values` as an array of numbers or objects."""
    try:
        array = np.asarray(values)
    except (ValueError, TypeError, OverflowError) as problem:
        raise SheetError(f"this makes no array: {problem}", what) from None
    if array.dtype.kind not in "biufO":
        raise SheetError(f"expected numbers, not {array.dtype.name}", what)
    return array


def _entries(array: np.ndarray, place: Place) -> list[Number]:
    """Return the finite entries of a flat array exactly; `place` names one by its position."""
    kind = array.dtype.kind
    if kind in "bi" or (kind == "u" and array.dtype.itemsize < 8):
        return _integers(array)
    if kind == "f":
        bad = np.flatnonzero(~np.isfinite(array))
        if bad.size:
            k = bad.item(0)
            raise SheetError(f"{array[k]} is not a finite number", place(k))
        # Up to here every integer has a float of its own, so the shortest decimal is the value.
        exact_below = min(EXACT_INTEGERS, 1 << (np.finfo(array.dtype).nmant + 1))
        if (np.rint(array) == array).all() and (np.abs(array) <= exact_below).all():
            return _integers(array)
    return _one_by_one(array, place)


def _integers(array: np.ndarray) -> list[Number]:
    found: list[Number] = array.astype(np.int64).tolist()
    return found


def _one_by_one(array: np.ndarray, place: Place) -> list[Number]:
    """Return the entries of a flat array exactly, each distinct one converted once."""
    known: dict[Any, Number] = {}
    plain = array.dtype == np.float64
    found = []
    for k, value in enumerate(array.tolist() if plain else array):
        try:
            number = known.get(value)
            if number is None:
                number = known[value] = from_float(value) if plain else exact(value)
        except NumberError as problem:
            raise SheetError(str(problem), place(k)) from None
        except TypeError:
            raise SheetError("expected a number", place(k)) from None
        found.append(number)
    return found


def _dense_terms(matrix: np.ndarray) -> list[Terms]:
    """Return the terms of each row of a dense array."""
    at, columns = np.nonzero(matrix != 0)  # of objects too: None is no zero
    return _terms(matrix[at, columns], at, columns, matrix.shape[0])


def _sparse_terms(matrix: Any) -> list[Terms]:
    """Return the terms of each row of a sparse matrix; repeated entries add up exactly."""
    entries = matrix.tocoo()
    data = _array(entries.data, "rows")
    order = np.lexsort((entries.col, entries.row))
    at, columns = entries.row[order], entries.col[order]
    if not ((at[1:] == at[:-1]) & (columns[1:] == columns[:-1])).any():
        stored = data[order] != 0
        return _terms(data[order][stored], at[stored], columns[stored], matrix.shape[0])
    return _merged_terms(data[order], at, columns, matrix.shape[0])


def _terms(data: np.ndarray, at: np.ndarray, columns: np.ndarray, count: int) -> list[Terms]:
    """Group entries, sorted by row and column, into the terms of each row."""
    values = _entries(data, lambda k: f"rows[{at[k]}, {columns[k]}]")
    pairs = list(zip(columns.tolist(), values, strict=True))
    ends = np.searchsorted(at, np.arange(count + 1)).tolist()
    return [tuple(pairs[ends[i] : ends[i + 1]]) for i in range(count)]


def _merged_terms(data: np.ndarray, at: np.ndarray, columns: np.ndarray, count: int) -> list[Terms]:
    """Group entries as `_terms` does, where some come more than once."""
    values = _entries(data, lambda k: f"rows[{at[k]}, {columns[k]}]")
    lines: list[dict[int, Number]] = [{} for _ in range(count)]
    for i, j, value in zip(at.tolist(), columns.tolist(), values, strict=True):
        lines[i][j] = lines[i].get(j, 0) + value
    return [tuple((j, exact(c)) for j, c in line.items() if c) for line in lines]


def _limits(values: Any, size: int, what: str, missing: float) -> list[Number | None]:
    """Return `size` exact limits, None where the entry is None or the infinity `missing`."""
    array = _array(missing if values is None else values, what)
    if array.shape not in ((), (size,)):
        raise SheetError(f"the shape is {array.shape}; expected ({size},) or one number", what)
    scalar = array.ndim == 0
    flat = array.reshape(-1)

    def place(k: int) -> str:
        return what if scalar else f"{what}[{k}]"

    if flat.dtype.kind == "O":
        absent = np.array([v is None or _is_infinity(v, missing) for v in flat], bool)
    elif flat.dtype.kind == "f":
        absent = flat == missing
    else:
        absent = np.zeros(flat.size, bool)
    kept = np.flatnonzero(~absent)
    found: list[Number | None] = [None] * flat.size
    numbers = _entries(flat[kept], lambda k: place(kept.item(k)))
    for k, number in zip(kept.tolist(), numbers, strict=True):
        found[k] = number
    return found * size if scalar else found


def _is_infinity(value: Any, missing: float) -> bool:
    return isinstance(value, (float, np.floating)) and float(value) == missing


def _flags(whole: Any, size: int) -> list[bool]:
    """Return `size` flags."""
    array = _array(whole, "whole")
    if array.shape not in ((), (size,)):
        raise SheetError(f"the shape is {array.shape}; expected ({size},) or one flag", "whole")
    if array.dtype.kind != "b" and not np.isin(array, (0, 1)).all():
        raise SheetError("expected true or false", "whole")
    flags: list[bool] = np.broadcast_to(array.astype(bool), (size,)).tolist()
    return flags


def _names(names: Sequence[str] | None, size: int, what: str, letter: str) -> list[str]:
    """Return `size` names, numbered ones where none are given."""
    if names is None:
        return [f"{letter}[{k}]" for k in range(size)]
    given = list(names) if not isinstance(names, str) else [names]
    if len(given) != size:
        raise SheetError(f"{len(given):,} names for {size:,}", what)
    seen: dict[str, int] = {}
    for k, name in enumerate(given):
        if not isinstance(name, str):
            raise SheetError("a name is text", f"{what}[{k}]")
        given[k] = name = normal(str(name))
        problem = name_problem(name)
        if problem:
            raise SheetError(problem, f"{what}[{k}]")
        if seen.setdefault(name, k) != k:
            raise SheetError(f"the name {name} is given twice", f"{what}[{k}]")
    return given


def _activities(
    count: int, least: Any, most: Any, whole: Any, names: Sequence[str] | None
) -> tuple[Activity, ...]:
    """Return the activities with their bounds checked."""
    if count == 0:
        raise SheetError("an empty sheet: it has no activities", "rows")
    columns = zip(
        _names(names, count, "names", "x"),
        _limits(least, count, "least", -math.inf),
        _limits(most, count, "most", math.inf),
        _flags(whole, count),
        strict=True,
    )
    activities = tuple(Activity(*column) for column in columns)
    for activity in activities:
        check_bounds(activity, activity.name)
    return activities


def _rules(
    lines: list[Terms], row_least: Any, row_most: Any, names: Sequence[str] | None
) -> tuple[Rule, ...]:
    """Return the rules with their limits checked."""
    count = len(lines)
    rules = []
    for name, terms, least, most in zip(
        _names(names, count, "rule_names", "r"),
        lines,
        _limits(row_least, count, "row_least", -math.inf),
        _limits(row_most, count, "row_most", math.inf),
        strict=True,
    ):
        if least is not None and most is not None and least > most:
            raise SheetError(f"row_least = {show(least)} is above row_most = {show(most)}", name)
        _spread(terms, (v for v in (least, most) if v is not None), name)
        rules.append(Rule(name, terms, least, most))
    return tuple(rules)


def _spread(terms: Terms, limits: Any, where: str) -> None:
    try:
        check_spread((c for _, c in terms), limits)
    except NumberError as problem:
        raise SheetError(str(problem), where) from None
