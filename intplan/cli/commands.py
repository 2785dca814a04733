"""The commands. Each reads words, asks the layers below, and says what came of it."""

from __future__ import annotations

from collections.abc import Callable
from fractions import Fraction
from typing import TYPE_CHECKING

import click

from intplan.cli.answers import (
    NO,
    STATUS_OF,
    YES,
    give_and_keep,
    read_sheet,
    shown_progress,
)
from intplan.cli.app import BAD_INPUT, UNFINISHED, Session, group
from intplan.cli.options import limit_options, output_options

if TYPE_CHECKING:
    from intplan.planning import StandingPlan
    from intplan.sheet import Sheet


@group.command("solve", short_help="Find the best whole-unit plan and prove it.")
@click.argument("sheet_file", metavar="SHEET")
@click.option("--save", "save_to", metavar="FILE", help="Keep the standing plan as JSON.")
@click.option("--plan-to", metavar="FILE", help="Write the plan as CSV: activity,amount.")
@limit_options
@output_options
@click.pass_obj
def solve_command(
    session: Session,
    sheet_file: str,
    save_to: str | None,
    plan_to: str | None,
    time_limit: float | None,
    gap: Fraction,
    node_limit: int | None,
    as_json: bool,
    quiet: bool,
) -> int:
    """Find the best whole-unit plan for SHEET, a TOML file, and prove that nothing beats it.

    Exit status: 0 if the plan is proven best (or within --gap), 1 if there is no plan or the aim
    has no limit, 2 for bad input, 3 if a limit or an interrupt ended the search.
    """
    from intplan.cli.targets import check_targets
    from intplan.report.data import solve_data
    from intplan.report.text import solve_text

    session.console.quiet = quiet
    check_targets([save_to, plan_to], [sheet_file])
    sheet = read_sheet(session, sheet_file)
    with session.interrupts.softened() as stop:
        standing = _search(session, sheet, time_limit, gap, node_limit, stop)
        text, data = solve_text(standing), solve_data(standing)
        kept = give_and_keep(session, standing, text, data, save_to, plan_to)
    return STATUS_OF[standing.outcome] if kept else BAD_INPUT


@group.command("check", short_help="Hold a hand-made plan against the rules.")
@click.argument("sheet_file", metavar="SHEET")
@click.argument("plan_file", metavar="PLAN.csv")
@output_options
@click.pass_obj
def check_command(
    session: Session, sheet_file: str, plan_file: str, as_json: bool, quiet: bool
) -> int:
    """Hold PLAN.csv, with the columns activity,amount, against the rules of SHEET.

    Amounts are decimals or p/q; an activity that is left out counts as 0. Exit status: 0 if the
    plan meets every rule and bound, 1 if it breaks one, 2 for bad input.
    """
    from intplan.planning.planfile import read_plan
    from intplan.report.data import check_data
    from intplan.report.text import check_text

    session.console.quiet = quiet
    sheet = read_sheet(session, sheet_file)
    plan = read_plan(plan_file, sheet)
    session.console.notes(f"Note: {warning}." for warning in plan.warnings)
    check = sheet.check(plan.amounts)
    session.console.answer(
        check_text(sheet, plan.amounts, check),
        check_data(sheet, plan.amounts, check, plan.warnings),
    )
    return YES if check.good else NO


@group.command("compare", short_help="Warm against cold node solves of one search.")
@click.argument("sheet_file", metavar="SHEET")
@limit_options
@output_options
@click.pass_obj
def compare_command(
    session: Session,
    sheet_file: str,
    time_limit: float | None,
    gap: Fraction,
    node_limit: int | None,
    as_json: bool,
    quiet: bool,
) -> int:
    """Solve SHEET, then solve each node of its search tree twice with the same rows: warm, from
    its parent's basis, and cold, from nothing.

    The limits are those of the search. Exit status: 0 if both agree at every node, 1 if they
    differ or the aim has no limit, 2 for bad input, 3 if a limit or an interrupt ended the search.
    """
    from intplan.planning.compare import Comparison, compare
    from intplan.report.data import compare_data
    from intplan.report.text import compare_text

    session.console.quiet = quiet
    sheet = read_sheet(session, sheet_file)
    with session.interrupts.softened() as stop:
        standing = _search(session, sheet, time_limit, gap, node_limit, stop)
        bounded = standing.outcome != "unbounded"
        interrupted = stop()  # the search was ended: what it solved is compared all the same
        comparison = Comparison.of(())
        if bounded:
            comparison = compare(standing, None if interrupted else stop)
    session.console.answer(compare_text(comparison, standing), compare_data(comparison, standing))
    if not (bounded and comparison.agree):
        return NO
    finished = standing.outcome != "unfinished" and comparison.complete
    return YES if finished else UNFINISHED


@group.command("tree", short_help="Write the search tree for other programs.")
@click.argument("standing_file", metavar="STANDING")
@click.option(
    "--to",
    "target",
    metavar="FILE",
    required=True,
    help="The file to write; it ends in .graphml, .dot or .json, which chooses the form.",
)
@output_options
@click.pass_obj
def tree_command(
    session: Session, standing_file: str, target: str, as_json: bool, quiet: bool
) -> int:
    """Write the search tree of STANDING, a file that `solve --save` wrote, to a file.

    GraphML and DOT hold a sentence and the numbers of every node; JSON holds its evidence too.
    Exit status: 0 if the file was written, 2 for bad input.
    """
    from intplan.cli.targets import check_targets
    from intplan.planning import load_standing
    from intplan.report.data import tree_data
    from intplan.report.text import tree_text
    from intplan.report.treefile import tree_writer, write_tree

    session.console.quiet = quiet
    check_targets([target], [standing_file])
    tree_writer(target)
    standing = load_standing(standing_file)
    write_tree(standing, target)
    session.console.answer(tree_text(standing, target), tree_data(standing, target))
    return YES


def _search(
    session: Session,
    sheet: Sheet,
    time_limit: float | None,
    gap: Fraction,
    node_limit: int | None,
    stop: Callable[[], bool],
) -> StandingPlan:
    """Solve a sheet, with a status sentence where someone can see it."""
    from intplan.planning import solve

    standing = solve(
        sheet,
        time_limit=time_limit,
        gap=gap,
        node_limit=node_limit,
        progress=shown_progress(session, sheet),
        stop=stop,
    )
    session.console.clear_status()
    return standing
