"""Answers as JSON objects: the same facts as the text reports, complete and exact.

Numbers are JSON numbers; where such a number has no short decimal, ``exact`` beside it gives the
number as ``p/q``. What does not exist is null.
"""

from __future__ import annotations

import os
from collections.abc import Mapping, Sequence
from typing import Any

from intplan.planning import Comparison, StandingPlan
from intplan.planning.numbers import has_short_decimal, nearest
from intplan.sheet import Sheet
from intplan.sheet.checking import CheckResult
from intplan.sheet.numbers import Number, fraction_text

Data = dict[str, Any]


def solve_data(standing: StandingPlan) -> Data:
    """Return the answer of ``intplan solve``."""
    sheet, check = standing.sheet, standing.check
    data: Data = {"title": sheet.title, "outcome": standing.outcome}
    if standing.ended_by is not None:
        data["ended_by"] = standing.ended_by
    data |= exact_numbers(value=standing.exact_value, bound=standing.exact_bound)
    data |= plan_data(standing.exact_plan)
    if standing.ray:
        data["ray"] = {name: nearest(step) for name, step in standing.ray.items()}
    data |= rules_data(sheet, check)
    data["search"] = search_data(standing)
    return data | warnings_data(sheet.warnings)


def search_data(standing: StandingPlan) -> Data:
    """Return what the search took."""
    search = standing.search
    return {**search._asdict(), "seconds": round(search.seconds, 6)}


def check_data(
    sheet: Sheet, amounts: Sequence[Number], check: CheckResult, warnings: Sequence[str]
) -> Data:
    """Return the answer of ``intplan check``.

    Parameters
    ----------
    sheet : the rules
    amounts : the plan, by activity index
    check : what came of it
    warnings : about the plan's file
    """
    plan = {a.name: amount for a, amount in zip(sheet.activities, amounts, strict=True)}
    data: Data = {"title": sheet.title, "good": check.good}
    data |= exact_numbers(value=check.value)
    data |= plan_data(plan)
    data |= rules_data(sheet, check)
    data["broken"] = [
        {"name": broken.name, "what": broken.what, **exact_numbers(by=broken.by)}
        for broken in check.broken
    ]
    return data | warnings_data([*sheet.warnings, *warnings])


def compare_data(comparison: Comparison, standing: StandingPlan) -> Data:
    """Return the answer of ``intplan compare``."""
    data: Data = {"title": standing.sheet.title, "outcome": standing.outcome}
    if standing.ended_by is not None:
        data["ended_by"] = standing.ended_by
    data["agree"] = comparison.agree
    if not comparison.complete:
        data["complete"] = False
    for side in ("warm", "cold"):
        data[side] = {
            "pivots": getattr(comparison, f"{side}_pivots"),
            "seconds": round(getattr(comparison, f"{side}_seconds"), 6),
        }
    data["ratio"] = {
        "pivots": ratio(comparison.warm_pivots, comparison.cold_pivots),
        "seconds": ratio(comparison.warm_seconds, comparison.cold_seconds),
    }
    data["nodes"] = [
        {
            "id": node.node,
            "name": node.name,
            "depth": node.depth,
            "warm": _node_side(node, "warm"),
            "cold": _node_side(node, "cold"),
            "agree": node.agree,
        }
        for node in comparison.nodes
    ]
    return data | warnings_data(standing.sheet.warnings)


def ratio(warm: float, cold: float) -> float | None:
    """Return warm by cold, to four digits; None where cold is nothing."""
    return float(f"{warm / cold:.4g}") if cold else None


def tree_data(standing: StandingPlan, path: str | os.PathLike[str]) -> Data:
    """Return the answer of ``intplan tree``."""
    return {
        "title": standing.sheet.title,
        "outcome": standing.outcome,
        "nodes": standing.tree.number_of_nodes(),
        "solved": nodes_solved(standing),
        "written": os.fspath(path),
    }


def nodes_solved(standing: StandingPlan) -> int:
    """Return how many nodes of the tree were solved; the others never took any time."""
    return sum(seconds > 0 for _, seconds in standing.tree.nodes(data="seconds"))


def _node_side(node: Any, side: str) -> Data:
    return {
        "pivots": getattr(node, f"{side}_pivots"),
        "seconds": round(getattr(node, f"{side}_seconds"), 9),
        "bound": getattr(node, f"{side}_bound"),
    }


def exact_numbers(**values: Number | None) -> Data:
    """Return numbers by name, with ``exact`` for those that JSON would round."""
    data: Data = {name: None if value is None else nearest(value) for name, value in values.items()}
    exact = _exact({name: value for name, value in values.items() if value is not None})
    return data | {f"exact_{name}": text for name, text in exact.items()}


def _exact(values: Mapping[str, Number]) -> dict[str, str]:
    return {
        name: fraction_text(value) for name, value in values.items() if not has_short_decimal(value)
    }


def plan_data(plan: Mapping[str, Number] | None) -> Data:
    """Return a plan by name, with ``exact`` for the amounts that JSON would round."""
    if plan is None:
        return {"plan": None}
    data: Data = {"plan": {name: nearest(amount) for name, amount in plan.items()}}
    exact = _exact(plan)
    return data | ({"exact": exact} if exact else {})


def rules_data(sheet: Sheet, check: CheckResult | None) -> Data:
    """Return every rule as it is shown, and how far each soft one bends."""
    rules: Data = {}
    bends: Data = {}
    for index, rule in enumerate(sheet.rules):
        state = None if check is None else check.rules[index]
        rules[rule.name] = exact_numbers(
            value=None if state is None else state.value,
            least=rule.least,
            most=rule.most,
            spare=None if state is None else state.spare,
        )
        if rule.give is not None and state is not None:
            bends[rule.name] = {
                "side": state.side,
                **exact_numbers(amount=state.bend, price=state.bend * rule.give),
            }
    return {"rules": rules, "bends": bends} if bends else {"rules": rules}


def warnings_data(warnings: Sequence[str]) -> Data:
    """Return what is odd, one sentence each; nothing where nothing is."""
    return {"warnings": list(warnings)} if warnings else {}
