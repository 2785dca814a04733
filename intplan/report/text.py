"""Answers in words: sentences and small tables in the planner's own names and units."""

from __future__ import annotations

import os
from collections.abc import Sequence
from fractions import Fraction
from math import ceil

from intplan.errors import printable
from intplan.planning import Comparison, NodeComparison, StandingPlan
from intplan.report.data import nodes_solved, ratio
from intplan.report.numbers import bound_text, readable, value_text
from intplan.sheet import Rule, Sheet
from intplan.sheet.checking import Broken, CheckResult, RuleCheck
from intplan.sheet.numbers import Number

CAUTION = (
    "A plan is a calculation: where people or machines are concerned, local codes and licensed "
    "practice decide."
)
RULES_WITH_ROOM = 20  # more of them than this are counted, not listed
EXACT_RULES = 5  # the same for rules that are met exactly, as they must be
NODES_SHOWN = 15  # rows of the table of a comparison
ENDED = {
    "time": "The time limit came before the proof was complete.",
    "nodes": "The node limit came before the proof was complete.",
    "interrupt": "The search was interrupted before the proof was complete.",
    "range": (
        "A whole activity grew too large to go on with; "
        "give whole activities a `most` (and a `least`) to settle this."
    ),
}


# ---------------------------------------------------------------------------------- solve


def solve_text(standing: StandingPlan) -> str:
    """Return the planner's report on a solved sheet."""
    sheet = standing.sheet
    blocks = [title_line(sheet) + " ".join(verdict(standing))]
    if standing.exact_plan is not None and standing.check is not None:
        amounts = list(standing.exact_plan.values())
        blocks.append(plan_table(sheet, amounts))
        blocks += rule_tables(sheet, standing.check)
    blocks.append(f"{effort_sentence(standing)}\n{CAUTION}")
    return "\n\n".join(blocks)


def title_line(sheet: Sheet) -> str:
    """Return the sheet's title on a line of its own; nothing if it has none."""
    return f"{printable(sheet.title)}\n" if sheet.title else ""


def verdict(standing: StandingPlan) -> list[str]:
    """Say in sentences what was found and what is proven of it."""
    sheet = standing.sheet
    if standing.outcome == "infeasible":
        whole = " in whole units" if any(a.whole for a in sheet.activities) else ""
        return [f"No plan{whole} can meet every rule and bound; that is proven."]
    if standing.outcome == "unbounded":
        return _runaway_sentences(standing)
    value = standing.exact_value
    if standing.outcome == "optimal" and value is not None:
        if sheet.aim.sense is None and not value:
            return ["Here is a plan that meets every rule and bound."]
        worth = value_text(sheet, value)
        return [f"The best plan comes to {worth}.", "It is proven that no plan is better."]
    opening = [ENDED[standing.ended_by]] if standing.ended_by else []
    return opening + _open_sentences(standing)


def _runaway_sentences(standing: StandingPlan) -> list[str]:
    steps = standing.ray or {}
    start = ", starting from the plan below," if standing.exact_plan else ""
    moves = [
        f"{name} {'grows' if step > 0 else 'falls'} by {readable(abs(step))}"
        for name, step in steps.items()
    ]
    return [
        "The aim has no limit.",
        f"It gets better for ever{start} as {_listing(moves)}, again and again.",
    ]


def _open_sentences(standing: StandingPlan) -> list[str]:
    """Say how good a plan is that is not proven best, or what is known without a plan."""
    sheet, value, bound = standing.sheet, standing.exact_value, standing.exact_bound
    limit = None if bound is None else bound_text(sheet, bound)
    if value is None:
        known = [] if limit is None else [f"If there is one, it cannot {_passes(sheet)} {limit}."]
        return ["No plan has been found, nor is it proven that there is none.", *known]
    found = "found" if standing.outcome == "within_gap" else "so far"
    sentences = [f"The best plan {found} comes to {value_text(sheet, value)}."]
    if bound is None:
        return [*sentences, "How far it is from the best is not known."]
    share = "" if not value else f", which is {percent_text(bound - value, value)} away"
    return [*sentences, f"It is proven that no plan can {_passes(sheet)} {limit}{share}."]


def percent_text(distance: Number, value: Number) -> str:
    """Write a distance as a share of a value, rounded up at the second place: ``0.94%``."""
    hundredths = ceil(abs(Fraction(distance) / Fraction(value)) * 10000)
    return f"{readable(Fraction(hundredths, 100))}%"


def effort_sentence(standing: StandingPlan) -> str:
    """Say what the search took."""
    search = standing.search
    nodes, pivots = _count(search.nodes, "node"), _count(search.pivots, "pivot")
    took = seconds_text(search.seconds)
    return f"The search solved {nodes}, with {pivots} and {_count(search.cuts, 'cut')}, in {took}."


def seconds_text(seconds: float) -> str:
    """Write a duration to the millisecond below ten seconds, with one decimal above."""
    if seconds < 0.001:
        return "under 0.001 s"
    return f"{seconds:.3f} s" if seconds < 10 else f"{seconds:,.1f} s"


def status_sentence(sheet: Sheet, value: Number | None, bound: Number | None) -> str:
    """Say how a search stands while it runs."""
    limit = None if bound is None else bound_text(sheet, bound, measured=False)
    best = "No plan so far" if value is None else f"Best plan so far {value_text(sheet, value)}"
    return f"{best}." if limit is None else f"{best}; nothing can {_passes(sheet)} {limit}."


def _passes(sheet: Sheet) -> str:
    """Say what a plan would do that is better than a bound."""
    return "pass" if sheet.aim.sense == "maximize" else "fall below"


# ---------------------------------------------------------------------------------- check


def check_text(sheet: Sheet, amounts: Sequence[Number], check: CheckResult) -> str:
    """Return the report on a plan that was held against a sheet.

    Parameters
    ----------
    sheet : the rules
    amounts : the plan, by activity index
    check : what came of it
    """
    if check.good:
        opening = "The plan meets every rule and bound."
    else:
        opening = f"The plan breaks {_count(len(check.broken), 'rule or bound')}."
    if sheet.aim.sense is not None or check.value:
        mood = "comes" if check.good else "would come"
        opening += f" It {mood} to {value_text(sheet, check.value)}."
    blocks = [title_line(sheet) + opening]
    if check.broken:
        sentences = [broken_sentence(sheet, amounts, check, broken) for broken in check.broken]
        blocks.append("\n".join(sentences))
    blocks += rule_tables(sheet, check)
    blocks.append(CAUTION)
    return "\n\n".join(blocks)


def broken_sentence(
    sheet: Sheet, amounts: Sequence[Number], check: CheckResult, broken: Broken
) -> str:
    """Say what a plan does not meet, and by how much."""
    if broken.what == "whole":
        value = amounts[sheet.activity_index[broken.name]]
        return f"{broken.name} is {readable(value)}, which is not a whole number."
    name = broken.name.removesuffix(f" {broken.what}")
    relation = "above its most" if broken.what == "most" else "below its least"
    if broken.name in sheet.rule_index:
        rule = sheet.rules[sheet.rule_index[broken.name]]
        state = check.rules[sheet.rule_index[broken.name]]
        value, limit = state.value, getattr(rule, broken.what)
        bent = f", and it bends by {readable(state.bend)} at most" if state.bend else ""
    else:
        index = sheet.activity_index[name]
        value, limit, bent = amounts[index], getattr(sheet.activities[index], broken.what), ""
    beyond = abs(value - limit)  # broken.by is what remains of it once the rule has bent
    over = f"{readable(beyond)} {relation}"
    return f"{name} is {readable(value)}: {over} of {readable(limit)}{bent}."


# ---------------------------------------------------------------------------------- compare, tree


def compare_text(comparison: Comparison, standing: StandingPlan) -> str:
    """Return the report on warm against cold node solves."""
    nodes = comparison.nodes
    if standing.outcome == "unbounded":
        known = " ".join(verdict(standing)[:1])
        return title_line(standing.sheet) + f"{known} So there are no bounds to compare."
    if not nodes:
        return title_line(standing.sheet) + (
            "The search needed no branches, so there is no node to solve from its parent's basis."
        )
    opening = (
        f"{_count(len(nodes), 'node')} solved twice to the end, from the parent's basis and from "
        "nothing."
    )
    if comparison.agree:
        opening += " Both gave the same bound, or both found no plan, at every node."
    else:
        differing = [str(node.node) for node in nodes if not node.agree]
        opening += f" They disagree at {_count(len(differing), 'node')}: {_listing(differing)}."
    blocks = [title_line(standing.sheet) + opening, _totals_table(comparison)]
    costly = sorted(nodes, key=lambda node: (-node.cold_pivots, node.node))[:NODES_SHOWN]
    heading = (
        "Every node"
        if len(costly) == len(nodes)
        else (f"The {NODES_SHOWN} nodes with the most pivots from nothing")
    )
    blocks.append(f"{heading}\n" + _nodes_table(costly))
    if standing.ended_by:
        blocks.append(ENDED[standing.ended_by] + " The nodes solved until then were compared.")
    if not comparison.complete:
        blocks.append("The comparison was interrupted; the other nodes were not compared.")
    return "\n\n".join(blocks)


def _totals_table(comparison: Comparison) -> str:
    rows = [["", "pivots", "time"]]
    for name, side in (("from the parent's basis", "warm"), ("from nothing", "cold")):
        pivots = getattr(comparison, f"{side}_pivots")
        rows.append([name, f"{pivots:,}", seconds_text(getattr(comparison, f"{side}_seconds"))])
    shares = [
        ratio(comparison.warm_pivots, comparison.cold_pivots),
        ratio(comparison.warm_seconds, comparison.cold_seconds),
    ]
    rows.append(["ratio", *("-" if share is None else f"{share:.3f}" for share in shares)])
    return table(rows, right={1, 2})


def _nodes_table(nodes: Sequence[NodeComparison]) -> str:
    rows = [["node", "pivots warm", "cold", "ms warm", "cold", "adds"]]
    rows += [
        [
            str(node.node),
            f"{node.warm_pivots:,}",
            f"{node.cold_pivots:,}",
            f"{node.warm_seconds * 1000:.2f}",
            f"{node.cold_seconds * 1000:.2f}",
            node.name,
        ]
        for node in nodes
    ]
    return table(rows, right={0, 1, 2, 3, 4})


def tree_text(standing: StandingPlan, path: str | os.PathLike[str]) -> str:
    """Say what was written, and why a tree has more nodes than the search solved."""
    total, solved = standing.tree.number_of_nodes(), nodes_solved(standing)
    sentence = f"The search tree, {_count(total, 'node')}, is in {printable(os.fspath(path))}."
    if solved == total:
        return sentence
    if not solved:
        return f"{sentence} Nothing of it was solved."
    waiting = standing.outcome in ("unfinished", "within_gap")
    rest = "were closed without that or still wait" if waiting else "were closed without that"
    return f"{sentence} The search solved {solved:,} of them; the others {rest}."


# ---------------------------------------------------------------------------------- tables


def plan_table(sheet: Sheet, amounts: Sequence[Number]) -> str:
    """Return a line for every activity that is not 0, and a count of the others."""
    rows = []
    for activity, value in zip(sheet.activities, amounts, strict=True):
        if value:
            digits, bracket, rounding = readable(value).partition(" (")
            unit = f"{printable(activity.unit)}{bracket}{rounding}".strip()
            rows.append([activity.name, digits, unit])
    idle = len(amounts) - len(rows)
    lines = [table(rows, right={1})] if rows else []
    if idle:
        others = "other activity" if rows else "activity"
        names = [a.name for a, value in zip(sheet.activities, amounts, strict=True) if not value]
        listed = f": {', '.join(names)}" if idle <= 5 else ""
        lines.append(f"  ({_count(idle, others)} at 0{listed})")
    return "\n".join(lines)


def rule_tables(sheet: Sheet, check: CheckResult) -> list[str]:
    """Return the rules at their limit, bent or broken, and those with room, as two tables.

    What a rule says exactly, it is always at: such rules are counted where they are many.
    """
    tight: list[list[str]] = []
    exact: list[list[str]] = []
    roomy: list[list[str]] = []
    for rule, state in zip(sheet.rules, check.rules, strict=True):
        if state.spare is None:
            continue
        row = [rule.name, readable(state.value), limits_phrase(rule)]
        if state.spare > 0:
            roomy.append([*row, f"{readable(state.spare)} to spare", printable(rule.note)])
        else:
            met = state.spare == 0 and rule.least == rule.most
            row += [_passing(sheet, rule, state), printable(rule.note)]
            (exact if met else tight).append(row)
    if len(exact) <= EXACT_RULES:
        tight, exact = tight + exact, []
    blocks = []
    if tight or exact:
        heading = "Rules at their limit" if check.good else "Rules at or past their limit"
        lines = [heading, *([table(tight, right={1})] if tight else [])]
        if exact:
            lines.append(f"  ({_count(len(exact), 'rule')} of an exact amount, all met)")
        blocks.append("\n".join(lines))
    if len(roomy) > RULES_WITH_ROOM:
        blocks.append(f"{len(roomy)} rules have room to spare.")
    elif roomy:
        blocks.append("Rules with room\n" + table(roomy, right={1}))
    return blocks


def limits_phrase(rule: Rule) -> str:
    """Write the limits of a rule: ``at most 16``, ``from 6 to 9``."""
    if rule.least is None:
        return "" if rule.most is None else f"at most {readable(rule.most)}"
    if rule.most is None:
        return f"at least {readable(rule.least)}"
    if rule.least == rule.most:
        return f"exactly {readable(rule.least)}"
    return f"from {readable(rule.least)} to {readable(rule.most)}"


def table(rows: Sequence[Sequence[str]], right: frozenset[int] | set[int] = frozenset()) -> str:
    """Line up columns, two blanks apart and two from the margin.

    Parameters
    ----------
    rows : cells, as many in every row
    right : numbers of the columns that are set to the right
    """
    widths = [max(len(row[i]) for row in rows) for i in range(len(rows[0]))]
    lines = []
    for row in rows:
        cells = [
            cell.rjust(width) if i in right else cell.ljust(width)
            for i, (cell, width) in enumerate(zip(row, widths, strict=True))
            if width
        ]
        lines.append("  " + "  ".join(cells).rstrip())
    return "\n".join(lines)


def _passing(sheet: Sheet, rule: Rule, state: RuleCheck) -> str:
    """Say how far a rule bends and what that costs, and how far it is broken beyond that."""
    parts = []
    if state.bend and rule.give is not None:
        price = value_text(sheet, state.bend * rule.give)
        parts.append(f"bent by {readable(state.bend)}, which costs {price}")
    if state.spare is not None and -state.spare > state.bend:
        parts.append(f"broken by {readable(-state.spare - state.bend)}")
    return ", ".join(parts)


def _count(number: int, noun: str) -> str:
    if number == 1:
        return f"1 {noun}"
    several = {"other activity": "other activities", "activity": "activities",
               "rule or bound": "rules or bounds"}.get(noun, f"{noun}s")  # fmt: skip
    return f"{number:,} {several}"


def _listing(parts: Sequence[str]) -> str:
    return parts[0] if len(parts) == 1 else f"{', '.join(parts[:-1])} and {parts[-1]}"
