"""Re-plans, clashes and worths as JSON objects: complete and exact, in the manner of `data`."""

from __future__ import annotations

from collections.abc import Mapping, Sequence

from intplan.planning import Bending, Clash, Closeness, Give, Replan, Verdict, Worth, WorthTable
from intplan.planning.numbers import has_short_decimal, nearest
from intplan.report.change_words import algebra, bounds_algebra, changes_of
from intplan.report.data import (
    Data,
    exact_numbers,
    plan_data,
    search_data,
    solve_data,
    warnings_data,
)
from intplan.sheet import Sheet
from intplan.sheet.changes import Changes
from intplan.sheet.numbers import Number, fraction_text

NO_SEARCH = {"nodes": 0, "pivots": 0, "cuts": 0, "seconds": 0.0}


# ---------------------------------------------------------------------------------- replan


def replan_data(change: Replan) -> Data:
    """Return the answer of ``intplan replan``: that of ``intplan solve``, and what changed."""
    data = solve_data(change.after)
    if not searched(change):
        data["search"] = dict(NO_SEARCH)
    data["effect"] = change.effect
    data |= exact_numbers(
        before=change.before.exact_value, after=change.after.exact_value, cost=change.exact_cost
    )
    data |= _moves(change.exact_moves)
    data["at_limit"] = list(change.at_limit)
    data["changes"] = changes_data(change.changes)
    if change.closeness is not None:
        data["stay_close"] = closeness_data(change.closeness)
    return data if change.found is None else data | clash_members(change.found)


def searched(change: Replan) -> bool:
    """Tell whether the answer took a search, or the old one was carried over."""
    return change.after.answer.tree is not change.before.answer.tree


def had_plan(change: Replan) -> bool:
    """Tell whether there was a plan before that the new one can be compared with."""
    return change.before.exact_plan is not None and change.before.outcome != "unbounded"


def given_up(change: Replan) -> Number:
    """Return how much of the best value staying close gave up."""
    close, after = change.closeness, change.after
    if close is None or after.exact_value is None or after.exact_bound is None:
        return 0
    nearer = close.done or close.distance != close.distance_before
    return abs(after.exact_bound - after.exact_value) if nearer else 0


def changes_data(changes: Changes) -> Data:
    """Return the changes with the rules that came out, as algebra."""
    data: Data = {
        "added": {name: algebra(changes.sheet, name) for name in changes.added},
        "waived": list(changes.waived),
        "set": {
            change.name: algebra(changes.sheet, change.name)
            if change.what == "rule"
            else bounds_algebra(changes.sheet, change.name)
            for change in changes_of(changes)
            if change.kind == "changed"
        },
    }
    return data | ({"notes": list(changes.notes)} if changes.notes else {})


def closeness_data(close: Closeness) -> Data:
    """Return what staying close came to."""
    data: Data = {**exact_numbers(percent=close.asked), "done": close.done}
    data["reason"] = close.reason or None
    return data | exact_numbers(distance=close.distance, distance_before=close.distance_before)


def _moves(moves: Mapping[str, tuple[Number, Number]]) -> Data:
    """Return old and new amounts by name, and as p/q where either has no short decimal."""
    data: Data = {"moves": {n: [nearest(old), nearest(new)] for n, (old, new) in moves.items()}}
    exact = {
        name: [fraction_text(amount) for amount in pair]
        for name, pair in moves.items()
        if not all(map(has_short_decimal, pair))
    }
    return data | ({"exact_moves": exact} if exact else {})


# ---------------------------------------------------------------------------------- clash


def clash_data(sheet: Sheet, found: Verdict) -> Data:
    """Return the answer of ``intplan clash``."""
    data: Data = {"title": sheet.title, "outcome": found.outcome}
    if found.standing.ended_by is not None:
        data["ended_by"] = found.standing.ended_by
    data |= plan_data(found.standing.exact_plan)
    if found.clash is None:
        data["clash"] = None
    else:
        data |= clash_members(found.clash)
    data["search"] = search_data(found.standing)
    return data | warnings_data(sheet.warnings)


def clash_members(clash: Clash) -> Data:
    """Return the rules and bounds that clash, what each says, and what would free them."""
    data: Data = {
        "clash": list(clash.names),
        "clash_rules": {name: algebra(clash.sheet, name) for name in clash.names},
        "needs_whole": clash.needs_whole,
        "smallest": clash.smallest,
        "clash_ended_by": clash.ended_by,
        "witnesses": {name: plan_data(plan) for name, plan in clash.witnesses.items()},
    }
    return data if clash.give is None else data | give_data(clash.give)


def give_data(give: Give) -> Data:
    """Return the least combination of bendings, each rule's own, and the plan they leave."""
    data: Data = {
        "give": _bendings(give.least),
        **exact_numbers(give_total=give.total),
        "give_alone": {
            name: None if bend is None else _bending(bend) for name, bend in give.alone.items()
        },
        "give_weights": {name: nearest(weight) for name, weight in give.weighted.items()},
        "give_proven": give.proven,
        "give_plan": None,
    }
    if give.plan is not None:
        data["give_plan"] = {
            "outcome": give.plan.outcome,
            **exact_numbers(value=give.plan.exact_value, bound=give.plan.exact_bound),
            **plan_data(give.plan.exact_plan),
        }
    return data


def _bendings(bendings: Sequence[Bending] | None) -> Data | None:
    return None if bendings is None else {bend.name: _bending(bend) for bend in bendings}


def _bending(bend: Bending) -> Data:
    return {"side": bend.side, **exact_numbers(amount=bend.amount)}


# ---------------------------------------------------------------------------------- worth


def worth_data(table: WorthTable) -> Data:
    """Return the answer of ``intplan worth``: gains, however the aim is directed."""
    standing = table.standing
    data: Data = {"title": standing.sheet.title, "outcome": standing.outcome}
    if table.ended_by is not None:
        data["ended_by"] = table.ended_by
        data["given_up"] = table.given_up
    data |= exact_numbers(value=standing.exact_value)
    data["worth"] = {entry.name: _worth(entry) for entry in table.entries}
    data["others"] = list(table.others)
    data["floors"] = list(table.floors)
    return data | warnings_data(standing.sheet.warnings)


def _worth(entry: Worth) -> Data:
    data: Data = {"side": entry.side, "toward": entry.toward, "runs_away": entry.runs_away}
    data |= exact_numbers(
        waived=entry.waived, unit=entry.unit, at_least=entry.at_least, at_most=entry.at_most
    )
    price = None if entry.price is None else float(f"{entry.price:.9g}")
    return data | {"price": price, "unsettled": list(entry.unsettled)}
