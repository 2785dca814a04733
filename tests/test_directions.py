"""Sheets whose whole activities may run away: their bounded form against the reference."""

from dataclasses import replace

from intplan import Sheet, solve
from intplan.planning.clash import restricted
from intplan.planning.directions import bounded, runs_away
from intplan.sheet.model import Activity, Aim
from tests.test_clash import far_off, is_refused, random_clashing


def form_of(text: str):
    sheet = Sheet.parse(text)
    return sheet, bounded(sheet)


def test_parity_without_bounds_is_settled():
    # 6a - 10b + 15c is odd only if c is; the second rule makes c even.
    sheet, form = form_of("""
    [activities]
    a = {}
    b = {}
    c = {}
    d = {}
    [rules]
    odd = "6*a - 10*b + 15*c = 1"
    even = "c - 2*d = 0"
    """)
    assert runs_away(sheet)
    assert solve(form.sheet).outcome == "infeasible"


def test_a_thin_strip_without_whole_points():
    # 2 <= 6a - 9b + 3c/2 <= 5/2 with c even: 6a - 9b + 3d lies in no strip from 2 to 5/2.
    _, form = form_of("""
    [activities]
    a = { least = -inf }
    b = { least = -inf }
    c = { least = -inf }
    d = { least = -inf }
    [rules]
    strip = "2 <= 6*a - 9*b + 1.5*c <= 2.5"
    even = "c = 2*d"
    """)
    assert solve(form.sheet).outcome == "infeasible"


def test_what_can_be_left_behind_goes():
    sheet, form = form_of("""
    [activities]
    a = {}
    b = { most = 3 }
    [rules]
    far = "a - b >= 100"
    same = "b >= 2"
    """)
    assert [rule.name for rule in form.sheet.rules] == ["same"]
    plan = form.lift(solve(form.sheet).result.plan)
    assert sheet.check(plan).good and plan[0] >= 102


def test_a_divisible_activity_makes_good_what_whole_ones_cannot():
    sheet, form = form_of("""
    [activities]
    a = { least = -inf }
    b = { least = -inf }
    oil = { least = -inf, whole = false }
    [rules]
    mix = "2*a + 4*b + oil = 1"
    pure = "oil = 1"
    """)
    plan = form.lift(solve(form.sheet).result.plan)
    assert sheet.check(plan).good and plan[2] == 1


def test_soft_rules_count_at_their_widest():
    _, form = form_of("""
    [activities]
    a = { most = 4 }
    [rules]
    need = { rule = "a >= 10", give = 2, give_most = 5 }
    free = { rule = "a = 3", give = 1 }
    """)
    assert [(r.name, r.least, r.give) for r in form.sheet.rules] == [("need", 5, None)]


def test_a_search_that_is_ended_gives_no_form():
    sheet = Sheet.parse('[activities]\na = {}\n[rules]\none = "2*a >= 5"')
    assert bounded(sheet, lambda s: solve(s, stop=lambda: True)) is None


def test_only_whole_activities_run_away():
    assert not runs_away(Sheet.parse("[activities]\na = { most = 3 }\nb = { whole = false }"))
    assert runs_away(Sheet.parse("[activities]\na = { least = -inf, most = 3 }"))


def test_bounded_forms_agree_with_the_reference():
    plans = 0
    for seed in range(150):
        sheet = random_clashing(seed)
        # Most bounds go, so that much runs away.
        names = {rule.name for rule in sheet.rules} | {f"a{j} least" for j in range(seed % 3)}
        sheet = restricted(sheet, names)
        form = bounded(sheet)
        answer = solve(form.sheet, node_limit=5000)
        if answer.outcome == "optimal":
            plans += 1
            assert sheet.check(form.lift(answer.result.plan)).good, seed
        else:
            assert answer.outcome == "infeasible" and is_refused(far_off(sheet)), seed
    assert 30 < plans < 150


def test_names_of_steps_are_new():
    sheet = Sheet.parse('[activities]\na = {least = -inf}\n[rules]\none = "3*a = 5"')
    taken = (replace(sheet.activities[0], name="step[0]"), Activity("step[1]", most=0))
    form = bounded(replace(sheet, aim=Aim(), activities=taken))
    assert [a.name for a in form.sheet.activities] == ["step[1]", "step[2]"]
    assert solve(form.sheet).outcome == "infeasible"
