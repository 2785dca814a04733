"""An independent check of a search's answer: the whole tree, in exact arithmetic.

`verify` walks the tree from its root, rebuilds the bounds of every node from the sheet's own, and
proves each branching, tightening, cut and closure again from the multipliers that were kept.  It
shares nothing with the search but the data it reads: the integers of the `Problem`, the plan, the
tree and the cuts of the `SearchResult`.  Where a proof cannot be rebuilt it raises `Refused`.

The claim that is checked is the strongest one the answer makes: no plan costs less than `claim`,
which is the cost of the stated bound, or plus infinity where no plan is said to exist.
"""

from __future__ import annotations

import math
from collections.abc import Callable, Iterable, Iterator, Sequence
from dataclasses import dataclass, field, replace
from fractions import Fraction
from typing import Any, NamedTuple

from scipy.optimize import linprog

from intplan.sheet.problem import Number, Problem
from tests.reference import silenced

LEAST, MOST = 0, 1
Coefficients = dict[int, Number]
Inequality = tuple[Coefficients, Number]  # coefficients @ x >= the number


class Refused(Exception):
    """The evidence does not prove what it was kept for."""


@dataclass
class Summary:
    """How much was proven again: counts by kind."""

    nodes: int = 0
    branchings: int = 0
    closures: int = 0
    inherited: int = 0  # closures that needed an ancestor's multipliers
    unlisted: int = 0  # closures that used a tightened bound they do not list
    steps: dict[str, int] = field(default_factory=dict)
    cuts: dict[str, int] = field(default_factory=dict)


@dataclass(frozen=True)
class Row:
    """``least <= sum(integers * x[columns]) * 2**-shift <= most``, in the scale of the search."""

    columns: tuple[int, ...]
    integers: tuple[int, ...]
    shift: int
    least: Number | None
    most: Number | None


class Box:
    """Bounds of every column: ``sides[LEAST][j]`` and ``sides[MOST][j]``, None for none."""

    def __init__(self, least: Iterable[Number | None], most: Iterable[Number | None]) -> None:
        self.sides = [list(least), list(most)]

    def copy(self) -> Box:
        """Return an independent copy."""
        return Box(*self.sides)

    def tighten(self, column: int, side: int, value: Number) -> None:
        """Take over a bound where it is tighter than the present one."""
        present = self.sides[side][column]
        if present is None or (value < present if side else value > present):
            self.sides[side][column] = value

    def implies(self, column: int, side: int, value: Number) -> bool:
        """Tell whether every point of the box meets a bound."""
        present = self.sides[side][column]
        return present is not None and (present <= value if side else present >= value)

    def crossed(self, column: int, whole: bool) -> bool:
        """Tell whether a column has no value left."""
        low, high = self.sides[LEAST][column], self.sides[MOST][column]
        if low is None or high is None:
            return False
        return math.ceil(low) > math.floor(high) if whole else low > high

    def least_value(self, coefficients: Coefficients) -> Number | None:
        """Return the least value of ``coefficients @ x`` over the box, None for no limit."""
        total: Number = 0
        for column, coefficient in coefficients.items():
            if coefficient:
                end = self.sides[LEAST if coefficient > 0 else MOST][column]
                if end is None:
                    return None
                total += coefficient * end
        return total


def exact(value: Any) -> Number | None:
    """Return a number as it is meant, exactly; None for an infinite or missing one."""
    if value is None or isinstance(value, int | Fraction):
        return value
    if isinstance(value, str):
        return Fraction(value)
    value = float(value)
    if math.isinf(value):
        return None
    return int(value) if value.is_integer() else Fraction(value)


def rational(value: Any, what: str) -> Number:
    """Return a number exactly; it must be finite."""
    number = exact(value)
    require(number is not None, f"{what} is not finite")
    return number


def require(condition: bool, complaint: str) -> None:
    """Raise `Refused` unless a condition holds."""
    if not condition:
        raise Refused(complaint)


# ---------------------------------------------------------------------- plans and rays


def check_plan(problem: Problem, plan: Sequence[Number]) -> Fraction:
    """Check a plan against every bound and rule; return its aim, computed from the integers."""
    require(len(plan) == len(problem.whole), "the plan has an amount for every column")
    for j, amount in enumerate(plan):
        require(isinstance(amount, int | Fraction), f"amount {j} is exact")
        low, high = problem.exact_least[j], problem.exact_most[j]
        require(low is None or amount >= low, f"amount {j} lies below its least bound")
        require(high is None or amount <= high, f"amount {j} lies above its most bound")
        if problem.whole[j]:
            require(Fraction(amount).denominator == 1, f"amount {j} is not whole")
    for i, row in enumerate(problem.rows):
        value = sum(c * plan[j] for j, c in zip(row.columns, row.coefficients, strict=True))
        require(row.least is None or value >= row.least, f"rule {i} lies below its limit")
        require(row.most is None or value <= row.most, f"rule {i} lies above its limit")
    return aim_of(problem, cost_of(problem, plan))


def cost_of(problem: Problem, plan: Sequence[Number]) -> Fraction:
    """Return the cost of a plan in the scale of the search."""
    return Fraction(sum(c * plan[j] for j, c in problem.exact_cost), 1 << problem.cost_shift)


def aim_of(problem: Problem, cost: Fraction) -> Fraction:
    """Convert a cost to the units of the aim."""
    return cost / Fraction(problem.cost_factor) + problem.aim_constant


def check_ray(problem: Problem, ray: Sequence[Number]) -> None:
    """Check that the aim improves along a direction which no bound or rule ever ends."""
    require(cost_of(problem, ray) < 0, "the aim does not improve along the ray")
    limits = [(problem.exact_least[j], problem.exact_most[j], d) for j, d in enumerate(ray)]
    for row in problem.rows:
        slope = sum(c * ray[j] for j, c in zip(row.columns, row.coefficients, strict=True))
        limits.append((row.least, row.most, slope))
    for low, high, slope in limits:
        require(slope >= 0 or low is None, "the ray passes a least limit")
        require(slope <= 0 or high is None, "the ray passes a most limit")


# ---------------------------------------------------------------------- the tree


class Checker:
    """One tree being proven again.

    Parameters
    ----------
    problem : the integers; its `exact_cost` is what the tree's bounds speak of
    tree, cuts : the evidence
    claim : no plan costs less, None for plus infinity
    aimless : the tree looks for any plan, so that its bounds prove nothing and claim nothing
    """

    def __init__(
        self, problem: Problem, tree: Any, cuts: Sequence[Any], claim: Any, aimless: bool = False
    ) -> None:
        self.problem = problem
        self.aimless = aimless
        self.tree = tree
        self.cuts = cuts
        self.claim = claim
        self.whole = [bool(w) for w in problem.whole]
        self.own = Box(problem.exact_least, problem.exact_most)
        self.rules = [
            Row(
                row.columns, row.coefficients, row.shift,
                None if row.least is None else Fraction(row.least) / (1 << row.shift),
                None if row.most is None else Fraction(row.most) / (1 << row.shift),
            )
            for row in problem.rows
        ]  # fmt: skip
        self.cut_rows = [cut_row(cut) for cut in cuts]
        stepped = all(self.whole[j] for j, _ in problem.exact_cost)
        grain = math.gcd(*(c for _, c in problem.exact_cost)) or 1
        self.step = Fraction(grain, 1 << problem.cost_shift) if stepped else None
        self.good: set[int] = set()  # cuts proven
        self.summary = Summary()
        self._aggregates: dict[int, tuple[Any, Any]] = {}

    # -------------------------------------------------------------- multipliers

    def row(self, number: int) -> Row:
        """Return a row by its number: the rules, then the cuts."""
        rules = len(self.rules)
        return self.rules[number] if number < rules else self.cut_rows[number - rules]

    def aggregate(self, closure: dict[str, Any]) -> tuple[Coefficients, int, Number] | None:
        """Return what is left of the cost beside the rows, and the rows' least value.

        ``scale * weight * cost @ x = rows + coefficients @ x`` with ``rows >= constant``; None
        where a multiplier leans on a limit that does not exist.
        """
        kept = self._aggregates.get(id(closure))
        if kept is not None and kept[0] is closure:
            return kept[1]
        pairs = [
            (self.row(int(i)), Fraction(rational(y, "multiplier")))
            for i, y in zip(closure["rows"], closure["multipliers"], strict=True)
        ]
        made = self._aggregate(int(closure["weight"]), [(r, y) for r, y in pairs if y])
        self._aggregates[id(closure)] = (closure, made)
        return made

    def _aggregate(
        self, weight: int, pairs: list[tuple[Row, Fraction]]
    ) -> tuple[Coefficients, int, Number] | None:
        require(weight in (0, 1), "a weight is 0 or 1")
        denominator = math.lcm(*(y.denominator for _, y in pairs))
        shift = max([self.problem.cost_shift, *(row.shift for row, _ in pairs)])
        lift = denominator << (shift - self.problem.cost_shift)
        coefficients: Coefficients = {}
        if weight:
            coefficients = {j: c * lift for j, c in self.problem.exact_cost}
        constant: Number = 0
        for row, y in pairs:
            limit = row.least if y > 0 else row.most
            if limit is None:
                return None
            times = int(y * denominator)
            constant += (times << shift) * limit
            for j, a in zip(row.columns, row.integers, strict=True):
                coefficients[j] = coefficients.get(j, 0) - (times << (shift - row.shift)) * a
        return coefficients, denominator << shift, constant

    def proven(self, closure: dict[str, Any], box: Box) -> Fraction | None:
        """Return the bound that multipliers prove over a box, None for minus infinity."""
        aggregate = self.aggregate(closure)
        if aggregate is None:
            return None
        coefficients, scale, constant = aggregate
        least = box.least_value(coefficients)
        return None if least is None else Fraction(constant + least) / scale

    def premises(self, closure: dict[str, Any], box: Box, free: Box) -> Box:
        """Return the bounds a closure says it used: its own list, and the sheet's for the rest.

        A closure that does not lean on the cut-off may use only what holds without it.
        """
        source = box if closure["leans"] else free
        used = self.own.copy()
        for number in closure["bounds"]:
            column, side = divmod(int(number), 2)
            value = source.sides[side][column]
            require(value is not None, f"a closure used a bound that {column} does not have")
            used.tighten(column, side, value)
        return used

    def rounded_up(self, cost: Fraction) -> Fraction:
        """Return the least cost a plan can have that is at least `cost`."""
        return cost if self.step is None else math.ceil(cost / self.step) * self.step

    def meets_claim(self, cost: Fraction | None) -> bool:
        """Tell whether a proven bound is as good as the answer says."""
        if self.claim is None or cost is None:
            return False
        return self.rounded_up(cost) >= self.claim

    # -------------------------------------------------------------- closures

    def check_closure(self, closure: dict[str, Any], box: Box, free: Box) -> Fraction | None:
        """Check that multipliers prove the bound that was stated; return the exact bound."""
        self.use_cuts(closure, box, free)
        self.summary.closures += 1
        stated = rational(closure["bound"], "the stated bound")
        bound = self.proven(closure, self.premises(closure, box, free))
        if bound is None or bound < stated:
            self.summary.unlisted += 1
            bound = self.proven(closure, box)
        require(bound is not None, "multipliers with a bound that does not exist")
        require(bound >= stated, f"multipliers prove {float(bound)}, stated is {float(stated)}")
        if closure["weight"] == 0:
            require(bound > 0, "a contradiction is positive")
        return bound

    def check_end(self, node: dict[str, Any], box: Box, free: Box, above: list[Any]) -> None:
        """Check how a node ended: its stated bound, and that it may be closed."""
        closure, outcome = node["evidence"]["closure"], node["outcome"]
        if "column" in closure or "row" in closure:
            require(outcome == "empty", "a missing value makes a node empty")
            return self.check_missing(closure, box, free)
        if self.aimless and closure["weight"] == 1:
            ended = outcome == "split" or (self.claim_is_nothing and outcome != "empty")
            return require(ended, "a bound closes nothing without an aim")
        bound = self.check_closure(closure, box, free)
        if closure["weight"] == 0:
            return require(outcome == "empty", "a contradiction makes a node empty")
        require(outcome != "empty", "an empty node needs a contradiction")
        stated = node["bound"]
        if bound < stated:
            self.summary.inherited += 1
            bound = max([bound, *self.all_proven(above, box)])
        require(bound >= stated, f"a node's bound is stated as {stated}, proven is {float(bound)}")
        if outcome in ("beaten", "plan"):
            require(self.meets_claim(bound), f"a {outcome} node of bound {float(bound)} is open")
        return None

    def all_proven(self, closures: list[Any], box: Box) -> list[Fraction]:
        """Return the bounds that ancestors' multipliers prove over a node's box."""
        bounds = [self.proven(c, box) for c in closures if c.get("weight") == 1]
        return [bound for bound in bounds if bound is not None]

    def check_missing(self, closure: dict[str, Any], box: Box, free: Box) -> None:
        """Check that a column has no value left, or that a rule cannot hold."""
        if "column" in closure:
            column = closure["column"]
            source = box if closure["leans"] else free
            return require(source.crossed(column, self.whole[column]), f"{column} has values left")
        row = self.row(closure["row"])
        crossed = row.least is not None and row.most is not None and row.least > row.most
        nothing = not row.columns and ((row.least or 0) > 0 or (row.most or 0) < 0)
        return require(crossed or nothing, f"rule {closure['row']} can hold")

    # -------------------------------------------------------------- tightenings

    def check_step(self, step: dict[str, Any], box: Box, free: Box) -> None:
        """Prove a tightening, then apply it (to `free` only where it needs no cut-off)."""
        checks: dict[str, Callable[..., None]] = {
            "rule": self.check_rule_step,
            "cost": self.check_cost_step,
            "trial": self.check_trial_step,
            "whole": self.check_whole_step,
        }
        kind = step["by"]
        require(kind in checks, f"a step by {kind!r} is unknown")
        self.summary.steps[kind] = self.summary.steps.get(kind, 0) + 1
        if kind == "whole" and "row" in step:
            return self.round_rule(step)
        for column, side, value in step["changes"]:
            value = rational(value, "a tightened bound")
            checks[kind](step, column, side, value, box, free)
            box.tighten(column, side, value)
            if not step["leans"]:
                free.tighten(column, side, value)
        return None

    def beyond(self, column: int, side: int, value: Number) -> Number:
        """Return the nearest value on the other side of a bound (divisible: the bound itself)."""
        if not self.whole[column]:
            return value
        require(Fraction(value).denominator == 1, "a tightened whole activity has a whole bound")
        return value + 1 if side else value - 1

    def other_side(self, box: Box, column: int, side: int, value: Number) -> Box:
        """Return the part of a box that a tightening takes away."""
        other = box.copy()
        other.sides[1 - side][column] = self.beyond(column, side, value)
        return other

    def check_rule_step(
        self, step: dict[str, Any], column: int, side: int, value: Number, box: Box, free: Box
    ) -> None:
        """One limit of one rule cannot be met on the other side, whatever the rest does."""
        row = self.rules[step["row"]]
        sign = -1 if step["limit"] == LEAST else 1
        limit = row.least if step["limit"] == LEAST else row.most
        require(limit is not None, "a tightening used a limit that is not there")
        other = self.other_side(box if step["leans"] else free, column, side, value)
        terms = {j: sign * a for j, a in zip(row.columns, row.integers, strict=True)}
        least = other.least_value(terms)
        require(least is not None, f"rule {step['row']} bounds nothing for {column}")
        excess = least - sign * limit * (1 << row.shift)
        require(
            excess > 0 or (excess == 0 and not self.whole[column] and column in row.columns),
            f"rule {step['row']} does not tighten {column} to {value}",
        )

    def check_cost_step(
        self, step: dict[str, Any], column: int, side: int, value: Number, box: Box, free: Box
    ) -> None:
        """On the other side the cost passes the target, and nothing better than the end is lost."""
        require(step["leans"], "a tightening by cost leans on the cut-off")
        closure = step["closure"]
        require(closure["weight"] == 1, "a tightening by cost weighs the cost")
        self.check_closure(closure, box, free)
        used = self.premises(closure, box, free)
        bound = self.proven(closure, self.other_side(used, column, side, value))
        if bound is None or not self.meets_claim(bound):
            self.summary.unlisted += 1
            bound = self.proven(closure, self.other_side(box, column, side, value))
        require(bound is not None, "the cost has no bound on the other side")
        require(bound > rational(step["target"], "target"), f"{column} may pass {value}")
        require(self.meets_claim(bound), f"a better plan may have {column} past {value}")

    def check_trial_step(
        self, step: dict[str, Any], column: int, side: int, value: Number, box: Box, free: Box
    ) -> None:
        """The other side of a branching is closed by its own multipliers."""
        closure = step["closure"]
        require(step["leans"] or not closure["leans"], "a step leans if its closure does")
        other = self.other_side(box, column, side, value)
        bound = self.check_closure(closure, other, self.other_side(free, column, side, value))
        if closure["weight"] == 1:
            require(step["leans"], "a trial beaten by its cost leans on the cut-off")
            require(self.meets_claim(bound), f"a better plan may have {column} past {value}")

    def check_whole_step(
        self, step: dict[str, Any], column: int, side: int, value: Number, box: Box, free: Box
    ) -> None:
        """A whole activity's bound is rounded inward."""
        present = box.sides[side][column]
        require(self.whole[column] and present is not None, f"nothing to round at {column}")
        require(value == (math.floor(present) if side else math.ceil(present)), "wrong rounding")

    def round_rule(self, step: dict[str, Any]) -> None:
        """A rule over whole activities has whole values: its limits are rounded inward."""
        number = step["row"]
        row = self.rules[number]
        require(all(self.whole[j] for j in row.columns), f"rule {number} has divisible activities")
        unit = Fraction(1, 1 << row.shift)
        limits = [row.least, row.most]
        for index, side, value in step["changes"]:
            require(index == number, "a rule's limits are rounded one rule at a time")
            present = limits[side]
            require((present is None) == (value is None), "a limit appeared or went away")
            if present is not None:
                inward = math.floor(present / unit) if side else math.ceil(present / unit)
                require(value == inward, f"a limit of rule {number} is wrongly rounded")
                limits[side] = value * unit
        self.rules[number] = replace(row, least=limits[LEAST], most=limits[MOST])
        self._aggregates.clear()

    # -------------------------------------------------------------- cuts

    def use_cuts(self, closure: dict[str, Any], box: Box, free: Box) -> None:
        """Prove the cuts among a closure's rows before they are used for the first time."""
        for number in closure["rows"]:
            if number >= len(self.rules):
                cut = int(number) - len(self.rules)
                require(
                    closure["leans"] or not self.cuts[cut].leans,
                    f"a closure leans on the cut-off through cut {cut}",
                )
                self.prove_cut(cut, box, free)

    def prove_cut(self, number: int, box: Box, free: Box) -> None:
        """Prove a cut over the root's bounds as they are when it is first used.

        A cut that does not lean on the cut-off must hold over the wider bounds without it.
        """
        if number in self.good:
            return
        cut = self.cuts[number]
        require(cut.kind in CUT_CHECKS, f"cut {number} is of an unknown kind")
        self.prove_earlier_cuts(number, box, free)
        where = box if cut.leans else free
        listed = self.own.copy()
        for column, side, value in cut_premises(cut):
            require(
                where.implies(column, side, value),
                f"cut {number} used a bound of {column} that was not there",
            )
            listed.tighten(column, side, value)
        try:
            CUT_CHECKS[cut.kind](self, number, listed)
        except Refused:
            self.summary.unlisted += 1
            CUT_CHECKS[cut.kind](self, number, where)
        self.good.add(number)
        self.summary.cuts[cut.kind] = self.summary.cuts.get(cut.kind, 0) + 1

    def prove_earlier_cuts(self, number: int, box: Box, free: Box) -> None:
        """Prove the cuts among the rows that a cut was derived from."""
        for index in self.cuts[number].evidence.get("rows", ()):
            if index >= len(self.rules):
                earlier = int(index) - len(self.rules)
                require(earlier < number, "a cut uses earlier cuts only")
                require(
                    self.cuts[number].leans or not self.cuts[earlier].leans,
                    f"cut {number} leans on the cut-off through cut {earlier}",
                )
                self.prove_cut(earlier, box, free)

    # -------------------------------------------------------------- the walk

    def walk(self) -> Summary:
        """Prove every node, parents first."""
        require(0 in self.tree and self.tree.in_degree(0) == 0, "the tree has a root 0")
        waiting = [(0, self.own.copy(), self.own.copy(), [])]
        while waiting:
            number, box, free, above = waiting.pop()
            try:
                children = self.check_node(number, box, free, above)
            except Refused as refusal:
                raise Refused(f"node {number}: {refusal}") from None
            waiting.extend(children)
        require(self.summary.nodes == len(self.tree), "a node hangs off the tree")
        return self.summary

    def check_node(
        self, number: int, box: Box, free: Box, above: list[Any]
    ) -> list[tuple[int, Box, Box, list[Any]]]:
        """Prove a node's steps and its end; return its children with their bounds."""
        self.summary.nodes += 1
        node = self.tree.nodes[number]
        evidence = node["evidence"]
        require(node["depth"] == len(above), "the depth is not that of the tree")
        for step in evidence["steps"] if evidence else []:
            self.check_step(step, box, free)
        if number == 0:
            for cut in range(len(self.cuts)):
                self.prove_cut(cut, box, free)
        children = sorted(self.tree.successors(number))
        if node["outcome"] == "waiting":
            require(not children, "a waiting node has no children")
            if evidence:
                self.check_closure(evidence["closure"], box, free)
                above = [*above, evidence["closure"]]
            require(
                self.claim_is_nothing or any(map(self.meets_claim, self.all_proven(above, box))),
                "a waiting node may hold a better plan than the answer says",
            )
            return []
        require(evidence is not None, "a solved node has evidence")
        self.check_end(node, box, free, above)
        if node["outcome"] != "split":
            require(not children, "a closed node has no children")
            return []
        return self.branch(children, box, free, [*above, evidence["closure"]])

    @property
    def claim_is_nothing(self) -> bool:
        """Whether the answer claims no bound at all."""
        return self.claim == -math.inf

    def branch(
        self, children: list[int], box: Box, free: Box, above: list[Any]
    ) -> list[tuple[int, Box, Box, list[Any]]]:
        """Check that two children leave no whole value of one activity out."""
        require(len(children) == 2, "a split node has two children")
        self.summary.branchings += 1
        rows = [self.tree.nodes[child]["added"] for child in children]
        require(all(len(added) == 1 for added in rows), "a child adds one bound to its parent")
        (down,), (up,) = sorted(rows, key=lambda added: added[0].kind, reverse=True)
        require((down.kind, up.kind) == ("most", "least"), "one child lies below, one above")
        require(down.index == up.index and self.whole[down.index], "they split a whole activity")
        require(
            rational(up.value, "branch") == rational(down.value, "branch") + 1
            and float(down.value).is_integer(),
            "nothing lies between them",
        )
        made = []
        for child, (added,) in zip(children, rows, strict=True):
            boxes = box.copy(), free.copy()
            for copy in boxes:
                side = MOST if added.kind == "most" else LEAST
                copy.tighten(added.index, side, rational(added.value, "branch"))
            made.append((child, *boxes, above))
        return made


# ---------------------------------------------------------------------- cuts


def cut_row(cut: Any) -> Row:
    """Return a cut with its doubles taken as exact."""
    ratios = [float(c).as_integer_ratio() for c in cut.coefficients]
    shift = max((q for _, q in ratios), default=1).bit_length() - 1
    integers = tuple((p << shift) // q for p, q in ratios)
    return Row(tuple(cut.columns), integers, shift, exact(cut.least), exact(cut.most))


def cut_premises(cut: Any) -> list[tuple[int, int, Number]]:
    """Return the bounds a cut was derived under: column, side, value."""
    return measured_from(cut) + listed_bounds(cut.evidence["box"], cut.evidence["box_values"])


def measured_from(cut: Any) -> list[tuple[int, int, Number]]:
    """Return the bounds a cut measures distances from: column, side, value."""
    return listed_bounds(cut.evidence["bounds"], cut.evidence["values"])


def listed_bounds(numbers: Any, values: Any) -> list[tuple[int, int, Number]]:
    """Return bounds by their numbers as column, side, value."""
    return [
        (int(number) >> 1, int(number) & 1, rational(value, "a cut's bound"))
        for number, value in zip(numbers, values, strict=True)
    ]


def coefficients_of(row: Row) -> Coefficients:
    """Return the coefficients of a row by column."""
    return {
        j: Fraction(a, 1 << row.shift) for j, a in zip(row.columns, row.integers, strict=True)
    }


def implied(stored: Row, exact_cut: Inequality, rows: Sequence[Inequality], box: Box) -> bool:
    """Tell whether an exact cut and the rows it is made of imply a stored row over a box.

    Multiples of them, at least 0, are subtracted from the stored row; what is left must hold over
    the box.  The rows take part because a cut in doubles is raised by small shares of them to be
    safe.
    """
    if stored.least is None or stored.most is not None:
        return False
    whole: Inequality = coefficients_of(stored), stored.least
    return any(
        spare(rest, box) >= 0 or share_of_rows(rest, rows, box)
        for multiple in likely_multiples(whole, exact_cut, rows, box)
        for rest in (minus(whole, exact_cut, multiple),)
    )


def likely_multiples(
    stored: Inequality, exact_cut: Inequality, rows: Sequence[Inequality], box: Box
) -> Iterator[Fraction]:
    """Yield by what a cut may have been multiplied before it was stored: a power of two.

    Or any number, if it was stored exactly; then all ratios of its coefficients are the same.
    """
    pairs = [(stored[0][j], c) for j, c in exact_cut[0].items() if c and stored[0].get(j)]
    ratios = {Fraction(s / c) for s, c in pairs if s / c > 0}
    if len(ratios) == 1:
        yield from ratios
    for power in {round(math.log2(ratio)) for ratio in ratios}:
        yield Fraction(2) ** power
    guess = guessed_shares(stored, [exact_cut, *rows], box)[0]
    if guess > 0:
        yield Fraction(2) ** round(math.log2(guess))


def minus(row: Inequality, other: Inequality, times: Fraction) -> Inequality:
    """Return a row less a multiple of another."""
    (a, least), (b, other_least) = row, other
    return {j: a.get(j, 0) - times * b.get(j, 0) for j in {*a, *b}}, least - times * other_least


def spare(row: Inequality, box: Box) -> Number:
    """Return by how much a box lies inside ``a @ x >= b``; minus infinity where it has no end."""
    least = box.least_value(row[0])
    return -math.inf if least is None else least - row[1]


def share_of_rows(rest: Inequality, rows: Sequence[Inequality], box: Box) -> bool:
    """Look for shares of rows after which the rest of a cut holds over a box.

    First one share for all of them: by how much the rest holds is concave and piecewise linear in
    it, with its corners where a coefficient vanishes, so that the corners are all there is to
    try.  Then shares guessed by `scipy.optimize.linprog`; the rest is checked exactly either way.
    """
    total: Coefficients = {}
    for terms, _ in rows:
        for j, c in terms.items():
            total[j] = total.get(j, 0) + c
    whole: Inequality = total, sum(least for _, least in rows)
    for share in {Fraction(rest[0].get(j, 0)) / r for j, r in total.items() if r}:
        if share > 0 and spare(minus(rest, whole, share), box) >= 0:
            return True
    for share, row in zip(guessed_shares(rest, rows, box), rows, strict=True):
        rest = minus(rest, row, share)
    return spare(rest, box) >= 0


def guessed_shares(rest: Inequality, rows: Sequence[Inequality], box: Box) -> list[Fraction]:
    """Return the shares of rows that doubles think best: duals of the least of the rest."""
    columns = sorted({*rest[0], *(j for row in rows for j in row[0])})
    scale = max((abs(c) for c in rest[0].values()), default=0)
    if not rows or not scale:
        return [Fraction(0)] * len(rows)
    sizes = [max(abs(Fraction(c)) for c in row[0].values()) for row in rows]
    matrix = [
        [-float(row[0].get(j, 0) / size) for j in columns]
        for row, size in zip(rows, sizes, strict=True)
    ]
    with silenced():
        answer = linprog(
            [float(rest[0].get(j, 0) / scale) for j in columns],
            matrix,
            [-float(row[1] / size) for row, size in zip(rows, sizes, strict=True)],
            bounds=[tuple(box.sides[side][j] for side in (LEAST, MOST)) for j in columns],
        )
    if answer.status != 0:
        return [Fraction(0)] * len(rows)
    duals = [max(-float(y), 0.0) for y in answer.ineqlin.marginals]
    return [Fraction(y) * scale / size for y, size in zip(duals, sizes, strict=True)]


class Distance(NamedTuple):
    """A term ``factor * value`` of an equation, written in the distance of value from a limit.

    The distance is ``side * (terms @ x - limit)``, at least 0 and a multiple of `grain` (0: of
    nothing); a side of 0 means that it is 0.  `row` tells rows from activities.
    """

    factor: Fraction
    grain: Number
    limit: Number
    terms: Coefficients
    side: int
    row: bool


def rounding_coefficient(a: Fraction, whole: bool, part: Fraction) -> Fraction:
    """Return the coefficient of a distance in the mixed-integer rounding of an equation.

    R. E. Gomory, An algorithm for the mixed integer problem, RAND report RM-2597, 1960.
    """
    if not whole:
        return a / part if a > 0 else -a / (1 - part)
    own = a - math.floor(a)
    return min(own / part, (1 - own) / (1 - part))


def check_gomory(checker: Checker, number: int, where: Box) -> None:
    """Round the exact combination of rows again; the stored cut must follow from it.

    The cut may be given in another form: with a multiple of the combination itself, which is an
    equation, added to it.
    """
    evidence = checker.cuts[number].evidence
    distances: list[Distance] = []
    own: Coefficients = {}
    limits = evidence.get("row_limits", [None] * len(evidence["rows"]))
    parts = zip(
        evidence["rows"], evidence["multipliers"], evidence["row_sides"], limits, strict=True
    )
    for index, multiplier, side, limit in parts:
        index, side = int(index), int(side)
        row, y = checker.row(index), Fraction(rational(multiplier, "multiplier"))
        for j, a in coefficients_of(row).items():
            own[j] = own.get(j, 0) - y * a
        distances.append(row_distance(checker, index, row, y, side, exact(limit)))
    anchors: dict[int, list[tuple[int, Number]]] = {}
    for column, side, value in measured_from(checker.cuts[number]):
        anchors.setdefault(column, []).append((side, value))
    for j, a in own.items():
        if a:
            distances.append(column_distance(checker, j, Fraction(a), anchors.get(j, []), where))
    right = -sum((a * limit for a, _, limit, *_ in distances), Fraction(0))
    part = right - math.floor(right)
    require(part != 0, f"the right-hand side of cut {number} is whole")
    plus = Fraction(rational(evidence["plus"], "multiple of the combination"))
    coefficients: Coefficients = {}
    least: Number = 1 + plus * right
    rows: list[Inequality] = []
    for a, grain, limit, terms, side, row in distances:
        if side == 0 or a == 0:
            continue
        unit = grain or 1
        gamma = rounding_coefficient(Fraction(a * side * unit), grain > 0, part) / unit
        gamma += plus * a * side
        for j, c in terms.items():
            coefficients[j] = coefficients.get(j, 0) + side * gamma * c
        least += side * gamma * limit
        if row:
            rows.append(minus(({}, 0), (terms, limit), -side * (Fraction(1) / unit + gamma)))
    require(
        implied(checker.cut_rows[number], (coefficients, least), rows, where),
        f"cut {number} does not follow from its multipliers",
    )


def row_distance(
    checker: Checker, index: int, row: Row, y: Fraction, side: int, kept: Number | None
) -> Distance:
    """Return a row as a distance from its limit, or from a wider one that was kept."""
    limit = row.most if side < 0 else row.least
    require(limit is not None, "a cut measures from a limit that is not there")
    require(side != 0 or row.least == row.most, "a row without a side is an equality")
    if kept is not None and kept != limit:
        require(side != 0 and (kept - limit) * side <= 0, "a limit of a cut does not hold")
        limit = kept
    grain: Number = 0
    if index < len(checker.rules) and all(checker.whole[j] for j in row.columns):
        unit = Fraction(1, 1 << row.shift)
        if Fraction(limit / unit).denominator == 1:
            grain = unit
    return Distance(y, grain, limit, coefficients_of(row), side, True)


def column_distance(
    checker: Checker, j: int, a: Fraction, anchors: list[tuple[int, Number]], where: Box
) -> Distance:
    """Return a column as a distance from the bound that was kept, or from any for a residue.

    One that was measured from both its bounds was fixed.
    """
    side, limit = anchors[0] if anchors else (LEAST, where.sides[LEAST][j])
    if limit is None:
        side, limit = MOST, where.sides[MOST][j]
    require(limit is not None, f"{j} takes part in a cut without a bound to measure from")
    fixed = len(anchors) > 1
    require(len({value for _, value in anchors}) < 2, f"{j} is fixed at two values")
    whole = checker.whole[j] and Fraction(limit).denominator == 1
    return Distance(a, int(whole), limit, {j: 1}, 0 if fixed else (-1 if side else 1), False)


def check_cover(checker: Checker, number: int, where: Box) -> None:
    """No 0-1 choice that fits the rule breaks the cut: the least weight for every value of it."""
    cut = checker.cuts[number]
    evidence = cut.evidence
    rule = checker.problem.rows[evidence["row"]]
    limit, sign = (rule.most, 1) if evidence["limit"] else (rule.least, -1)
    require(limit is not None, f"cut {number} uses a limit that is not there")
    fixed = {column: (side, value) for column, side, value in measured_from(cut)}
    weights: dict[int, int] = {}
    room: Number = sign * limit
    for j, c in zip(rule.columns, rule.coefficients, strict=True):
        if j not in fixed:
            require(
                checker.whole[j] and where.implies(j, LEAST, 0) and where.implies(j, MOST, 1),
                f"{j} is not a 0-1 activity in cut {number}",
            )
            weights[j] = sign * c
            continue
        side, value = fixed[j]
        require(side == (MOST if sign * c < 0 else LEAST), "an unhelpful bound in a cover")
        room -= sign * c * value
    values = coefficients_of(checker.cut_rows[number])
    require(set(values) <= set(weights), f"cut {number} has other activities than its rule")
    require(cover_holds(values, weights, room, checker.cut_rows[number].least), f"cut {number}")


def cover_holds(
    values: Coefficients, weights: dict[int, int], room: Number, least: Number
) -> bool:
    """Tell whether every 0-1 choice of weight at most `room` has ``values @ x >= least``."""
    room -= sum(min(w, 0) for j, w in weights.items() if j not in values)
    lightest: dict[Number, Number] = {0: 0}
    for j, value in values.items():
        for reached, weight in list(lightest.items()):
            with_item = reached + value, weight + weights[j]
            if with_item[1] < lightest.get(with_item[0], math.inf):
                lightest[with_item[0]] = with_item[1]
    return all(weight > room for value, weight in lightest.items() if value < least)


CUT_CHECKS = {"gomory": check_gomory, "cover": check_cover}


# ---------------------------------------------------------------------- whole answers


def drawn_home(problem: Problem) -> Problem:
    """Return the aim that a search for any plan is given: towards the bounds there are."""
    ends = zip(problem.exact_least, problem.exact_most, strict=True)
    pull = [(low is not None) - (high is not None) for low, high in ends]
    terms = tuple((j, p) for j, p in enumerate(pull) if p)
    return replace(
        problem, exact_cost=terms, cost_shift=0, cost_factor=Fraction(1), aim_constant=0
    )


def verify(problem: Problem, result: Any, gap: Number = 0) -> Summary:
    """Check an answer: its plan, its bound, its ray and its whole tree.

    Parameters
    ----------
    problem : what was asked
    result : a `SearchResult`
    gap : percent that was allowed

    Raises
    ------
    Refused
        With what does not hold.
    """
    if result.plan is not None:
        require(check_plan(problem, result.plan) == result.value, "the value is not the plan's")
    else:
        require(result.value is None, "a value without a plan")
    require(result.outcome in OUTCOMES, f"an outcome {result.outcome!r} is unknown")
    OUTCOMES[result.outcome](problem, result, gap)
    if result.any_plan:
        sought = result.bound is None or not problem.exact_cost
        require(sought, "a tree that looks for any plan proves nothing about the aim")
    if result.any_plan or result.outcome == "unbounded":
        return walk_for_any(problem, result)
    if result.bound is not None:
        cost = (Fraction(result.bound) - problem.aim_constant) * Fraction(problem.cost_factor)
        return Checker(problem, result.tree, result.cuts, cost).walk()
    claim = -math.inf if result.outcome == "unfinished" else None
    return Checker(problem, result.tree, result.cuts, claim).walk()


def walk_for_any(problem: Problem, result: Any) -> Summary:
    """Check the tree of a search for any plan: its steps, cuts and closed nodes."""
    stand_in = drawn_home(problem) if result.any_plan else problem
    claim = -math.inf if result.plan is not None or result.outcome == "unfinished" else None
    return Checker(stand_in, result.tree, result.cuts, claim, aimless=result.any_plan).walk()


def verify_standing(standing: Any, gap: Number = 0) -> Summary:
    """Check a standing plan; its tree may speak of its sheet without some soft rules.

    Those came later, and the plan meets them without bending: they take plans away or make them
    dearer, so what was proven without them holds with them.
    """
    sheet, proven, result = standing.sheet, standing.proven_sheet, standing.result
    if proven is sheet:
        return verify(sheet.problem(), result, gap)
    problem, columns = proven.problem(), len(proven.problem().whole)
    left_out = [rule for rule in sheet.rules if rule.name not in proven.rule_index]
    require(all(rule.give is not None for rule in left_out), "only soft rules may be left out")
    if result.plan is not None:
        require(check_plan(sheet.problem(), result.plan) == result.value, "the value is wrong")
        require(not any(result.plan[columns:]), "a rule that was left out is bent")
        result = replace(result, plan=result.plan[:columns])
    return verify(problem, result, gap)


def check_optimal(problem: Problem, result: Any, gap: Number) -> None:
    """A best plan is its own bound."""
    require(result.plan is not None, "an optimal answer has a plan")
    require(result.bound == result.value, "an optimal answer's bound is its value")


def check_within_gap(problem: Problem, result: Any, gap: Number) -> None:
    """The distance from the bound is at most the gap."""
    require(result.plan is not None and result.bound is not None, "a gap has two ends")
    distance = abs(Fraction(result.bound) - result.value)
    require(100 * distance <= gap * abs(result.value), "the gap is larger than it may be")


def check_infeasible(problem: Problem, result: Any, gap: Number) -> None:
    """Nothing is claimed beside the tree."""
    require(result.plan is None and result.bound is None, "an impossible sheet has no plan")


def check_unbounded(problem: Problem, result: Any, gap: Number) -> None:
    """A plan and a direction of improvement."""
    require(result.plan is not None and result.ray is not None, "a plan and a ray")
    require(result.bound is None, "an aim without a limit has no bound")
    check_ray(problem, result.ray)


def check_unfinished(problem: Problem, result: Any, gap: Number) -> None:
    """An end before the proof names its reason; the bound does not pass the value."""
    require(result.ended_by in ("time", "nodes", "interrupt", "range"), "a reason for the end")
    if result.bound is not None and result.value is not None:
        ahead = (Fraction(result.value) - result.bound) * Fraction(problem.cost_factor)
        require(ahead >= 0, "the bound passes the value")


OUTCOMES = {
    "optimal": check_optimal,
    "within_gap": check_within_gap,
    "infeasible": check_infeasible,
    "unbounded": check_unbounded,
    "unfinished": check_unfinished,
}
