"""A dual-feasible basis for every relaxation, or the direction in which its aim has no limit."""

from __future__ import annotations

from collections.abc import Callable

import numpy as np

from intplan.relaxation.dictionary import Dictionary
from intplan.relaxation.rows import RowStore

RAY = 1e-9  # cost per unit of a direction below which it is no improvement


class NoDualBasis(Exception):
    """Raised where no basis is dual feasible: the aim improves along `direction` for ever.

    Attributes
    ----------
    direction : (columns,) doubles; a ray of the bounds and rows, if any plan exists at all
    pivots : pivots spent
    """

    def __init__(self, direction: np.ndarray, pivots: int) -> None:
        super().__init__("no basis is dual feasible")
        self.direction = direction
        self.pivots = pivots


def cold_start(
    rows: RowStore,
    cost: np.ndarray,
    least: np.ndarray,
    most: np.ndarray,
    active: np.ndarray | None = None,
    stop: Callable[[], bool] | None = None,
) -> Dictionary:
    """Return a dual-feasible dictionary made from nothing.

    Parameters
    ----------
    rows, cost, least, most, active : as in `Dictionary.at_slack_basis`
    stop : as in `Dictionary.reoptimise`

    Raises
    ------
    Stopped
        When `stop` says so.
    numpy.linalg.LinAlgError
        If the basis found is singular in doubles.
    NoDualBasis
        If none exists.

    Notes
    -----
    The slack basis serves wherever each activity has the bound its cost pulls it towards.  Else
    the boxed problem is solved: the same rows and cost over directions, every finite limit
    replaced by 0 and every missing bound of an activity by one unit.  Its least cost is 0
    exactly when a dual-feasible basis exists, and then its last basis is one (Koberstein and
    Suhl, 2007); else its solution is a direction of improvement.
    """
    dictionary = Dictionary.at_slack_basis(rows, cost, least, most, active)
    if not dictionary.dual_infeasible():
        return dictionary
    active = np.arange(rows.count) if active is None else active
    boxed_rows = RowStore(
        rows.matrix[active],
        np.where(np.isfinite(rows.least[active]), 0.0, -np.inf),
        np.where(np.isfinite(rows.most[active]), 0.0, np.inf),
    )
    boxed = Dictionary.at_slack_basis(
        boxed_rows,
        cost,
        np.where(np.isfinite(least), 0.0, -1.0),
        np.where(np.isfinite(most), 0.0, 1.0),
    )
    boxed.reoptimise(stop=stop)
    if boxed.value < -RAY:
        raise NoDualBasis(boxed.activities(), boxed.pivots)
    dictionary.adopt_basis(
        np.where(boxed.basic < rows.columns, boxed.basic, _renumbered(boxed.basic, active, rows)),
        np.where(
            boxed.nonbasic < rows.columns, boxed.nonbasic, _renumbered(boxed.nonbasic, active, rows)
        ),
    )
    dictionary.pivots = boxed.pivots
    return dictionary


def _renumbered(variables: np.ndarray, active: np.ndarray, rows: RowStore) -> np.ndarray:
    """Translate row values of the boxed problem, which holds the active rows only."""
    n = rows.columns
    return active[np.maximum(variables - n, 0)] + n if len(active) else variables
