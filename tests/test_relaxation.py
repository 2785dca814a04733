"""The relaxation against an outside reference: cold starts, added rows, changed bounds, rays."""

from __future__ import annotations

import math
from collections import Counter
from fractions import Fraction

import numpy as np
import pytest

from intplan.relaxation.dictionary import DRIFT, Dictionary, Status, Stopped
from intplan.relaxation.rows import RowStore
from intplan.relaxation.start import NoDualBasis, cold_start
from intplan.search.exact import ExactSystem, solve_exactly
from tests import reference
from tests.families import (
    Instance,
    assignment,
    covering,
    exact_system_of,
    product_mix,
    shift_cover,
)
from tests.generators import KINDS, random_problem
from tests.reference import reference_linprog

SEEDS = 25 * len(KINDS)


def meaning(dictionary: Dictionary) -> np.ndarray:
    """Return the table without the rooms of the cost, which has no bounds."""
    table = dictionary.table.copy()
    table[-1, -2:] = 0.0
    return table


def minimised(instance: Instance) -> np.ndarray:
    """Return the aim as a cost."""
    return -instance.aim if instance.maximize else instance.aim


def store_of(instance: Instance) -> RowStore:
    """Return the rules as a row store."""
    return RowStore(instance.rows, instance.row_least, instance.row_most)


def cold(instance: Instance, rows: RowStore | None = None) -> tuple[str, Dictionary]:
    """Solve the relaxation from nothing; the dictionary may be at any outcome."""
    rows = store_of(instance) if rows is None else rows
    dictionary = cold_start(rows, minimised(instance), instance.least, instance.most)
    assert not dictionary.dual_infeasible()
    return dictionary.reoptimise().value, dictionary


def exact_system(instance: Instance, aim: bool = True) -> ExactSystem:
    """Return an instance of integers for the exact arithmetic, with or without its aim."""
    return exact_system_of(instance, minimised(instance) * (1 if aim else 0))


def settled(instance: Instance) -> str:
    """Return what the reference says, with "infeasible or unbounded" told apart by a zero aim.

    Source: scipy.optimize.linprog.
    """
    answer = reference_linprog(instance)
    status = answer.status
    if status in (reference.INFEASIBLE, reference.UNBOUNDED, reference.OTHER):
        no_aim = Instance(**{**vars(instance), "aim": np.zeros_like(instance.aim)})
        plain = reference_linprog(no_aim)
        status = plain.status if plain.status == reference.INFEASIBLE else reference.UNBOUNDED
    return {
        reference.OPTIMAL: "optimal",
        reference.INFEASIBLE: "empty",
        reference.UNBOUNDED: "unbounded",
    }[status]


def is_ray(instance: Instance, direction: list[Fraction]) -> bool:
    """Tell exactly whether the aim improves along a direction that no limit ends."""
    slopes = [
        (row, least, most)
        for row, least, most in (
            *zip(instance.rows, instance.row_least, instance.row_most, strict=True),
            *zip(np.eye(len(direction)), instance.least, instance.most, strict=True),
        )
    ]
    for row, least, most in slopes:
        slope = sum(int(a) * d for a, d in zip(row, direction, strict=True))
        if (slope < 0 and math.isfinite(least)) or (slope > 0 and math.isfinite(most)):
            return False
    return sum(int(c) * d for c, d in zip(minimised(instance), direction, strict=True)) < 0


def contradiction(instance: Instance, dictionary: Dictionary) -> Fraction:
    """Return, exactly, the bound that a failing row's multipliers prove on zero."""
    numbers, values = dictionary.row_multipliers(dictionary.failing_row)
    total = Fraction(0)
    reduced = [Fraction(0)] * len(instance.aim)
    for number, value in zip(numbers.tolist(), values.tolist(), strict=True):
        y = Fraction(value).limit_denominator(10**6)
        if not y:
            continue
        limit = instance.row_least[number] if y > 0 else instance.row_most[number]
        total += y * Fraction(float(limit))
        for j, a in enumerate(instance.rows[number].tolist()):
            reduced[j] -= y * int(a)
    for d, low, high in zip(reduced, instance.least, instance.most, strict=True):
        if d:
            total += d * Fraction(float(low if d > 0 else high))
    return total


def points_agree(instance: Instance, dictionary: Dictionary) -> None:
    """Check that the point meets every rule and bound and has the stated cost."""
    x = dictionary.activities()
    values = instance.rows @ x
    assert (x >= instance.least - 1e-7).all() and (x <= instance.most + 1e-7).all()
    assert (values >= instance.row_least - 1e-6).all()
    assert (values <= instance.row_most + 1e-6).all()
    assert minimised(instance) @ x == pytest.approx(dictionary.value, abs=1e-6)


def test_cold_starts_agree_with_the_reference() -> None:
    """Source: scipy.optimize.linprog, over every kind of small problem."""
    outcomes: Counter[str] = Counter()
    for seed in range(SEEDS):
        instance = random_problem(seed)
        try:
            outcome, dictionary = cold(instance)
        except NoDualBasis:
            # No basis is dual feasible, so that the aim has no limit if there is a plan at all.
            outcome = settled(instance)
            assert outcome in ("empty", "unbounded"), seed
            outcomes["ray, " + outcome] += 1
            continue
        outcomes[outcome] += 1
        assert outcome == settled(instance), seed
        if outcome == "optimal":
            value = reference_linprog(instance).value
            sign = -1 if instance.maximize else 1
            assert sign * dictionary.value == pytest.approx(value, rel=1e-8, abs=1e-8), seed
            points_agree(instance, dictionary)
    assert outcomes["optimal"] > 150
    assert min(outcomes["empty"], outcomes["ray, unbounded"]) > 10, outcomes
    assert outcomes["ray, empty"] > 0


def test_a_missing_dual_basis_is_a_ray() -> None:
    """The direction, solved again in rationals, improves the aim and is never stopped."""
    rays = 0
    for seed in range(SEEDS):
        instance = random_problem(seed)
        try:
            cold(instance)
        except NoDualBasis as found:
            rays += 1
            assert minimised(instance) @ found.direction < 0
            rounded = [Fraction(v).limit_denominator(10**4) for v in found.direction.tolist()]
            assert is_ray(instance, rounded), seed
            exact = solve_exactly(exact_system(instance))
            assert exact.status == "unbounded"
            assert is_ray(instance, exact.point), seed
        else:
            assert solve_exactly(exact_system(instance)).status != "unbounded", seed
    assert rays >= 25


def test_failing_rows_contradict_themselves() -> None:
    """The multipliers of a row that stays violated add up to something above 0, exactly."""
    proven = 0
    for seed in range(SEEDS):
        instance = random_problem(seed)
        try:
            outcome, dictionary = cold(instance)
        except NoDualBasis:
            continue
        if outcome == "empty":
            proven += 1
            assert contradiction(instance, dictionary) > 0, seed
    assert proven > 40


def test_relaxations_agree_with_rationals() -> None:
    """Doubles against the exact run over the same limits: value and outcome."""
    for seed in range(0, SEEDS, 2):
        instance = random_problem(seed)
        exact = solve_exactly(exact_system(instance))
        try:
            outcome, dictionary = cold(instance)
        except NoDualBasis:
            assert exact.status == "unbounded", seed
            continue
        assert outcome == exact.status, seed
        if outcome == "optimal":
            assert dictionary.value == pytest.approx(float(exact.value), rel=1e-9, abs=1e-9)


def solved_problems() -> list[tuple[int, Instance]]:
    """Return random problems whose relaxation has an optimum."""
    found = []
    for seed in range(SEEDS):
        instance = random_problem(seed)
        try:
            if cold(instance)[0] == "optimal":
                found.append((seed, instance))
        except NoDualBasis:
            continue
    assert len(found) > 150
    return found


@pytest.fixture(scope="module")
def solved() -> list[tuple[int, Instance]]:
    return solved_problems()


def with_row(
    instance: Instance, row: np.ndarray, least: float, most: float
) -> Instance:
    """Return an instance with one rule more."""
    return Instance(
        **{
            **vars(instance),
            "rows": np.vstack((instance.rows, row)),
            "row_least": np.append(instance.row_least, least),
            "row_most": np.append(instance.row_most, most),
        }
    )


def test_added_rows_agree_with_cold_solving(solved: list[tuple[int, Instance]]) -> None:
    """Three rows of every sense, one after the other, from the basis there is."""
    pivots = Counter()
    empty = 0
    for seed, instance in solved:
        rng = np.random.default_rng([seed, 77])
        rows = store_of(instance)
        _, warm = cold(instance, rows)
        for sort in rng.permutation(4)[:3]:
            row = rng.integers(-4, 7, len(instance.aim)).astype(float)
            value = float(np.rint(row @ warm.activities())) + int(rng.integers(-2, 3))
            least = (value, -np.inf, value, value)[sort]
            most = (np.inf, value, value, value + 2)[sort]
            instance = with_row(instance, row, least, most)
            numbers = rows.append(row[None], np.array([least]), np.array([most]), np.array([0]))
            before = warm.pivots
            warm.add_rows(numbers)
            status = warm.reoptimise().value
            pivots["warm"] += warm.pivots - before
            other, fresh = cold(instance)
            pivots["cold"] += fresh.pivots
            assert status == other == settled(instance), seed
            if status == "empty":
                empty += 1
                assert contradiction(instance, warm) > 0
                break
            assert warm.value == pytest.approx(fresh.value, rel=1e-8, abs=1e-7), seed
            points_agree(instance, warm)
    assert empty > 10
    assert pivots["warm"] < 0.6 * pivots["cold"]


def test_changed_bounds_agree_with_cold_solving(solved: list[tuple[int, Instance]]) -> None:
    """Bounds tightened one by one, of basic and non-basic activities alike."""
    compared = 0
    for seed, instance in solved:
        rng = np.random.default_rng([seed, 78])
        _, warm = cold(instance)
        least, most = instance.least.copy(), instance.most.copy()
        for _ in range(4):
            j = int(rng.integers(len(least)))
            value = warm.activities()[j] + float(rng.integers(-2, 3)) / 2
            if rng.random() < 0.5:
                least[j] = max(least[j], min(math.ceil(value), most[j]))
            else:
                most[j] = min(most[j], max(math.floor(value), least[j]))
            changed = Instance(**{**vars(instance), "least": least.copy(), "most": most.copy()})
            warm.set_bound(j, least[j], most[j])
            status = warm.reoptimise().value
            other, fresh = cold(changed)
            assert status == other, seed
            if status == "empty":
                assert contradiction(changed, warm) > 0
                break
            compared += 1
            assert warm.value == pytest.approx(fresh.value, rel=1e-8, abs=1e-7), seed
            points_agree(changed, warm)
    assert compared > 300


def test_an_optimum_that_meets_an_added_row_needs_no_pivot(
    solved: list[tuple[int, Instance]],
) -> None:
    """It stays optimal with the same value (common practice, no source)."""
    for seed, instance in solved:
        rng = np.random.default_rng([seed, 79])
        rows = store_of(instance)
        _, dictionary = cold(instance, rows)
        value, pivots = dictionary.value, dictionary.pivots
        x = dictionary.activities()
        row = rng.integers(-5, 6, len(x)).astype(float)
        met = float(row @ x)
        limits = ((met - 1, np.inf), (-np.inf, met + 2), (met - 1, met + 1))[seed % 3]
        numbers = rows.append(
            row[None], np.array([limits[0]]), np.array([limits[1]]), np.array([-1])
        )
        dictionary.add_rows(numbers)
        assert dictionary.reoptimise() is Status.OPTIMAL
        assert dictionary.pivots == pivots
        assert dictionary.value == pytest.approx(value, rel=1e-12, abs=1e-12)
        assert dictionary.activities() == pytest.approx(x, abs=1e-9)


def test_an_added_row_beyond_every_bound_empties_the_problem(
    solved: list[tuple[int, Instance]],
) -> None:
    """A row violated with everything at its most helpful bound (common practice, no source)."""
    emptied = 0
    for seed, instance in solved:
        rng = np.random.default_rng([seed, 80])
        bounded = np.isfinite(instance.least) & np.isfinite(instance.most)
        row = np.where(bounded, rng.integers(-5, 6, len(bounded)), 0).astype(float)
        if not row.any():
            continue
        highest = np.where(row > 0, instance.most, instance.least)[bounded] @ row[bounded]
        emptied += 1
        rows = store_of(instance)
        _, dictionary = cold(instance, rows)
        numbers = rows.append(
            row[None], np.array([highest + 1]), np.array([np.inf]), np.array([0])
        )
        dictionary.add_rows(numbers)
        assert dictionary.reoptimise() is Status.EMPTY
        changed = with_row(instance, row, highest + 1, np.inf)
        assert contradiction(changed, dictionary) > 0
        assert settled(changed) == "empty"
    assert emptied > 60


LARGER = [product_mix(20, 40, 3, scarce=5), shift_cover(24, (5, 7, 9), 2), assignment(8, 24, 1),
          covering(50, 100, 0.1, 1)]  # fmt: skip


@pytest.mark.parametrize("instance", LARGER, ids=lambda i: i.family)
def test_larger_relaxations(instance: Instance) -> None:
    """Source: scipy.optimize.linprog; steepest edge, refactorisation and drift at size."""
    outcome, dictionary = cold(instance)
    sign = -1 if instance.maximize else 1
    assert outcome == "optimal"
    assert sign * dictionary.value == pytest.approx(reference_linprog(instance).value, rel=1e-9)
    assert dictionary.drift() < DRIFT
    points_agree(instance, dictionary)
    table, value = meaning(dictionary), dictionary.value
    pivots = dictionary.pivots
    dictionary.refactor()
    assert meaning(dictionary) == pytest.approx(table, abs=1e-7)
    assert dictionary.since_refactored == 0
    assert dictionary.reoptimise() is Status.OPTIMAL
    assert (dictionary.pivots, dictionary.value) == (pivots, pytest.approx(value, rel=1e-10))


def test_refactoring_reproduces_the_table(solved: list[tuple[int, Instance]]) -> None:
    for seed, instance in solved:
        _, dictionary = cold(instance)
        table = meaning(dictionary)
        dictionary.refactor()
        assert meaning(dictionary) == pytest.approx(table, rel=1e-8, abs=1e-8, nan_ok=True), seed


def test_drift_is_noticed_and_mended() -> None:
    """Noise in the basic values shows as a residual of the rows and goes with a refactorisation."""
    instance = LARGER[0]
    _, dictionary = cold(instance)
    clean = dictionary.drift()
    value = dictionary.value
    dictionary.table[:, -3] += 1e-4
    assert clean < DRIFT < dictionary.drift()
    dictionary.refactor()
    assert dictionary.drift() < DRIFT
    assert dictionary.value == pytest.approx(value, rel=1e-9)


def test_copies_and_kept_bases_are_independent(solved: list[tuple[int, Instance]]) -> None:
    """A copy that goes on does not touch its original; a basis alone restores the table."""
    for seed, instance in solved[::5]:
        _, dictionary = cold(instance)
        kept = meaning(dictionary)
        child = dictionary.copy()
        j = int(np.random.default_rng(seed).integers(len(instance.aim)))
        x = math.floor(child.activities()[j])
        child.set_bound(j, min(instance.least[j], x), x)
        child.reoptimise()
        assert np.array_equal(meaning(dictionary), kept)
        other = Dictionary.at_basis(
            dictionary.rows, dictionary.cost, instance.least, instance.most,
            (dictionary.basic, dictionary.nonbasic),
        )  # fmt: skip
        assert other.entries == pytest.approx(dictionary.entries, rel=1e-8, abs=1e-8)
        assert other.value == pytest.approx(dictionary.value, rel=1e-8, abs=1e-8)


def test_a_singular_basis_gives_way_to_the_slack_basis() -> None:
    rows = RowStore(np.array([[1.0, 1.0], [2.0, 2.0]]), np.zeros(2), np.full(2, 9.0))
    basis = (np.array([0, 1]), np.array([2, 3]))
    made = Dictionary.at_basis(rows, np.ones(2), np.zeros(2), np.full(2, 5.0), basis)
    assert sorted(made.basic.tolist()) == [2, 3]
    assert made.reoptimise() is Status.OPTIMAL


def test_a_run_is_stopped_from_outside() -> None:
    for instance in LARGER:
        rows = store_of(instance)
        dictionary = cold_start(rows, minimised(instance), instance.least, instance.most)
        with pytest.raises(Stopped):
            dictionary.reoptimise(stop=lambda: True)


def test_runs_stop_at_the_cutoff_and_at_the_limit() -> None:
    """A bound that passes the cut-off ends a run early and is a true bound all the same."""
    beaten = 0
    for instance in LARGER:
        _, best = cold(instance)
        rows = store_of(instance)
        dictionary = cold_start(rows, minimised(instance), instance.least, instance.most)
        assert dictionary.reoptimise(limit=1) is Status.LIMIT
        start = dictionary.value
        cutoff = start + (best.value - start) / 2
        if dictionary.reoptimise(cutoff) is Status.BEATEN:
            beaten += 1
            assert cutoff < dictionary.value <= best.value + 1e-7
            assert dictionary.pivots < best.pivots
    assert beaten == len(LARGER)


def test_dropped_rows_change_nothing(solved: list[tuple[int, Instance]]) -> None:
    """Rows whose value is basic and inside its limits leave without a trace in the point."""
    dropped = 0
    for _, instance in solved[::3]:
        _, dictionary = cold(instance)
        rows = (dictionary.basic >= dictionary.columns).nonzero()[0]
        if not len(rows):
            continue
        x, value = dictionary.activities(), dictionary.value
        dropped += len(rows)
        dictionary.drop_rows(rows)
        assert dictionary.reoptimise() is Status.OPTIMAL
        assert np.array_equal(dictionary.activities(), x)
        assert dictionary.value == value
        assert not (dictionary.basic >= dictionary.columns).any()
    assert dropped > 50
