"""What commands share around an answer: exit statuses, sheets in, the status, files out."""

from __future__ import annotations

from collections.abc import Callable
from typing import TYPE_CHECKING, Any

from intplan.cli.app import UNFINISHED, Session

if TYPE_CHECKING:
    from intplan.planning import StandingPlan
    from intplan.sheet import Sheet

YES, NO = 0, 1
STATUS_OF = {
    "optimal": YES,
    "within_gap": YES,
    "infeasible": NO,
    "unbounded": NO,
    "unfinished": UNFINISHED,
}


def read_sheet(session: Session, path: str) -> Sheet:
    """Read a sheet and pass its warnings on."""
    from intplan.sheet import Sheet

    sheet = Sheet.read(path)
    session.console.notes(f"Note: {warning}." for warning in sheet.warnings)
    return sheet


def shown_progress(session: Session, sheet: Sheet) -> Callable[..., None] | None:
    """Return what shows how a search stands, where someone can see it."""
    console = session.console
    if not console.shows_status():
        return None
    from intplan.report.text import status_sentence

    return lambda value, bound: console.status(status_sentence(sheet, value, bound))


def give_and_keep(
    session: Session,
    standing: StandingPlan,
    text: str,
    data: dict[str, Any],
    save_to: str | None,
    plan_to: str | None,
) -> bool:
    """Write the files that were asked for and give the answer, which no failure to write loses.

    Parameters
    ----------
    standing : what to keep
    text, data : the answer
    save_to, plan_to : the files for the standing plan and its plan, None where not asked for

    Returns
    -------
    bool
        Whether the files were written.
    """
    console = session.console
    failure = _keep(session, standing, save_to, plan_to)
    if failure is None or not console.as_json:
        console.answer(text, data)
    if failure is not None:
        console.error(*failure, more=data)
    return failure is None


def _keep(
    session: Session, standing: StandingPlan, save_to: str | None, plan_to: str | None
) -> tuple[str, str | None] | None:
    """Write the files that were asked for; return message and place of what went wrong."""
    from intplan.errors import IntplanError, printable
    from intplan.planning.planfile import write_plan

    try:
        if save_to is not None:
            standing.save(save_to)
        if plan_to is not None and standing.exact_plan is not None:
            write_plan(plan_to, standing.sheet, standing.exact_plan)
        elif plan_to is not None:
            note = f"Note: there is no plan, so {printable(plan_to)} was not written."
            session.console.notes([note])
    except IntplanError as error:
        return error.message, error.where
    return None
