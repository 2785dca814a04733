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
from functools import partial
from typing import Any

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


def gomory_cuts(
    rounding: Rounding,
    dictionary: Dictionary,
    rows: np.ndarray,
    x: np.ndarray,
    bounds: Bounds,
    leaning_rows: np.ndarray,
) -> list[Candidate]:
    """Return the cuts of dictionary rows whose basic whole activity has a fractional value.

    Rows that give no cut that is violated, safe and well scaled are passed over.  All rows are
    worked on at once, as matrices with a line a row.

    Parameters
    ----------
    rows : (k,) dictionary rows
    x : (columns,) the dictionary's point
    bounds : bounds under which the cuts will be used, or wider ones
    leaning_rows : (rows,) bool, rows that lean on the cut-off
    """
    n = dictionary.columns
    entries = dictionary.entries[rows]
    entries = np.where(np.abs(entries) > TINY, entries, 0.0)
    used = ((dictionary.nonbasic >= n) & entries.any(axis=0)).nonzero()[0]
    base = _Base.of(rounding, dictionary, used, x, bounds)
    work = _combine(base, entries[:, used])
    if not len(work.multipliers):
        return []
    coefficients, least, slip = _round(base, work)
    cuts = []
    for i in range(len(least)):
        loss = 0.0
        if len(rounding.open):
            loss = _settle_open(base, work, i, coefficients[i], slip.item(i))
        bare = None if loss is None else _trim(coefficients[i], least.item(i) - loss, bounds)
        if bare is None:
            continue
        candidate = Candidate("gomory", *bare, partial(_explain, base, work, i, leaning_rows))
        if candidate.measure(x):
            cuts.append(candidate)
    return cuts


@dataclass
class _Base:
    """What all combinations of one round share.

    Attributes
    ----------
    numbers, matrix, limits, row_sides : (u, ...) the rows whose values are not basic, what they
        are at, and the side they are on
    at_least, anchors, sides : (columns,) which bound distances are measured from, its value (0
        where there is none), and the sign of the distance, 0 if it is fixed
    grounded : (columns,) whether there is such a bound
    """

    rounding: Rounding
    bounds: Bounds
    numbers: np.ndarray
    matrix: np.ndarray
    limits: np.ndarray
    row_sides: np.ndarray
    at_least: np.ndarray
    anchors: np.ndarray
    sides: np.ndarray
    grounded: np.ndarray

    @classmethod
    def of(
        cls,
        rounding: Rounding,
        dictionary: Dictionary,
        used: np.ndarray,
        x: np.ndarray,
        bounds: Bounds,
    ) -> _Base:
        """Gather it for the non-basic columns used."""
        numbers = dictionary.nonbasic[used] - dictionary.columns
        at_least = nearer_least(x, bounds)
        anchors = np.where(at_least, bounds.least, bounds.most)
        grounded = np.isfinite(anchors)
        sides = np.where(at_least, 1.0, -1.0)
        sides[bounds.least == bounds.most] = 0.0
        return cls(
            rounding, bounds, numbers, rounding.rows.matrix[numbers], dictionary.at[used],
            dictionary.side[used], at_least, np.where(grounded, anchors, 0.0), sides, grounded,
        )  # fmt: skip


@dataclass
class _Combinations:
    """Combinations of rows in distances, one a line.

    Attributes
    ----------
    multipliers : (k, u)
    own : (k, columns) coefficients on the activities, 0 where `live` is false
    live : (k, columns) coefficients beyond their error
    error : (k,) of the coefficients
    right_error : (k,) of the right-hand side
    fraction : (k,) fractional part of the right-hand side
    near : (k,) its distance from 0 and 1
    """

    multipliers: np.ndarray
    own: np.ndarray
    live: np.ndarray
    error: np.ndarray
    right_error: np.ndarray
    fraction: np.ndarray
    near: np.ndarray

    def only(self, chosen: np.ndarray) -> _Combinations:
        """Return some of them."""
        return _Combinations(
            self.multipliers[chosen], self.own[chosen], self.live[chosen], self.error[chosen],
            self.right_error[chosen], self.fraction[chosen], self.near[chosen],
        )  # fmt: skip


def _combine(base: _Base, multipliers: np.ndarray) -> _Combinations:
    """Add the rows up; leave out combinations without a bound to measure from or a fraction."""
    own = -(multipliers @ base.matrix)
    count = multipliers.shape[1] + own.shape[1]
    error = (multipliers.shape[1] + 3) * ROUNDING * 2.0 * np.abs(multipliers).sum(axis=1)
    live = np.abs(own) > error[:, None]
    own = np.where(live, own, 0.0)
    right = -(multipliers @ base.limits + own @ base.anchors)
    size = np.abs(multipliers) @ np.abs(base.limits) + np.abs(own) @ np.abs(base.anchors)
    right_error = error * base.rounding.reach + (count + 3) * ROUNDING * size
    fraction = right - np.floor(right)
    near = np.minimum(fraction, 1.0 - fraction)
    good = (near >= AWAY) & (right_error <= AWAY * 1e-3)
    good &= ~(live & ~base.grounded).any(axis=1)
    work = _Combinations(multipliers, own, live, error, right_error, fraction, near)
    return work.only(good.nonzero()[0])


def _round(base: _Base, work: _Combinations) -> tuple[np.ndarray, np.ndarray, np.ndarray]:
    """Return the rounded combinations as rows over the activities.

    Returns
    -------
    coefficients : (k, columns)
    least : (k,) what rounding errors may have added at activities with both bounds is taken off
    slip : (k,) the error that each coefficient may have
    """
    rounding = base.rounding
    row_gamma = _rounded(work.multipliers * base.row_sides, rounding.grain[base.numbers], work)
    own_gamma = _rounded(work.own * base.sides, rounding.whole * 1.0, work)
    row_weights = row_gamma * base.row_sides
    own_weights = own_gamma * base.sides
    coefficients = row_weights @ base.matrix + own_weights
    least = 1.0 + row_weights @ base.limits + own_weights @ base.anchors
    size = np.abs(row_weights) @ np.abs(base.limits) + np.abs(own_weights) @ np.abs(base.anchors)
    count = sum(base.matrix.shape)
    spent = (count + 4) * ROUNDING * (1.0 + size) + 4.0 * rounding.reach * work.error / work.near
    weight = 2.0 * np.abs(row_weights).sum(axis=1) + np.abs(own_weights).max(axis=1, initial=0.0)
    slip = (len(base.numbers) + 4) * ROUNDING * (weight + 1.0)
    return coefficients, least - 1.001 * (spent + slip * rounding.reach), slip


def _explain(
    base: _Base, work: _Combinations, i: int, leaning_rows: np.ndarray
) -> tuple[dict[str, Any], bool]:
    """Return the evidence of one cut, and whether it leans on the cut-off."""
    used = work.multipliers[i].nonzero()[0]
    numbers = base.numbers[used]
    box, leans = base.rounding.box(base.matrix[used].any(axis=0), base.bounds)
    live = work.live[i].nonzero()[0]
    evidence = {
        "rows": numbers, "multipliers": work.multipliers[i, used],
        "row_sides": base.row_sides[used], **box,
        **bounds_used(live, base.at_least[live], base.sides[live], base.bounds),
    }  # fmt: skip
    return evidence, leans or bool(leaning_rows[numbers].any())


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


def nearer_least(x: np.ndarray, bounds: Bounds) -> np.ndarray:
    """Choose for each activity the bound to measure from, the nearer one: true for its least."""
    return x - bounds.least <= bounds.most - x


def _rounded(a: np.ndarray, grain: np.ndarray, work: _Combinations) -> np.ndarray:
    """Return the cuts' coefficients on distances, rounded up by the error they may carry.

    Parameters
    ----------
    a : (k, m) coefficients of the combinations on distances
    grain : (m,) distances are multiples of this, 0 for divisible ones
    """
    stepped = grain > 0
    steps = np.where(stepped, grain, 1.0)
    fraction, near = work.fraction[:, None], work.near[:, None]
    scaled = a * steps
    part = scaled - np.floor(scaled)
    divisible = np.where(a > 0, a / fraction, -a / (1.0 - fraction))
    whole = np.minimum(part / fraction, (1.0 - part) / (1.0 - fraction)) / steps
    gamma = np.where(stepped, whole, divisible)
    error = (work.error + work.right_error)[:, None]
    gamma += (error / near + 4 * ROUNDING) * (1.0 / steps + gamma)
    gamma[a == 0] = 0.0
    return gamma


def _settle_open(
    base: _Base, work: _Combinations, i: int, coefficients: np.ndarray, slip: float
) -> float | None:
    """Raise coefficients of activities with one bound by their error; None if that cannot be."""
    bounds, loss = base.bounds, 0.0
    touched = base.matrix[work.multipliers[i].nonzero()[0]].any(axis=0)
    for j in base.rounding.open.tolist():
        if not touched[j]:
            continue
        low, high = bounds.least.item(j), bounds.most.item(j)
        if not work.live[i, j] or (low == -math.inf and high == math.inf):
            return None
        if high == math.inf:
            coefficients[j] += slip
            loss += 2.0 * slip * abs(low)
        elif low == -math.inf:
            coefficients[j] -= slip
            loss += 2.0 * slip * abs(high)
        else:
            loss += slip * max(abs(low), abs(high))
    return 1.001 * loss


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
