"""Clashes in words: the rules and bounds that no plan can meet together, and what frees them."""

from __future__ import annotations

from collections.abc import Sequence

from intplan.planning import Bending, Clash, Give, Verdict
from intplan.report.change_words import LONGEST_RULE, algebra, limit_of, note_of
from intplan.report.numbers import brief, readable, value_text
from intplan.report.phrases import CAUTION, ENDED, listing, title_line
from intplan.report.tables import plan_table, table
from intplan.report.text import no_plan_sentence, verdict
from intplan.sheet import Sheet

BENDS_NAMED = 6  # rules that may bend; more of them are counted


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
        rules = all(name in clash.sheet.rule_index for name in clash.names)
        kind = "rules" if rules else "rules and bounds"
        clashing = f"These {len(clash.names)} {kind} clash"
        sentences = [f"{clashing}: no plan{units} can meet them together."]
        if clash.smallest:
            sentences.append("Without any one of them there is a plan.")
        else:
            sentences.append("They are not yet the smallest set: some may not be needed.")
    if whole and clash.needs_whole:
        sentences.append("Fractions would have fitted.")
    elif whole and clash.needs_whole is not None:
        sentences.append("Fractions would not fit either.")
    return " ".join(sentences)


def _members(clash: Clash) -> str:
    """Return a line for each rule and bound of a clash; bounds at 0 from below share one."""
    sheet = clash.sheet
    rows, floors = [], []
    for name in clash.names:
        i = sheet.rule_index.get(name)
        if i is None and name.endswith(" least") and limit_of(sheet, name, "least") == 0:
            floors.append(name.removesuffix(" least"))
            continue
        says = algebra(sheet, name, LONGEST_RULE)
        most = None if i is None else sheet.rules[i].give_most
        bends = "" if most is None else f"bends by at most {readable(most)}"
        rows.append([name, "  ".join(filter(None, (says, bends, note_of(sheet, name))))])
    lines = [table(rows)] if rows else []
    if floors:
        others = "and that " if rows else "that "
        lines.append(f"  {others}{listing(floors)} cannot be below 0")
    return "\n".join(lines)


# ---------------------------------------------------------------------------------- give


def give_blocks(sheet: Sheet, give: Give, clashing: Sequence[str]) -> list[str]:
    """Return the paragraphs on what frees a clash: each rule alone, the least, its plan.

    Parameters
    ----------
    sheet : in which it was found
    give : what frees it
    clashing : the rules and bounds of the clash
    """
    lines = [_bending_sentence(sheet, name, bend) for name, bend in give.alone.items()]
    free = [bend for bend in give.alone.values() if bend is not None]
    if give.least is not None and list(give.least) != free:
        lines.append(_least_sentence(sheet, give, give.least))
        beyond = [bend.name for bend in give.least if bend.name not in clashing]
        if beyond:
            stand = "stands" if len(beyond) == 1 else "stand"
            lines.append(f"Beyond this clash {listing(beyond)} {stand} in the way too.")
    elif give.least is None and give.proven and not (lines and len(give.may_bend) == 1):
        lines.append(_helpless_sentence(give))
    if not give.proven:
        lines.append("A limit came before the least give was proven.")
    blocks = ["\n".join(lines)] if lines else []
    if give.plan is not None:
        blocks.append(" ".join(["With this give there is a plan.", *verdict(give.plan)]))
        if give.plan.exact_plan is not None:
            amounts = list(give.plan.exact_plan.values())
            blocks[-1] += "\n" + plan_table(give.plan.sheet, amounts)
    return blocks


def _bending_sentence(sheet: Sheet, name: str, bend: Bending | None) -> str:
    """Say how far one rule would have to go by itself."""
    if bend is None:
        return f"{name} alone cannot free the plan, however far it bends."
    return f"{name} alone would have to go {_way(sheet, bend)}."


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
