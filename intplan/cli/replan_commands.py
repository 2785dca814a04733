"""The commands around a standing plan whose rules change: replan, clash, worth."""

from __future__ import annotations

import contextlib
import os
from fractions import Fraction
from typing import TYPE_CHECKING

import click

from intplan.cli.answers import NO, STATUS_OF, YES, give_and_keep, read_sheet, shown_progress
from intplan.cli.app import BAD_INPUT, UNFINISHED, Session, group
from intplan.cli.options import (
    ChangeCommand,
    bend_option,
    change_options,
    limit_options,
    node_option,
    output_options,
    time_option,
)

if TYPE_CHECKING:
    from intplan.planning import Replan, StandingPlan
    from intplan.sheet import Sheet


@group.command(
    "replan", cls=ChangeCommand, short_help="What a change of rules does to a standing plan."
)
@click.argument("standing_file", metavar="STANDING")
@change_options
@bend_option
@click.option("--save", "save_to", metavar="FILE", help="Keep the new standing plan as JSON.")
@click.option("--plan-to", metavar="FILE", help="Write the new plan as CSV: activity,amount.")
@limit_options
@output_options
@click.pass_obj
def replan_command(
    session: Session,
    standing_file: str,
    additions: tuple[str, ...],
    waive: tuple[str, ...],
    settings: tuple[str, ...],
    freeze: tuple[str, ...],
    stay_close: Fraction | None,
    may_bend: tuple[str, ...],
    save_to: str | None,
    plan_to: str | None,
    time_limit: float | None,
    gap: Fraction,
    node_limit: int | None,
    as_json: bool,
    quiet: bool,
) -> int:
    """Say what a change of rules does to STANDING, a file that `solve --save` or `replan --save`
    wrote: whether the plan stands, the new best plan if not, what moves and what that costs; and
    where no plan is left, which rules clash and the least give that frees them.

    Rules are waived first, then limits set, then rules added. Exit status: 0 if the plan stands
    or the new one is proven best (or within --gap), 1 if no plan is left or the aim has no limit,
    2 for bad input, 3 if a limit or an interrupt came first.
    """
    from intplan.cli.targets import check_targets
    from intplan.planning import load_standing
    from intplan.planning.replan import replan
    from intplan.report.replan_data import replan_data
    from intplan.report.replan_text import replan_text
    from intplan.sheet.changes import read_addition, read_setting

    session.console.quiet = quiet
    if not (additions or waive or settings or freeze):
        raise click.UsageError("No change: give --add, --waive, --set or --freeze.")
    check_targets([save_to, plan_to], [standing_file])
    add = [read_addition(text) for text in additions]
    limits = [read_setting(text) for text in settings]
    standing = load_standing(standing_file)
    with session.interrupts.softened() as stop:
        change = replan(
            standing,
            add=add,
            waive=waive,
            set=limits,
            freeze=freeze,
            stay_close=stay_close,
            may_bend=may_bend or None,
            time_limit=time_limit,
            gap=gap,
            node_limit=node_limit,
            progress=shown_progress(session, standing.sheet),
            stop=stop,
        )
        session.console.clear_status()
        session.console.notes(f"Note: {note}." for note in change.changes.notes)
        text, data = replan_text(change), replan_data(change)
        kept = give_and_keep(session, change.after, text, data, save_to, plan_to)
    return _replan_status(change) if kept else BAD_INPUT


def _replan_status(change: Replan) -> int:
    return UNFINISHED if change.effect == "undecided" else STATUS_OF[change.after.outcome]


@group.command("clash", short_help="Why there is no plan, and the least give that frees it.")
@click.argument("subject_file", metavar="SHEET|STANDING")
@bend_option
@time_option
@node_option
@output_options
@click.pass_obj
def clash_command(
    session: Session,
    subject_file: str,
    may_bend: tuple[str, ...],
    time_limit: float | None,
    node_limit: int | None,
    as_json: bool,
    quiet: bool,
) -> int:
    """Say which rules and bounds no plan can meet together, and how far rules must bend before
    there is one. Takes a sheet, a TOML file, or a standing plan, a JSON file.

    Exit status: 0 if there is a plan and so no clash, 1 if there is a clash, 2 for bad input, 3 if
    a limit or an interrupt came before that was known.
    """
    from intplan.planning.clash import settle
    from intplan.report.clash_text import clash_text
    from intplan.report.replan_data import clash_data

    session.console.quiet = quiet
    subject: Sheet | StandingPlan
    if _is_standing(subject_file):
        from intplan.planning import load_standing

        subject = load_standing(subject_file)
        sheet = subject.sheet
    else:
        subject = sheet = read_sheet(session, subject_file)
    with session.interrupts.softened() as stop:
        session.console.status("Looking for what clashes.")
        found = settle(
            subject,
            may_bend=may_bend or None,
            time_limit=time_limit,
            node_limit=node_limit,
            stop=stop,
        )
        session.console.answer(clash_text(sheet, found), clash_data(sheet, found))
    return {"feasible": YES, "infeasible": NO, "undecided": UNFINISHED}[found.outcome]


@group.command("worth", short_help="What each rule of a standing plan costs.")
@click.argument("standing_file", metavar="STANDING")
@click.option(
    "--below-zero",
    is_flag=True,
    help="Weigh what keeps activities from falling below 0 as well; it takes longer.",
)
@time_option
@node_option
@output_options
@click.pass_obj
def worth_command(
    session: Session,
    standing_file: str,
    below_zero: bool,
    time_limit: float | None,
    node_limit: int | None,
    as_json: bool,
    quiet: bool,
) -> int:
    """Say what each rule and bound of STANDING costs: what the aim would gain without it, and with
    its limit one unit further out. The plan must be proven best.

    Exit status: 0 if every figure is settled, 2 for bad input, 3 if a limit or an interrupt left
    some open.
    """
    from intplan.planning import load_standing
    from intplan.planning.worth import worth
    from intplan.report.replan_data import worth_data
    from intplan.report.worth_text import worth_text

    session.console.quiet = quiet
    standing = load_standing(standing_file)
    console = session.console

    def progress(done: int, most: int) -> None:
        console.status(f"Weighed {done:,} of at most {most:,} changes.")

    with session.interrupts.softened() as stop:
        found = worth(
            standing,
            below_zero=below_zero,
            time_limit=time_limit,
            node_limit=node_limit,
            progress=progress,
            stop=stop,
        )
        console.answer(worth_text(found), worth_data(found))
    return UNFINISHED if found.ended_by else YES


def _is_standing(path: str) -> bool:
    """Tell whether a file is a standing plan, by its name or by how it begins."""
    if path.endswith(".json"):
        return True
    if path.endswith(".toml") or not os.path.isfile(path):
        return False  # a pipe can be read but once
    with contextlib.suppress(OSError), open(path, "rb") as file:
        return file.read(64).lstrip().startswith(b"{")
    return False
