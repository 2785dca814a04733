"""Re-plans in words: whether the plan stands, what the change costs, what moves, what clashes."""

from __future__ import annotations

from collections.abc import Sequence

from intplan.errors import printable
from intplan.planning import Replan
from intplan.report.change_words import Change, Subject, changes_of, changes_table, subject_of
from intplan.report.clash_text import clash_blocks
from intplan.report.numbers import brief, readable, signed, value_text
from intplan.report.phrases import CAUTION, ENDED, count, title_line
from intplan.report.replan_data import given_up, had_plan, searched
from intplan.report.tables import limits_phrase, plan_table, rule_tables, table
from intplan.report.text import effort_sentence, open_sentences, runaway_sentence, verdict
from intplan.sheet.numbers import Number


def replan_text(change: Replan) -> str:
    """Return the planner's report on what a change of rules did to a standing plan."""
    blocks = [title_line(change.after.sheet) + " ".join(opening(change))]
    if change.closeness is not None:
        blocks.append(closeness_sentence(change))
    blocks.append(changes_table(change.changes))
    blocks += _plan_blocks(change)
    if change.found is not None:
        blocks += clash_blocks(change.found)
    blocks.append(f"{_effort(change)}{CAUTION}")
    return "\n\n".join(filter(None, blocks))


def _effort(change: Replan) -> str:
    """Say what the answer took; a clash is looked for beyond that."""
    if searched(change):
        return effort_sentence(change.after) + "\n"
    return "" if change.found else "No search was needed to tell.\n"


# ---------------------------------------------------------------------------------- the opening


def opening(change: Replan) -> list[str]:
    """Say in sentences what happened, what it costs, and what is proven."""
    changes = changes_of(change.changes)
    subject = subject_of(changes)
    if change.effect == "stands":
        return _stands(change, changes)
    if change.effect == "impossible":
        return _impossible(change, changes)
    if change.effect == "unbounded":
        loose = subject_of([c for c in changes if c.loosened])
        opens = f"has no limit now: {loose.does('leaves', 'leave')} it none"
        still = "still has no limit" if change.before.outcome == "unbounded" else opens
        return [f"The aim {still}.", runaway_sentence(change.after)]
    if change.effect == "undecided":
        does = subject.does("does", "do")
        return [f"It is not settled what {does} to the plan.", *verdict(change.after)]
    if not had_plan(change):
        return [_found(change, changes), *verdict(change.after)]
    return _moved(change, changes)


def _found(change: Replan, changes: Sequence[Change]) -> str:
    """Say why there is a best plan now where there was none."""
    if change.before.outcome == "unbounded":
        tight = subject_of([c for c in changes if c.tightened])
        return f"The aim has a limit now: {tight.does('sets', 'set')} it."
    loose = subject_of([c for c in changes if c.loosened])
    room = f": {loose.does('makes', 'make')} room" if loose.text else ""
    return f"There is a plan now{room}."


def _stands(change: Replan, changes: Sequence[Change]) -> list[str]:
    """Say why the plan stands and what is proven of it."""
    met = subject_of([c for c in changes if c.tightened])
    more = subject_of([c for c in changes if c.loosened and not c.tightened])
    if change.exact_cost:
        joined = ", but" if change.exact_cost > 0 else ", and"
        costs = _costs(change, subject_of(changes), change.exact_cost)
        return [f"The plan stands{joined} {costs}.", *_value_sentences(change)]
    reasons = [f"it meets {met.text}"] if met.text else []
    if more.text and change.after.outcome == "unfinished":
        reasons.append(f"{more.does('has', 'have')} brought nothing so far")
    elif more.text:
        reasons.append(f"{more.does('brings', 'bring')} nothing")
    because = f": {', and '.join(reasons)}" if reasons else ""
    return [f"The plan stands{because}.", *_value_sentences(change)]


def _moved(change: Replan, changes: Sequence[Change]) -> list[str]:
    """Say what a change of the plan costs and what is proven of it."""
    subject, cost = subject_of(changes), change.exact_cost or 0
    if change.after.sheet.aim.sense is None and not cost:
        met = subject_of([c for c in changes if c.tightened])
        return [f"The plan moves so that it meets {met.text}."]
    close = given_up(change)
    if change.before.outcome == "optimal" and close:
        price = value_text(change.after.sheet, close)
        costs = _costs(change, subject, cost - close)
        return [f"The plan moves: {costs}, and staying close gives up {price}.",
                *_value_sentences(change)]  # fmt: skip
    if change.before.outcome == change.after.outcome == "optimal":
        return [f"The best plan moves: {_costs(change, subject, cost)}.",
                *_value_sentences(change)]  # fmt: skip
    sentences = [f"The plan moves because of {subject.text}.", *_value_sentences(change)]
    if change.before.outcome != "optimal":
        sentences.append(
            f"The plan before was not proven best, so the difference is not what {subject.text}"
            f" {'cost' if subject.plural else 'costs'}."
        )
    return sentences


def _value_sentences(change: Replan) -> list[str]:
    """Say what the plan comes to now, what it came to before, and what is proven."""
    after = change.after
    sheet, value = after.sheet, after.exact_value
    if value is None or (sheet.aim.sense is None and not value):
        return []
    instead = "" if change.exact_cost == 0 else (
        f" instead of {value_text(change.before.sheet, change.before.exact_value or 0)}"
    )  # fmt: skip
    if given_up(change) and after.exact_bound is not None:
        best = value_text(sheet, after.exact_bound)
        comes = f"It comes to {value_text(sheet, value)}{instead}"
        return [f"{comes}; the best plan comes to {best}, and it is proven that none is better."]
    comes = f"It comes to {value_text(sheet, value)}{instead}"
    if after.outcome == "optimal":
        same = change.effect == "stands" and not change.exact_cost
        still = "it is still proven" if same else "it is proven"
        return [f"{comes}, and {still} that no plan is better."]
    ended = [ENDED[after.ended_by]] if after.ended_by else []
    return [f"{comes}.", *ended, *open_sentences(after)[1:]]


def _costs(change: Replan, subject: Subject, cost: Number) -> str:
    """Say what changes cost the aim, or bring it."""
    together = "together " if subject.plural else ""
    if not cost:
        return subject.does("costs", "cost") + " nothing"
    size = value_text(change.after.sheet, abs(cost))
    verbs = ("costs", "cost") if cost > 0 else ("brings", "bring")
    return f"{subject.does(verbs[0], together + verbs[1])} {size}"


def _impossible(change: Replan, changes: Sequence[Change]) -> list[str]:
    whole = any(activity.whole for activity in change.after.sheet.activities)
    units = " in whole units" if whole else ""
    tight = [c for c in changes if c.tightened]
    if had_plan(change) and tight:
        with_others = "together with the other rules and bounds"
        return [f"No plan is left: none{units} meets {subject_of(tight).text} {with_others}. "
                "That is proven."]  # fmt: skip
    still = "still " if change.before.outcome == "infeasible" else ""
    return [f"There is {still}no plan{units} that meets every rule and bound; that is proven."]


def closeness_sentence(change: Replan) -> str:
    """Say how close to the old plan the new one stays, or why none closer was looked for."""
    close = change.closeness
    if close is None:
        return ""
    if close.distance is None:
        return f"No plan closer to the old one was looked for: {close.reason}."
    percent = readable(close.asked)
    among = f"the plans within {percent}% of the best" if close.asked else "the best plans"
    if not close.done:
        return f"It is not proven to be the closest to the old plan of {among}: {close.reason}."
    differ = f"its amounts differ from the old ones by {brief(close.distance)} in all"
    if not close.distance:
        differ = "nothing moves"
    sentence = f"Of {among}, this is the closest to the old one: {differ}."
    if close.distance_before in (None, close.distance):
        return sentence
    first = brief(close.distance_before)
    return f"{sentence} Those of the best plan found first differ by {first}."


# ---------------------------------------------------------------------------------- the plan


def _plan_blocks(change: Replan) -> list[str]:
    """Return what moves, what bends, and the rules at their limit now; or a whole new plan."""
    after = change.after
    if after.exact_plan is None:
        return []
    if not had_plan(change) or change.effect == "unbounded":
        blocks = [plan_table(after.sheet, list(after.exact_plan.values()))]
        return blocks if after.check is None else blocks + rule_tables(after.sheet, after.check)
    return [moves_table(change), "\n".join(_bend_sentences(change)), _limits_table(change)]


def moves_table(change: Replan) -> str:
    """Return a line for each activity whose amount differs, and a count of the others."""
    moves, sheet = change.exact_moves, change.after.sheet
    if not moves:
        return ""
    rows = [["", "before", "now", "change", ""]]
    for name, (old, new) in moves.items():
        step = new - old
        unit = printable(sheet.activities[sheet.activity_index[name]].unit)
        rows.append([name, brief(old), brief(new), _signed(step), unit])
    lines = ["What moves", table(rows, right={1, 2, 3})]
    if staying := len(sheet.activities) - len(moves):
        stay = "stays" if staying == 1 else "stay"
        lines.append(f"  ({count(staying, 'other activity')} {stay})")
    return "\n".join(lines)


def _signed(step: Number) -> str:
    """Write a step with its sign, also a positive one."""
    return signed(brief(step)) if step > 0 else brief(step)


def _bend_sentences(change: Replan) -> list[str]:
    """Say of each soft rule that bends otherwise than before how far it does so."""
    old, new, sheet = change.before.bends, change.after.bends, change.after.sheet
    sentences = []
    for rule in sheet.rules:
        before, now = old.get(rule.name, 0), new.get(rule.name, 0)
        if before == now or rule.give is None:
            continue
        if not now:
            sentences.append(f"{rule.name} does not bend any more.")
            continue
        price = value_text(sheet, now * rule.give)
        instead = f", instead of by {readable(before)}" if before else ""
        sentences.append(f"{rule.name} bends by {readable(now)}{instead}, which costs {price}.")
    return sentences


def _limits_table(change: Replan) -> str:
    """Return the rules that are at their limit now and were not before; bends are told above."""
    sheet, check = change.after.sheet, change.after.check
    if check is None or not change.at_limit:
        return ""
    rows = []
    for name in change.at_limit:
        i = sheet.rule_index[name]
        rule, state = sheet.rules[i], check.rules[i]
        if state.side is None:
            row = [name, readable(state.value), limits_phrase(rule), printable(rule.note)]
            rows.append(row)
    return "At their limit now, and not before\n" + table(rows, right={1}) if rows else ""
