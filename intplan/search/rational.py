"""Square systems of integers solved exactly, by doubles that correct themselves.

An inverse in doubles gives some digits of the solution; what is missing of the right-hand side is
known exactly, scaled up and solved for again, until enough digits are there to read every entry
as a fraction over one denominator.

References
----------
Z. Wan, An algorithm to solve integer linear systems exactly using numerical methods, Journal of
Symbolic Computation 41:621-632, 2006.
J. D. Dixon, Exact solution of linear equations using p-adic expansions, Numerische Mathematik
40:137-141, 1982 (the same scheme over a prime).
"""

from __future__ import annotations

from collections.abc import Sequence

import numpy as np

DIGITS = 24  # bits gained by each correction
STEPS = 80  # most corrections
SAFE = 1 << 62


def solve_rationally(
    matrix: np.ndarray, right: Sequence[int]
) -> tuple[list[int], int] | None:
    """Return numerators and the denominator of the solution of ``matrix @ x = right``.

    Parameters
    ----------
    matrix : (k, k) int64
    right : (k,) integers

    Returns
    -------
    tuple or None
        None where doubles cannot invert the matrix or the fractions grow too large.
    """
    size = len(right)
    try:
        inverse = np.linalg.inv(matrix.astype(float))
    except np.linalg.LinAlgError:
        return None
    if not np.isfinite(inverse).all():
        return None
    largest = max(int(np.abs(matrix).max(initial=0)), 1)
    wide = matrix.astype(object)
    left = np.array(right, object)
    digits = [0] * size
    check = 4
    for step in range(1, STEPS + 1):
        scaled = left * (1 << DIGITS)
        correction = np.rint(inverse @ scaled.astype(float))
        reach = np.abs(correction).max(initial=0.0) * largest * size
        if not np.isfinite(reach):
            return None
        if reach < SAFE:
            whole = correction.astype(np.int64)
            left = scaled - matrix @ whole
        else:
            whole = np.array([int(v) for v in correction.tolist()], object)
            left = scaled - wide @ whole
        if np.abs(left).max(initial=0) > largest * size << 4:
            return None  # the inverse is too poor for the corrections to shrink
        digits = [(d << DIGITS) + w for d, w in zip(digits, whole.tolist(), strict=True)]
        if step in (check, STEPS) or not left.any():
            found = _read(digits, DIGITS * step)
            if found is not None and _solves(wide, right, *found):
                return found
            check *= 2
    return None


def _read(digits: list[int], bits: int) -> tuple[list[int], int] | None:
    """Read scaled numbers as fractions over one denominator, None if some is no short fraction."""
    unit = 1
    slack = bits // 2 - 8
    if slack <= 0:
        return None
    for d in digits:
        rest = d * unit & ((1 << bits) - 1)
        rest = min(rest, (1 << bits) - rest)
        if rest >> (bits - slack):
            unit *= _denominator(d * unit, bits, slack)
            if unit.bit_length() > slack:
                return None
    half = 1 << (bits - 1)
    return [(d * unit + half) >> bits for d in digits], unit


def _denominator(value: int, bits: int, slack: int) -> int:
    """Return the denominator of the first convergent of ``value / 2**bits`` that is near it."""
    before, rest = 1 << bits, value & ((1 << bits) - 1)
    under, over = 0, 1
    while rest >> (bits - slack):
        quotient = before // rest
        before, rest = rest, before - quotient * rest
        under, over = over, under + quotient * over
    return over


def _solves(matrix: np.ndarray, right: Sequence[int], numerators: list[int], unit: int) -> bool:
    """Tell whether a solution is exact."""
    return bool((matrix @ np.array(numerators, object) == np.array(right, object) * unit).all())
