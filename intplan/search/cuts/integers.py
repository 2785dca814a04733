"""Gomory mixed-integer cuts in integers, without any rounding.

A cut that is weakened by a rounding error leaves the relaxation a hair below the best plan, and
where the aim has divisible activities no step of the aim bridges that hair: the tie would have to
be broken by more branching.  So for such aims the multipliers of the combination, which may be
any numbers, are first taken as fractions over one small denominator; everything after that is
integer arithmetic.
"""

from __future__ import annotations

import math
from typing import Any

import numpy as np

from intplan.relaxation.dictionary import Dictionary
from intplan.search.arithmetic import common_denominator
from intplan.search.cuts.candidate import Candidate
from intplan.search.cuts.gomory import AWAY, SPREAD, TINY, Rounding, bounds_used, nearer_least
from intplan.search.tightening import Bounds

DENOMINATOR = 50_000  # greatest common denominator of the multipliers
NEAR = 1e-11  # how near a multiplier must be to its fraction
LARGEST = float(1 << 62)
EXACT = 1 << 53


def integer_gomory_cut(
    rounding: Rounding,
    dictionary: Dictionary,
    row: int,
    x: np.ndarray,
    bounds: Bounds,
    leaning_rows: np.ndarray,
) -> Candidate | None:
    """Return the exact cut of a dictionary row, or None where its numbers grow too large.

    Parameters and meaning as `intplan.search.cuts.gomory.gomory_cuts`, for one row.
    """
    n = dictionary.columns
    entries = dictionary.entries[row]
    used = ((dictionary.nonbasic >= n) & (np.abs(entries) > TINY)).nonzero()[0]
    numbers = dictionary.nonbasic[used] - n
    shifts = rounding.rows.shift[numbers]
    if (shifts < 0).any():
        return None
    common = common_denominator(np.ldexp(entries[used], -shifts), DENOMINATOR, NEAR)
    if common is None:
        return None
    weights, unit = common
    matrix = np.ldexp(rounding.rows.matrix[numbers], shifts[:, None])
    if float((np.abs(weights) @ np.abs(matrix)).max(initial=0.0)) * unit > LARGEST:
        return None
    whole_weights = weights.astype(np.int64)
    integers = matrix.astype(np.int64)
    own = -(whole_weights @ integers)
    row_sides = dictionary.side[used].astype(np.int64)
    live = own.nonzero()[0]
    at_least = nearer_least(x, bounds)[live]
    anchors = np.where(at_least, bounds.least[live], bounds.most[live])
    limits = np.ldexp(dictionary.at[used], shifts)
    if not (_whole(anchors) and _whole(limits)):
        return None
    sides = np.where(at_least, 1, -1)
    sides[bounds.least[live] == bounds.most[live]] = 0
    whole_limits, whole_anchors = limits.astype(np.int64), anchors.astype(np.int64)
    size = float(np.abs(weights) @ np.abs(limits) + np.abs(own[live]) @ np.abs(anchors))
    if size > LARGEST:
        return None
    right = -int(whole_weights @ whole_limits) - int(own[live] @ whole_anchors)
    part = right % unit
    if min(part, unit - part) < AWAY * unit:
        return None
    stepped = rounding.grain[numbers] > 0
    row_gamma = _rounded(whole_weights * row_sides, stepped, part, unit)
    own_gamma = _rounded(own[live] * sides, rounding.whole[live], part, unit)
    return _assemble(
        rounding, dictionary, x, bounds, leaning_rows,
        (numbers, entries[used], row_sides, row_gamma * row_sides, integers, whole_limits),
        (live, at_least, sides, own_gamma * sides, whole_anchors),
        part * (unit - part), (whole_weights, unit, shifts),
    )  # fmt: skip


def _whole(values: np.ndarray) -> bool:
    return bool((np.isfinite(values) & (values == np.rint(values))).all())


def _rounded(a: np.ndarray, stepped: np.ndarray, part: int, unit: int) -> np.ndarray:
    """Return the coefficients on distances times ``part * (unit - part)``, integers.

    Parameters
    ----------
    a : coefficients of the combination on distances, times `unit`
    stepped : distances that are whole
    part : fractional part of the right-hand side, times `unit`
    """
    left = a % unit
    whole = np.minimum(left * (unit - part), (unit - left) * part)
    divisible = np.where(a > 0, a * (unit - part), -a * part)
    return np.where(stepped, whole, divisible)


def _assemble(
    rounding: Rounding,
    dictionary: Dictionary,
    x: np.ndarray,
    bounds: Bounds,
    leaning_rows: np.ndarray,
    of_rows: tuple[np.ndarray, ...],
    of_columns: tuple[np.ndarray, ...],
    right: int,
    origin: tuple[np.ndarray, int, np.ndarray],
) -> Candidate | None:
    """Write the cut over the activities; None if it is not violated or not exact in doubles."""
    numbers, _, row_sides, row_weights, integers, limits = of_rows
    live, at_least, sides, own_weights, anchors = of_columns
    bound = float(np.abs(row_weights.astype(float)) @ np.abs(integers).max(axis=1, initial=1))
    if bound + float(np.abs(own_weights).max(initial=0)) > LARGEST:
        return None
    coefficients = row_weights @ integers
    coefficients[live] += own_weights
    least = right + sum(
        int(w) * int(v)
        for w, v in zip((*row_weights, *own_weights), (*limits, *anchors), strict=True)
    )
    divisor = math.gcd(*coefficients[coefficients != 0].tolist(), least)
    if not divisor or not coefficients.any():
        return None
    coefficients //= divisor
    least //= divisor
    sizes = np.abs(coefficients[coefficients != 0])
    largest = int(sizes.max())
    if max(largest, abs(least)) >= EXACT or largest > SPREAD * int(sizes.min()):
        return None
    shift = largest.bit_length() - 1
    scale = 2.0**-shift
    weights, unit, shifts = origin

    def explain() -> tuple[dict[str, Any], bool]:
        touched = np.zeros(integers.shape[1], bool)
        touched[live] = True
        box, leans = rounding.box(touched, bounds)
        fractions = [f"{int(w) << int(s)}/{unit}" for w, s in zip(weights, shifts, strict=True)]
        evidence = {
            "rows": numbers, "multipliers": fractions, "row_sides": row_sides, **box,
            **bounds_used(live, at_least, sides, bounds),
        }  # fmt: skip
        return evidence, leans or bool(leaning_rows[numbers].any())

    candidate = Candidate("gomory", coefficients * scale, least * scale, explain, shift)
    return candidate if candidate.measure(x) else None
