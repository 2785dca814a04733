"""The problem families, the random generators, the brute force and the reference behind them."""

from __future__ import annotations

import os
from collections import Counter

import numpy as np
import pytest
from hypothesis import given, settings

import intplan
from tests import reference
from tests.families import FAMILIES, Instance, build, instance_of, product_mix, shift_cover
from tests.generators import (
    BRUTE_FORCE_LIMIT,
    KINDS,
    brute_force,
    problems,
    random_problem,
    tiny_problem,
)
from tests.reference import reference_linprog, reference_milp, settle, silenced

ARRAYS = ("aim", "rows", "row_least", "row_most", "least", "most", "whole")


def same(one: Instance, other: Instance) -> bool:
    """Tell whether two instances hold the same problem."""
    equal = all(np.array_equal(getattr(one, name), getattr(other, name)) for name in ARRAYS)
    return equal and (one.maximize, one.constant) == (other.maximize, other.constant)


@pytest.mark.parametrize("family", FAMILIES)
def test_a_family_is_the_same_every_time_and_in_integers(family: str) -> None:
    first, again = FAMILIES[family](), FAMILIES[family]()
    assert len(first) >= 4
    assert all(same(one, other) for one, other in zip(first, again, strict=True))
    for instance in first:
        assert instance.family == family
        assert np.array_equal(instance.rows, np.rint(instance.rows))
        assert np.array_equal(instance.aim, np.rint(instance.aim))


def test_every_instance_has_a_name_of_its_own() -> None:
    names = Counter(instance.name for make in FAMILIES.values() for instance in make())
    assert [name for name, count in names.items() if count > 1] == []


@pytest.mark.parametrize("family", FAMILIES)
def test_a_sheet_of_arrays_gives_the_same_arrays_back(family: str) -> None:
    for instance in FAMILIES[family]():
        sheet = intplan.Sheet.from_arrays(**instance.arrays())
        assert same(instance_of(sheet, instance.name, family), instance)


def test_the_arrays_of_a_sheet_hold_bends_and_the_constant() -> None:
    sheet = intplan.Sheet.parse(
        """
        [aim]
        minimize = "2*a + b + 7"
        [activities]
        a = { most = 4 }
        b = { least = -1, whole = false }
        [rules]
        enough = { rule = "a + b >= 6", give = 0.5, give_most = 3 }
        room   = "a - b <= 2"
        """
    )
    instance = instance_of(sheet, "small", "none")
    assert instance.rows.tolist() == [[1, 1, 1], [1, -1, 0]]
    assert instance.aim.tolist() == [2, 1, 0.5]
    assert instance.most.tolist() == [4, np.inf, 3]
    assert instance.whole.tolist() == [True, False, False]
    # By hand: bend 3 at 0.5 each, then b = 3 at 1 each: 1.5 + 3 + 7.
    assert reference_milp(instance).value == pytest.approx(11.5)
    assert reference_linprog(instance).value == pytest.approx(11.5)


@pytest.mark.parametrize("family", FAMILIES)
def test_the_quickest_instance_of_a_family_against_the_reference(family: str) -> None:
    instance = min(FAMILIES[family](), key=lambda one: one.rows.size)
    standing = intplan.solve(intplan.Sheet.from_arrays(**instance.arrays()))
    assert standing.outcome == "optimal"
    assert standing.value == pytest.approx(reference_milp(instance).value, rel=1e-6)


def test_a_long_shift_rests_in_its_middle() -> None:
    instance = shift_cover(24, (4, 9), seed=1)
    short, long = instance.rows[:, 0], instance.rows[:, 1]
    assert short.nonzero()[0].tolist() == [0, 1, 2, 3]
    assert long.nonzero()[0].tolist() == [0, 1, 2, 3, 5, 6, 7, 8]


def test_product_mix_without_limits_is_stopped_by_its_resources() -> None:
    instance = product_mix(10, 20, 1, scarce=5, limited=False)
    assert np.isinf(instance.most).all()
    assert (instance.rows.max(0) > 0).all()


def test_random_problems_cover_every_kind_and_outcome() -> None:
    seeds = range(20 * len(KINDS))
    outcomes = Counter()
    for seed in seeds:
        instance = random_problem(seed)
        outcomes[settle(instance, reference_milp(instance))] += 1
        assert instance.rows.any(1).all()
    assert {random_problem(seed).family for seed in seeds} == set(KINDS)
    for status in (reference.OPTIMAL, reference.INFEASIBLE, reference.UNBOUNDED):
        assert outcomes[status] >= len(seeds) // 12
    assert sum(outcomes.values()) == len(seeds)


def test_random_problems_are_the_same_every_time() -> None:
    assert all(same(random_problem(seed), random_problem(seed)) for seed in range(30))
    assert not same(random_problem(0), random_problem(len(KINDS)))


@pytest.mark.parametrize("seed", range(60))
def test_brute_force_agrees_with_the_reference(seed: int) -> None:
    instance = tiny_problem(seed)
    outcome, value = brute_force(instance)
    answer = reference_milp(instance)
    assert (outcome == "infeasible") == (settle(instance, answer) == reference.INFEASIBLE)
    assert value is None or value == pytest.approx(answer.value, abs=1e-6)


@settings(derandomize=True, database=None, max_examples=50, deadline=None)
@given(problems(bounded=True))
def test_drawn_bounded_problems_can_be_settled(instance: Instance) -> None:
    outcome, value = brute_force(instance)
    assert (outcome, value is None) in {("optimal", False), ("infeasible", True)}


def test_brute_force_by_hand() -> None:
    # maximise 3a + 2b, 2a + b <= 5, a and b up to 2: a = 1, b = 2 uses 4, a = 2, b = 1 uses 5.
    instance = build("hand", "hand", [3, 2], [[2, 1]], row_most=5, most=2, maximize=True)
    assert brute_force(instance) == ("optimal", 8)
    assert brute_force(build("odd", "hand", [1], [[2]], 3, 3, most=5)) == ("infeasible", None)


@pytest.mark.parametrize(
    "instance",
    [
        build("open", "hand", [1], [[1]], row_most=5),
        build("divisible", "hand", [1], [[1]], row_most=5, most=2, whole=False),
        build("fraction", "hand", [1], [[0.5]], row_most=5, most=2),
        build("large", "hand", [1], [[1]], row_most=5, most=BRUTE_FORCE_LIMIT),
    ],
    ids=lambda instance: instance.name,
)
def test_brute_force_refuses_what_it_cannot_settle(instance: Instance) -> None:
    with pytest.raises(ValueError, match="brute force"):
        brute_force(instance)


def test_the_reference_by_hand() -> None:
    # W. L. Winston's two products again: 40 in whole units, 165/4 otherwise; from memory.
    arrays = ([8, 5], [[1, 1], [9, 5]], -np.inf, [6, 45])
    instance = build("hand", "hand", *arrays, maximize=True)
    answer = reference_milp(instance)
    assert (answer.status, round(answer.value, 6)) == (reference.OPTIMAL, 40)
    assert np.rint(answer.x).tolist() == [5, 0]
    assert reference_linprog(instance).value == pytest.approx(165 / 4)


def test_infeasible_and_unbounded_are_told_apart() -> None:
    odd = build("odd", "hand", [1], [[2]], 3, 3)
    climbing = build("climbing", "hand", [1, 0], [[1, -1]], 0, 0, maximize=True)
    both = build("both", "hand", [1, 0], [[0, 2]], 3, 3, maximize=True)
    found = [settle(one, reference_milp(one)) for one in (odd, climbing, both)]
    assert found == [reference.INFEASIBLE, reference.UNBOUNDED, reference.INFEASIBLE]


def test_silenced_drops_what_is_written_and_puts_the_descriptors_back(
    capfd: pytest.CaptureFixture[str],
) -> None:
    os.write(1, b"before ")
    with pytest.raises(ZeroDivisionError), silenced():
        os.write(1, b"within")
        os.write(2, b"within")
        raise ZeroDivisionError
    os.write(1, b"after")
    assert capfd.readouterr() == ("before after", "")
