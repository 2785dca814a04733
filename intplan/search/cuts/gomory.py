"""Gomory mixed-integer cuts, made safe against rounding.

A combination of rows, ``multipliers @ rows @ x - (multipliers @ rows) @ x = 0``, is written in
distances from bounds and limits, all at least 0; the mixed-integer rounding of its coefficients
is the cut.  The multipliers may be any doubles, so those of a dictionary row serve as they are;
every later rounding error is bounded and taken off the cut, which therefore holds exactly.

References
----------
R. E. Gomory, An algorithm for the mixed integer problem, RAND report RM-2597, 1960.
W. Cook, S. Dash, R. Fukasawa, M. Goycoolea, Numerically safe Gomory mixed-integer cuts, INFORMS J.
Computing 21:641-649, 2009.
"""

from __future__ import annotations

import math
from dataclasses import dataclass

import numpy as np

from intplan.relaxation.dictionary import Dictionary
from intplan.relaxation.rows import RowStore
from intplan.search.cuts.candidate import Candidate
from intplan.search.evidence import ROUNDING
from intplan.search.tightening import Bounds

AWAY = 0.005  # least distance of the right-hand side from a whole number
TINY = 1e-11  # multipliers below this are dropped
SMALL = 1e-7  # coefficients this small next to the largest are removed by their bound
SPREAD = 1e6  # greatest ratio of two coefficients of a cut


@dataclass
class Rounding:
    """What mixed-integer rounding needs to know of a problem.

    Attributes
    ----------
    rows : the store
    whole : (columns,) bool
    grain : (rows,) the row values of all-whole plans are multiples of this, 0 if of nothing
    reach : sum over the bounded activities of their greatest size
    open : activities without both bounds
    own : the sheet's own bounds, a pair of (columns,)
    """

    rows: RowStore
    whole: np.ndarray
    grain: np.ndarray
    reach: float
    open: np.ndarray
    own: tuple[np.ndarray, np.ndarray]

    def box(
        self, touched: np.ndarray, bounds: Bounds
    ) -> tuple[dict[str, np.ndarray], bool]:
        """Return, as evidence, the bounds of some activities that are not the sheet's own.

        Errors are bounded over the box of the activities touched, (columns,) bool, so a cut
        leans on these bounds even where it measures no distance from them.  Returned as well:
        whether any of them leans on the cut-off.
        """
        least = touched & (bounds.least != self.own[0])
        most = touched & (bounds.most != self.own[1])
        leans = bool((least & bounds.leans[0]).any() or (most & bounds.leans[1]).any())
        numbers = np.concatenate((2 * least.nonzero()[0], 2 * most.nonzero()[0] + 1))
        return {"box": numbers, "box_values": bounds.values(numbers)}, leans


def gomory_cut(
    rounding: Rounding,
    dictionary: Dictionary,
    row: int,
    x: np.ndarray,
    bounds: Bounds,
    leaning_rows: np.ndarray,
) -> Candidate | None:
    """Return the cut of one dictionary row whose basic whole activity has a fractional value.

    Parameters
    ----------
    row : the dictionary row
    x : (columns,) the dictionary's point
    bounds : bounds under which the cut will be used, or wider ones
    leaning_rows : (rows,) bool, rows that lean on the cut-off

    Returns
    -------
    Candidate or None
        None if the row gives no cut that is violated, safe and well scaled.
    """
    n = dictionary.columns
    entries = dictionary.entries[row]
    used = ((dictionary.nonbasic >= n) & (np.abs(entries) > TINY)).nonzero()[0]
    numbers = dictionary.nonbasic[used] - n
    multipliers = entries[used]
    store = rounding.rows
    row_sides = dictionary.side[used]
    limits = dictionary.at[used]
    matrix = store.matrix[numbers]
    own = -(multipliers @ matrix)
    weight = float(np.abs(multipliers).sum())
    error = (len(used) + 3) * ROUNDING * 2.0 * weight
    live = (np.abs(own) > error).nonzero()[0]
    at_least = _nearer_least(x[live], bounds.least[live], bounds.most[live])
    anchors = np.where(at_least, bounds.least[live], bounds.most[live])
    if not np.isfinite(anchors).all():
        return None
    sides = np.where(at_least, 1.0, -1.0)
    sides[bounds.least[live] == bounds.most[live]] = 0.0
    terms = np.concatenate((multipliers * limits, own[live] * anchors))
    right = -float(terms.sum())
    right_error = (
        error * rounding.reach + (len(terms) + 3) * ROUNDING * float(np.abs(terms).sum())
    )
    fraction = right - math.floor(right)
    near = min(fraction, 1.0 - fraction)
    if near < AWAY or right_error > AWAY * 1e-3:
        return None
    row_gamma = _rounded(
        multipliers * row_sides, rounding.grain[numbers], fraction, error + right_error, near
    )
    own_gamma = _rounded(
        own[live] * sides, rounding.whole[live] * 1.0, fraction, error + right_error, near
    )
    row_weights = row_gamma * row_sides
    own_weights = own_gamma * sides
    coefficients = row_weights @ matrix
    coefficients[live] += own_weights
    shifts = np.concatenate((row_weights * limits, own_weights * anchors))
    least = 1.0 + float(shifts.sum())
    spent = (len(shifts) + 4) * ROUNDING * (1.0 + float(np.abs(shifts).sum()))
    spent += 4.0 * rounding.reach * error / near
    slip = (len(used) + 4) * ROUNDING * (2.0 * float(np.abs(row_weights).sum()) + 1.0)
    slip += (len(used) + 4) * ROUNDING * float(np.abs(own_weights).max(initial=0.0))
    spent += slip * rounding.reach
    if len(rounding.open):
        loss = _settle_open(rounding, coefficients, own, error, slip, matrix, bounds)
        if loss is None:
            return None
        spent += loss
    bare = _trim(coefficients, least - spent * 1.001, bounds)
    if bare is None:
        return None
    coefficients, least = bare
    box, leans = rounding.box(matrix.any(axis=0), bounds)
    candidate = Candidate(
        "gomory", coefficients, least,
        {"rows": numbers, "multipliers": multipliers, "row_sides": row_sides, **box,
         **bounds_used(live, at_least, sides, bounds)},
        leans or bool(leaning_rows[numbers].any()),
    )  # fmt: skip
    return candidate if candidate.measure(x) else None


def bounds_used(
    live: np.ndarray, at_least: np.ndarray, sides: np.ndarray, bounds: Bounds
) -> dict[str, np.ndarray]:
    """Return the bounds that distances are measured from, as evidence.

    ``bounds`` holds the numbers ``2 * column + side`` and ``values`` what they are; a fixed
    activity, whose distance is zero, appears with both.
    """
    fixed = live[sides == 0]
    numbers = np.concatenate((2 * live + ~at_least, 2 * fixed + at_least[sides == 0]))
    return {"bounds": numbers, "values": bounds.values(numbers)}


def _nearer_least(x: np.ndarray, least: np.ndarray, most: np.ndarray) -> np.ndarray:
    """Choose for each activity the bound to measure from: the nearer one."""
    return x - least <= most - x


def _rounded(
    a: np.ndarray, grain: np.ndarray, fraction: float, error: float, near: float
) -> np.ndarray:
    """Return the cut's coefficients on distances, rounded up by the error they may carry.

    Parameters
    ----------
    a : coefficients of the combination on distances, (k,)
    grain : distances are multiples of this, 0 for divisible ones, (k,)
    fraction : fractional part of the right-hand side
    error : of the coefficients and the right-hand side together
    near : distance of `fraction` from 0 and 1
    """
    stepped = grain > 0
    steps = np.where(stepped, grain, 1.0)
    scaled = a * steps
    part = scaled - np.floor(scaled)
    divisible = np.where(a > 0, a / fraction, -a / (1.0 - fraction))
    whole = np.minimum(part / fraction, (1.0 - part) / (1.0 - fraction)) / steps
    gamma = np.where(stepped, whole, divisible)
    gamma += (error / near + 4 * ROUNDING) * (1.0 / steps + gamma)
    gamma[a == 0] = 0.0
    return gamma


def _settle_open(
    rounding: Rounding,
    coefficients: np.ndarray,
    own: np.ndarray,
    error: float,
    slip: float,
    matrix: np.ndarray,
    bounds: Bounds,
) -> float | None:
    """Raise coefficients of activities with one bound by their error; None if that cannot be."""
    loss = 0.0
    for j in rounding.open:
        if not matrix[:, j].any():
            continue
        low, high = bounds.least.item(j), bounds.most.item(j)
        if abs(own.item(j)) <= error or (low == -math.inf and high == math.inf):
            return None
        if high == math.inf:
            coefficients[j] += slip
            loss += 2.0 * slip * abs(low)
        elif low == -math.inf:
            coefficients[j] -= slip
            loss += 2.0 * slip * abs(high)
        else:
            loss += slip * max(abs(low), abs(high))
    return loss


def _trim(
    coefficients: np.ndarray, least: float, bounds: Bounds
) -> tuple[np.ndarray, float] | None:
    """Remove coefficients too small to matter, at their bounds' expense; scale the row.

    Returns None where the row is badly scaled.
    """
    sizes = np.abs(coefficients)
    largest = float(sizes.max(initial=0.0))
    if not (1e-9 < largest < 1e9):
        return None
    small = ((sizes > 0) & (sizes < SMALL * largest)).nonzero()[0]
    if len(small):
        ends = np.where(coefficients[small] > 0, bounds.most[small], bounds.least[small])
        if not np.isfinite(ends).all():
            return None
        removed = coefficients[small] * ends
        least -= float(removed.sum()) + 1e-12 * float(np.abs(removed).sum())
        coefficients[small] = 0.0
    kept = sizes[coefficients != 0]
    if float(kept.min()) * SPREAD < largest:
        return None
    scale = 2.0 ** -math.floor(math.log2(largest))
    return coefficients * scale, least * scale
