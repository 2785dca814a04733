"""What rules cost, in words: a sentence for each rule that costs something, the costliest first."""

from __future__ import annotations

from fractions import Fraction

from intplan.planning import Worth, WorthTable
from intplan.report.change_words import limit_of
from intplan.report.numbers import readable, signed, value_text
from intplan.report.phrases import CAUTION, count, listing, title_line
from intplan.sheet import Sheet
from intplan.sheet.numbers import Number

NAMED = 12  # rules and bounds that cost nothing; more of them are counted
ENDED = {
    "time": "The time limit came before every figure was settled.",
    "nodes": "The node limit came before every figure was settled.",
    "interrupt": "It was interrupted before every figure was settled.",
    "range": "A whole activity grew too large for some figures to be settled.",
}


def worth_text(found: WorthTable) -> str:
    """Return the report of ``intplan worth``."""
    sheet = found.standing.sheet
    telling = [entry for entry in found.entries if not _worthless(entry)]
    floors = [entry for entry in telling if _is_floor(sheet, entry)]
    others = [entry for entry in telling if not _is_floor(sheet, entry)]
    blocks = [title_line(sheet) + _opening(found, len(telling))]
    if others:
        blocks.append("\n".join(worth_sentences(sheet, entry) for entry in others))
    if floors:
        told = [f"{e.name.removesuffix(' least')} {_waived(sheet, e)}" for e in floors]
        blocks.append(f"If an activity could fall below 0: {listing(told)}.")
    idle = [entry.name for entry in found.entries if _worthless(entry)] + list(found.others)
    if idle:
        blocks.append(_idle_sentence(idle, bool(telling)))
    if found.floors:
        bounds = count(len(found.floors), "bound")
        keep = "that keeps" if len(found.floors) == 1 else "that keep"
        blocks.append(
            f"Not weighed: {bounds} {keep} activities from falling below 0; `--below-zero` "
            "weighs them too."
        )
    if found.given_up:
        blocks.append(
            "Some figures took too long and were given up; `--time-limit` or `--node-limit` gives "
            "them longer."
        )
    elif found.ended_by:
        blocks.append(ENDED[found.ended_by])
    return "\n\n".join([*blocks, CAUTION])


def _worthless(entry: Worth) -> bool:
    """Tell whether it is settled that neither waiving nor one unit gains anything."""
    return not (entry.unsettled or entry.runs_away or entry.waived or entry.unit)


def _is_floor(sheet: Sheet, entry: Worth) -> bool:
    """Tell whether it is the bound that keeps an activity from falling below 0."""
    name = entry.name
    return name.endswith(" least") and limit_of(sheet, name, "least") == 0


def _opening(found: WorthTable, telling: int) -> str:
    standing = found.standing
    if standing.exact_value is None or not telling:
        return "No rule and no bound costs the aim anything."
    return (
        f"The best plan comes to {value_text(standing.sheet, standing.exact_value)}. How that would"
        " change without a rule or bound, and with its limit one unit further out:"
    )


def worth_sentences(sheet: Sheet, entry: Worth) -> str:
    """Say what the aim gains without a rule or bound, and with its limit moved by one."""
    sentences = [f"Without {entry.name}: {_waived(sheet, entry)}."]
    more = "more" if entry.toward == "most" else "less"
    if entry.unit is not None:
        sentences.append(f"One {more}: {_step(sheet, entry.unit)}{_price(sheet, entry)}.")
    elif "unit" in entry.unsettled:
        sentences.append(f"One {more}: not settled{_price(sheet, entry)}.")
    return " ".join(sentences)


def _waived(sheet: Sheet, entry: Worth) -> str:
    """Write the gain of waiving, or what is known of it."""
    if entry.runs_away:
        return "the aim has no limit"
    if entry.waived is not None:
        return _step(sheet, entry.waived)
    least = _step(sheet, entry.at_least)
    if entry.at_most is None:
        return f"{least} or better, not settled" if entry.at_least else "not settled"
    span = f"from {least} to" if entry.at_least else "up to"
    return f"{span} {_step(sheet, entry.at_most)}, not settled"


def _step(sheet: Sheet, gain: Number) -> str:
    """Write a gain as the change of the aim: with a minus where less is better."""
    if not gain:
        return "nothing"
    step = gain if sheet.aim.sense == "maximize" else -gain
    text = value_text(sheet, step)
    return signed(text) if step > 0 else text


def _price(sheet: Sheet, entry: Worth) -> str:
    """Write what a unit is worth where activities are divisible, to six digits."""
    if entry.price is None:
        return ""
    return f" ({readable(Fraction(f'{entry.price:.6g}'))} per unit, of the relaxation)"


def _idle_sentence(names: list[str], after_others: bool) -> str:
    kind = "other rule or bound" if after_others else "rule or bound"
    if len(names) > NAMED:
        return f"{count(len(names), kind)} cost nothing."
    cost = "costs" if len(names) == 1 else "cost"
    return f"{listing(names)} {cost} nothing."
