"""The relaxation's prices: what fractions of a unit of each limit are worth to the aim."""

from __future__ import annotations

from collections.abc import Callable
from fractions import Fraction
from typing import Literal

import numpy as np

from intplan.sheet.model import Sheet

Side = Literal["least", "most"]
Prices = dict[tuple[str, Side], float]

NOISE = 1e-9  # multipliers and reduced costs this small, beside the others, are rounding


def relaxation_prices(sheet: Sheet, stop: Callable[[], bool] | None = None) -> Prices | None:
    """Return what the relaxation gains per unit by which a limit is moved outward.

    Parameters
    ----------
    sheet : its rules and bounds as they are written, with every activity taken as divisible
    stop : polled; true breaks off

    Returns
    -------
    dict or None
        By name (a rule, or a bound such as ``loaf most``) and side, in units of the aim per unit
        of the rule as it is shown; prices of 0 are left out. None where the relaxation has no
        optimum, where doubles do not reach it, or where it was broken off.

    Notes
    -----
    These are the multipliers of one optimal basis. The root of a search's tree would not do: its
    multipliers lie on cuts, and on bounds that the rules imply, where the rules themselves ought
    to have them.
    """
    from intplan.relaxation.dictionary import Status, Stopped
    from intplan.relaxation.rows import RowStore
    from intplan.relaxation.start import NoDualBasis, cold_start

    problem = sheet.problem()
    rows = RowStore(problem.matrix, problem.row_least, problem.row_most)
    try:
        dictionary = cold_start(rows, problem.cost, problem.least, problem.most, stop=stop)
        if dictionary.reoptimise(stop=stop) is not Status.OPTIMAL:
            return None
    except (NoDualBasis, Stopped, np.linalg.LinAlgError):
        return None
    found = dictionary.cost_multipliers()
    noise = NOISE * (1 + float(np.abs(found.values).sum()))
    per_cost = 1 / abs(float(problem.cost_factor))
    prices: Prices = {}
    for i, y in zip(found.rows.tolist(), found.values.tolist(), strict=True):
        if abs(y) > noise:
            scale = float(problem.rows[i].factor * Fraction(1, 1 << problem.rows[i].shift))
            prices[sheet.rules[i].name, _side(y)] = abs(y) * scale * per_cost
    reduced = problem.cost - found.values @ problem.matrix[found.rows]
    for activity, d in zip(sheet.activities, reduced.tolist(), strict=False):
        if abs(d) > noise:
            prices[f"{activity.name} {_side(d)}", _side(d)] = abs(d) * per_cost
    return prices


def _side(multiplier: float) -> Side:
    """Return the limit on which a multiplier of a minimised cost leans."""
    return "least" if multiplier > 0 else "most"
