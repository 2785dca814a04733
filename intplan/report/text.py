"""Answers in words: sentences and small tables in the planner's own names and units."""

from __future__ import annotations

import os
from collections.abc import Sequence

from intplan.errors import printable
from intplan.planning import Comparison, NodeComparison, StandingPlan
from intplan.report.data import nodes_solved, ratio
from intplan.report.numbers import bound_text, readable, value_text
from intplan.report.phrases import (
    CAUTION,
    ENDED,
    count,
    listing,
    passes,
    percent_text,
    seconds_text,
    title_line,
)
from intplan.report.tables import plan_table, rule_tables, table
from intplan.sheet import Sheet
from intplan.sheet.checking import Broken, CheckResult
from intplan.sheet.numbers import Number

NODES_SHOWN = 15  # rows of the table of a comparison
CLASH_HINT = "`intplan clash SHEET` tells which rules clash, and the least give that frees them."


# ---------------------------------------------------------------------------------- solve


def solve_text(standing: StandingPlan) -> str:
    """Return the planner's report on a solved sheet."""
    sheet = standing.sheet
    blocks = [title_line(sheet) + " ".join(verdict(standing))]
    if standing.exact_plan is not None and standing.check is not None:
        amounts = list(standing.exact_plan.values())
        blocks.append(plan_table(sheet, amounts))
        blocks += rule_tables(sheet, standing.check)
    if standing.outcome == "infeasible":
        blocks.append(CLASH_HINT)
    blocks.append(f"{effort_sentence(standing)}\n{CAUTION}")
    return "\n\n".join(blocks)


def verdict(standing: StandingPlan) -> list[str]:
    """Say in sentences what was found and what is proven of it."""
    sheet = standing.sheet
    if standing.outcome == "infeasible":
        return [no_plan_sentence(sheet)]
    if standing.outcome == "unbounded":
        return ["The aim has no limit.", runaway_sentence(standing)]
    value = standing.exact_value
    if standing.outcome == "optimal" and value is not None:
        if sheet.aim.sense is None and not value:
            return ["Here is a plan that meets every rule and bound."]
        worth = value_text(sheet, value)
        return [f"The best plan comes to {worth}.", "It is proven that no plan is better."]
    opening = [ENDED[standing.ended_by]] if standing.ended_by else []
    return opening + open_sentences(standing)


def no_plan_sentence(sheet: Sheet) -> str:
    """Say that it is proven that there is no plan."""
    whole = " in whole units" if any(a.whole for a in sheet.activities) else ""
    return f"No plan{whole} can meet every rule and bound; that is proven."


def runaway_sentence(standing: StandingPlan) -> str:
    """Name the activities that run away where the aim has no limit."""
    steps = standing.ray or {}
    start = ", starting from the plan below," if standing.exact_plan else ""
    moves = [
        f"{name} {'grows' if step > 0 else 'falls'} by {readable(abs(step))}"
        for name, step in steps.items()
    ]
    return f"It gets better for ever{start} as {listing(moves)}, again and again."


def open_sentences(standing: StandingPlan) -> list[str]:
    """Say how good a plan is that is not proven best, or what is known without a plan."""
    sheet, value, bound = standing.sheet, standing.exact_value, standing.exact_bound
    limit = None if bound is None else bound_text(sheet, bound)
    if value is None:
        known = [] if limit is None else [f"If there is one, it cannot {passes(sheet)} {limit}."]
        return ["No plan has been found, nor is it proven that there is none.", *known]
    found = "found" if standing.outcome == "within_gap" else "so far"
    sentences = [f"The best plan {found} comes to {value_text(sheet, value)}."]
    if bound is None:
        return [*sentences, "How far it is from the best is not known."]
    share = "" if not value else f", which is {percent_text(bound - value, value)} away"
    return [*sentences, f"It is proven that no plan can {passes(sheet)} {limit}{share}."]


def effort_sentence(standing: StandingPlan) -> str:
    """Say what the search took."""
    search = standing.search
    nodes, pivots = count(search.nodes, "node"), count(search.pivots, "pivot")
    took = seconds_text(search.seconds)
    return f"The search solved {nodes}, with {pivots} and {count(search.cuts, 'cut')}, in {took}."


def status_sentence(sheet: Sheet, value: Number | None, bound: Number | None) -> str:
    """Say how a search stands while it runs."""
    limit = None if bound is None else bound_text(sheet, bound, measured=False)
    best = "No plan so far" if value is None else f"Best plan so far {value_text(sheet, value)}"
    return f"{best}." if limit is None else f"{best}; nothing can {passes(sheet)} {limit}."


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
        opening = f"The plan breaks {count(len(check.broken), 'rule or bound')}."
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
        f"{count(len(nodes), 'node')} solved twice to the end, from the parent's basis and from "
        "nothing."
    )
    if comparison.agree:
        opening += " Both gave the same bound, or both found no plan, at every node."
    else:
        differing = [str(node.node) for node in nodes if not node.agree]
        opening += f" They disagree at {count(len(differing), 'node')}: {listing(differing)}."
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
    sentence = f"The search tree, {count(total, 'node')}, is in {printable(os.fspath(path))}."
    if solved == total:
        return sentence
    if not solved:
        return f"{sentence} Nothing of it was solved."
    waiting = standing.outcome in ("unfinished", "within_gap")
    rest = "were closed without that or still wait" if waiting else "were closed without that"
    return f"{sentence} The search solved {solved:,} of them; the others {rest}."
