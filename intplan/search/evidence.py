"""Evidence: row multipliers that prove a bound, and the bound they prove in spite of rounding.

For any multipliers y on the row values, ``weight * cost @ x`` equals ``y @ (rows @ x)`` plus
``(weight * cost - y @ rows) @ x``, and the least value of each part over its limits adds up to a
true lower bound.  With weight 1 this bounds the aim (a node is *beaten*); with weight 0 a positive
bound contradicts 0 (a node is *empty*).  Rounding errors are bounded and taken off, so the bound
holds for the exact data.

References
----------
A. Neumaier, O. Shcherbina, Safe bounds in linear and mixed-integer linear programming,
Mathematical Programming 99:283-296, 2004.
N. J. Higham, Accuracy and Stability of Numerical Algorithms, 2nd ed., SIAM, 2002, section 3.1
(the error bound of a dot product).
"""

from __future__ import annotations

import math
from dataclasses import dataclass

import numpy as np

from intplan.relaxation.dictionary import Multipliers
from intplan.relaxation.rows import RowStore

ROUNDING = 2.0**-53
LEAST, MOST = 0, 1  # sides of a bound; bound number 2 * j + side


@dataclass(slots=True)
class Proof:
    """A lower bound and what it was proven from.

    Attributes
    ----------
    weight : 1 if the cost takes part, 0 for a contradiction
    rows, multipliers : (k,) row numbers and their multipliers, doubles taken as exact
    bound : the proven lower bound, a double rounded down
    reduced : (columns,) ``weight * cost - multipliers @ rows``, as computed
    error : each entry of `reduced` is within this distance of its exact value
    """

    weight: int
    rows: np.ndarray
    multipliers: np.ndarray
    bound: float
    reduced: np.ndarray
    error: float


class Prover:
    """Turns multipliers into safe bounds over the rows of one store.

    Parameters
    ----------
    rows : the rows, each with coefficients of at most 2 in size
    cost : (columns,) minimised, entries of at most 2 in size
    """

    def __init__(self, rows: RowStore, cost: np.ndarray) -> None:
        self.rows = rows
        self.cost = cost
        self.nothing = np.zeros_like(cost)
        self.reach = np.inf
        self.open: np.ndarray = np.arange(0)

    def set_box(self, least: np.ndarray, most: np.ndarray) -> None:
        """State bounds that hold wherever bounds will be asked for, (columns,) each."""
        size = np.maximum(np.abs(least), np.abs(most))
        bounded = np.isfinite(size)
        self.reach = float(size[bounded].sum())
        self.open = (~bounded).nonzero()[0]

    def prove(
        self, weight: int, y: Multipliers, least: np.ndarray, most: np.ndarray
    ) -> Proof:
        """Return the bound that multipliers prove over bounds inside the stated box.

        Multipliers that lean on a limit that does not exist are dropped; where an unbounded
        activity's reduced cost has the wrong sign by no more than rounding, the multipliers are
        shrunk towards zero, at which the cost itself has the right sign.  The bound is minus
        infinity where none can be had this way.
        """
        proof = self._evaluate(weight, y.rows, y.values, least, most)
        if proof.bound == -np.inf and weight and len(self.open):
            shrink = self._shrinkage(proof, least, most)
            if shrink is not None:
                proof = self._evaluate(weight, y.rows, y.values * (1.0 - shrink), least, most)
        return proof

    def _evaluate(
        self,
        weight: int,
        numbers: np.ndarray,
        values: np.ndarray,
        least: np.ndarray,
        most: np.ndarray,
    ) -> Proof:
        store = self.rows
        limits = np.where(values > 0, store.least[numbers], store.most[numbers])
        from_rows = float(values @ limits)
        if not math.isfinite(from_rows):
            usable = np.isfinite(limits)
            numbers, values, limits = numbers[usable], values[usable], limits[usable]
            from_rows = float(values @ limits)
        cost = self.cost if weight else self.nothing
        reduced = cost - values @ store.matrix[numbers]
        absolute = np.abs(values)
        sizes = float(absolute.sum())
        error = (len(values) + 4) * ROUNDING * 2.0 * (weight + sizes)
        sides = np.where(reduced > 0, least, most)
        if len(self.open):
            exact = ~store.matrix[numbers][:, self.open].any(axis=0)
            slip = self._open_terms(reduced, np.where(exact, 0.0, error), sides, least, most)
            if slip is None:
                return Proof(weight, numbers, values, -np.inf, reduced, error)
        else:
            slip = 0.0
        total = from_rows + float(reduced @ sides)
        size = float(absolute @ np.abs(limits) + np.abs(reduced) @ np.abs(sides))
        count = len(values) + len(reduced) + 4
        slip += error * self.reach + count * ROUNDING * size
        return Proof(weight, numbers, values, total - slip * (1 + 1e-9), reduced, error)

    def _open_terms(
        self,
        reduced: np.ndarray,
        errors: np.ndarray,
        sides: np.ndarray,
        least: np.ndarray,
        most: np.ndarray,
    ) -> float | None:
        """Settle the activities outside the finite box; None if one lacks the bound it needs.

        Their reduced cost must be of the sign of the bound they have by more than its error.
        Returns the slip that the errors, (open,), cause at their finite bounds.
        """
        slip = 0.0
        for j, error in zip(self.open.tolist(), errors.tolist(), strict=True):
            low, high, d = least.item(j), most.item(j), reduced.item(j)
            if d == 0 and error == 0:
                sides[j] = 0.0
                continue
            if (high == np.inf and d < error) or (low == -np.inf and d > -error):
                return None
            slip += error * max(
                abs(low) if low > -np.inf else 0.0, abs(high) if high < np.inf else 0.0
            )
        return slip

    def _shrinkage(self, proof: Proof, least: np.ndarray, most: np.ndarray) -> float | None:
        """Return by what share to shrink multipliers so that open activities keep their sign."""
        share = 0.0
        for j in self.open:
            low, high, d, c = least[j], most[j], proof.reduced[j], self.cost[j]
            if low == -np.inf and high == np.inf:
                return None
            if high == np.inf:
                lacking, given = 2 * proof.error - d, c
            elif low == -np.inf:
                lacking, given = 2 * proof.error + d, -c
            else:
                continue
            if lacking > 0:
                if given <= 0 or lacking > 1e-6 * given:
                    return None
                share = max(share, 2 * lacking / given)
        return share
