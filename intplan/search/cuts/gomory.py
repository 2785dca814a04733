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
from dataclasses import dataclass, fields
from functools import partial
from typing import Any

import numpy as np

from intplan.search.cuts.candidate import EFFICACY, Candidate, unlike
from intplan.search.cuts.distances import Limits, Rounding, bounds_used
from intplan.search.evidence import ROUNDING
from intplan.search.tightening import Bounds

AWAY = 0.005  # least distance of the right-hand side from a whole number
TINY = 1e-11  # multipliers below this are dropped
SMALL = 1e-7  # coefficients this small next to the largest are removed by their bound
SPREAD = 1e6  # greatest ratio of two coefficients of a cut


def gomory_cuts(
    rounding: Rounding,
    limits: Limits,
    multipliers: np.ndarray,
    most: int,
) -> list[Candidate]:
    """Return the deepest cuts of combinations of rows.

    Combinations that give no cut that is violated, safe and well scaled are passed over.  All
    are worked on at once, as matrices with a line a combination.

    Parameters
    ----------
    multipliers : (k, u) of the rows of `limits`
    most : how many cuts to return at most
    """
    base = _Base.of(rounding, limits)
    work = _combine(base, multipliers)
    coefficients, least, slip = _round(base, work)
    cuts: list[Candidate] = []
    for i in _by_depth(coefficients, least, rounding.x):
        loss: float | None = 0.0
        if len(rounding.open):
            loss = _settle_open(base, work, i, coefficients[i], slip.item(i))
        if loss is None:
            continue
        bare = _trim(coefficients[i], least.item(i) - loss, rounding.bounds)
        if bare is None:
            continue
        candidate = Candidate("gomory", *bare, partial(_explain, base, work, i))
        if candidate.measure(rounding.x):
            cuts.append(candidate)
            if len(cuts) == most:
                break
    return cuts


def deepest_combinations(
    rounding: Rounding, limits: Limits, multipliers: np.ndarray, most: int
) -> np.ndarray:
    """Return the combinations whose cuts are deepest and unlike each other, (most, u).

    Parameters as of `gomory_cuts`; nothing here is safe against rounding.
    """
    base = _Base.of(rounding, limits)
    work = _combine(base, multipliers)
    coefficients, least, _ = _round(base, work)
    order = np.array(_by_depth(coefficients, least, rounding.x)[: 4 * most], int)
    return work.multipliers[order[unlike(coefficients[order], most)]]


def _by_depth(coefficients: np.ndarray, least: np.ndarray, x: np.ndarray) -> list[int]:
    """Return which cuts are violated at a point, deepest first."""
    norms = np.sqrt(np.einsum("ij,ij->i", coefficients, coefficients))
    depths = (least - coefficients @ x) / norms
    order = (-depths).argsort(kind="stable")
    return order[depths[order] > EFFICACY].tolist()


@dataclass
class _Base:
    """What all combinations of one round share.

    Attributes
    ----------
    limits, matrix : (u, ...) the rows
    at_least, anchors, sides : (columns,) which bound distances are measured from, its value (0
        where there is none), and the sign of the distance, 0 if it is fixed
    grounded : (columns,) whether there is such a bound
    """

    rounding: Rounding
    limits: Limits
    matrix: np.ndarray
    at_least: np.ndarray
    anchors: np.ndarray
    sides: np.ndarray
    grounded: np.ndarray

    @classmethod
    def of(cls, rounding: Rounding, limits: Limits) -> _Base:
        """Measure the activities from their nearer bounds."""
        bounds, at_least = rounding.bounds, rounding.nearer_least()
        anchors = np.where(at_least, bounds.least, bounds.most)
        grounded = np.isfinite(anchors)
        sides = np.where(at_least, 1.0, -1.0)
        sides[bounds.least == bounds.most] = 0.0
        return cls(
            rounding, limits, rounding.rows.matrix[limits.numbers], at_least,
            np.where(grounded, anchors, 0.0), sides, grounded,
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
        return _Combinations(*(getattr(self, f.name)[chosen] for f in fields(self)))


def _combine(base: _Base, multipliers: np.ndarray) -> _Combinations:
    """Add the rows up; leave out combinations without a bound to measure from or a fraction."""
    multipliers = np.where(np.abs(multipliers) > TINY, multipliers, 0.0)
    own = -(multipliers @ base.matrix)
    count = multipliers.shape[1] + own.shape[1]
    error = (multipliers.shape[1] + 3) * ROUNDING * 2.0 * np.abs(multipliers).sum(axis=1)
    live = np.abs(own) > error[:, None]
    own = np.where(live, own, 0.0)
    right = -(multipliers @ base.limits.at + own @ base.anchors)
    size = np.abs(multipliers) @ np.abs(base.limits.at) + np.abs(own) @ np.abs(base.anchors)
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
    rounding, limits = base.rounding, base.limits
    row_gamma = _rounded(work.multipliers * limits.sides, rounding.grain[limits.numbers], work)
    own_gamma = _rounded(work.own * base.sides, rounding.whole * 1.0, work)
    row_weights = row_gamma * limits.sides
    own_weights = own_gamma * base.sides
    coefficients = row_weights @ base.matrix + own_weights
    least = 1.0 + row_weights @ limits.at + own_weights @ base.anchors
    size = np.abs(row_weights) @ np.abs(limits.at) + np.abs(own_weights) @ np.abs(base.anchors)
    count = sum(base.matrix.shape)
    spent = (count + 4) * ROUNDING * (1.0 + size) + 4.0 * rounding.reach * work.error / work.near
    weight = 2.0 * np.abs(row_weights).sum(axis=1) + np.abs(own_weights).max(axis=1, initial=0.0)
    slip = (len(limits.numbers) + 4) * ROUNDING * (weight + 1.0)
    return coefficients, least - 1.001 * (spent + slip * rounding.reach), slip


def _explain(base: _Base, work: _Combinations, i: int) -> tuple[dict[str, Any], bool]:
    """Return the evidence of one cut, and whether it leans on the cut-off."""
    used = work.multipliers[i].nonzero()[0]
    numbers = base.limits.numbers[used]
    box, leans = base.rounding.box(base.matrix[used].any(axis=0))
    live = work.live[i].nonzero()[0]
    evidence = {
        "rows": numbers, "multipliers": work.multipliers[i, used],
        "row_sides": base.limits.sides[used], "plus": "0", **box,
        **bounds_used(live, base.at_least[live], base.sides[live], base.rounding.bounds),
    }  # fmt: skip
    return evidence, leans or bool(base.rounding.leaning_rows[numbers].any())


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
    bounds, loss = base.rounding.bounds, 0.0
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
