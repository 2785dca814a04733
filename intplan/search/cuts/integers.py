"""Gomory mixed-integer cuts in integers, without any rounding.

A cut that is weakened by a rounding error leaves the relaxation a hair below the best plan, and
where the aim has divisible activities no step of the aim bridges that hair: the tie would have to
be broken by more branching.  So for such aims the multipliers of the combination, which may be
any numbers, are first taken as fractions over one small denominator; everything after that is
integer arithmetic.
"""

from __future__ import annotations

import math
from dataclasses import dataclass
from fractions import Fraction
from functools import cached_property, partial
from typing import Any

import numpy as np

from intplan.search.arithmetic import common_denominator
from intplan.search.cuts.candidate import Candidate
from intplan.search.cuts.distances import Limits, Rounding, bounds_used
from intplan.search.cuts.gomory import AWAY, SPREAD, TINY

DENOMINATOR = 50_000  # greatest common denominator of the multipliers
NEAR = 1e-11  # how near a multiplier must be to its fraction
LARGEST = float(1 << 60)  # int64 holds the sum of a few numbers of this size
EXACT = 1 << 53


def integer_gomory_cut(
    rounding: Rounding, limits: Limits, multipliers: np.ndarray
) -> Candidate | None:
    """Return the exact cut of one combination of rows, or None where its numbers grow too large.

    Parameters and meaning as `intplan.search.cuts.gomory.gomory_cuts`, `multipliers` being (u,).
    """
    combination = _Combination.of(rounding, limits, multipliers)
    if combination is None:
        return None
    best: tuple[int, np.ndarray, int, int] | None = None
    for added in combination.forms():
        made = combination.written_out(added)
        if made is not None:
            filled = int(np.count_nonzero(made[0]))
            if best is None or filled < best[0]:
                best = (filled, *made, added)
    if best is None:
        return None
    _, coefficients, least, added = best
    shift = int(np.abs(coefficients).max()).bit_length() - 1
    scale = 2.0**-shift
    candidate = Candidate(
        "gomory", coefficients * scale, least * scale,
        partial(combination.explain, added), shift,
    )  # fmt: skip
    return candidate if candidate.measure(rounding.x) else None


@dataclass
class _Combination:
    """A combination of rows over the denominator `unit`, in distances.

    Attributes
    ----------
    numbers, weights, shifts, sides, rows, at : (u, ...) the rows, in integers
    live, at_least, own_sides, own, anchors : (k,) the activities with a coefficient
    part : fractional part of the right-hand side, times `unit`
    right : the right-hand side, times `unit`
    stepped : (u,) rows whose value is whole
    """

    rounding: Rounding
    numbers: np.ndarray
    weights: np.ndarray
    unit: int
    shifts: np.ndarray
    sides: np.ndarray
    rows: np.ndarray
    at: np.ndarray
    live: np.ndarray
    at_least: np.ndarray
    own_sides: np.ndarray
    own: np.ndarray
    anchors: np.ndarray
    part: int
    right: int
    stepped: np.ndarray

    @classmethod
    def of(
        cls, rounding: Rounding, limits: Limits, multipliers: np.ndarray
    ) -> _Combination | None:
        """Read the multipliers as fractions and add the rows up; None if numbers grow too large."""
        used = (np.abs(multipliers) > TINY).nonzero()[0]
        numbers = limits.numbers[used]
        shifts = rounding.rows.shift[numbers]
        rounded_rows, rounded_columns = rounding.rounded
        if (shifts < 0).any() or rounded_rows[numbers].any():
            return None
        common = common_denominator(np.ldexp(multipliers[used], -shifts), DENOMINATOR, NEAR)
        if common is None:
            return None
        weights, unit = common
        rows = np.ldexp(rounding.rows.matrix[numbers], shifts[:, None])
        if float((np.abs(weights) @ np.abs(rows)).max(initial=0.0)) * unit > LARGEST:
            return None
        weights, rows = weights.astype(np.int64), rows.astype(np.int64)
        own = -(weights @ rows)
        live = own.nonzero()[0]
        own = own[live]
        if rounded_columns[live].any():
            return None
        bounds, at_least = rounding.bounds, rounding.nearer_least()[live]
        anchors = np.where(at_least, bounds.least[live], bounds.most[live])
        at = np.ldexp(limits.at[used], shifts)
        size = float(np.abs(weights) @ np.abs(at) + np.abs(own) @ np.abs(anchors))
        if not (_whole(anchors) and _whole(at)) or size > LARGEST:
            return None
        anchors, at = anchors.astype(np.int64), at.astype(np.int64)
        right = -int(weights @ at) - int(own @ anchors)
        part = right % unit
        if min(part, unit - part) < AWAY * unit:
            return None
        own_sides = np.where(at_least, 1, -1)
        own_sides[bounds.least[live] == bounds.most[live]] = 0
        return cls(
            rounding, numbers, weights, unit, shifts,
            limits.sides[used].astype(np.int64), rows, at, live, at_least, own_sides, own, anchors,
            part, right, rounding.grain[numbers] > 0,
        )  # fmt: skip

    def forms(self) -> tuple[int, ...]:
        """Return multiples of the combination itself that may be added to the rounded one.

        Where an equality takes part they change which coefficients the cut has: two of them
        cancel the divisible distances of one sign.
        """
        return (self.part, self.part - self.unit) if (self.sides == 0).any() else (0,)

    @cached_property
    def gammas(self) -> tuple[np.ndarray, np.ndarray]:
        """Rounded coefficients of both kinds of distance, times ``part * (unit - part)``."""
        whole = self.rounding.whole[self.live]
        return (
            _rounded(self.weights * self.sides, self.stepped, self.part, self.unit),
            _rounded(self.own * self.own_sides, whole, self.part, self.unit),
        )

    def written_out(self, added: int) -> tuple[np.ndarray, int] | None:
        """Write the rounded combination over the activities, coprime; None if it is too large.

        `added` is the multiple of the combination itself to add, times ``part * (unit - part)``
        and divided by `unit`.
        """
        row_gamma, own_gamma = self.gammas
        row_weights = row_gamma * self.sides + added * self.weights * np.abs(self.sides)
        own_weights = own_gamma * self.own_sides + added * self.own * np.abs(self.own_sides)
        size = np.abs(row_weights.astype(float)) @ np.abs(self.rows).max(axis=1, initial=1)
        if float(size) + float(np.abs(own_weights).max(initial=0)) > LARGEST:
            return None
        coefficients = row_weights @ self.rows
        coefficients[self.live] += own_weights
        least = self.part * (self.unit - self.part) + added * self.right
        for weights, limits in ((row_weights, self.at), (own_weights, self.anchors)):
            least += sum(w * v for w, v in zip(weights.tolist(), limits.tolist(), strict=True))
        divisor = math.gcd(*coefficients[coefficients != 0].tolist(), least)
        if not divisor or not coefficients.any():
            return None
        coefficients //= divisor
        least //= divisor
        sizes = np.abs(coefficients[coefficients != 0])
        largest = int(sizes.max())
        if max(largest, abs(least)) >= EXACT or largest > SPREAD * int(sizes.min()):
            return None
        return coefficients, least

    def explain(self, added: int) -> tuple[dict[str, Any], bool]:
        """Return the evidence of the cut, and whether it leans on the cut-off."""
        touched = np.zeros(self.rows.shape[1], bool)
        touched[self.live] = True
        box, leans = self.rounding.box(touched)
        pairs = zip(self.weights.tolist(), self.shifts.tolist(), strict=True)
        plus = Fraction(added * self.unit, self.part * (self.unit - self.part))
        evidence = {
            "rows": self.numbers,
            "multipliers": [f"{w << shift}/{self.unit}" for w, shift in pairs],
            "row_sides": self.sides, "plus": str(plus), **box,
            **bounds_used(self.live, self.at_least, self.own_sides, self.rounding.bounds),
        }  # fmt: skip
        return evidence, leans or bool(self.rounding.leaning_rows[self.numbers].any())


def _whole(values: np.ndarray) -> bool:
    """Tell whether doubles are whole numbers that doubles count exactly."""
    return bool(((np.abs(values) < EXACT) & (values == np.rint(values))).all())


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
