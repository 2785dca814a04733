"""What an earlier search leaves to the search of a changed problem: rows, cuts, bounds, bases.

Nothing is taken over on trust.  Row multipliers prove some bound whatever the rows' limits are, so
those of a closed node are weighed again over the changed limits and bounds.  Cuts and tightened
bounds are taken over where everything they were derived from still holds: always, unless they lean
on the cut-off or on a rule or bound that now allows more, as a rule with new columns does; those
that do are proven again or undone.

Reference: A. M. Geoffrion, R. Nauss, Parametric and postoptimality analysis in integer linear
programming, Management Science 23:453-466, 1977.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass, replace
from fractions import Fraction
from functools import cached_property
from typing import Any, NamedTuple

import numpy as np

from intplan.relaxation.dictionary import Dictionary, Multipliers
from intplan.relaxation.rows import RowStore
from intplan.search.context import Context
from intplan.search.evidence import LEAST, MOST, Proof
from intplan.search.result import Cut, SearchResult
from intplan.search.tightening import Bounds
from intplan.sheet.problem import ExactRow, Number, Problem

FINE = 52  # bits of a cut's doubles up to which it is known in integers


class Weighed(NamedTuple):
    """The multipliers of an earlier closure by the rows of the changed problem."""

    weight: int
    multipliers: Multipliers


@dataclass(frozen=True)
class Kept:
    """An earlier search, as far as it does not depend on the change.

    Attributes
    ----------
    problem, result : what was searched and what came of it
    """

    problem: Problem
    result: SearchResult

    @cached_property
    def cut_matrix(self) -> np.ndarray:
        """The cuts' coefficients, (cuts, columns)."""
        cuts = self.result.cuts
        matrix = np.zeros((len(cuts), len(self.problem.cost)))
        for line, cut in zip(matrix, cuts, strict=True):
            line[list(cut.columns)] = cut.coefficients
        return matrix

    @cached_property
    def cut_shifts(self) -> np.ndarray:
        """The shifts that make the cuts integers, -1 where doubles are too fine, (cuts,)."""
        scaled = np.ldexp(self.cut_matrix, FINE)
        good = (scaled == np.rint(scaled)).all(axis=1) & (np.abs(scaled) < 2.0**62).all(axis=1)
        shifts = np.full(len(scaled), -1)
        for i in good.nonzero()[0].tolist():
            bits = int(np.bitwise_or.reduce(np.abs(scaled[i]).astype(np.int64)))
            shifts[i] = FINE - ((bits & -bits).bit_length() - 1) if bits else 0
        return np.maximum(shifts, -1)

    @cached_property
    def limits(self) -> np.ndarray:
        """The cuts' limits, (2, cuts)."""
        cuts = self.result.cuts
        return np.array([[c.least for c in cuts], [c.most for c in cuts]]).reshape(2, len(cuts))

    @cached_property
    def held_cuts(self) -> list[int]:
        """Numbers of the cuts that the root ended with."""
        added = self.result.tree.nodes[0]["added"] if len(self.result.tree) else ()
        return [a.index for a in added if a.kind == "cut"]

    def store(self) -> RowStore:
        """Return all rows of the earlier search, rules first, as it was posed."""
        problem = self.problem
        rows = RowStore(problem.matrix, problem.row_least, problem.row_most)
        rows.append(self.cut_matrix, self.limits[0], self.limits[1], self.cut_shifts)
        return rows


@dataclass(frozen=True)
class Places:
    """Where the rules and columns of the earlier problem are in the changed one.

    Attributes
    ----------
    rules : (rules,) the new number of each, -1 where it is gone
    columns : (columns,) the new number of each, -1 where it is gone
    aim_rule : the rule of the changed problem that holds the earlier aim where the aim is now
        another one, None where there is no such rule
    same_aim : the aim is the earlier one (beside what new columns cost)
    """

    rules: np.ndarray
    columns: np.ndarray
    aim_rule: int | None = None
    same_aim: bool = True


class Carrier:
    """Takes the parts of an earlier search over into the search of a changed problem.

    Parameters
    ----------
    kept : the earlier search
    places : how its numbers are to be read
    context : of the present search

    Attributes
    ----------
    shrunk : nothing is allowed that was not allowed before
    fresh : the columns that the earlier problem had not
    freed : some earlier rules have such columns now
    row_map : (rows,) the present number of each earlier row, -1 where it is gone
    """

    def __init__(self, kept: Kept, places: Places, context: Context) -> None:
        self.kept = kept
        self.places = places
        self.context = context
        before, now = kept.problem, context.problem
        self.rules = len(before.rows)
        cuts = len(kept.result.cuts)
        self.row_map = np.concatenate((places.rules, np.full(cuts, -1)))
        self.same_columns = bool((places.columns == np.arange(len(places.columns))).all())
        self.same_rules = bool((places.rules == np.arange(self.rules)).all())
        self.changed_rules, self.wider_rules = _compare_rules(before, now, places.rules)
        self.fresh = np.setdiff1d(np.arange(len(now.cost)), places.columns)
        others = _other_rules(before, now, places, set(self.fresh.tolist()))
        self.changed_rules |= others
        self.wider_rules |= others
        self.freed = bool(others.any())
        self.wider_bounds = _wider_bounds(before, now, places.columns)
        self.shrunk = not (self.wider_rules.any() or self.wider_bounds.any())
        self.scale = Fraction(1)
        if places.same_aim:
            self.scale = now.cost_factor / before.cost_factor
        elif places.aim_rule is not None:
            self.scale = _share(before, now, places.aim_rule)
        self.plain = self.shrunk and places.same_aim and self.scale == 1

    def rows_to_look_at(self) -> np.ndarray:
        """Return the present rules that are new, have other limits or touch other bounds."""
        before, now = self.kept.problem, self.context.problem
        there = self.places.rules[self.places.rules >= 0]
        fresh = np.ones(len(now.rows), bool)
        fresh[there] = False
        fresh[self.places.rules[self.changed_rules & (self.places.rules >= 0)]] = True
        columns = self.places.columns
        moved = (now.least[columns] != before.least) | (now.most[columns] != before.most)
        fresh |= (now.matrix[:, columns[moved]] != 0).any(axis=1)
        return fresh.nonzero()[0]

    # ------------------------------------------------------------------ multipliers

    def weigh(self, closure: dict[str, Any] | None) -> Weighed | None:
        """Return an earlier closure's multipliers by the present rows; None if it has none.

        Where the earlier aim is now a rule, a bound on it becomes a contradiction with that rule.
        A contradiction that new columns of its rules may undo becomes a bound on their cost.
        """
        if closure is None or "rows" not in closure:
            return None
        weight, rows = closure["weight"], np.asarray(closure["rows"], int)
        places = self.places
        if weight and not places.same_aim and places.aim_rule is None:
            return None
        values = closure["multipliers"]
        if closure["exact"]:
            values = np.array([float(Fraction(y)) for y in values])
        numbers = self.row_map[rows]
        there = numbers >= 0
        if not there.all():
            numbers, values = numbers[there], values[there]
        if self.freed:
            values = values * self._units[rows[there]]
        if weight and places.same_aim and self.scale != 1:
            values = values * float(self.scale)
        if weight and not places.same_aim:
            numbers = np.append(numbers, places.aim_rule)
            values = np.append(values, -float(self.scale))
            weight = 0
        if self.freed and not weight:
            return self._priced(numbers, values)
        return Weighed(weight, Multipliers(numbers, values))

    @cached_property
    def _units(self) -> np.ndarray:
        """What multipliers of earlier rows are to be multiplied by, (rows,).

        A rule with other columns may have been scaled otherwise.
        """
        units = np.ones(len(self.row_map))
        before, now = self.kept.problem.rows, self.context.problem.rows
        for i, place in enumerate(self.places.rules.tolist()):
            if place >= 0:
                units[i] = _unit(before[i]) / _unit(now[place])
        return units

    def _priced(self, numbers: np.ndarray, values: np.ndarray) -> Weighed:
        """Return the multipliers of a contradiction, which new columns may undo, at their price.

        As large as no new column is worth its cost, they bound what undoing it costs.
        """
        pull = values @ self.context.rows.matrix[numbers][:, self.fresh]
        undoing = pull > 0
        if not undoing.any():
            return Weighed(0, Multipliers(numbers, values))
        times = (self.context.problem.cost[self.fresh][undoing] / pull[undoing]).min()
        return Weighed(1, Multipliers(numbers, values * times))

    def weigh_exactly(self, closure: dict[str, Any]) -> dict[int, Fraction] | None:
        """Return an exact closure's multipliers by the present rows; None if it is not exact."""
        if not closure.get("exact") or not (closure["weight"] and self.places.same_aim):
            return None
        numbers = self.row_map[np.asarray(closure["rows"], int)].tolist()
        pairs = zip(numbers, closure["multipliers"], strict=True)
        return {i: Fraction(y) * self.scale for i, y in pairs if i >= 0}

    def renumbered(self, closure: dict[str, Any]) -> dict[str, Any]:
        """Return a closure that holds as it is, by the present row numbers."""
        if "row" in closure:
            return {**closure, "row": int(self.row_map[closure["row"]])}
        if "rows" not in closure:
            return closure
        rows = np.asarray(closure["rows"], int)
        if self.same_rules and (rows < self.rules).all():
            return closure
        return {**closure, "rows": self.row_map[rows]}

    def renumbered_step(self, step: dict[str, Any]) -> dict[str, Any]:
        """Return a step that holds as it is, by the present row numbers."""
        if step["by"] == "rule":
            row = int(self.row_map[step["row"]])
            return step if row == step["row"] else {**step, "row": row}
        closure = self.renumbered(step["closure"])
        return step if closure is step["closure"] else {**step, "closure": closure}

    def renumbered_basis(self, basis: np.ndarray) -> np.ndarray | None:
        """Return an earlier basis by present numbers, None where part of it is gone."""
        n = len(self.kept.problem.cost)
        basis = np.asarray(basis, int)
        columns = self.places.columns[basis[basis < n]]
        rows = self.row_map[basis[basis >= n] - n]
        if (columns < 0).any() or (rows < 0).any():
            return None
        present = len(self.context.problem.cost)
        return np.concatenate((columns, rows + present)).astype(np.int32)

    # ------------------------------------------------------------------ cuts

    def carry_cuts(self, bounds: Bounds) -> np.ndarray:
        """Take over the cuts whose premises hold over the root's present bounds.

        Returns
        -------
        The present numbers of those that the earlier root ended with, (k,).
        """
        context, kept = self.context, self.kept
        taken: list[int] = []
        first = context.rows.count
        for index, cut in enumerate(kept.result.cuts):
            if self.row_map[self.rules + index] >= 0:
                continue
            carried = self._carried_cut(cut, bounds)
            if carried is not None:
                self.row_map[self.rules + index] = first + len(taken)
                taken.append(index)
                context.record.note_cut(carried)
        if not taken:
            return np.arange(0)
        matrix = np.zeros((len(taken), len(context.problem.cost)))
        there = self.places.columns >= 0
        matrix[:, self.places.columns[there]] = kept.cut_matrix[taken][:, there]
        least, most = kept.limits[:, taken]
        context.rows.append(matrix, least, most, kept.cut_shifts[taken])
        held = self.row_map[self.rules + np.array(kept.held_cuts, int)]
        return held[held >= first]

    def carry_all_cuts(self) -> None:
        """Take over every cut of a search whose answer stays the same."""
        cuts = self.kept.result.cuts
        self.row_map[self.rules :] = self.context.record.rules + np.arange(len(cuts))
        for cut in cuts:
            used = self._rows_used(cut)
            changed = bool(self.changed_rules[used[used < self.rules]].any())
            self.context.record.note_cut(
                replace(cut, evidence=self._renumbered_cut(cut, used, changed))
            )

    @staticmethod
    def _rows_used(cut: Cut) -> np.ndarray:
        """Return the earlier rows that a cut was derived from."""
        evidence = cut.evidence
        return np.asarray([evidence["row"]] if cut.kind == "cover" else evidence["rows"], int)

    def _carried_cut(self, cut: Cut, bounds: Bounds) -> Cut | None:
        """Return a cut as it holds now, None if something that it was derived from does not."""
        used = self._rows_used(cut)
        if (self.row_map[used] < 0).any() or self.wider_rules[used[used < self.rules]].any():
            return None
        if not self.same_columns and not self._unmoved(used):
            return None
        leans = False
        if not self.plain or cut.leans:
            found = self._premises_hold(cut, used, bounds)
            if found is None:
                return None
            leans = found
        changed = bool(self.changed_rules[used[used < self.rules]].any())
        renumbered = not self.same_rules or bool((used >= self.rules).any())
        if not (changed or renumbered or leans != cut.leans):
            return cut
        return replace(cut, leans=leans, evidence=self._renumbered_cut(cut, used, changed))

    def _unmoved(self, rows: np.ndarray) -> bool:
        """Tell whether all columns in some earlier rows still have their numbers."""
        touched = self.kept_rows.matrix[rows].any(axis=0).nonzero()[0]
        return bool((self.places.columns[touched] == touched).all())

    def _renumbered_cut(self, cut: Cut, used: np.ndarray, changed: bool) -> dict[str, Any]:
        """Return a cut's evidence by the present row numbers.

        A limit that is tighter now than the one that the cut was measured from is kept beside it.
        """
        evidence = cut.evidence
        if cut.kind == "cover":
            return {**evidence, "row": int(self.row_map[evidence["row"]])}
        evidence = {**evidence, "rows": self.row_map[used]}
        if changed and "row_limits" not in evidence:
            pairs = zip(used.tolist(), evidence["row_sides"], strict=True)
            evidence["row_limits"] = [self._measured_from(i, int(side)) for i, side in pairs]
        return evidence

    def _measured_from(self, row: int, side: int) -> str:
        """Write the limit of an earlier row that a cut was measured from, in the store's scale."""
        if row >= self.rules:
            cut = self.kept.result.cuts[row - self.rules]
            return str(Fraction(cut.least if side >= 0 else cut.most))
        rule, rounded = self.kept.problem.rows[row], self._rounded_limits.get(row)
        low, high = (rule.least, rule.most) if rounded is None else rounded
        limit = low if side >= 0 else high
        return str(Fraction(0 if limit is None else limit) / (1 << rule.shift))

    @cached_property
    def _rounded_limits(self) -> dict[int, tuple[Number | None, Number | None]]:
        """Limits of earlier rules over whole activities as their root rounded them."""
        evidence = self.kept.result.tree.nodes[0]["evidence"] or {"steps": ()}
        return {
            step["row"]: tuple(limit for _, _, limit in step["changes"])
            for step in evidence["steps"]
            if step["by"] == "whole" and "row" in step
        }

    def _premises_hold(self, cut: Cut, used: np.ndarray, bounds: Bounds) -> bool | None:
        """Tell whether a cut leans on the cut-off now, None where a premise does not hold."""
        columns = self.places.columns
        leans = bool(
            (used >= self.rules).any()
            and self.context.record.leaning_rows[
                self.row_map[used[used >= self.rules]] - self.context.record.rules
            ].any()
        )
        evidence = cut.evidence
        for numbers, values in (("bounds", "values"), ("box", "box_values")):
            found = self._hold(
                np.asarray(evidence[numbers], int), np.asarray(evidence[values], float), bounds
            )
            if found is None:
                return None
            leans |= found
        if self.shrunk:
            return leans
        touched = self.kept_rows.matrix[used].any(axis=0)
        wider = touched & self.wider_bounds
        for side in (LEAST, MOST):
            own = self.kept.problem.most if side else self.kept.problem.least
            places = wider[side].nonzero()[0]
            if (columns[places] < 0).any():
                return None
            if self._as_written(columns[places], side, bounds):
                return None
            found = self._hold(2 * places + side, own[places], bounds)
            if found is None:
                return None
            leans |= found
        return leans

    def _as_written(self, columns: np.ndarray, side: int, bounds: Bounds) -> bool:
        """Tell whether some bounds are the sheet's own: doubles may not show them to be wider."""
        now = self.context.problem
        written, present = (now.most, bounds.most) if side else (now.least, bounds.least)
        return bool((written[columns] == present[columns]).any())

    def _hold(self, numbers: np.ndarray, values: np.ndarray, bounds: Bounds) -> bool | None:
        """Tell whether bounds lean on the cut-off, None where the present ones are wider."""
        columns = self.places.columns[numbers >> 1]
        if (columns < 0).any():
            return None
        sides = numbers & 1
        present = np.where(sides, bounds.most[columns], bounds.least[columns])
        if not np.where(sides, present <= values, present >= values).all():
            return None
        return bool(bounds.leans[sides, columns].any())

    @cached_property
    def kept_rows(self) -> RowStore:
        """All rows of the earlier search."""
        return self.kept.store()

    # ------------------------------------------------------------------ tightened bounds

    def carry_steps(self, steps: Sequence[dict[str, Any]], bounds: Bounds) -> list[dict[str, Any]]:
        """Tighten a node's bounds by those of its earlier steps that hold; return their records.

        Steps by reduced costs are left out: the node's own closure gives them anew.
        """
        carried: list[dict[str, Any]] = []
        for step in steps:
            if step["by"] not in ("rule", "trial"):
                continue
            if self.plain and not step["leans"]:
                self._apply(step, bounds, carried)
            elif step["by"] == "rule":
                self._derive_again(step, bounds, carried)
            else:
                self._refute_again(step, bounds, carried)
        return carried

    def _apply(
        self, step: dict[str, Any], bounds: Bounds, carried: list[dict[str, Any]]
    ) -> None:
        """Apply a step that holds as it is."""
        for column, side, value in step["changes"]:
            present = bounds.most.item(column) if side else bounds.least.item(column)
            if value < present if side else value > present:
                bounds.set(column, side, value, False)
        carried.append(self.renumbered_step(step))

    def _derive_again(
        self, step: dict[str, Any], bounds: Bounds, carried: list[dict[str, Any]]
    ) -> None:
        """Tighten by the same limit of the same rule, as far as it goes now."""
        row = int(self.row_map[step["row"]])
        columns = [int(self.places.columns[j]) for j, _, _ in step["changes"]]
        if row >= 0 and min(columns) >= 0:
            self.context.propagator.again(row, step["limit"], columns, bounds, carried)

    def _refute_again(
        self, step: dict[str, Any], bounds: Bounds, carried: list[dict[str, Any]]
    ) -> None:
        """Close the other side of a step by the same multipliers, if they still do."""
        weighed = self.weigh(step["closure"])
        if weighed is None:
            return
        for column, side, value in step["changes"]:
            array = bounds.least if side else bounds.most
            present = bounds.most.item(column) if side else bounds.least.item(column)
            if value >= present if side else value <= present:
                continue
            kept = array.item(column)
            array[column] = value + 1 if side else value - 1
            proof = self.prove(weighed, bounds)
            closure = None
            if self.context.best.beats(proof.bound) if weighed.weight else proof.bound > 0:
                closure = self.context.record.closure(proof, bounds)
            array[column] = kept
            if closure is not None:
                leans = closure["leans"] or weighed.weight == 1
                bounds.set(column, side, value, leans)
                carried.append(
                    {"by": "trial", "changes": [(column, side, value)], "closure": closure,
                     "leans": leans}
                )  # fmt: skip

    def prove(self, weighed: Weighed, bounds: Bounds) -> Proof:
        """Return what multipliers prove over bounds."""
        return self.context.prover.prove(*weighed, bounds.least, bounds.most)

    # ------------------------------------------------------------------ bases

    def basis(
        self, earlier: np.ndarray | None, bounds: Bounds, held: np.ndarray
    ) -> tuple[np.ndarray, np.ndarray] | None:
        """Return an earlier basis in present numbers, new rows basic and new columns not.

        Parameters
        ----------
        earlier : as `Dictionary.basis` gives it; None where none was kept
        bounds : of the node
        held : numbers of the rows to hold

        Returns
        -------
        Basic and non-basic variables, or None where nothing can be made of it.
        """
        if earlier is None:
            return None
        earlier = np.asarray(earlier, int)
        n, now = len(self.kept.problem.cost), len(self.context.problem.cost)
        rows = self.row_map[earlier[earlier >= n] - n]
        columns = self.places.columns[earlier[earlier < n]]
        if (columns < 0).any() or self._gone(earlier[earlier >= n] - n).any():
            earlier = self._freed_basis(earlier, bounds, n)
            rows = self.row_map[earlier[earlier >= n] - n]
            columns = self.places.columns[earlier[earlier < n]]
            if (rows < 0).any() or (columns < 0).any():
                return None
        if not np.isin(rows, held).all():
            return None
        inside = np.zeros(now + self.context.rows.count, bool)
        inside[columns] = True
        inside[now + held] = True
        inside[now + rows] = False
        outside = np.zeros_like(inside)
        outside[:now] = True
        outside[columns] = False
        outside[now + rows] = True
        return inside.nonzero()[0], outside.nonzero()[0]

    def _gone(self, earlier: np.ndarray) -> np.ndarray:
        """Tell which earlier rows are gone, or have no limit left, (k,)."""
        numbers, rows = self.row_map[earlier], self.context.rows
        if not rows.count:
            return numbers < 0
        return (numbers < 0) | (np.isinf(rows.least[numbers]) & np.isinf(rows.most[numbers]))

    def _freed_basis(self, earlier: np.ndarray, bounds: Bounds, n: int) -> np.ndarray:
        """Let the row values that are gone enter the basis; return what comes of it."""
        before = self.kept.problem
        least, most = before.least.copy(), before.most.copy()
        there = (self.places.columns >= 0).nonzero()[0]
        least[there] = bounds.least[self.places.columns[there]]
        most[there] = bounds.most[self.places.columns[there]]
        rows = self.kept_rows
        nonbasic_rows = earlier[earlier >= n] - n
        held = np.union1d(np.arange(self.rules), nonbasic_rows)
        inside = np.setdiff1d(np.concatenate((earlier[earlier < n], held + n)), nonbasic_rows + n)
        outside = np.concatenate((np.setdiff1d(np.arange(n), earlier), nonbasic_rows + n))
        dictionary = Dictionary.at_basis(rows, before.cost, least, most, (inside, outside))
        gone = self._gone(nonbasic_rows)
        for row in nonbasic_rows[gone].tolist():
            if dictionary.place[row + n] < 0 and len(dictionary.basic):
                dictionary.enter(row + n)
        return dictionary.basis()


def _compare_rules(
    before: Problem, now: Problem, places: np.ndarray
) -> tuple[np.ndarray, np.ndarray]:
    """Tell which earlier rules have other limits now, and which of them allow more, (rules,)."""
    changed = places < 0
    wider = changed.copy()
    for i, place in enumerate(places.tolist()):
        if place < 0:
            continue
        old, new = before.rows[i], now.rows[place]
        if (old.least, old.most) != (new.least, new.most):
            changed[i] = True
            wider[i] = _lower(new.least, old.least) or _higher(new.most, old.most)
    return changed, wider


def _other_rules(
    before: Problem, now: Problem, places: Places, fresh: set[int]
) -> np.ndarray:
    """Tell which earlier rules have new columns now, or are scaled otherwise, (rules,).

    What makes up for the others in a rule lets them be what they could not be before.
    """
    others = np.zeros(len(places.rules), bool)
    for i, place in enumerate(places.rules.tolist()):
        if place < 0 or before.rows[i] is now.rows[place]:
            continue
        row = now.rows[place]
        others[i] = row.factor != before.rows[i].factor or not fresh.isdisjoint(row.columns)
    return others


def _wider_bounds(before: Problem, now: Problem, places: np.ndarray) -> np.ndarray:
    """Tell which bounds of earlier columns allow more now, (2, columns)."""
    wider = np.zeros((2, len(places)), bool)
    for j, place in enumerate(places.tolist()):
        if place >= 0:
            wider[LEAST, j] = _lower(now.exact_least[place], before.exact_least[j])
            wider[MOST, j] = _higher(now.exact_most[place], before.exact_most[j])
    return wider


def _unit(row: ExactRow) -> float:
    """Return by what a written rule is multiplied in the row store."""
    return float(Fraction(row.factor) / (1 << row.shift))


def _lower(new: Number | None, old: Number | None) -> bool:
    return old is not None and (new is None or new < old)


def _higher(new: Number | None, old: Number | None) -> bool:
    return old is not None and (new is None or new > old)


def _share(before: Problem, now: Problem, rule: int) -> Fraction:
    """Return by what a rule that holds the earlier aim is multiplied to give its cost."""
    row = now.rows[rule]
    first = dict(zip(row.columns, row.coefficients, strict=True))
    column, cost = before.exact_cost[0]
    return Fraction(cost, 1 << before.cost_shift) / Fraction(first[column], 1 << row.shift)
