"""Rounds of cuts: every kind is tried at the relaxation's point, and the best are kept."""

from __future__ import annotations

import math

import numpy as np

from intplan.relaxation.dictionary import Dictionary
from intplan.search.context import Context
from intplan.search.cuts.aggregation import Aggregator
from intplan.search.cuts.candidate import Candidate, choose
from intplan.search.cuts.cover import cover_cut
from intplan.search.cuts.distances import Limits, Rounding
from intplan.search.cuts.gomory import deepest_combinations, gomory_cuts
from intplan.search.cuts.integers import integer_gomory_cut
from intplan.search.result import Cut
from intplan.search.tightening import Bounds
from intplan.sheet.problem import Number, Problem

GOMORY_ROWS = 30  # dictionary rows tried in a round
CUTS_A_ROUND = 30
ENOUGH = 5  # cuts from sums of rules beyond which dictionary rows are left alone
COARSE = 20  # bits of a rule's integers up to which its whole value is of use to a cut
TIGHT = 0.1  # room, next to a rule's value, up to which a cover cut is sought


class Separator:
    """Finds cuts of one search.

    Parameters
    ----------
    context : of the search; the store and the record receive the cuts
    bounds : of the root, those that do not lean on the cut-off
    """

    def __init__(self, context: Context, bounds: Bounds) -> None:
        problem = context.problem
        self.context = context
        self.bounds = bounds
        self._aggregator = Aggregator(context.rows, context.record.rules, problem.whole)
        self._grain = _grain(problem)
        self._rounded_rows = np.zeros(len(problem.rows), bool)
        if not context.arithmetic.plain:
            limits = enumerate(map(context.arithmetic.row_limits, range(len(problem.rows))))
            rows = context.rows
            self._rounded_rows[:] = [
                _off(low, rows.least.item(i)) or _off(high, rows.most.item(i))
                for i, (low, high) in limits
            ]
        ends = zip(problem.exact_least, problem.exact_most, strict=True)
        self._rounded_columns = np.array(
            [_off(low, problem.least.item(j)) or _off(high, problem.most.item(j))
             for j, (low, high) in enumerate(ends)], bool,
        )  # fmt: skip
        binary = problem.whole & (bounds.least == 0) & (bounds.most == 1)
        self._knapsacks = {
            i
            for i, row in enumerate(problem.rows)
            if len({abs(c) for j, c in zip(row.columns, row.coefficients, strict=True)
                    if binary[j]}) > 1
        }  # fmt: skip

    def separate(self, dictionary: Dictionary, rows: np.ndarray) -> np.ndarray:
        """Find cuts at a dictionary's point and put the chosen ones into the store.

        Parameters
        ----------
        dictionary : of the root as it is
        rows : (k,) dictionary rows of whole activities with a fractional value

        Returns
        -------
        The numbers of the new rows.
        """
        context, rounding = self.context, self._rounding(dictionary)
        candidates = self._round_sums(rounding)
        if len(candidates) < ENOUGH:
            candidates += self._round_rows(rounding, dictionary, rows)
        candidates += self._covers(rounding, dictionary)
        chosen = choose(candidates, CUTS_A_ROUND)
        if not chosen:
            return np.arange(0)
        for candidate in chosen:
            columns = candidate.coefficients.nonzero()[0]
            evidence, leans = candidate.explain()
            context.record.note_cut(
                Cut(
                    candidate.kind, tuple(columns.tolist()),
                    tuple(candidate.coefficients[columns].tolist()), candidate.least, math.inf,
                    leans, evidence,
                )
            )  # fmt: skip
        least = np.array([c.least for c in chosen])
        return context.rows.append(
            np.array([c.coefficients for c in chosen]),
            least,
            np.full(len(chosen), np.inf),
            np.array([c.shift for c in chosen]),
        )

    def _round_rows(
        self, rounding: Rounding, dictionary: Dictionary, rows: np.ndarray
    ) -> list[Candidate]:
        """Round the dictionary rows of the activities furthest from whole values."""
        values = dictionary.values[rows]
        order = (-np.abs(values - np.floor(values) - 0.5)).argsort(kind="stable")[::-1]
        limits, columns = Limits.of_dictionary(dictionary)
        lines = dictionary.entries[rows[order[:GOMORY_ROWS]]][:, columns]
        return self._rounded(rounding, limits, lines)

    def _round_sums(self, rounding: Rounding) -> list[Candidate]:
        """Round sums of rules."""
        if not self._aggregator.useful:
            return []
        limits = Limits.nearest(rounding.rows, rounding.x)
        lines = self._aggregator.combinations(rounding, limits)
        return self._rounded(rounding, limits, lines)

    def _rounded(
        self, rounding: Rounding, limits: Limits, lines: np.ndarray
    ) -> list[Candidate]:
        """Return the deepest rounding cuts of some combinations of rows.

        Where the aim has no step they are made in integers or not at all: a cut weakened by a
        rounding error leaves the bound a hair below the best plan, and with no step to bridge
        the hair it costs more branching than it saves.  Where activities lack a bound they are
        made in integers if they can be: a rounding error cannot be bounded over such an activity,
        even if the combination is free of it.
        """
        stepped = self.context.problem.cost_step is not None
        if stepped and not len(rounding.open):
            return gomory_cuts(rounding, limits, lines, 2 * CUTS_A_ROUND)
        best = deepest_combinations(rounding, limits, lines, CUTS_A_ROUND)
        made = [integer_gomory_cut(rounding, limits, line) for line in best]
        cuts = [cut for cut in made if cut is not None]
        if stepped:
            left = [line for line, cut in zip(best, made, strict=True) if cut is None]
            lines = np.array(left).reshape(len(left), lines.shape[1])
            cuts += gomory_cuts(rounding, limits, lines, CUTS_A_ROUND)
        return cuts

    def _covers(self, rounding: Rounding, dictionary: Dictionary) -> list[Candidate]:
        """Return cover cuts of the rules that bind, or nearly."""
        found = []
        for number in self._tight_rules(dictionary):
            row = self.context.problem.rows[number]
            for limit in (0, 1):
                cut = cover_cut(rounding, number, row, limit)
                if cut is not None:
                    found.append(cut)
        return found

    def _tight_rules(self, dictionary: Dictionary) -> list[int]:
        """Return the rules that bind, or nearly, at the point and may have a cover cut."""
        rooms = dictionary.rooms.min(axis=1, initial=np.inf)
        near = (rooms < TIGHT * (1.0 + np.abs(dictionary.values))).nonzero()[0]
        numbers = np.concatenate((dictionary.nonbasic, dictionary.basic[near]))
        return [i for i in (numbers - dictionary.columns).tolist() if i in self._knapsacks]

    def _rounding(self, dictionary: Dictionary) -> Rounding:
        """Gather what mixed-integer rounding needs at the root's present point."""
        context, problem, bounds = self.context, self.context.problem, self.bounds
        cuts = context.rows.count - context.record.rules
        size = np.maximum(np.abs(bounds.least), np.abs(bounds.most))
        bounded = np.isfinite(size)
        return Rounding(
            context.rows, problem.whole, np.concatenate((self._grain, np.zeros(cuts))),
            float(size[bounded].sum()), (~bounded).nonzero()[0], (problem.least, problem.most),
            dictionary.activities(), bounds,
            np.concatenate((np.zeros(context.record.rules, bool), context.record.leaning_rows)),
            (np.concatenate((self._rounded_rows, np.zeros(cuts, bool))), self._rounded_columns),
        )  # fmt: skip


def _off(exact: Number | None, double: float) -> bool:
    """Tell whether a limit is not quite the double that stands for it."""
    return exact is not None and exact != double  # Python compares them exactly


def _grain(problem: Problem) -> np.ndarray:
    """Return (rules,) what the value of each is a multiple of in every plan, 0 for nothing."""
    grain = np.zeros(len(problem.rows))
    for i, row in enumerate(problem.rows):
        if row.columns and problem.whole[list(row.columns)].all() and row.shift < COARSE:
            grain[i] = 2.0**-row.shift
    return grain
