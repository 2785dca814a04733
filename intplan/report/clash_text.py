"""Clashes in words: the rules and bounds that no plan can meet together, and what frees them."""

from __future__ import annotations

from collections.abc import Sequence

from intplan.planning import Bending, Clash, Give, Verdict
from intplan.report.change_words import LONGEST_RULE, algebra, limit_of, note_of
from intplan.report.numbers import brief, readable, value_text
from intplan.report.phrases import CAUTION, ENDED, count, few, listing, title_line
from intplan.report.tables import plan_table, table
from intplan.report.text import no_plan_sentence, verdict
from intplan.sheet import Sheet
from intplan.sheet.numbers import Number

BENDS_NAMED = 6  # rules that may bend; more of them are counted
RULES_SHOWN = 20  # rules of a clash, and rules that free it alone; more of them are counted
ALIKE = 3  # bounds of a clash at the same number share a line from so many on
NOT_SMALLEST = {
    "time": "as the time limit came first",
    "nodes": "as the node limit came first",
    "interrupt": "as the search was interrupted",
    "range": "as a whole activity grew too large to go on with",
}
FEW = 6  # members of a clash; of more it is told how many are rules


def clash_text(sheet: Sheet, found: Verdict) -> str:
    """Return the report of ``intplan clash``.

    Parameters
    ----------
    sheet : where a clash was looked for
    found : what came of it
    """
    opening = title_line(sheet)
    if found.clash is not None:
        blocks = [opening + no_plan_sentence(sheet), *clash_blocks(found.clash)]
    elif found.standing.exact_plan is not None:
        blocks = [
            f"{opening}Nothing clashes: here is a plan that meets every rule and bound.",
            plan_table(sheet, list(found.standing.exact_plan.values())),
        ]
    else:
        ended = ENDED.get(found.standing.ended_by or "", "")
        known = "No plan has been found, nor is it proven that there is none."
        return opening + f"{ended} {known}".lstrip()
    return "\n\n".join([*blocks, CAUTION])


def clash_blocks(clash: Clash) -> list[str]:
    """Return the paragraphs on a clash: its rules and bounds, and the give that frees them."""
    blocks = [f"{_clash_sentences(clash)}\n{_members(clash)}"]
    if clash.give is not None:
        blocks += give_blocks(clash.sheet, clash.give, clash.names)
    return blocks


def _clash_sentences(clash: Clash) -> str:
    """Say how many clash, whether all are needed, and whether only whole units make them."""
    whole = any(activity.whole for activity in clash.sheet.activities)
    units = " in whole units" if whole else ""
    if len(clash.names) == 1:
        sentences = [f"{clash.names[0]} alone cannot be met by any plan{units}."]
    else:
        sentences = [f"{_counted(clash)} clash: no plan{units} can meet them together."]
        if clash.smallest:
            sentences.append("Without any one of them there is a plan.")
        else:
            sentences += _open_sentences(clash)
    if whole and clash.needs_whole:
        sentences.append("Fractions would have fitted.")
    elif whole and clash.needs_whole is not None:
        sentences.append("Fractions would not fit either.")
    return " ".join(sentences)


def _open_sentences(clash: Clash) -> list[str]:
    """Say why a clash is not yet the smallest set."""
    if clash.given_up:
        why = "as telling took too long and was given up"
    else:
        why = NOT_SMALLEST.get(clash.ended_by or "", "")
    reason = f", {why}" if why else ""
    sentences = [f"They are not yet the smallest set{reason}: some may not be needed."]
    if clash.given_up:
        sentences.append("`--time-limit` or `--node-limit` gives it longer.")
    return sentences


def _counted(clash: Clash) -> str:
    """Count the members of a clash, rules and bounds by themselves where they are many."""
    members = len(clash.names)
    rules = sum(name in clash.sheet.rule_index for name in clash.names)
    if members > FEW and 0 < rules < members:
        return f"{count(rules, 'rule')} and {count(members - rules, 'bound')}"
    kind = "rules" if rules == members else "rules and bounds" if rules else "bounds"
    return f"These {members} {kind}"


def _members(clash: Clash) -> str:
    """Return a line for each rule and bound of a clash; bounds at the same number share one."""
    sheet = clash.sheet
    rules = [name for name in clash.names if name in sheet.rule_index]
    rows = [[name, _says(sheet, name)] for name in rules[:RULES_SHOWN]]
    if len(rules) > RULES_SHOWN:
        rows.append([f"({count(len(rules) - RULES_SHOWN, 'more rule')})", ""])
    shared = []
    for (side, limit), names in _alike(clash).items():
        floor = side == "least" and limit == 0
        if len(names) < ALIKE and not floor:
            rows += [[f"{name} {side}", _says(sheet, f"{name} {side}")] for name in names]
        else:
            beyond = "below" if side == "least" else "above"
            named = few(names, "other activities")
            shared.append(f"that {named} cannot be {beyond} {readable(limit)}")
    lines = [table(rows)] if rows else []
    for sentence in shared:
        lines.append(f"  {'and ' if lines else ''}{sentence}")
    return "\n".join(lines)


def _says(sheet: Sheet, name: str) -> str:
    """Write what a rule or bound of a clash says."""
    i = sheet.rule_index.get(name)
    most = None if i is None else sheet.rules[i].give_most
    bends = "" if most is None else f"bends by at most {readable(most)}"
    parts = (algebra(sheet, name, LONGEST_RULE), bends, note_of(sheet, name))
    return "  ".join(filter(None, parts))


def _alike(clash: Clash) -> dict[tuple[str, Number], list[str]]:
    """Return the activities whose bounds clash, by side and number, least bounds at 0 last."""
    found: dict[tuple[str, Number], list[str]] = {}
    for name in clash.names:
        if name not in clash.sheet.rule_index:
            activity, _, side = name.rpartition(" ")
            limit = limit_of(clash.sheet, name, side) or 0
            found.setdefault((side, limit), []).append(activity)
    floors = found.pop(("least", 0), [])
    return found | ({("least", 0): floors} if floors else {})


# ---------------------------------------------------------------------------------- give


def give_blocks(sheet: Sheet, give: Give, clashing: Sequence[str]) -> list[str]:
    """Return the paragraphs on what frees a clash: each rule alone, the least, its plan.

    Parameters
    ----------
    sheet : in which it was found
    give : what frees it
    clashing : the rules and bounds of the clash
    """
    free = [bend for bend in give.alone.values() if bend is not None]
    lines = [f"{b.name} alone would have to go {_way(sheet, b)}." for b in free[:RULES_SHOWN]]
    if len(free) > RULES_SHOWN:
        lines.append(f"So could {count(len(free) - RULES_SHOWN, 'more rule')} alone.")
    lines += _idle_sentences([name for name, bend in give.alone.items() if bend is None])
    if give.least is not None and list(give.least) != free:
        lines.append(_least_sentence(sheet, give, give.least))
        beyond = [bend.name for bend in give.least if bend.name not in clashing]
        if beyond:
            stand = "stands" if len(beyond) == 1 else "stand"
            lines.append(f"Beyond this clash {listing(beyond)} {stand} in the way too.")
    elif give.least is None and give.proven and not (lines and len(give.may_bend) == 1):
        lines.append(_helpless_sentence(give))
    if not give.proven:
        lines.append("The search for the least give was cut short.")
    blocks = ["\n".join(lines)] if lines else []
    if give.plan is not None:
        blocks.append(" ".join(["With this give there is a plan.", *verdict(give.plan)]))
        if give.plan.exact_plan is not None:
            amounts = list(give.plan.exact_plan.values())
            blocks[-1] += "\n" + plan_table(give.plan.sheet, amounts)
    return blocks


def _idle_sentences(names: Sequence[str]) -> list[str]:
    """Name the rules that free nothing by themselves."""
    if not names:
        return []
    bends = "it bends" if len(names) == 1 else "they bend"
    each = "" if len(names) == 1 else "each "
    named = few(names, "other rules")
    return [f"{named} {each}alone cannot free the plan, however far {bends}."]


def _way(sheet: Sheet, bend: Bending) -> str:
    """Say where a limit would have to go: ``from at most 16 to 19 (3 more)``."""
    limit = limit_of(sheet, bend.name, bend.side) or 0
    beyond = limit + bend.amount if bend.side == "most" else limit - bend.amount
    more = "more" if bend.side == "most" else "less"
    step = f"{brief(bend.amount)} {more}"
    other = limit_of(sheet, bend.name, "least" if bend.side == "most" else "most")
    kind = "exactly" if other == limit else f"at {bend.side}"
    return f"from {kind} {readable(limit)} to {readable(beyond)} ({step})"


def _least_sentence(sheet: Sheet, give: Give, least: tuple[Bending, ...]) -> str:
    """Name the bendings of the least sum, and how they were weighed against each other."""
    known = "The least give" if give.proven else "The least give found"
    if len(least) == 1 and give.alone.get(least[0].name) == least[0]:
        return f"{known} is that of {least[0].name}."
    ways = [f"{bend.name} {_way(sheet, bend)}" for bend in least]
    priced = {name for name, weight in give.weighted.items() if weight != 1}
    if priced & {bend.name for bend in least}:
        total = f", {value_text(sheet, give.total or 0)} at the prices of the sheet"
    else:
        total = "" if len(least) == 1 else f", {readable(give.total or 0)} in all"
    return f"{known}: {listing(ways)}{total}."


def _helpless_sentence(give: Give) -> str:
    if not give.may_bend:
        return "No rule may bend, so nothing frees the plan."
    if len(give.may_bend) > BENDS_NAMED:
        return f"Bending these {len(give.may_bend)} rules cannot free the plan."
    return f"Bending {listing(list(give.may_bend))} cannot free the plan."
