"""The sheet as the engine takes it: dense doubles beside the exact integers they stand for.

The engine always minimises.  Rules and the aim are scaled to coprime integers, then (for the
doubles only) by a power of two so that the largest coefficient of a row is about one; a power of
two changes no digit.  Integers beyond 2**53 are rounded in the doubles and stay exact in
`ExactRow`, which every final check uses.
"""

from __future__ import annotations

import math
from collections.abc import Iterable, Sequence
from dataclasses import dataclass, replace
from fractions import Fraction
from typing import NamedTuple

import numpy as np

Number = int | Fraction
Terms = Sequence[tuple[int, Number]]
Posed = tuple[Terms, Number | None, Number | None]


class ExactRow(NamedTuple):
    """One rule in integers: ``least <= sum(coefficients * x[columns]) <= most``.

    `factor` is the positive rational by which the written rule was multiplied; the engine's
    doubles are this row times ``2**-shift``.
    """

    columns: tuple[int, ...]
    coefficients: tuple[int, ...]
    least: Number | None
    most: Number | None
    factor: Number
    shift: int


class Bend(NamedTuple):
    """A divisible column by which a soft rule may pass one of its limits."""

    rule: int
    side: str
    column: int


def lowest(value: Number) -> Number:
    """Return `value` as an int when it is whole."""
    return value.numerator if value.denominator == 1 else value


def integer_scale(terms: Terms) -> Fraction:
    """Return the positive rational that makes the coefficients coprime integers."""
    denominators = math.lcm(*(c.denominator for _, c in terms)) if terms else 1
    divisor = math.gcd(*(int(c * denominators) for _, c in terms)) if terms else 1
    return Fraction(denominators, divisor or 1)


def as_double(value: Number | None, missing: float, shift: int = 0) -> float:
    """Return ``value * 2**-shift`` as the nearest double, `missing` for no bound."""
    if value is None:
        return missing
    return float(value if shift == 0 else Fraction(value) / (Fraction(2) ** shift))


def exact_row(terms: Terms, least: Number | None, most: Number | None) -> ExactRow:
    """Scale one rule to integers.

    Parameters
    ----------
    terms : pairs (column, coefficient), no zero coefficients
    least, most : limits of the rule, None where there is none
    """
    factor = integer_scale(terms)
    scaled = tuple(int(c * factor) for _, c in terms)
    largest = max((abs(c) for c in scaled), default=1)
    return ExactRow(
        columns=tuple(j for j, _ in terms),
        coefficients=scaled,
        least=None if least is None else lowest(least * factor),
        most=None if most is None else lowest(most * factor),
        factor=lowest(factor),
        shift=largest.bit_length() - 1,
    )


@dataclass(frozen=True)
class Problem:
    """Minimise ``cost @ x`` over ``row_least <= matrix @ x <= row_most``, ``least <= x <= most``.

    Attributes
    ----------
    cost : (columns,) doubles, the aim in the engine's scale, minimised
    matrix : (rows, columns) doubles
    row_least, row_most : (rows,) doubles, infinite where there is no limit
    least, most : (columns,) doubles, infinite where there is no bound
    whole : (columns,) bool
    rows : the same rules in integers
    exact_cost : the aim in integers, minimised: one pair (column, integer) a term
    exact_least, exact_most : exact bounds of the columns, None where there is none
    cost_factor : engine cost = cost_factor * (written aim without its constant), negative when
        the aim is maximised
    aim_constant : the constant of the written aim
    cost_step : the engine's cost of every plan is a multiple of this (None when the aim has
        divisible activities); a dyadic rational
    bends : the columns that stand for the bends of soft rules, after the activities
    """

    cost: np.ndarray
    matrix: np.ndarray
    row_least: np.ndarray
    row_most: np.ndarray
    least: np.ndarray
    most: np.ndarray
    whole: np.ndarray
    rows: tuple[ExactRow, ...]
    exact_cost: tuple[tuple[int, int], ...]
    cost_shift: int
    exact_least: tuple[Number | None, ...]
    exact_most: tuple[Number | None, ...]
    cost_factor: Fraction
    aim_constant: Number
    cost_step: Fraction | None
    bends: tuple[Bend, ...] = ()

    @classmethod
    def build(
        cls,
        aim_terms: Terms,
        aim_constant: Number,
        maximize: bool,
        rules: Iterable[Posed],
        least: Sequence[Number | None],
        most: Sequence[Number | None],
        whole: Sequence[bool],
        bends: tuple[Bend, ...] = (),
    ) -> Problem:
        """Scale exact data to integers and doubles.

        Parameters
        ----------
        aim_terms, aim_constant, maximize : the written aim
        rules : (terms, least, most) a rule, terms without zeros or repeats
        least, most, whole : one entry a column
        """
        rows = tuple(exact_row(*rule) for rule in rules)
        columns = len(whole)
        matrix = np.zeros((len(rows), columns))
        for i, row in enumerate(rows):
            matrix[i, list(row.columns)] = scaled_doubles(row.coefficients, row.shift)
        factor = integer_scale(aim_terms) * (-1 if maximize else 1)
        exact_cost = tuple((j, int(c * factor)) for j, c in aim_terms)
        shift = max((abs(c) for _, c in exact_cost), default=1).bit_length() - 1
        cost = np.zeros(columns)
        cost[[j for j, _ in exact_cost]] = scaled_doubles([c for _, c in exact_cost], shift)
        unit = Fraction(2) ** shift
        stepped = all(whole[j] for j, _ in exact_cost)
        return cls(
            cost=cost,
            matrix=matrix,
            row_least=np.array([as_double(r.least, -np.inf, r.shift) for r in rows], float),
            row_most=np.array([as_double(r.most, np.inf, r.shift) for r in rows], float),
            least=np.array([as_double(v, -np.inf) for v in least], float),
            most=np.array([as_double(v, np.inf) for v in most], float),
            whole=np.array(whole, bool),
            rows=rows,
            exact_cost=exact_cost,
            cost_shift=shift,
            exact_least=tuple(least),
            exact_most=tuple(most),
            cost_factor=factor / unit,
            aim_constant=aim_constant,
            cost_step=1 / unit if stepped else None,
            bends=bends,
        )

    def changed(
        self,
        rules: Sequence[int | tuple[int, Number | None, Number | None] | Posed],
        bounds: dict[int, tuple[Number | None, Number | None]],
        bends: tuple[Bend, ...],
    ) -> Problem:
        """Return the problem with other rules and bounds over the same columns and aim.

        Parameters
        ----------
        rules : for each rule its number here where it stays as it is, that number with its new
            limits (as written), or the terms and limits of a new rule
        bounds : new bounds by column
        bends : the same columns, by the present numbers of their rules
        """
        rows, kept = [], []
        for rule in rules:
            if isinstance(rule, int):
                rows.append(self.rows[rule])
                kept.append(rule)
            elif isinstance(rule[0], int):
                old = self.rows[rule[0]]
                low, high = (None if v is None else lowest(v * old.factor) for v in rule[1:])
                rows.append(old._replace(least=low, most=high))
                kept.append(rule[0])
            else:
                rows.append(exact_row(*rule))
                kept.append(-1)
        matrix = self.matrix[kept] if len(self.rows) else np.zeros((len(rows), len(self.cost)))
        ends = np.array([self.row_least[kept], self.row_most[kept]]) if len(self.rows) else None
        ends = np.empty((2, len(rows))) if ends is None else ends
        for i, (rule, row) in enumerate(zip(rules, rows, strict=True)):
            if isinstance(rule, int):
                continue
            ends[:, i] = as_double(row.least, -np.inf, row.shift), as_double(
                row.most, np.inf, row.shift
            )
            if kept[i] < 0:
                matrix[i] = 0.0
                matrix[i, list(row.columns)] = scaled_doubles(row.coefficients, row.shift)
        least, most = self.least.copy(), self.most.copy()
        exact_least, exact_most = list(self.exact_least), list(self.exact_most)
        for j, (low, high) in bounds.items():
            exact_least[j], exact_most[j] = low, high
            least[j], most[j] = as_double(low, -np.inf), as_double(high, np.inf)
        return replace(
            self, matrix=matrix, row_least=ends[0], row_most=ends[1], least=least, most=most,
            rows=tuple(rows), exact_least=tuple(exact_least), exact_most=tuple(exact_most),
            bends=bends,
        )  # fmt: skip

    def aim_from_cost(self, cost: Number) -> Number:
        """Convert an exact cost in the engine's scale to the units of the written aim."""
        return lowest(Fraction(cost) / self.cost_factor + self.aim_constant)

    def exact_cost_of(self, plan: Sequence[Number]) -> Fraction:
        """Return the exact cost of a plan, in the engine's scale."""
        total = sum((c * plan[j] for j, c in self.exact_cost), 0)
        return Fraction(total) / (1 << self.cost_shift)


def scaled_doubles(integers: Sequence[int], shift: int) -> list[float]:
    """Return integers times ``2**-shift`` as the nearest doubles (any size of integer)."""
    if shift <= 53:
        scale = 2.0**-shift
        return [c * scale for c in integers]
    unit = 1 << shift
    return [float(Fraction(c, unit)) for c in integers]
